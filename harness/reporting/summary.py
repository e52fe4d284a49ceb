"""What stands out in a verdict, for the report's first page and the terminal alike."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.domain.verdict import Outcome
from harness.reporting.document import Document, named_parts, number, part, parts, text, texts
from harness.reporting.words import (
    limit_words,
    metric_words,
    outcome_of,
    quantity,
    shown_unit,
)

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping


MOST_MISSES = 3  # with their figures; the tables have all
SAME_TITLE = ("settling_time_2", "settling_time_5")  # told apart by their bands


def judged_phases(document: Mapping[str, object]) -> list[Document]:
    """Return the phases that were judged, and those that ended badly.

    Parameters
    ----------
    document : mapping
        The verdict document.
    """
    bad = {Outcome.FAIL, Outcome.INVALID}
    return [
        phase
        for phase in parts(document, "phases")
        if named_parts(phase, "metrics") or text(phase, "verdict") in bad
    ]


def misses(phases: Iterable[Mapping[str, object]]) -> list[tuple[str, str]]:
    """Return for each phase, in words, the figures that lie outside their limits.

    The first few come with their figures, the others by name. A phase that cannot be judged
    has none.

    Parameters
    ----------
    phases : iterable of mapping
        Phases of the verdict document.

    Returns
    -------
    list of (str, str)
        Name of the phase; its misses. Phases without one are left out.
    """
    told = []
    for phase in phases:
        if outcome_of(text(phase, "verdict")) is not Outcome.FAIL:
            continue
        missed = [
            (name, metric)
            for name, metric in named_parts(phase, "metrics").items()
            if outcome_of(text(metric, "verdict")) is Outcome.FAIL
        ]
        if missed:
            words = "; ".join(_miss(name, metric) for name, metric in missed[:MOST_MISSES])
            more = ", ".join(_title(name) for name, _ in missed[MOST_MISSES:])
            words += f"; also {more}" if more else ""
            told.append((text(phase, "name"), f"outside limits: {words}."))
    return told


def findings_told(document: Mapping[str, object]) -> list[tuple[str, list[str]]]:
    """Return each finding once, with the names of the phases that it was made in.

    One that the reasons of the run tell already is left out.

    Parameters
    ----------
    document : mapping
        The verdict document.
    """
    reasons = " ".join(texts(document, "reasons")).lower()
    told: dict[str, list[str]] = {}
    for phase in parts(document, "phases"):
        for finding in texts(phase, "findings"):
            if finding.rstrip(".").lower() not in reasons:
                told.setdefault(finding, []).append(text(phase, "name"))
    return list(told.items())


def _miss(name: str, metric: Mapping[str, object]) -> str:
    unit, limit = text(metric, "unit"), part(metric, "limit")
    measured = quantity(number(metric, "measured"), unit)
    allowed = f"{limit_words(limit, unit)} {shown_unit(unit)}"
    return f"{_title(name)} {measured}, allowed {allowed}"


def _title(name: str) -> str:
    """Return a metric's name within a sentence."""
    words = metric_words(name)
    title = words.title if words.title.isupper() else words.title.lower()
    return f"{title} ({words.of_what})" if words.of_what and name in SAME_TITLE else title
