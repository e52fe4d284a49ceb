"""Settings as one block takes them: in its form, in its units, rounded to what it can hold."""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal
from typing import TYPE_CHECKING

from harness.domain.models import ControllerSettings
from harness.domain.orders import BlockForm, GainUnit, TimeUnit
from harness.errors import ModelError
from harness.tuning.forms import (
    gain_engineering,
    gain_from_engineering,
    gain_from_proportional_band,
    proportional_band,
)

if TYPE_CHECKING:
    from harness.domain.orders import BlockUnits
    from harness.domain.rig import Action
    from harness.domain.signals import Range

_PERCENT_SPAN = 100.0  # of an output in percent [%]
_PER_MINUTE = 60.0  # seconds in a minute [s]


@dataclass(frozen=True, slots=True, kw_only=True)
class BlockEntry:
    """What somebody types into a block, and what the block then has.

    Parameters
    ----------
    gain : float
        Number for the gain [``gain_unit``].
    gain_name, gain_text, gain_unit : str
        What the block calls it, the number to type, and its unit.
    integral : float or None
        Number for the integral action; None where there is none [``integral_unit``].
    integral_name, integral_text, integral_unit : str
        The same of the integral action.
    settings : ControllerSettings
        What these numbers are in ideal form: what a prediction has to use.
    """

    gain: float
    gain_name: str
    gain_text: str
    gain_unit: str
    integral: float | None
    integral_name: str
    integral_text: str
    integral_unit: str
    settings: ControllerSettings

    @property
    def words(self) -> str:
        """Return both numbers in words."""
        gain = f"{self.gain_name} {self.gain_text} {self.gain_unit}".strip()
        if self.integral is None:
            return f"{gain}, integral action off"
        return f"{gain}, {self.integral_name} {self.integral_text} {self.integral_unit}".strip()


def block_entry(settings: ControllerSettings, block: BlockUnits, measured: Range) -> BlockEntry:
    """Return what to type into a block so that it has given settings, as nearly as it can.

    Parameters
    ----------
    settings : ControllerSettings
        Ideal form.
    block : BlockUnits
        The block. Without derivative action its series form is the ideal one.
    measured : Range
        Range of the process variable in the unit shown.

    Returns
    -------
    BlockEntry
        Numbers, and the settings that they stand for.

    Raises
    ------
    ModelError
        When the block cannot hold them: a number rounds to nothing.
    """
    wanted = _gain_shown(settings.gain, block, measured)
    gain, gain_text = rounded(wanted, block.gain_resolution)
    _require(gain, wanted, "gain", block.gain_resolution)
    integral, integral_text = None, ""
    if settings.integral_time is not None:
        wanted = _integral_shown(settings.gain, settings.integral_time, block, measured)
        integral, integral_text = rounded(wanted, block.time_resolution)
        _require(integral, wanted, "integral action", block.time_resolution)
    names = _names(block, measured)
    return BlockEntry(
        gain=gain,
        gain_name=names[0],
        gain_text=gain_text,
        gain_unit=names[1],
        integral=integral,
        integral_name=names[2],
        integral_text=integral_text,
        integral_unit=names[3],
        settings=block_settings(gain, integral, settings.action, block, measured),
    )


def block_settings(
    gain: float, integral: float | None, action: Action, block: BlockUnits, measured: Range
) -> ControllerSettings:
    """Return the settings that the numbers in a block stand for.

    Parameters
    ----------
    gain : float
        The gain as the block shows it; above 0 [unit of the block].
    integral : float or None
        The integral action as the block shows it; None where it is off [unit of the block].
    action : Action
        Direct or reverse.
    block : BlockUnits
        The block.
    measured : Range
        Range of the process variable in the unit shown.

    Returns
    -------
    ControllerSettings
        Ideal form.
    """
    fraction = _gain_from(gain, block, measured)
    time = None
    if integral is not None:
        seconds = {
            TimeUnit.SECONDS: lambda: integral,
            TimeUnit.MINUTES: lambda: integral * _PER_MINUTE,
            TimeUnit.REPEATS: lambda: _PER_MINUTE / integral,
            TimeUnit.RATE: lambda: 1.0 / integral,
        }[block.time_unit]()
        # In the parallel form the integral part has a gain of its own: 1/seconds = Kp / Ti.
        time = seconds * (_parallel_gain(fraction, block, measured) or 1.0)
    return ControllerSettings(gain=fraction, integral_time=time, action=action)


def rounded(value: float, resolution: float | None) -> tuple[float, str]:
    """Return a number as it can be typed, and its text.

    Parameters
    ----------
    value : float
        The number [any unit].
    resolution : float or None
        Smallest step; None for four significant digits [unit of ``value``].

    Returns
    -------
    number : float
        Nearest number that can be typed, halves to the even step [unit of ``value``].
    text : str
        With the decimals that the step has.
    """
    if resolution is None:
        text = f"{value:.4g}"
        return float(text), text
    step = Decimal(repr(resolution)).normalize()  # 1.0 has no decimals
    number = (Decimal(repr(value)) / step).quantize(Decimal(1)) * step
    return float(number), f"{number:f}"


def _gain_shown(gain: float, block: BlockUnits, measured: Range) -> float:
    match block.gain_unit:
        case GainUnit.PERCENT:
            return gain
        case GainUnit.ENGINEERING:
            return gain_engineering(gain, measured.span, _PERCENT_SPAN)
        case GainUnit.BAND:
            return proportional_band(gain)
        case GainUnit.COUNTS:
            return gain_engineering(gain, block.process_variable_counts, block.output_counts)


def _gain_from(shown: float, block: BlockUnits, measured: Range) -> float:
    match block.gain_unit:
        case GainUnit.PERCENT:
            return shown
        case GainUnit.ENGINEERING:
            return gain_from_engineering(shown, measured.span, _PERCENT_SPAN)
        case GainUnit.BAND:
            return gain_from_proportional_band(shown)
        case GainUnit.COUNTS:
            return gain_from_engineering(
                shown, block.process_variable_counts, block.output_counts
            )


def _integral_shown(
    gain: float, integral_time: float, block: BlockUnits, measured: Range
) -> float:
    seconds = integral_time / (_parallel_gain(gain, block, measured) or 1.0)
    match block.time_unit:
        case TimeUnit.SECONDS:
            return seconds
        case TimeUnit.MINUTES:
            return seconds / _PER_MINUTE
        case TimeUnit.REPEATS:
            return _PER_MINUTE / seconds
        case TimeUnit.RATE:
            return 1.0 / seconds


def _parallel_gain(gain: float, block: BlockUnits, measured: Range) -> float | None:
    """Return the gain that is part of a parallel block's integral number; None in other forms.

    A proportional band has no integral counterpart; the gain is then that of fractions.
    """
    if block.form is not BlockForm.PARALLEL:
        return None
    return gain if block.gain_unit is GainUnit.BAND else _gain_shown(gain, block, measured)


def _names(block: BlockUnits, measured: Range) -> tuple[str, str, str, str]:
    """Return names and units of both numbers."""
    gain_name, gain_unit = {
        GainUnit.PERCENT: ("gain", "%/%"),
        GainUnit.ENGINEERING: ("gain", f"%/{measured.unit}"),
        GainUnit.BAND: ("proportional band", "%"),
        GainUnit.COUNTS: ("gain", "counts/count"),
    }[block.gain_unit]
    name = {
        TimeUnit.SECONDS: "integral time",
        TimeUnit.MINUTES: "integral time",
        TimeUnit.REPEATS: "integral action",
        TimeUnit.RATE: "integral action",
    }[block.time_unit]
    unit = block.time_unit.value
    if block.form is not BlockForm.PARALLEL:
        return gain_name, gain_unit, name, unit
    of_gain = "%/%" if block.gain_unit is GainUnit.BAND else gain_unit
    parallel = {
        TimeUnit.SECONDS: ("integral time of its own", f"s per {of_gain}"),
        TimeUnit.MINUTES: ("integral time of its own", f"min per {of_gain}"),
        TimeUnit.REPEATS: ("integral gain", f"{of_gain} per minute"),
        TimeUnit.RATE: ("integral gain", f"{of_gain} per second"),
    }[block.time_unit]
    if block.gain_unit is not GainUnit.BAND:
        gain_name = "proportional gain"
    return gain_name, gain_unit, *parallel


def _require(number: float, wanted: float, what: str, resolution: float | None) -> None:
    if number == 0.0:
        raise ModelError(
            f"{what}: {wanted:.4g} is less than half of the block's resolution of {resolution:g}, "
            "and would be typed as 0; give the block a finer resolution or another unit, or ask "
            "for another closed-loop time"
        )
