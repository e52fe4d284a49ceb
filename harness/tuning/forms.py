"""Forms and units of controller settings, as data sheets and configuration pages have them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum

from harness.errors import ModelError

_LIKENESS = 4.0  # the series form has real times only where Ti >= 4 Td of the ideal form


class Form(StrEnum):
    """How a block combines its three terms."""

    IDEAL = "ideal"
    SERIES = "series"
    PARALLEL = "parallel"


@dataclass(frozen=True, slots=True, kw_only=True)
class IdealForm:
    """Kc (1 + 1/(Ti s) + Td s).

    Parameters
    ----------
    gain : float
        Kc [-].
    integral_time : float
        Ti [s].
    derivative_time : float
        Td [s].
    """

    gain: float
    integral_time: float
    derivative_time: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SeriesForm:
    """Kc' (1 + 1/(Ti' s)) (1 + Td' s).

    Parameters
    ----------
    gain : float
        Kc' [-].
    integral_time : float
        Ti' [s].
    derivative_time : float
        Td' [s].
    """

    gain: float
    integral_time: float
    derivative_time: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class ParallelForm:
    """Kp + Ki/s + Kd s.

    Parameters
    ----------
    proportional : float
        Kp [-].
    integral : float
        Ki [1/s].
    derivative : float
        Kd [s].
    """

    proportional: float
    integral: float
    derivative: float = 0.0


def series_to_ideal(form: SeriesForm) -> IdealForm:
    """Return the ideal form of the same controller; it always exists.

    Parameters
    ----------
    form : SeriesForm
        Series form.

    Returns
    -------
    IdealForm
        With F = 1 + Td'/Ti': Kc = Kc' F, Ti = Ti' F, Td = Td'/F.
    """
    factor = 1.0 + form.derivative_time / form.integral_time
    return IdealForm(
        gain=form.gain * factor,
        integral_time=form.integral_time * factor,
        derivative_time=form.derivative_time / factor,
    )


def ideal_to_series(form: IdealForm) -> SeriesForm:
    """Return the series form of the same controller.

    Parameters
    ----------
    form : IdealForm
        Ideal form.

    Returns
    -------
    SeriesForm
        Series form.

    Raises
    ------
    ModelError
        If Ti < 4 Td: the two zeros are complex and no series form has them.
    """
    if form.integral_time < _LIKENESS * form.derivative_time:
        raise ModelError(
            f"series form: Ti {form.integral_time:g} s is less than 4 Td = "
            f"{_LIKENESS * form.derivative_time:g} s; there is no series form of it: "
            "lower Td or keep the ideal form"
        )
    ratio = _LIKENESS * form.derivative_time / form.integral_time
    factor = 0.5 * (1.0 + math.sqrt(1.0 - ratio))
    return SeriesForm(
        gain=form.gain * factor,
        integral_time=form.integral_time * factor,
        derivative_time=form.derivative_time / factor,
    )


def ideal_to_parallel(form: IdealForm) -> ParallelForm:
    """Return the parallel form: Kp = Kc, Ki = Kc/Ti, Kd = Kc Td.

    Parameters
    ----------
    form : IdealForm
        Ideal form.

    Returns
    -------
    ParallelForm
        Parallel form.
    """
    return ParallelForm(
        proportional=form.gain,
        integral=form.gain / form.integral_time,
        derivative=form.gain * form.derivative_time,
    )


def parallel_to_ideal(form: ParallelForm) -> IdealForm:
    """Return the ideal form: Kc = Kp, Ti = Kp/Ki, Td = Kd/Kp.

    Parameters
    ----------
    form : ParallelForm
        Parallel form.

    Returns
    -------
    IdealForm
        Ideal form; Ti is infinite without integral action.

    Raises
    ------
    ModelError
        If there is no proportional gain: an ideal form cannot be without.
    """
    if form.proportional == 0.0:
        raise ModelError("ideal form: Kp is 0; the ideal form cannot be without a gain")
    integral = form.integral
    return IdealForm(
        gain=form.proportional,
        integral_time=form.proportional / integral if integral != 0.0 else math.inf,
        derivative_time=form.derivative / form.proportional,
    )


def proportional_band(gain: float) -> float:
    """Return the proportional band of a gain; its own inverse.

    Parameters
    ----------
    gain : float
        Kc [fraction of output per fraction of PV span].

    Returns
    -------
    float
        100/Kc [%].
    """
    return 100.0 / gain


def gain_from_proportional_band(band: float) -> float:
    """Return the gain of a proportional band.

    Parameters
    ----------
    band : float
        Proportional band [%].

    Returns
    -------
    float
        Kc [fraction of output per fraction of PV span].
    """
    return 100.0 / band


def repeats_per_minute(integral_time: float) -> float:
    """Return the integral setting as repeats per minute.

    Parameters
    ----------
    integral_time : float
        Ti [s].

    Returns
    -------
    float
        60/Ti [1/min].
    """
    return 60.0 / integral_time


def integral_time_from_repeats(repeats: float) -> float:
    """Return the integral time of a setting in repeats per minute.

    Parameters
    ----------
    repeats : float
        Repeats per minute [1/min].

    Returns
    -------
    float
        Ti [s].
    """
    return 60.0 / repeats


def repeats_per_second(integral_time: float) -> float:
    """Return the integral setting as repeats per second.

    Parameters
    ----------
    integral_time : float
        Ti [s].

    Returns
    -------
    float
        1/Ti [1/s].
    """
    return 1.0 / integral_time


def gain_engineering(gain: float, pv_span: float, output_span: float) -> float:
    """Return a controller gain in output units per unit of the process variable.

    Parameters
    ----------
    gain : float
        Kc [fraction of output per fraction of PV span].
    pv_span : float
        Span of the process variable, e.g. 2 for 0 to 2 m [unit of PV].
    output_span : float
        Span of the output, e.g. 100 for 0 to 100 % [unit of output].

    Returns
    -------
    float
        Kc x output span / PV span [unit of output per unit of PV].
    """
    return gain * output_span / pv_span


def gain_from_engineering(gain: float, pv_span: float, output_span: float) -> float:
    """Return a controller gain as fractions, from output units per unit of the process variable.

    Parameters
    ----------
    gain : float
        Gain [unit of output per unit of PV].
    pv_span : float
        Span of the process variable [unit of PV].
    output_span : float
        Span of the output [unit of output].

    Returns
    -------
    float
        Kc = gain x PV span / output span [fraction of output per fraction of PV span].
    """
    return gain * pv_span / output_span
