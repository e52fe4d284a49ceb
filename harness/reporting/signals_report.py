"""The check of all signals as a page of HTML, as JUnit XML, and as a table in the terminal."""

from __future__ import annotations

import xml.etree.ElementTree as ET
from importlib.resources import files
from typing import TYPE_CHECKING

from rich.text import Text

from harness.domain.verdict import Outcome
from harness.reporting.document import named_parts, number, part, parts, text, texts
from harness.reporting.junit import ELEMENTS, clean
from harness.reporting.markup import Markup, badge, element, escaped, joined, table
from harness.reporting.report_bench import check_table, found_words
from harness.reporting.tables import OUTCOME_STYLES, plain_table
from harness.reporting.words import CAUTIONS, figure, outcome_of, shown_unit

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from rich.table import Table

    from harness.domain.run import RunHeader

NO_FIGURE = "\N{EN DASH}"
_TEXT = "utf-8"


def render_signals(document: Mapping[str, object], header: RunHeader) -> str:
    """Return the check as one HTML page; the same input gives the same bytes.

    Parameters
    ----------
    document : mapping
        As ``harness.app.signals`` writes it.
    header : RunHeader
        The run's header.
    """
    style = files("harness.reporting").joinpath("report.css").read_text(encoding=_TEXT)
    title = f"{header.rig_name}: signals"
    body = [
        element("h1", title),
        element("p", badge(outcome_of(text(document, "verdict")))),
        *(element("p", reason) for reason in texts(document, "reasons")),
        element("p", f"Run {header.run}, {header.started_utc}, {header.controller}."),
        element("h2", "Tags"),
        check_table(parts(document, "checks")),
        element("h2", "Loops"),
        *(_loop(tag, loop, document) for tag, loop in named_parts(document, "loops").items()),
        element("h2", "Test points"),
        *(_points(tag, rows) for tag, rows in _all_points(document).items() if rows),
        element("h2", "Cautions"),
        Markup(f'<ul class="cautions">{joined(element("li", item) for item in CAUTIONS)}</ul>'),
    ]
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f"<title>{escaped(title)}</title>\n<style>\n{style}</style>\n</head>\n"
        f"<body>\n<main>\n{joined(body)}\n</main>\n</body>\n</html>\n"
    )


def signals_junit(document: Mapping[str, object]) -> str:
    """Return the check as JUnit XML: a case a tag.

    Parameters
    ----------
    document : mapping
        As ``harness.app.signals`` writes it.
    """
    root = ET.Element("testsuites", name=clean(f"{text(document, 'rig')} signals"))
    suite = ET.SubElement(root, "testsuite", name="signals")
    checks = parts(document, "checks")
    if not checks or texts(document, "reasons"):
        case = ET.SubElement(suite, "testcase", name="run", classname="signals")
        reasons = "; ".join(texts(document, "reasons")) or "nothing was checked"
        ET.SubElement(case, "error", message=clean(reasons), type=str(Outcome.INVALID))
    for check in checks:
        case = ET.SubElement(
            suite, "testcase", name=clean(text(check, "tag")), classname="signals"
        )
        outcome = outcome_of(text(check, "verdict"))
        kind = ELEMENTS.get(outcome)
        if kind is not None:
            ET.SubElement(case, kind, message=clean(found_words(check)), type=str(outcome))
    cases = suite.findall("testcase")
    for each in (suite, root):
        each.set("tests", str(len(cases)))
        for kind, name in (
            ("failures", "failure"),
            ("errors", "error"),
            ("skipped", "skipped"),
        ):
            each.set(kind, str(sum(case.find(name) is not None for case in cases)))
    ET.indent(root)
    return (
        '<?xml version="1.0" encoding="UTF-8"?>\n'
        + ET.tostring(root, encoding="unicode")
        + "\n"
    )


def signals_table(document: Mapping[str, object]) -> Table:
    """Return the tags of a check with their verdicts, for the terminal.

    Parameters
    ----------
    document : mapping
        As ``harness.app.signals`` writes it.
    """
    shown = plain_table()
    for title in ("Tag", "Verdict", "What was found"):
        shown.add_column(title)
    for check in parts(document, "checks"):
        outcome = outcome_of(text(check, "verdict"))
        shown.add_row(
            Text(text(check, "tag")),
            Text(outcome.value, style=OUTCOME_STYLES[outcome]),
            Text(text(check, "evidence") if outcome is Outcome.PASS else found_words(check)),
        )
    return shown


def loop_words(loop: Mapping[str, object]) -> str:
    """Return the facts of a loop in a sentence, for who types into its controller.

    Parameters
    ----------
    loop : mapping
        As ``harness.app.loop_facts`` gives them.
    """
    span, output = part(loop, "range"), part(loop, "output_range")
    low, high = (f"{number(span, key) or 0.0:g}" for key in ("low", "high"))
    ends = " to ".join(f"{100 * (number(output, key) or 0.0):g}" for key in ("low", "high"))
    return (
        f"{text(loop, 'process_variable')} {low} to {high} {shown_unit(text(span, 'unit'))} to "
        f"{text(loop, 'output')} {ends} %, {text(loop, 'action')} acting; {text(loop, 'form')} "
        f"form, gain in {text(loop, 'gain_unit')}, integral in {text(loop, 'time_unit')}; scan "
        f"{number(loop, 'scan') or 0.0:g} s, delay {number(loop, 'delay') or 0.0:g} s"
    )


def scan_words(measured: Mapping[str, object]) -> str:
    """Return how a controller scans, in a sentence; empty where that is not known.

    Parameters
    ----------
    measured : mapping
        Period, jitter and delay [s], scans missed and seen [-].
    """
    if number(measured, "period") is None:
        return ""
    period, jitter, delay = (
        figure(number(measured, key)) for key in ("period", "jitter", "delay")
    )
    missed, scans = (number(measured, key) or 0 for key in ("missed", "scans"))
    return (
        f"measured: a scan every {period} s, 95 of 100 within {jitter} s of that; its output acts "
        f"{delay} s after the image it read; {missed:.0f} scans missed of {scans + missed:.0f}"
    )


def _loop(tag: str, loop: Mapping[str, object], document: Mapping[str, object]) -> Markup:
    measured = scan_words(part(part(document, "controllers"), tag))
    return element("p", f"{tag}: {loop_words(loop)}. {measured}")


def _all_points(document: Mapping[str, object]) -> dict[str, list[dict[str, object]]]:
    found = part(document, "points")
    return {tag: parts(found, tag) for tag in found}


def _points(tag: str, rows: Sequence[Mapping[str, object]]) -> Markup:
    if "told" in rows[0]:
        titles: tuple[str, ...] = ("Ordered [%]", "Received [%]", "Refused")
        cells = [
            [
                figure(number(row, "told")),
                figure(number(row, "received"), NO_FIGURE),
                "; ".join(texts(row, "refused")),
            ]
            for row in rows
        ]
    else:
        unit = shown_unit(text(rows[0], "unit"))
        titles = ("Forced [mA]", "Band", f"Transmitted [{unit}]", f"Said [{unit}]", "Age [s]")
        cells = [
            [
                f"{number(row, 'current_ma') or 0.0:g}",
                text(row, "band"),
                figure(number(row, "transmitted")),
                figure(number(row, "said"), "no value"),
                figure(number(row, "age"), NO_FIGURE),
            ]
            for row in rows
        ]
    return joined((element("h3", tag), table(titles, cells)))
