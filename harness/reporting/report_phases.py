"""The part of the report that shows the phases: curves, metrics, findings."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.domain.verdict import Outcome
from harness.reporting.document import named_parts, number, part, parts, text, texts
from harness.reporting.markup import Markup, badge, element, gauge, joined, table
from harness.reporting.plots import has_values, line_sample, phase_drawing
from harness.reporting.words import (
    figure_in,
    humanised,
    limit_words,
    metric_title,
    metric_words,
    outcome_of,
    shown_unit,
)

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from harness.domain.verdict import PhaseCurves

LEGEND = {
    "measured": "measured",
    "predicted_nonlinear": "predicted, nonlinear plant: judged against",
    "predicted_linear": "predicted, linear model",
    "design_target": "design target, not judged",
    "transmitted": "transmitted",
    "setpoint": "setpoint",
    "load": "load valve",
}


PROPORTIONAL = (
    "A proportional block leaves an offset: bands, overshoot and integrals are taken about the "
    "value where the response ends, and the offset says how far that is from the setpoint."
)


def phase_sections(document: Mapping[str, object], curves: Sequence[PhaseCurves]) -> Markup:
    """Return a section for each phase that has curves or metrics."""
    drawn = {item.name: item for item in curves}
    loops = part(document, "loops")
    return joined(
        _phase_section(phase, drawn.get(text(phase, "name")), part(loops, text(phase, "loop")))
        for phase in parts(document, "phases")
        if text(phase, "name") in drawn or named_parts(phase, "metrics")
    )


def _phase_section(
    phase: Mapping[str, object], curves: PhaseCurves | None, loop: Mapping[str, object]
) -> Markup:
    metrics = named_parts(phase, "metrics")
    title = element(
        "h3",
        f"{text(phase, 'loop')} {text(phase, 'name')}".strip(),
        badge(text(phase, "verdict") or Outcome.SHOWN),
    )
    when = element("p", _when(phase), css="when")
    findings = joined(element("li", finding) for finding in texts(phase, "findings"))
    listed = Markup(f'<ul class="findings">{findings}</ul>') if findings else Markup("")
    pieces = [Markup('<div class="together">'), title, when, listed]
    if curves is not None:
        settled = number(part(metrics, "settling_time_2"), "measured")
        pieces += [
            _legend(curves, text(loop, "load")),
            Markup(f'<div class="plot">{phase_drawing(curves, settled, **_tags(loop))}</div>'),
        ]
    pieces += [Markup("</div>"), _metrics_table(metrics) if metrics else Markup("")]
    if metrics and text(part(loop, "tuning"), "law") == "P":
        pieces.append(element("p", PROPORTIONAL, css="note"))
    return Markup(f'<section class="phase">{joined(pieces)}</section>')


def _tags(loop: Mapping[str, object]) -> dict[str, str]:
    """Return what to write at the upper axis, where the document has its tag."""
    name = text(loop, "process_variable")
    return {"process_variable": name} if name else {}


def _when(phase: Mapping[str, object]) -> str:
    kind = humanised(text(phase, "kind"))
    change = number(phase, "change")
    kind += f" of {100 * change:+.3g} %" if change else ""
    mode = text(phase, "mode")
    words = [f"{kind}, controller in {mode}" if mode else kind]
    start, zero, end = (number(phase, key) for key in ("start", "zero", "end"))
    if start is not None and end is not None:
        words.append(f"plant time {start:.1f} s to {end:.1f} s")
    if zero is not None:
        words.append(f"metric time zero at {zero:.1f} s")
    return "; ".join(words) + "."


def _legend(curves: PhaseCurves, load: str) -> Markup:
    shown = [name for name in LEGEND if has_values(getattr(curves, name))]
    items = [
        element(
            "span",
            Markup(line_sample(name)),
            f"{LEGEND[name]} {load}".rstrip() if name == "load" else LEGEND[name],
            css="key",
        )
        for name in shown
    ]
    if curves.band > 0:
        swatch = Markup('<span class="swatch"></span>')
        items.append(element("span", swatch, "settling band", css="key"))
    return element("p", *items, css="legend")


def _metrics_table(metrics: Mapping[str, Mapping[str, object]]) -> Markup:
    rows, kinds = [], []
    for name, metric in metrics.items():
        outcome = outcome_of(text(metric, "verdict"))
        values = [number(metric, key) for key in ("measured", "predicted_nonlinear")]
        if outcome is Outcome.SHOWN and all(value is None for value in values):
            continue  # not defined for this kind of phase
        rows.append(_metric_row(name, metric, outcome))
        kinds.append(outcome.value.replace(" ", "-"))
    titles = (
        "Metric",
        "Measured",
        "Predicted, nonlinear",
        "Predicted, linear",
        "Unit",
        "Allowed",
        "",
        "Verdict",
    )
    return joined((table(titles, rows, css="metrics", row_css=kinds), _bases(metrics)))


def _metric_row(name: str, metric: Mapping[str, object], outcome: Outcome) -> list[object]:
    unit, limit, words = text(metric, "unit"), part(metric, "limit"), metric_words(name)
    measured, nonlinear, linear = (
        number(metric, key) for key in ("measured", "predicted_nonlinear", "predicted_linear")
    )
    return [
        joined((words.title, element("small", words.of_what) if words.of_what else "")),
        element("b", figure_in(measured, unit)),
        figure_in(nonlinear, unit),
        figure_in(linear, unit),
        shown_unit(unit),
        limit_words(limit, unit) if limit else "not judged",
        gauge(measured, nonlinear, number(limit, "low"), number(limit, "high")),
        badge(outcome),
    ]


def _bases(metrics: Mapping[str, Mapping[str, object]]) -> Markup:
    """Return, beneath the table, why the limits are what they are."""
    by_basis: dict[str, list[str]] = {}
    for name, metric in metrics.items():
        basis = text(part(metric, "limit"), "basis")
        if basis:
            by_basis.setdefault(basis, []).append(metric_title(name))
    if not by_basis:
        return Markup("")
    words = [f"{'; '.join(names)}: {basis}." for basis, names in by_basis.items()]
    gauge_words = (
        " In the drawings the bar is what is allowed, the stroke the nonlinear prediction, the "
        "dot the measurement. Errors under the integrals are fractions of span."
    )
    return element("p", "Limits. " + " ".join(words) + gauge_words, css="note")
