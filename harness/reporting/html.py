"""The report of a run: one HTML file that needs nothing else, for the screen and for A4."""

from __future__ import annotations

import json
from importlib.resources import files
from typing import TYPE_CHECKING

from harness.domain.verdict import Outcome
from harness.reporting.document import named_parts, parts, text, texts
from harness.reporting.markup import Markup, badge, element, escaped, joined
from harness.reporting.report_facts import conditions, event_table, lateness, loop_sections
from harness.reporting.report_phases import phase_overview, phase_sections
from harness.reporting.words import CAUTIONS, outcome_of

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from harness.domain.run import Event, RunHeader
    from harness.domain.verdict import PhaseCurves

MEANING = {
    Outcome.PASS: "Every figure judged lies within its limits.",
    Outcome.FAIL: "At least one figure judged lies outside its limits.",
    Outcome.INVALID: "The run cannot be judged; it is neither a pass nor a fail.",
    Outcome.NOT_DECIDABLE: "The record does not decide the question.",
    Outcome.SHOWN: "Nothing was judged.",
}
METHOD = (
    "The plant is simulated by its nonlinear balances; controller, valves and transmitters act "
    "on it tick by tick. Each automatic phase is compared with two "
    "predictions: the fitted linear model under the same sampled block, and this "
    "plant under the ideal block with the same sampling, delay and noise. The controller is "
    "judged against the second, on the true level, so that noise of the transmitter is not "
    "counted against it. The gap between the two predictions says how far the step leaves the "
    "linear range. The design target is what the tuning rule asked for; it is shown and never "
    "judged."
)
SIGNATURES = ("Tested by", "Witnessed by")


def render_report(
    document: dict[str, object],
    curves: Sequence[PhaseCurves],
    events: Sequence[Event],
    header: RunHeader,
) -> str:
    """Return the report as one HTML document; the same input gives the same bytes.

    Parameters
    ----------
    document : dict
        The verdict document; optional parts may be absent.
    curves : sequence of PhaseCurves
        Curves of the phases to draw, by name.
    events : sequence of Event
        Events of the run, in order.
    header : RunHeader
        The run's header.
    """
    style = files("harness.reporting").joinpath("report.css").read_text(encoding="utf-8")
    title = f"{header.rig_name}: {header.trial_name or 'live session'}"
    body = [
        _head_block(document, header),
        _section("What was tested, and how", _tested(document, header)),
        _section("Result by phase", phase_overview(document)),
        _section("Conditions", conditions(document, header)),
        _section("Models and tuning", loop_sections(document)),
        _section("Phases", phase_sections(document, curves)),
        _section("Lateness of the ticks", lateness(document)),
        _section("Events", event_table(events, header.tick)),
        _section("Cautions", _cautions()),
        _section("Signatures", _signatures(), css="together"),
    ]
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{escaped(title)}</title>\n<style>\n{style}{_page_foot(header)}</style>\n</head>\n"
        f"<body>\n<main>\n{joined(body)}</main>\n</body>\n</html>\n"
    )


def _head_block(document: Mapping[str, object], header: RunHeader) -> Markup:
    outcome = outcome_of(text(document, "verdict"))
    reasons = joined(element("li", reason) for reason in texts(document, "reasons"))
    names = element(
        "div",
        element("p", "Control loop test report", css="kind"),
        element("h1", header.rig_name),
        element("p", f"Trial: {header.trial_name or 'none, a live session'}", css="trial"),
        element("p", f"Run {header.run}, started {header.started_utc}", css="run"),
    )
    verdict = element(
        "div",
        badge(outcome, "large"),
        element("p", MEANING[outcome]),
        Markup(f"<ul>{reasons}</ul>") if reasons else "",
        css=f"verdict {outcome.value.replace(' ', '-')}",
    )
    return Markup(f"<header>{names}{verdict}</header>\n")


def _section(title: str, content: Markup, css: str = "") -> Markup:
    kind = f' class="{css}"' if css else ""
    return Markup(f"<section{kind}>{element('h2', title)}{content}</section>\n")


def _tested(document: Mapping[str, object], header: RunHeader) -> Markup:
    phases = parts(document, "phases")
    scored = sum(1 for phase in phases if phase.get("scored"))
    loops = ", ".join(named_parts(document, "loops")) or "none"
    words = (
        f"Loop {loops} of the rig “{header.rig_name}”, closed by the controller under test "
        f"({header.controller}). The trial has {len(phases)} phases, of which {scored} are "
        "judged; the others bring the plant to rest or identify it."
    )
    return joined((element("p", words), element("p", METHOD)))


def _cautions() -> Markup:
    return Markup(
        f'<ul class="cautions">{joined(element("li", item) for item in CAUTIONS)}</ul>'
    )


def _signatures() -> Markup:
    lines = joined(
        Markup(
            f'<div class="signature"><span>{escaped(who)} (name, signature)</span>'
            "<span>Date</span></div>"
        )
        for who in SIGNATURES
    )
    return Markup(f'<div class="signatures">{lines}</div>')


def _page_foot(header: RunHeader) -> str:
    """Return the foot of each printed page, as style; text goes in as a CSS string."""
    words = f"{header.rig_name} / {header.trial_name or 'live session'} / run {header.run}"
    # JSON quotes like CSS does but for characters above and below ASCII, and for "</style>".
    safe = "".join(char if char.isalnum() or char in " /-_.,:()" else " " for char in words)
    return (
        f"@page {{ @bottom-left {{ content: {json.dumps(safe, ensure_ascii=False)}; }}\n"
        '  @bottom-right { content: "page " counter(page) " of " counter(pages); } }\n'
    )
