"""The report of a run: one HTML file that needs nothing else, for the screen and for A4."""

from __future__ import annotations

import json
from importlib.resources import files
from typing import TYPE_CHECKING

from harness.reporting.markup import Markup, element, escaped, joined, table
from harness.reporting.report_bench import bench
from harness.reporting.report_facts import conditions, loop_sections
from harness.reporting.report_front import head_block, summary, tested, title_block
from harness.reporting.report_phases import phase_sections
from harness.reporting.report_timing import event_table, timing
from harness.reporting.words import CAUTIONS

if TYPE_CHECKING:
    from collections.abc import Sequence

    from harness.domain.run import Event, RunHeader
    from harness.domain.verdict import PhaseCurves

SIGNATURES = ("Tested by", "Witnessed by", "Accepted for the client by")


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
        head_block(document, header),
        title_block(document, header),
        _section("Summary", summary(document)),
        _section("What was tested, and how", tested(document, header)),
        _section("Conditions", conditions(document, header)),
        _section("Models and tuning", loop_sections(document)),
        _section("Timing", timing(document)),
        *_bench(document),
        _section("Phases", phase_sections(document, curves)),
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


def _bench(document: dict[str, object]) -> list[Markup]:
    """Return the section on the bench, where there was one."""
    told = bench(document)
    return [_section("Bench", told)] if told else []


def _section(title: str, content: Markup, css: str = "") -> Markup:
    kind = f' class="{css}"' if css else ""
    return Markup(f"<section{kind}>{element('h2', title)}{content}</section>\n")


def _cautions() -> Markup:
    return Markup(
        f'<ul class="cautions">{joined(element("li", item) for item in CAUTIONS)}</ul>'
    )


def _signatures() -> Markup:
    words = (
        "By signing, the undersigned confirm that they have seen this report of the run above."
    )
    rows = [[who, "", "", ""] for who in SIGNATURES]
    titles = ("", "Name, company", "Signature", "Date")
    return joined((element("p", words), table(titles, rows, css="signatures")))


def _page_foot(header: RunHeader) -> str:
    """Return the foot of each printed page, as style; text goes in as a CSS string."""
    words = f"{header.rig_name} / {header.trial_name or 'live session'} / run {header.run}"
    # JSON quotes like CSS does but for characters above and below ASCII, and for "</style>".
    safe = "".join(char if char.isalnum() or char in " /-_.,:()" else " " for char in words)
    return (
        f"@page {{ @bottom-left {{ content: {json.dumps(safe, ensure_ascii=False)}; }}\n"
        '  @bottom-right { content: "page " counter(page) " of " counter(pages); } }\n'
    )
