"""The first page of the report: title block, what came out, what was tested and how."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.domain.verdict import Outcome
from harness.reporting.document import named_parts, number, parts, text, texts
from harness.reporting.markup import Markup, badge, element, joined, table
from harness.reporting.summary import findings_told, judged_phases, misses
from harness.reporting.words import (
    duration,
    figure_in,
    humanised,
    outcome_of,
    shown_unit,
)

if TYPE_CHECKING:
    from collections.abc import Mapping

    from harness.domain.run import RunHeader

BUILT_IN = "builtin"  # as the header names the rig's own block
MEANING = {
    Outcome.PASS: "Every figure judged lies within its limits.",
    Outcome.FAIL: "At least one figure judged lies outside its limits.",
    Outcome.INVALID: "The run cannot be judged; it is neither a pass nor a fail.",
    Outcome.NOT_DECIDABLE: "The record does not decide the question.",
    Outcome.SHOWN: "Nothing was judged.",
}
METHOD = (
    "The plant is simulated by its nonlinear balances; controller, valves and transmitters act "
    "on it tick by tick. A phase makes one step and lasts until, with the confidence stated "
    "under Events, next to nothing of it is still to come. Each phase in automatic is compared "
    "with two predictions: the linear model under the same sampled block, and this plant "
    "under the ideal block with the same settings, sampling, delay and noise. The controller is "
    "judged against the second, on the true value, so that noise of the transmitter is not "
    "counted against it. The gap between the two predictions says how far the step leaves the "
    "linear range. The design target is what the tuning rule asked for; it is shown and never "
    "judged."
)
GLANCE = (
    ("Settling, 2 %", ("settling_time_2",), "s"),
    ("Overshoot or peak", ("overshoot", "peak_deviation"), "1"),
    ("IAE", ("iae",), "s"),
    ("Offset", ("offset",), "1"),
)


def head_block(document: Mapping[str, object], header: RunHeader) -> Markup:
    """Return name and verdict of the run."""
    outcome = outcome_of(text(document, "verdict"))
    kind = outcome.value.replace(" ", "-")
    reasons = joined(
        element("li", f"{reason[:1].upper()}{reason[1:].rstrip('.')}.")
        for reason in texts(document, "reasons")
    )
    names = element(
        "div",
        element("p", "Control loop test report", css="kind"),
        element("h1", header.rig_name),
        element("p", f"Trial: {header.trial_name or 'none, a live session'}", css="trial"),
        element("p", f"Run {header.run}, started {utc_words(header.started_utc)}", css="run"),
    )
    verdict = element(
        "div",
        badge(outcome, "large"),
        element("p", MEANING[outcome]),
        css=f"verdict {kind}",
    )
    # Beneath both, over the whole width: a reason is often a long sentence.
    why = element("ul", reasons, css=f"reasons {kind}") if reasons else ""
    return Markup(f"<header>{names}{verdict}</header>{why}\n")


def title_block(document: Mapping[str, object], header: RunHeader) -> Markup:
    """Return the fields that name the job; what the program cannot know is left to fill in."""
    loops = named_parts(document, "loops")
    built_in = header.controller == BUILT_IN
    fields = (
        ("Client", ""),
        ("Project", ""),
        ("Site", ""),
        ("Loop", ", ".join(loops)),
        ("Service of the loop", ""),
        (
            "Controller: make, type, firmware",
            "the rig's own reference block" if built_in else "",
        ),
        ("Document no., revision", ""),
        ("Date of the test", header.started_utc[:10]),
        ("Tested with", f"dryrig {header.versions.get('dryrig', '')}".strip()),
    )
    cells = joined(
        element("div", element("small", label), element("span", value))
        for label, value in fields
    )
    return Markup(f'<div class="title-block">{cells}</div>\n')


def summary(document: Mapping[str, object]) -> Markup:
    """Return the result in a sentence, a table of the judged phases, and what to look at."""
    phases = parts(document, "phases")
    judged = judged_phases(document)
    pieces = [element("p", _result_words(judged), css="result")]
    if judged:
        pieces.append(_overview(judged))
    told = [
        element("li", element("b", ", ".join(names)), f": {finding}")
        for finding, names in findings_told(document)
    ]
    told += [element("li", element("b", name), f": {words}") for name, words in misses(judged)]
    if told:
        pieces += [element("h4", "What stands out"), element("ul", *told, css="findings")]
    rest = [phase for phase in phases if phase not in judged]
    if rest:
        words = ", ".join(f"{text(phase, 'name')} ({_length(phase)})" for phase in rest)
        told_rest = f"Not judged, to bring the plant to rest or to identify it: {words}."
        pieces.append(element("p", told_rest, css="note"))
    return joined(pieces)


def tested(document: Mapping[str, object], header: RunHeader) -> Markup:
    """Return what was tested, and how, in words."""
    loops = [_loop_words(tag, loop) for tag, loop in named_parts(document, "loops").items()]
    who = (
        "by the rig's own reference block"
        if header.controller == BUILT_IN
        else f"by the controller under test, {header.controller}"
    )
    words = (
        f"{'; '.join(loops) or 'No loop'}; rig “{header.rig_name}”, closed {who}. "
        f"The trial has {len(parts(document, 'phases'))} phases, of which "
        f"{len(judged_phases(document))} are judged."
    )
    return joined((element("p", words), element("p", METHOD)))


def utc_words(stamp: str) -> str:
    """Return an ISO 8601 stamp as people write it: ``2026-03-05 07:08:09 UTC``."""
    return stamp.replace("T", " ").removesuffix("Z") + " UTC" if stamp.endswith("Z") else stamp


def _loop_words(tag: str, loop: Mapping[str, object]) -> str:
    measured, moved, load = (text(loop, key) for key in ("process_variable", "output", "load"))
    if not (measured and moved):
        return f"Loop {tag}"
    words = f"Loop {tag}, which measures {measured} and moves {moved}"
    return f"{words}; its load is {load}" if load else words


def _result_words(judged: list[dict[str, object]]) -> str:
    if not judged:
        return "No phase was judged."
    outcomes = [outcome_of(text(phase, "verdict")) for phase in judged]
    valid = [
        phase
        for phase, outcome in zip(judged, outcomes, strict=True)
        if outcome is not Outcome.INVALID
    ]
    lost = len(judged) - len(valid)
    cannot = f"{lost} of {len(judged)} phases cannot be judged"
    if not valid:
        return f"{cannot}."
    words = f"{_count(outcomes, Outcome.PASS)} of {len(valid)} judged phases pass"
    figures = [
        outcome_of(text(metric, "verdict"))
        for phase in valid
        for metric in named_parts(phase, "metrics").values()
    ]
    judged_figures = len(figures) - _count(figures, Outcome.SHOWN)
    within = _count(figures, Outcome.PASS)
    words += f"; of {judged_figures} figures judged {within} lie within limits"
    for outcome, told in ((Outcome.FAIL, "outside"), (Outcome.NOT_DECIDABLE, "not decidable")):
        if count := _count(figures, outcome):
            words += f", {count} {told}"
    return f"{words}; {cannot}." if lost else f"{words}."


def _count(outcomes: list[Outcome], wanted: Outcome) -> int:
    return sum(1 for outcome in outcomes if outcome is wanted)


def _overview(judged: list[dict[str, object]]) -> Markup:
    rows = []
    for phase in judged:
        metrics = named_parts(phase, "metrics")
        what = humanised(text(phase, "kind")).lower()
        change = number(phase, "change")
        step = f"{what} of {100 * change:+.3g} %" if change else what
        cells = [_glance(metrics, names) for _, names, _ in GLANCE]
        verdict = badge(text(phase, "verdict") or Outcome.SHOWN)
        rows.append([text(phase, "name"), step, *cells, verdict])
    heads = [
        joined((title, element("small", f" [{shown_unit(unit)}]"))) for title, _, unit in GLANCE
    ]
    titles = ("Phase", "Step", *heads, "Verdict")
    note = "Measured, and in brackets predicted by the nonlinear plant. Overshoot is a part of "
    note += "the step, peak and offset are parts of the span of the process variable."
    return joined((table(titles, rows, css="overview"), element("p", note, css="note")))


def _glance(metrics: Mapping[str, Mapping[str, object]], names: tuple[str, ...]) -> Markup:
    """Return measured and predicted figure of the first of these metrics that has any."""
    for name in names:
        metric = metrics.get(name, {})
        values = [number(metric, key) for key in ("measured", "predicted_nonlinear")]
        if any(value is not None for value in values):
            unit = text(metric, "unit")
            measured, predicted = (figure_in(value, unit) for value in values)
            css = "missed" if outcome_of(text(metric, "verdict")) is Outcome.FAIL else ""
            return joined(
                (element("b", measured, css=css), element("small", f" ({predicted})"))
            )
    return Markup("not reached" if metrics else "")


def _length(phase: Mapping[str, object]) -> str:
    start, end = number(phase, "start"), number(phase, "end")
    return duration(end - start) if start is not None and end is not None else "no time"
