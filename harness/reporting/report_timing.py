"""The part of the report about time: the controller's scan as measured, lateness, events."""

from __future__ import annotations

from itertools import groupby
from typing import TYPE_CHECKING

from harness.domain.run import EventKind
from harness.reporting.document import named_parts, number, part
from harness.reporting.markup import Markup, element, joined, table
from harness.reporting.words import figure, quantity

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

    from harness.domain.run import Event

MOST_EVENTS = 200  # in the report; the record holds all
NO_FIGURE = "\N{EN DASH}"
LATENESS = (
    ("p50", "Median"),
    ("p99", "99 of 100 within"),
    ("p999", "999 of 1000 within"),
    ("max", "Greatest"),
    ("allowed", "Half a scan: later counts as late"),
)


def timing(document: Mapping[str, object]) -> Markup:
    """Return the controller's scan as measured, and how late the ticks were."""
    boxes = []
    for tag, loop in named_parts(document, "loops").items():
        rows = list(_scan(loop))
        if rows:
            title = element("h3", f"{tag}: scan of the controller, plant time")
            boxes.append(element("div", title, table((), rows, css="facts")))
    title = element("h3", "Lateness of the ticks, wall time")
    facts = part(document, "lateness")
    if not facts:
        told = element("p", "The run was in virtual time: no tick can be late.")
        return element("div", *boxes, element("div", title, told), css="pair")
    late = [
        (title, _milliseconds(number(facts, key))) for key, title in LATENESS if key in facts
    ]
    late.append(("Ticks that were late", quantity(number(facts, "late_fraction"), "1")))
    boxes.append(element("div", title, table((), late, css="facts")))
    return element("div", *boxes, css="pair")


def event_table(events: Sequence[Event], tick: float) -> Markup:
    """Return the events with their plant time.

    Parameters
    ----------
    events : sequence of Event
        Events, in order.
    tick : float
        Step of the rig [s].
    """
    # When an order was known stands with its phase, as metric time zero.
    told = [event for event in events if event.kind is not EventKind.ORDER_KNOWN]
    if not told:
        return element("p", "None were recorded.")
    rows = []
    for _, same in groupby(told, key=lambda event: (event.kind, event.subject, event.text)):
        first, *more = same
        words = first.text
        if more:
            words += f" ({len(more)} more times, last at {more[-1].tick * tick:.1f} s)"
        rows.append([f"{first.tick * tick:.1f}", str(first.kind), first.subject, words])
    titles = ("Plant time [s]", "Event", "Subject", "What")
    listed = table(titles, rows[:MOST_EVENTS], css="events")
    if len(rows) <= MOST_EVENTS:
        return listed
    words = f"{len(rows) - MOST_EVENTS} more events are in the record."
    return joined((listed, element("p", words, css="note")))


def _scan(loop: Mapping[str, object]) -> Iterator[tuple[str, str]]:
    measured = part(loop, "controller")
    if not measured:
        return
    asked = number(loop, "scan")
    yield "Period, mean", _seconds(number(measured, "period"))
    if asked is not None:
        yield "Period as the rig file has it", f"{asked:g} s"
    if "jitter_p95" in measured:
        yield "Jitter, 95 of 100 within", _seconds(number(measured, "jitter_p95"))
    if "missed_scans" in measured:
        yield "Scans missed", f"{number(measured, 'missed_scans') or 0:.0f}"
    yield "Sample to output, median", _seconds(number(measured, "delay"))
    yield "Longest time without a new output", _seconds(number(measured, "longest_hold"))
    yield "Scans with an effect", f"{number(measured, 'scans') or 0:.0f}"


def _seconds(seconds: float | None) -> str:
    return NO_FIGURE if seconds is None else f"{figure(seconds)} s"


def _milliseconds(seconds: float | None) -> str:
    return NO_FIGURE if seconds is None else f"{figure(1000 * seconds)} ms"
