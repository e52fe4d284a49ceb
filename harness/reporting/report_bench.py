"""The part of the report about the bench: pre-flight of the controller, and who wrote what."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.reporting.document import named_parts, number, part, parts, text, texts
from harness.reporting.markup import Markup, badge, element, joined, table
from harness.reporting.words import duration, figure, outcome_of

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

NO_FIGURE = "\N{EN DASH}"


def bench(document: Mapping[str, object]) -> Markup:
    """Return pre-flight and exchanges; empty for a run without a controller outside.

    Parameters
    ----------
    document : mapping
        The verdict document.
    """
    pieces = []
    for tag, found in named_parts(document, "preflight").items():
        pieces.append(element("h3", f"{tag}: pre-flight"))
        pieces.append(element("p", text(found, "text") + "."))
        moved = part(found, "disturbance")
        if moved:
            pieces.append(element("p", _disturbance(moved), css="note"))
        pieces.append(check_table(parts(found, "checks")))
    rows = [_exchange(each) for each in parts(document, "exchanges")]
    if rows:
        titles = (
            *("Point", "Link", "By", "Function", "Writes", "First", "Last"),
            "Age of the image read last, median (95 %)",
        )
        pieces += [element("h3", "Who wrote what, and when"), table(titles, rows)]
    return joined(pieces)


def check_table(checks: Sequence[Mapping[str, object]]) -> Markup:
    """Return checks of tags as a table: verdict, mistake, evidence, where to look.

    Parameters
    ----------
    checks : sequence of mapping
        As ``harness.runtime.controller_checks.check_document`` gives them.
    """
    return table(
        ("Tag", "Verdict", "What was found"),
        [
            [text(check, "tag"), badge(outcome_of(text(check, "verdict"))), found_words(check)]
            for check in checks
        ],
        css="checks",
    )


def found_words(check: Mapping[str, object]) -> str:
    """Return what was found out about a tag, in sentences.

    Parameters
    ----------
    check : mapping
        A check.
    """
    words = text(check, "evidence")
    if text(check, "mistake"):
        words = f"{text(check, 'mistake')}: {words}"
        others = texts(check, "others")
        if others:
            words += f". The same points are explained by: {', '.join(others)}"
        words += f". Look at {text(check, 'look_at')}"
    notes = texts(check, "notes")
    return ". ".join((words, *(note[:1].upper() + note[1:] for note in notes))) + "."


def _disturbance(moved: Mapping[str, object]) -> str:
    output, error = (100 * (number(moved, key) or 0.0) for key in ("output", "input_of_block"))
    return (
        f"Before the first phase the output was moved by {output:g} % in manual and back, and the "
        f"block's input, held, stepped by {error:g} % for a few scans in automatic."
    )


def _exchange(each: Mapping[str, object]) -> list[str]:
    first, last = (number(each, key) for key in ("first", "last"))
    delay, high = (number(each, key) for key in ("delay", "delay_p95"))
    age = NO_FIGURE if delay is None else f"{figure(delay)} s ({figure(high)} s)"
    return [
        *(text(each, key) for key in ("point", "link", "peer", "function")),
        f"{number(each, 'writes') or 0:.0f}",
        duration(first or 0.0),
        duration(last or 0.0),
        age,
    ]
