"""How figures, metrics and verdicts are put into words, the same in every report."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.domain.verdict import Outcome
from harness.reporting.document import number

if TYPE_CHECKING:
    from collections.abc import Mapping

NOT_REACHED = "not reached"
DIGITS = 4  # significant; a level transmitter resolves no more
LARGEST_PLAIN = 1e7  # beyond it, and below the next, powers of ten are easier to read
SMALLEST_PLAIN = 1e-4
FINEST = 4  # decimals of a percentage; nobody judges a millionth of a span

CAUTIONS = (
    "The outputs of a controller under test must be isolated from the field: no output may "
    "reach a real valve, pump or motor while it is connected to this rig.",
    "This report is no evidence for a safety function. Safety instrumented functions are "
    "verified by their own standards and procedures.",
    "The plant is a simulation. Local codes and the judgement of licensed practice decide "
    "whether, and how, a controller is taken into service.",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class MetricWords:
    """How a metric is called.

    Parameters
    ----------
    title : str
        Name in a table.
    of_what : str
        What a fraction is a fraction of, or what the figure is taken over.
    """

    title: str
    of_what: str


METRICS = {
    "settling_time_2": MetricWords(title="Settling time", of_what="2 % band"),
    "settling_time_5": MetricWords(title="Settling time", of_what="5 % band"),
    "overshoot": MetricWords(title="Overshoot", of_what="of the step"),
    "rise_time": MetricWords(title="Rise time", of_what="10 to 90 %"),
    "peak_deviation": MetricWords(title="Peak deviation", of_what="of span"),
    "peak_time": MetricWords(title="Time of the peak", of_what=""),
    "iae": MetricWords(title="IAE", of_what="integral of |e|"),
    "ise": MetricWords(title="ISE", of_what="integral of e²"),
    "itae": MetricWords(title="ITAE", of_what="integral of t|e|"),
    "offset": MetricWords(title="Offset", of_what="of span"),
    "output_travel": MetricWords(title="Output travel", of_what="of output"),
    "decay_ratio": MetricWords(title="Decay ratio", of_what="second peak to first"),
}

SIGNS = {
    Outcome.PASS: "✓",
    Outcome.FAIL: "✗",
    Outcome.INVALID: "!",
    Outcome.NOT_DECIDABLE: "?",
    Outcome.SHOWN: "·",
}

UNITS = {
    "1": "%",
    "s^2": "s²",
    "m3/h": "m³/h",
    "m3/s": "m³/s",
    "m3": "m³",
    "m3/h/%": "m³/h per %",
    "%/m3/h": "% per m³/h",
}


def outcome_of(text: str) -> Outcome:
    """Return the outcome of its text; an unknown one counts as invalid."""
    try:
        return Outcome(text)
    except ValueError:
        return Outcome.INVALID


def metric_title(name: str) -> str:
    """Return the full name of a metric in one line."""
    words = metric_words(name)
    return f"{words.title}, {words.of_what}" if words.of_what else words.title


def metric_words(name: str) -> MetricWords:
    """Return the words for a metric; one that is not in the table is called by its name."""
    known = METRICS.get(name)
    return known or MetricWords(title=humanised(name), of_what="")


def humanised(name: str) -> str:
    """Return a name of the program as words: ``closed_loop_time`` becomes Closed loop time."""
    words = name.replace("_", " ").replace("-", " ").strip()
    return words[:1].upper() + words[1:]


def figure(value: float | None, missing: str = NOT_REACHED, digits: int = DIGITS) -> str:
    """Return a number with four significant digits, or a word where there is none.

    Parameters
    ----------
    value : float or None
        The number [any unit]; None and what is not finite give ``missing``.
    missing : str
        The word.
    digits : int
        Significant digits [-].
    """
    if value is None or not math.isfinite(value):
        return missing
    if value == 0.0:
        return "0"
    size = abs(value)
    if not SMALLEST_PLAIN <= size < LARGEST_PLAIN:
        return f"{value:.{digits - 1}e}"
    decimals = digits - 1 - math.floor(math.log10(size))
    rounded = round(value, decimals)
    decimals = digits - 1 - math.floor(math.log10(abs(rounded)))  # 9.9996 became 10.00
    return f"{rounded:.{max(0, decimals)}f}"


def figure_in(
    value: float | None, unit: str, missing: str = NOT_REACHED, digits: int = DIGITS
) -> str:
    """Return a number as shown in ``shown_unit(unit)``: fractions times 100, and not too fine.

    Parameters
    ----------
    value : float or None
        The number, in ``unit``; None and what is not finite give ``missing``.
    unit : str
        Its unit, ``"1"`` for a fraction.
    missing : str
        The word.
    digits : int
        Significant digits [-].
    """
    words = figure(in_unit(value, unit), missing, digits)
    shown = in_unit(value, unit)
    if unit != "1" or shown is None or words == missing:
        return words
    finest = min(FINEST, digits)
    rounded = round(shown, finest)
    if rounded == 0.0:
        return "0" if shown == 0.0 else f"{0:.{finest}f}"
    return words if len(words.partition(".")[2]) <= finest else f"{rounded:.{finest}f}"


def shown_unit(unit: str) -> str:
    """Return a unit as people read it; a fraction is shown in per cent."""
    return UNITS.get(unit, unit)


def in_unit(value: float | None, unit: str) -> float | None:
    """Return the number to show in ``shown_unit`` of its unit: fractions times 100."""
    return value * 100.0 if value is not None and unit == "1" else value


def quantity(value: float | None, unit: str, missing: str = NOT_REACHED) -> str:
    """Return number and unit, e.g. ``4.050 %`` for 0.0405 of unit ``"1"``."""
    words = figure_in(value, unit, missing)
    return words if words == missing else f"{words} {shown_unit(unit)}".rstrip()


def limit_words(limit: Mapping[str, object], unit: str) -> str:
    """Return the limits in words, in the unit as shown: ``26.10 to 31.90``, ``at most 5.000``."""
    low, high = (number(limit, key) for key in ("low", "high"))
    if low is not None and high is not None:
        return f"{figure_in(low, unit)} to {figure_in(high, unit)}"
    if high is not None:
        return f"at most {figure_in(high, unit)}"
    return f"at least {figure_in(low, unit)}" if low is not None else "none"


def event_text(subject: str, kind: str, text: str) -> str:
    """Return an event in one line: who, what kind, and its text; a run needs no name."""
    return f"{kind}: {text}" if subject == "run" else f"{subject}, {kind}: {text}"


def duration(seconds: float) -> str:
    """Return a duration as ``h:mm:ss``, or ``m:ss`` below an hour [s]."""
    whole = max(0, round(seconds))
    hours, rest = divmod(whole, 3600)
    minutes, left = divmod(rest, 60)
    return f"{hours}:{minutes:02d}:{left:02d}" if hours else f"{minutes}:{left:02d}"
