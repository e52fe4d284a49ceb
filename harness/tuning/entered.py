"""Settings as a block takes them: its form, its units, and rounded to its steps."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from enum import StrEnum

from harness.domain.signals import Range
from harness.errors import ModelError, UsageError
from harness.tuning.forms import (
    Form,
    IdealForm,
    ParallelForm,
    SeriesForm,
    gain_engineering,
    ideal_to_parallel,
    ideal_to_series,
    parallel_to_ideal,
    series_to_ideal,
)
from harness.tuning.process import PidSettings

_MINUTE = 60.0  # [s]


class GainUnit(StrEnum):
    """What a block calls its gain."""

    GAIN = "gain"
    BAND = "band"
    ENGINEERING = "engineering"
    COUNTS = "counts"


class IntegralUnit(StrEnum):
    """What a block calls its integral setting."""

    SECONDS = "s"
    MINUTES = "min"
    REPEATS_PER_MINUTE = "repeats/min"
    PER_SECOND = "1/s"


class DerivativeUnit(StrEnum):
    """What a block calls its derivative setting."""

    SECONDS = "s"
    MINUTES = "min"


@dataclass(frozen=True, slots=True, kw_only=True)
class Spans:
    """Ranges behind gains that are not fractions.

    Parameters
    ----------
    pv, output : Range or None
        Ranges of process variable and controller output, in their own units.
    pv_counts, output_counts : float or None
        Counts over the same ranges, as the block sees them [counts].
    """

    pv: Range | None = None
    output: Range | None = None
    pv_counts: float | None = None
    output_counts: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class BlockFormat:
    """How a block takes its settings.

    Parameters
    ----------
    form : Form
        Ideal, series or parallel.
    gain_unit : GainUnit
        Unit of the gain.
    integral_unit : IntegralUnit
        Unit of the integral setting.
    derivative_unit : DerivativeUnit
        Unit of the derivative setting.
    gain_step, time_step : float
        Smallest steps that the block resolves of its gain and of its integral and derivative
        settings, each in its own unit; 0 takes any number [unit of the setting].
    """

    form: Form = Form.IDEAL
    gain_unit: GainUnit = GainUnit.GAIN
    integral_unit: IntegralUnit = IntegralUnit.SECONDS
    derivative_unit: DerivativeUnit = DerivativeUnit.SECONDS
    gain_step: float = 0.0
    time_step: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Entered:
    """Numbers to type into the block.

    Parameters
    ----------
    values : dict of str to float
        By name of the setting [unit of the setting].
    units : dict of str to str
        Units by the same names.
    settings : PidSettings
        What the block then does, in ideal form.
    """

    values: dict[str, float]
    units: dict[str, str]
    settings: PidSettings


def entered(settings: PidSettings, block: BlockFormat, spans: Spans) -> Entered:
    """Return settings as a block takes them, rounded to its steps.

    Parameters
    ----------
    settings : PidSettings
        Ideal form.
    block : BlockFormat
        How the block takes them.
    spans : Spans
        Ranges, where the gain is not a fraction.

    Returns
    -------
    Entered
        Numbers, units, and what they come to.

    Raises
    ------
    ModelError
        When the form does not exist for these settings, or a setting rounds to nothing.
    UsageError
        When a range is missing, or form and unit do not go together.
    """
    factor, unit = gain_factor(block.gain_unit, spans)
    if block.form is Form.PARALLEL:
        return _parallel(settings, block, factor, unit)
    gain, integral, derivative = settings.gain, settings.integral_time, settings.derivative_time
    if block.form is Form.SERIES and derivative > 0.0:
        series = ideal_to_series(_ideal(settings))
        gain, integral, derivative = series.gain, series.integral_time, series.derivative_time
    values, units = (
        {"gain": _round("gain", _told(gain, block, factor), block.gain_step)},
        {"gain": unit},
    )
    back = _untold(values["gain"], block, factor)
    if integral is not None:
        shown = _round("integral", _integral(integral, block.integral_unit), block.time_step)
        values["integral"], units["integral"] = shown, block.integral_unit.value
        integral = _seconds(shown, block.integral_unit)
    if derivative > 0.0:
        scale = _scale(block.derivative_unit)
        shown = _round("derivative", derivative / scale, block.time_step, may_vanish=True)
        values["derivative"], units["derivative"] = shown, block.derivative_unit.value
        derivative = shown * scale
    if block.form is Form.SERIES and derivative > 0.0 and integral is not None:
        ideal = series_to_ideal(
            SeriesForm(gain=back, integral_time=integral, derivative_time=derivative)
        )
        back, integral, derivative = ideal.gain, ideal.integral_time, ideal.derivative_time
    return Entered(
        values=values, units=units, settings=_with(settings, back, integral, derivative)
    )


def gain_factor(unit: GainUnit, spans: Spans) -> tuple[float, str]:
    """Return what a gain in fractions is multiplied by, and the name of the unit.

    Parameters
    ----------
    unit : GainUnit
        Unit; the proportional band is the reciprocal of what comes out, times 100.
    spans : Spans
        Ranges.

    Returns
    -------
    factor : float
        Factor [unit of the gain per fraction of output per fraction of PV span].
    name : str
        Unit in words.

    Raises
    ------
    UsageError
        When a range is missing.
    """
    match unit:
        case GainUnit.GAIN:
            return 1.0, "%/%"
        case GainUnit.BAND:
            return 1.0, "% proportional band"
        case GainUnit.ENGINEERING:
            if spans.pv is None or spans.output is None:
                raise UsageError(
                    "gain in engineering units: the ranges of process variable and output are "
                    "not known; give --output-range LOW HIGH of the "
                    "process variable and --input-range LOW HIGH of the controller output"
                )
            name = f"{spans.output.unit or 'output unit'} per {spans.pv.unit or 'PV unit'}"
            return gain_engineering(1.0, spans.pv.span, spans.output.span), name
        case GainUnit.COUNTS:
            if not spans.pv_counts or not spans.output_counts:
                raise UsageError(
                    "gain in raw counts: the counts over the ranges are not known; give "
                    "--counts PV OUTPUT, e.g. --counts 27648 16000"
                )
            return gain_engineering(
                1.0, spans.pv_counts, spans.output_counts
            ), "counts per count"


def _parallel(settings: PidSettings, block: BlockFormat, factor: float, unit: str) -> Entered:
    """Return Kp, Ki and Kd; Ki and Kd per second or per minute, as the integral unit has it."""
    if block.gain_unit is GainUnit.BAND:
        raise UsageError(
            "parallel form with a proportional band: its three settings are gains; choose "
            "another gain unit or form"
        )
    minutes = block.integral_unit in {IntegralUnit.MINUTES, IntegralUnit.REPEATS_PER_MINUTE}
    integral_scale = factor * (_MINUTE if minutes else 1.0)
    derivative_scale = factor / _scale(block.derivative_unit)
    form = ideal_to_parallel(_ideal(settings))
    values = {
        "proportional": _round("proportional", form.proportional * factor, block.gain_step)
    }
    units = {"proportional": unit}
    if settings.integral_time is not None:
        values["integral"] = _round("integral", form.integral * integral_scale, block.time_step)
        units["integral"] = f"{unit} per {'min' if minutes else 's'}"
    if form.derivative > 0.0:
        values["derivative"] = _round(
            "derivative", form.derivative * derivative_scale, block.time_step, may_vanish=True
        )
        units["derivative"] = f"{unit} times {block.derivative_unit}"
    ideal = parallel_to_ideal(
        ParallelForm(
            proportional=values["proportional"] / factor,
            integral=values.get("integral", 0.0) / integral_scale,
            derivative=values.get("derivative", 0.0) / derivative_scale,
        )
    )
    integral = None if settings.integral_time is None else ideal.integral_time
    changed = _with(settings, ideal.gain, integral, ideal.derivative_time)
    return Entered(values=values, units=units, settings=changed)


def _ideal(settings: PidSettings) -> IdealForm:
    return IdealForm(
        gain=settings.gain,
        integral_time=math.inf if settings.integral_time is None else settings.integral_time,
        derivative_time=settings.derivative_time,
    )


def _with(
    settings: PidSettings, gain: float, integral: float | None, derivative: float
) -> PidSettings:
    lag = settings.derivative_filter if derivative > 0.0 else 0.0
    return replace(
        settings,
        gain=gain,
        integral_time=integral,
        derivative_time=derivative,
        derivative_filter=lag,
    )


def _told(gain: float, block: BlockFormat, factor: float) -> float:
    return 100.0 / gain if block.gain_unit is GainUnit.BAND else gain * factor


def _untold(value: float, block: BlockFormat, factor: float) -> float:
    return 100.0 / value if block.gain_unit is GainUnit.BAND else value / factor


def _integral(value: float, unit: IntegralUnit) -> float:
    """Return an integral time [s] in a unit."""
    match unit:
        case IntegralUnit.SECONDS:
            return value
        case IntegralUnit.REPEATS_PER_MINUTE:
            return _MINUTE / value
        case IntegralUnit.PER_SECOND:
            return 1.0 / value
        case IntegralUnit.MINUTES:
            return value / _MINUTE


def _seconds(value: float, unit: IntegralUnit) -> float:
    """Return the integral time [s] of a setting; reciprocals undo themselves."""
    return value * _MINUTE if unit is IntegralUnit.MINUTES else _integral(value, unit)


def _scale(unit: DerivativeUnit) -> float:
    return _MINUTE if unit is DerivativeUnit.MINUTES else 1.0


def _round(name: str, value: float, step: float, *, may_vanish: bool = False) -> float:
    """Round to a step of the block; a derivative may vanish, the others may not."""
    if step <= 0.0:
        return value
    rounded = round(value / step) * step
    if rounded == 0.0 and not may_vanish:
        raise ModelError(
            f"rounding: the block takes its {name} in steps of {step:g}, and {value:.4g} would "
            "round to 0; choose another unit, or a block with a finer step"
        )
    decimals = max(0, 2 - math.floor(math.log10(step)))
    return round(rounded, decimals)
