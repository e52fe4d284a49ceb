"""Metrics of a phase, by name, and two checks on them.

Errors are deviations from ``final``, the value the response is to settle at: the setpoint,
or, under a P block, the value its static balance leaves. Not reached is None, never NaN.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.analysis.measures import (
    checked_series,
    decay_ratio,
    integral_absolute_error,
    integral_squared_error,
    integral_time_absolute_error,
    output_travel,
    rise_time,
    settling_time,
    tail_mean,
)
from harness.errors import UsageError

BANDS = (0.02, 0.05)  # settling bands, fractions of the step: common practice

METRIC_UNITS = {
    "settling_time_2": "s",
    "settling_time_5": "s",
    "overshoot": "1",
    "rise_time": "s",
    "peak_deviation": "1",
    "peak_time": "s",
    "iae": "s",
    "ise": "s",
    "itae": "s^2",
    "offset": "1",
    "output_travel": "1",
    "decay_ratio": "1",
}


def setpoint_metrics(
    time: NDArray[np.float64],
    process_variable: NDArray[np.float64],
    output: NDArray[np.float64],
    *,
    setpoint: float,
    initial: float,
    final: float | None = None,
    initial_output: float | None = None,
    tail: float = 0.0,
    noise: float = 0.0,
) -> dict[str, float | None]:
    """Return the metrics of a setpoint step.

    Overshoot, bands, rise and decay are relative to the step ``final - initial``; peak
    deviation is signed, the greatest excursion past the final value in the direction of the
    step; the integrals are of the deviation from ``final``, in the unit of the process
    variable; the offset is the mean of the tail minus the setpoint.

    Parameters
    ----------
    time, process_variable, output : ndarray, shape (n,)
        Time from metric zero [s], process variable and controller output [-].
    setpoint : float
        Setpoint after the step [-].
    initial : float
        Process variable before the step [-].
    final : float or None
        Value to settle at; None takes the setpoint [-].
    initial_output : float or None
        Output before the step, so that its jump counts as travel [-].
    tail : float
        Length of record over which the offset is averaged; 0 takes the last sample [s].
    noise : float
        Excursions past the final value up to this are no lobes of the decay ratio [-].

    Returns
    -------
    dict of str to float or None
        By the names of ``METRIC_UNITS``, in the units given there [s, s^2 or -].

    Raises
    ------
    UsageError
        When the series do not match or the step is zero.
    """
    time, process_variable = checked_series(time, process_variable)
    final = setpoint if final is None else final
    step = final - initial
    if step == 0.0 or not math.isfinite(step):
        raise UsageError(
            f"metrics: a setpoint step from {initial} to {final}; it must not be 0"
        )
    error = process_variable - final
    progress = (process_variable - initial) / step
    top = int(np.argmax(progress))
    past = bool(progress[top] > 1.0)
    return {
        "settling_time_2": settling_time(time, error, BANDS[0] * abs(step)),
        "settling_time_5": settling_time(time, error, BANDS[1] * abs(step)),
        "overshoot": max(0.0, float(progress[top]) - 1.0),
        "rise_time": rise_time(time, progress),
        "peak_deviation": float(error[top]) if past else 0.0,
        "peak_time": float(time[top]) if past else None,
        **_integrals(time, error),
        "offset": tail_mean(time, process_variable, tail) - setpoint,
        "output_travel": output_travel(output, initial_output),
        "decay_ratio": decay_ratio(progress, noise / abs(step)),
    }


def load_metrics(
    time: NDArray[np.float64],
    process_variable: NDArray[np.float64],
    output: NDArray[np.float64],
    *,
    setpoint: float,
    final: float | None = None,
    band_reference: float | None = None,
    initial_output: float | None = None,
    tail: float = 0.0,
) -> dict[str, float | None]:
    """Return the metrics of a load step.

    Peak deviation is signed, from ``final``, and is the greatest in size. Settling is the last
    return into the band around ``final``; the band is 2 and 5 % of ``band_reference``, to be
    given as the predicted peak deviation so that measurement and prediction share one band.

    Parameters
    ----------
    time, process_variable, output : ndarray, shape (n,)
        Time from metric zero [s], process variable and controller output [-].
    setpoint : float
        Setpoint [-].
    final : float or None
        Value to settle at; None takes the setpoint [-].
    band_reference : float or None
        Size that the bands are fractions of; None takes the record's own peak deviation [-].
    initial_output : float or None
        Output before the step, so that a jump counts as travel [-].
    tail : float
        Length of record over which the offset is averaged; 0 takes the last sample [s].

    Returns
    -------
    dict of str to float or None
        By the names of ``METRIC_UNITS``, in the units given there [s, s^2 or -]; overshoot,
        rise time and decay ratio are None.

    Raises
    ------
    UsageError
        When the series do not match.
    """
    time, process_variable = checked_series(time, process_variable)
    final = setpoint if final is None else final
    error = process_variable - final
    top = int(np.argmax(np.abs(error)))
    size = abs(float(error[top]) if band_reference is None else band_reference)
    settled = [settling_time(time, error, band * size) if size else 0.0 for band in BANDS]
    return {
        "settling_time_2": settled[0],
        "settling_time_5": settled[1],
        "overshoot": None,
        "rise_time": None,
        "peak_deviation": float(error[top]),
        "peak_time": float(time[top]),
        **_integrals(time, error),
        "offset": tail_mean(time, process_variable, tail) - setpoint,
        "output_travel": output_travel(output, initial_output),
        "decay_ratio": None,
    }


def _integrals(
    time: NDArray[np.float64], error: NDArray[np.float64]
) -> dict[str, float | None]:
    return {
        "iae": integral_absolute_error(time, error),
        "ise": integral_squared_error(time, error),
        "itae": integral_time_absolute_error(time, error),
    }


@dataclass(frozen=True, slots=True, kw_only=True)
class IntegralIdentity:
    """The integral of the error against the move of the controller's integral part.

    Parameters
    ----------
    error_integral : float
        Integral of the error [s].
    integral_move : float
        Lasting change of output, less the gain times the change of error over the trace [-].
    expected : float
        Ti / Kc times the move: what the error integral must be [s].
    time_per_gain : float or None
        Ti / Kc as the trace shows it; None when the integral part did not move [s].
    """

    error_integral: float
    integral_move: float
    expected: float
    time_per_gain: float | None


def integral_identity(
    time: NDArray[np.float64],
    error: NDArray[np.float64],
    output: NDArray[np.float64],
    *,
    gain: float,
    integral_time: float,
    right_rectangles: bool = False,
) -> IntegralIdentity:
    """Hold a trace of a PI block against the integral of e dt = (Ti / Kc) times the lasting change of output.

    It holds for any change of setpoint or load, on a nonlinear plant too, as long as the
    output is at no limit and the block in automatic. The proportional part at the two ends is
    taken off, so that the trace need not have come to rest. With right-hand rectangles over
    samples at the block's own scans it is exact for the reference block.

    Parameters
    ----------
    time, error, output : ndarray, shape (n,)
        Time [s]; setpoint minus process variable for reverse action, its negative for direct
        action [-]; output computed from that sample [-].
    gain : float
        Kc, positive [-].
    integral_time : float
        Ti [s].
    right_rectangles : bool
        Sum each interval with its later error instead of the trapezoid.

    Returns
    -------
    IntegralIdentity
        Both sides.

    Raises
    ------
    UsageError
        When the series do not match.
    """
    time, error = checked_series(time, error)
    _, output = checked_series(time, output)
    heights = error[1:] if right_rectangles else (error[:-1] + error[1:]) / 2.0
    total = float(np.sum(np.diff(time) * heights))
    move = float((output[-1] - output[0]) - gain * (error[-1] - error[0]))
    return IntegralIdentity(
        error_integral=total,
        integral_move=move,
        expected=integral_time / gain * move,
        time_per_gain=total / move if move else None,
    )


def lobe_near_band(prediction: NDArray[np.float64], band: float, noise: float) -> bool:
    """Return whether a lobe of the predicted error ends within noise of the band's edge.

    Then a disturbance as small as the noise decides whether that lobe counts as outside, the
    settling time jumps by a whole lobe, and it is not decidable. Only lobes after the last
    clear excursion (beyond band plus noise) can do that.

    Parameters
    ----------
    prediction : ndarray, shape (n,)
        Predicted deviation from the final value [-].
    band : float
        Half width of the band, in the same unit [-].
    noise : float
        Largest disturbance to reckon with, in the same unit [-].

    Returns
    -------
    bool
        True where the settling time is not decidable.
    """
    size = np.abs(np.asarray(prediction, dtype=np.float64))
    clear = np.flatnonzero(size > band + noise)
    rest = size[clear[-1] :] if len(clear) else size
    if len(rest) < 3:  # noqa: PLR2004  an extremum needs a neighbour on each side
        return False
    slope = np.sign(np.diff(rest))
    moving = np.flatnonzero(slope)
    turns = moving[1:][(slope[moving[:-1]] > 0) & (slope[moving[1:]] < 0)]
    return bool(np.any(np.abs(rest[turns] - band) <= noise))
