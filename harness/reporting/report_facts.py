"""The part of the report that states facts: conditions, models, tuning, lateness, events."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from harness.reporting.document import Document, named_parts, number, numbers, part, text
from harness.reporting.markup import Markup, element, joined, table
from harness.reporting.words import figure, humanised, quantity

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

    from harness.domain.run import Event, RunHeader

MOST_EVENTS = 200  # in the report; the record holds all
CONDITION_UNITS = {"tick": "s", "scan": "s", "period": "s", "delay": "s"}
NO_FIGURE = "\N{EN DASH}"
PATHS = {"output": "controller output to process variable", "load": "load to process variable"}
PARAMETERS = {
    "gain": ("Gain", "% of span per % of output"),
    "gain_engineering": ("Gain", "engineering units"),
    "total_lag": ("Total lag, dead time included", "s"),
    "time_constant_1": ("Time constant 1", "s"),
    "time_constant_2": ("Time constant 2", "s"),
    "dead_time": ("Dead time", "s"),
}


def conditions(document: Mapping[str, object], header: RunHeader) -> Markup:
    """Return the table of what the run ran under."""
    facts: dict[str, str] = {
        "Run": header.run,
        "Started (UTC)": header.started_utc,
        "Clock": header.clock,
        "Pace": _pace(header.pace),
        "Tick": f"{header.tick:g} s",
        "Seed of the noise": str(header.seed),
        "Controller": header.controller,
        "Versions": ", ".join(f"{name} {version}" for name, version in header.versions.items()),
    }
    facts |= {humanised(name): value for name, value in header.extra.items()}
    for name, value in part(document, "conditions").items():
        title = humanised(name)
        if title not in facts and name not in {"seed", "versions", "run"}:
            facts[title] = _condition(name, value)
    return table((), list(facts.items()), css="facts")


def loop_sections(document: Mapping[str, object]) -> Markup:
    """Return models and tuning of each loop."""
    sections = []
    for tag, loop in named_parts(document, "loops").items():
        models = named_parts(loop, "models")
        pieces = [element("h3", f"{tag}: models")]
        pieces += [_model_table(path, model) for path, model in models.items()]
        if not models:
            pieces.append(element("p", "No models were used.", css="note"))
        tuning = part(loop, "tuning")
        if tuning:
            pieces += [element("h3", f"{tag}: controller settings"), _tuning_tables(tuning)]
        sections.append(Markup(f'<section class="loop">{joined(pieces)}</section>'))
    return joined(sections)


def lateness(document: Mapping[str, object]) -> Markup:
    """Return how late the ticks were, or that there was no clock to be late against."""
    facts = part(document, "lateness")
    if not facts:
        return element("p", "The run was in virtual time: no tick can be late.")
    rows = [
        [title, _milliseconds(number(facts, key))]
        for key, title in (("p50", "Median"), ("p99", "99 of 100 within"), ("max", "Greatest"))
    ]
    rows.append(["Ticks later than half a scan", quantity(number(facts, "late_fraction"), "1")])
    return table((), rows, css="facts narrow")


def event_table(events: Sequence[Event], tick: float) -> Markup:
    """Return the events with their plant time.

    Parameters
    ----------
    events : sequence of Event
        Events, in order.
    tick : float
        Step of the rig [s].
    """
    if not events:
        return element("p", "None were recorded.")
    rows = [
        [f"{event.tick * tick:.1f}", str(event.kind), event.subject, event.text]
        for event in events[:MOST_EVENTS]
    ]
    listed = table(("Plant time [s]", "Event", "Subject", "What"), rows, css="events")
    if len(events) <= MOST_EVENTS:
        return listed
    words = f"{len(events) - MOST_EVENTS} more events are in the record."
    return joined((listed, element("p", words, css="note")))


def _pace(pace: float) -> str:
    return f"{pace:g} plant seconds per second" if pace > 0 else "as fast as it goes"


def _condition(name: str, value: object) -> str:
    if isinstance(value, dict):
        return ", ".join(f"{humanised(str(key))} {item}" for key, item in value.items())
    if value is None:
        return NO_FIGURE
    if isinstance(value, float):
        units = [unit for key, unit in CONDITION_UNITS.items() if key in name]
        return f"{value:g} {units[0] if units else ''}".strip()
    return str(value)


def _model_table(path: str, model: Document) -> Markup:
    linearised = part(model, "linearised")
    limits = named_parts(model, "limits")
    levels = {number(limit, "level") for limit in limits.values()} - {None}
    level = f"{100 * max(item for item in levels if item):g} % limits" if levels else "limits"
    here, there = _parameters(model), _parameters(linearised)
    rows = []
    for name, (title, unit) in PARAMETERS.items():
        if name not in here and name not in there:
            continue
        limit = limits.get(name, {})
        low, high = number(limit, "low"), number(limit, "high")
        known = low is not None and high is not None
        rows.append(
            [
                title,
                unit,
                element("b", figure(here.get(name), NO_FIGURE)),
                f"{figure(low)} to {figure(high)}" if known else NO_FIGURE,
                figure(there.get(name), NO_FIGURE),
                _difference(here.get(name), there.get(name)),
            ]
        )
    titles = ("Parameter", "Unit", "Model used", level, "Linearised plant", "Difference")
    caption = element("h4", f"From {PATHS.get(path, path)}")
    return Markup(f'<div class="together">{caption}{table(titles, rows, css="model")}</div>')


def _parameters(model: Mapping[str, object]) -> dict[str, float]:
    lags = numbers(model, "time_constants")
    found = {
        "gain": number(model, "gain"),
        "gain_engineering": number(model, "gain_engineering"),
    }
    found["dead_time"] = number(model, "dead_time")
    found |= {f"time_constant_{i}": lag for i, lag in enumerate(lags, start=1)}
    if lags:
        found["total_lag"] = sum(lags) + (found["dead_time"] or 0.0)
    return {name: value for name, value in found.items() if value is not None}


def _difference(value: float | None, reference: float | None) -> str:
    if value is None or reference is None or reference == 0:
        return NO_FIGURE
    return f"{100 * (value / reference - 1):+.1f} %"


def _tuning_tables(tuning: Mapping[str, object]) -> Markup:
    rule = text(tuning, "rule")
    aim = number(tuning, "closed_loop_time")
    words = f"{text(tuning, 'law')} block, {text(tuning, 'action')} acting".strip(", ")
    if aim is not None:
        words += f", for a closed-loop time constant of {figure(aim)} s"
    if rule:
        words += f". Rule: {rule}"
    pieces = [element("p", words + ".")]
    pieces.append(table((), list(_settings(tuning)), css="facts"))
    margins = list(_margins(part(tuning, "margins")))
    if margins:
        pieces += [element("h4", "Margins of the loop with these settings")]
        pieces.append(table((), margins, css="facts"))
    return Markup(f'<div class="together">{joined(pieces)}</div>')


def _settings(tuning: Mapping[str, object]) -> Iterator[tuple[str, str]]:
    """Yield the settings in the forms in which controllers ask for them."""
    gain, integral = number(tuning, "gain"), number(tuning, "integral_time")
    engineering = number(tuning, "gain_engineering")
    if gain is not None:
        yield "Gain", f"{figure(gain)} % of output per % of span"
        if engineering is not None:
            yield "Gain, engineering units", figure(engineering)
        if gain != 0:
            yield "Proportional band", f"{figure(100 / abs(gain))} % of span"
    if integral is None or integral == 0:
        yield "Integral action", "none"
        return
    yield "Integral time", f"{figure(integral)} s = {figure(integral / 60)} min"
    yield "Integral rate", f"{figure(60 / integral)} repeats per minute"
    if gain is not None:
        yield "Integral gain (parallel form)", f"{figure(gain / integral)} 1/s"


def _margins(margins: Mapping[str, object]) -> Iterator[tuple[str, str]]:
    ratio = number(margins, "gain_margin")
    if ratio is not None and ratio > 0:
        decibels = figure(20 * math.log10(ratio))
        yield "Gain margin", f"factor {figure(ratio)} = {decibels} dB"
    phase = number(margins, "phase_margin_deg")
    if phase is not None:
        yield "Phase margin", f"{figure(phase)}°"
    delay = number(margins, "delay_margin")
    if delay is not None:
        yield "Delay margin", f"{figure(delay)} s of further dead time"
    peak = number(margins, "ms")
    if peak is not None:
        yield "Greatest sensitivity Ms", figure(peak)


def _milliseconds(seconds: float | None) -> str:
    return NO_FIGURE if seconds is None else f"{figure(1000 * seconds)} ms"
