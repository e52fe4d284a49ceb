"""The part of the report that states facts: conditions, models, tuning, margins."""

from __future__ import annotations

import hashlib
import math
from typing import TYPE_CHECKING

from harness.reporting.document import Document, named_parts, number, numbers, part, text
from harness.reporting.markup import Markup, element, joined, table
from harness.reporting.report_front import BUILT_IN, utc_words
from harness.reporting.words import duration, figure, humanised, quantity, shown_unit

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from harness.domain.run import RunHeader

CONDITION_UNITS = {"tick": "s", "scan": "s", "period": "s", "delay": "s"}
NO_FIGURE = "\N{EN DASH}"
PATHS = {"output": "controller output to process variable", "load": "load to process variable"}
PARAMETERS = {
    "total_lag": ("Total lag, dead time included", "s"),
    "gain": ("Gain", "%/%"),
    "gain_engineering": ("Gain, engineering units", ""),
    "time_constant_1": ("Time constant 1", "s"),
    "time_constant_2": ("Time constant 2", "s"),
    "dead_time": ("Dead time", "s"),
}
SOURCES = {
    "identified": "Identified from the steps in manual",
    "linearised": "Linearised plant at the operating point; nothing was identified",
    "given": "Given in the trial file",
}
CONTROLLERS = {BUILT_IN: "the rig's own reference block"}
TOLD = {  # conditions that the table says in its own words
    *("started_utc", "controller", "clock", "pace", "tick", "seed"),
    *("rows", "duration", "end", "versions", "run"),
}
DIGEST = 16  # of the 64 characters of a file's digest: enough to tell two files apart


def conditions(document: Mapping[str, object], header: RunHeader) -> Markup:
    """Return the table of what the run ran under."""
    told = part(document, "conditions")
    facts: dict[str, str] = {
        "Run": header.run,
        "Started": utc_words(header.started_utc),
        "Controller": CONTROLLERS.get(header.controller, header.controller),
        "Clock": _clock(header),
        "Tick": f"{header.tick:g} s",
        "Seed of the noise": str(header.seed),
    }
    covered, rows = number(told, "duration"), number(told, "rows")
    if covered is not None and rows is not None:
        facts["Plant time recorded"] = f"{duration(covered)} in {rows:.0f} rows"
    if told.get("end"):
        facts["Run ended"] = text(told, "end")
    facts |= {humanised(name): value for name, value in header.extra.items()}
    for name, value in told.items():
        if name not in TOLD:
            facts[humanised(name)] = _condition(name, value)
    facts["Rig file, SHA-256 from"] = _digest(header.rig_text)
    if header.trial_text:
        facts["Trial file, SHA-256 from"] = _digest(header.trial_text)
    facts["Versions"] = ", ".join(f"{name} {item}" for name, item in header.versions.items())
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
            pieces += [
                element("h3", f"{tag}: controller settings"),
                _tuning_tables(tuning, loop),
            ]
        sections.append(Markup(f'<section class="loop">{joined(pieces)}</section>'))
    return joined(sections)


def _clock(header: RunHeader) -> str:
    """Return how plant time passed."""
    if header.pace <= 0:
        return "virtual time: as fast as it goes"
    return f"{header.clock}, {header.pace:g} plant seconds per second"


def _digest(text: str) -> str:
    """Return the start of a file's digest, by which the file as used is known again."""
    return hashlib.sha256(text.encode("utf-8")).hexdigest()[:DIGEST]


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
    """Return the parameters of a path: model, its limits, and the linearised plant beside it."""
    limits = named_parts(model, "limits")
    identified = text(model, "source") != "linearised"
    linearised = part(model, "linearised") if identified else {}
    here, there = _parameters(model), _parameters(linearised)
    rows = []
    for name, (title, unit) in PARAMETERS.items():
        if name not in here and name not in there:
            continue
        shown = text(model, "gain_engineering_unit") if name == "gain_engineering" else unit
        row: list[object] = [
            title,
            shown_unit(shown),
            element("b", figure(here.get(name), NO_FIGURE)),
        ]
        if limits:
            row.append(_limits(limits.get(name, {})))
        if linearised:
            row.append(figure(there.get(name), NO_FIGURE))
            row.append(_difference(here.get(name), there.get(name), unit))
        rows.append(row)
    titles = ["Parameter", "Unit", "Model used"]
    titles += [_limits_title(limits)] if limits else []
    titles += ["Linearised plant", "Difference"] if linearised else []
    caption = element("h4", f"From {PATHS.get(path, path)}")
    listed = table(titles, rows, css="model" if limits or linearised else "model narrow")
    note = element("p", _model_note(model), css="note")
    return Markup(f'<div class="together">{caption}{listed}{note}</div>')


def _model_note(model: Document) -> str:
    """Return where a model comes from, and what it is worth."""
    source = text(model, "source")
    words = SOURCES.get(source, humanised(source))
    samples, residual = number(model, "samples"), number(model, "residual_rms")
    if samples is not None and residual is not None:
        words += f": {samples:.0f} samples, residuals {quantity(residual, '1')} of span rms"
    words = f"{words}. " if words else ""
    if len(numbers(model, "time_constants")) > 1 and named_parts(model, "limits"):
        words += (
            "The total lag is well determined; how it divides into time constants and dead time "
            "is less so, as the limits say."
        )
    return words


def _limits_title(limits: Mapping[str, Document]) -> str:
    levels = [level for limit in limits.values() if (level := number(limit, "level"))]
    return f"{100 * max(levels):g} % limits" if levels else "Limits"


def _limits(limit: Mapping[str, object]) -> str:
    low, high = number(limit, "low"), number(limit, "high")
    if low is None or high is None:
        return NO_FIGURE
    return f"{figure(low)} to {figure(high)}"


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


def _difference(value: float | None, reference: float | None, unit: str) -> str:
    """Return how far a parameter is from the linearised plant's: times in s, gains in per cent."""
    if value is None or reference is None:
        return NO_FIGURE
    if unit == "s":
        return f"{value - reference:+.1f} s"
    return f"{100 * (value / reference - 1):+.1f} %" if reference else NO_FIGURE


def _tuning_tables(tuning: Mapping[str, object], loop: Mapping[str, object]) -> Markup:
    pieces = [table((), list(_settings(tuning)), css="facts")]
    rule = text(tuning, "rule")
    if rule:
        greek = rule.replace("theta", "θ").replace("tau", "τ")
        pieces.append(element("p", f"Rule: {greek}.", css="note"))
    margins = list(_margins(part(tuning, "margins")))
    if margins:
        scan = part(loop, "controller")
        period, delay = number(scan, "period"), number(scan, "delay")
        title = "Margins of the loop with these settings"
        if period is not None and delay is not None:
            title += f", sampled every {figure(period)} s with a delay of {figure(delay)} s"
        pieces += [element("h4", title), table((), margins, css="facts")]
    return Markup(f'<div class="together">{joined(pieces)}</div>')


def _settings(tuning: Mapping[str, object]) -> Iterator[tuple[str, str]]:
    """Yield the settings in the forms in which controllers ask for them."""
    gain, integral = number(tuning, "gain"), number(tuning, "integral_time")
    engineering = number(tuning, "gain_engineering")
    form = text(tuning, "form")
    yield "Control law", f"{text(tuning, 'law')}, {form} form" if form else text(tuning, "law")
    yield "Action", text(tuning, "action") or NO_FIGURE
    if gain is not None:
        yield "Gain", f"{figure(gain)} % of output per % of span"
        if engineering is not None:
            unit = shown_unit(text(tuning, "gain_engineering_unit"))
            yield "Gain, engineering units", f"{figure(engineering)} {unit}".rstrip()
        if gain != 0:
            yield "Proportional band", f"{figure(100 / abs(gain))} % of span"
    if integral is None or integral == 0:
        yield "Integral action", "none"
    else:
        yield "Integral time", f"{figure(integral)} s = {figure(integral / 60)} min"
        yield "Integral rate", f"{figure(60 / integral)} repeats per minute"
        if gain is not None:
            yield "Integral gain (parallel form)", f"{figure(gain / integral)} %/% per s"
    yield "Derivative action", "none"
    aim = number(tuning, "closed_loop_time")
    if aim is not None:
        yield "Closed-loop time constant asked for", f"{figure(aim)} s"
    reduced = _parameters(part(tuning, "reduced"))
    if reduced:
        lag = figure(reduced.get("time_constant_1"))
        dead = figure(reduced.get("dead_time"))
        words = (
            f"gain {figure(reduced.get('gain'))} %/%, time constant {lag} s, dead time {dead} s"
        )
        yield "Reduced model the rule works on", words


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
