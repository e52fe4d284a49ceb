"""What a short step on a held input tells of a block: its direction, its gain and its integral time.

The input is held and stepped, so that the loop is open and the plant has no say: the output jumps
by the gain times the error and then runs on with the slope gain times error over integral time.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.analysis.signal_case import TagCheck
from harness.domain.verdict import Outcome

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

_FEWEST_SCANS = 4  # after the step: a jump and a slope [-]
_ROOM = (
    0.2  # relative; an integral that starts a scan earlier or later is 0.1 at a tenth of Ti [-]
)
_LEAST = 0.05  # of the jump expected, below which nothing moved [-]
_SECONDS_PER_MINUTE = 60.0
_WHOLE = 100.0
_SLOWEST = 100.0  # times the integral time ordered [-]


@dataclass(frozen=True, slots=True, kw_only=True)
class LawStep:
    """A step of the error of a block whose input is held.

    Parameters
    ----------
    times : sequence of float
        Time of the image of each scan, from that of the first scan after the step [s].
    outputs : sequence of float
        Outputs of these scans, less the output before the step [-].
    error : float
        Error stepped to, positive where the output should rise [fraction of span].
    scan : float
        Period of the controller [s].
    gain : float
        Gain ordered [-].
    integral_time : float
        Integral time ordered; infinite for none [s].
    span : float
        Span of the process variable in its unit [unit].
    limited : bool
        Whether the output came to a limit.
    """

    times: Sequence[float]
    outputs: Sequence[float]
    error: float
    scan: float
    gain: float
    integral_time: float
    span: float
    limited: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class LawFound:
    """The law that a step shows.

    Parameters
    ----------
    gain : float
        Gain; negative where the block acts the wrong way [-].
    integral_time : float
        Integral time; infinite for none, not a number where it could not be seen [s].
    """

    gain: float
    integral_time: float


def law_found(step: LawStep) -> LawFound | None:
    """Return gain and integral time of a step; None where too little was seen.

    Parameters
    ----------
    step : LawStep
        The step.
    """
    times, outputs = _from_the_jump(step)
    if len(outputs) < _FEWEST_SCANS:
        return None
    if step.limited:
        return LawFound(gain=float(outputs[0] / step.error), integral_time=math.nan)
    slope, start = (float(each) for each in np.polyfit(times, outputs, 1))
    # The integral of the first scan is in its output already (backward Euler).
    jump = start - slope * step.scan
    # Slower than a hundred times the time ordered is not told from none.
    slowest = _SLOWEST * step.integral_time
    still = abs(slope) * slowest < abs(jump) or not math.isfinite(step.integral_time)
    return LawFound(gain=jump / step.error, integral_time=math.inf if still else jump / slope)


def _from_the_jump(step: LawStep) -> tuple[Floats, Floats]:
    """Return the scans from the first that moved, in time since that one.

    A controller that reads in several requests may have read its input a tick before the image
    that it read last.
    """
    times = np.asarray(step.times, dtype=np.float64)
    outputs = np.asarray(step.outputs, dtype=np.float64)
    moved = np.flatnonzero(np.abs(outputs) > _LEAST * step.gain * abs(step.error))
    first = int(moved[0]) if len(moved) else len(outputs)
    times, outputs = times[first:], outputs[first:]
    return times - (times[0] if len(times) else 0.0), outputs


def check_law(tag: str, step: LawStep, *, units: bool) -> TagCheck:
    """Return whether a block acts in the right direction, with the gain and the time ordered.

    Parameters
    ----------
    tag : str
        Tag of the loop.
    step : LawStep
        The step.
    units : bool
        Whether gain and integral time were ordered, and are judged as well.

    Returns
    -------
    TagCheck
        Invalid where nothing moved.
    """
    found = law_found(step)
    if found is None or abs(found.gain) < _LEAST * step.gain:
        return TagCheck(
            tag=tag,
            outcome=Outcome.INVALID,
            mistake="does not act",
            evidence=f"{tag}: in automatic, with an error of {_WHOLE * step.error:+.3g} % of span, "
            "its output does not move",
            look_at="whether the block is in automatic, and uses that process variable",
        )
    facts = _facts(found)
    if found.gain < 0.0:
        return TagCheck(
            tag=tag,
            outcome=Outcome.FAIL,
            mistake="reversed action",
            evidence=f"{tag}: on an error of {_WHOLE * step.error:+.3g} % of span the output went "
            f"by {_WHOLE * step.outputs[0]:+.3g} %, away from where it had to go",
            look_at="direct and reverse action of the block, against what valve and plant do",
        )
    names = (_wrong_gain(found, step) or _wrong_time(found, step)) if units else []
    if not names:
        return TagCheck(tag=tag, outcome=Outcome.PASS, evidence=f"acts as it should: {facts}")
    return TagCheck(
        tag=tag,
        outcome=Outcome.FAIL,
        mistake=names[0],
        evidence=f"{tag} was ordered a gain of {step.gain:.4g} %/% and an integral time of "
        f"{step.integral_time:.4g} s; it acts with {'at least ' if step.limited else ''}{facts}",
        look_at="the unit of that setting in the controller, and how it is converted",
        others=tuple(dict.fromkeys(names[1:])),
    )


def _facts(found: LawFound) -> str:
    if math.isnan(found.integral_time):
        return f"a gain of {found.gain:.4g} %/%"
    time = "no integral action"
    if math.isfinite(found.integral_time):
        time = f"an integral time of {found.integral_time:.4g} s"
    return f"a gain of {found.gain:.4g} %/% and {time}"


def _wrong_gain(found: LawFound, step: LawStep) -> list[str]:
    """Return the names of the mistakes that explain a gain, the likeliest first."""
    gains = (
        ("gain taken for a proportional band", _WHOLE / step.gain),
        ("gain taken for percent of output per unit", step.gain * step.span / _WHOLE),
        ("gain taken for output per unit", step.gain * step.span),
        ("gain per unit, not per percent of span", step.gain / step.span),
        ("gain divided by a hundred", step.gain / _WHOLE),
        ("gain times a hundred", step.gain * _WHOLE),
    )
    if step.limited:  # the output went as far as it could: the gain is at least this
        if step.gain >= (1.0 - _ROOM) * found.gain:
            return []
        return [name for name, gain in gains if gain >= found.gain] or ["wrong gain"]
    if _near(found.gain, step.gain):
        return []
    return [name for name, gain in gains if _near(found.gain, gain)] or ["wrong gain"]


def _wrong_time(found: LawFound, step: LawStep) -> list[str]:
    """Return the names of the mistakes that explain an integral time, the likeliest first."""
    if math.isnan(found.integral_time) or _near(found.integral_time, step.integral_time):
        return []
    times = (
        ("integral time in minutes for seconds", step.integral_time * _SECONDS_PER_MINUTE),
        ("integral time in seconds for minutes", step.integral_time / _SECONDS_PER_MINUTE),
        (
            "integral time taken for repeats per minute",
            _SECONDS_PER_MINUTE / step.integral_time,
        ),
        ("integral time taken for repeats per second", 1.0 / step.integral_time),
        ("no integral action", math.inf),
    )
    names = [name for name, time in times if _near(found.integral_time, time)]
    return names or ["wrong integral time"]


def _near(found: float, wanted: float) -> bool:
    if math.isinf(wanted):
        return math.isinf(found)
    return abs(found - wanted) <= _ROOM * abs(wanted)
