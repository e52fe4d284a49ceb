"""Documents as people read them in a terminal."""

from __future__ import annotations

from typing import TYPE_CHECKING

from rich.text import Text

from harness.reporting.document import named_parts, number, numbers, part, parts, text, texts
from harness.reporting.signals_report import loop_words, scan_words, signals_table
from harness.reporting.tables import plain_table, verdict_table
from harness.reporting.terminal import make_console
from harness.reporting.words import duration, figure, shown_unit

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

    from rich.console import Console
    from rich.table import Table

    from harness.app.run_files import RunResult

_NONE = "-"


def print_result(result: RunResult) -> None:
    """Print a verdict, what is wrong, and where the report is.

    Parameters
    ----------
    result : RunResult
        The scored run.
    """
    console = make_console()
    console.print(verdict_table(result.document))
    _say(console, f"report: {result.folder / 'report.html'}")


def print_check(document: dict[str, object]) -> None:
    """Print what a check found.

    Parameters
    ----------
    document : dict
        From ``harness.app.check.check``.
    """
    console = make_console()
    _say(console, f"rig {text(document, 'rig')}: in order")
    for link in parts(document, "links"):
        unit = number(link, "unit")
        at = text(link, "address") + ("" if unit is None else f", unit {unit:.0f}")
        _say(console, f"link {text(link, 'name')}: {at}")
        if parts(link, "map"):
            console.print(_register_map(parts(link, "map")))
    for tag, loop in named_parts(document, "loop_facts").items():
        _say(console, f"loop {tag}: {loop_words(loop)}")
    phases = parts(document, "phases")
    if not phases:
        return
    _say(console, "")
    _say(console, f"trial {text(document, 'trial')}: in order")
    console.print(_phases(phases))
    pace = number(document, "pace") or 1.0
    total = number(document, "expected") or 0.0
    words = f"about {duration(total)} of plant time"
    words += "" if pace == 1.0 else f", {duration(total / pace)} at pace {pace:g}"
    _say(console, f"{words}; seconds in virtual time")


def print_signals(document: dict[str, object]) -> None:
    """Print what a check of signals found.

    Parameters
    ----------
    document : dict
        From ``harness.app.signals.signals``.
    """
    console = make_console()
    _print_loops(console, document)
    console.print(signals_table(document))
    for reason in texts(document, "reasons"):
        _say(console, reason)
    _say(console, f"{text(document, 'verdict').upper()}  {text(document, 'rig')}, signals")
    _say(console, f"report: {text(document, 'folder')}/report.html")


def _print_loops(console: Console, document: dict[str, object]) -> None:
    """Print what is to be known of each loop, and how its controller was seen to scan."""
    for tag, loop in named_parts(document, "loops").items():
        _say(console, f"loop {tag}: {loop_words(loop)}")
        measured = scan_words(part(part(document, "controllers"), tag))
        if measured:
            _say(console, f"loop {tag}: {measured}")


def print_model(document: dict[str, object]) -> None:
    """Print operating point and models.

    Parameters
    ----------
    document : dict
        From ``harness.app.model.model``.
    """
    console = make_console()
    _say(console, f"rig {text(document, 'rig')}, at its initial outputs")
    console.print(_operating_point(part(document, "operating_point")))
    for tag, loop in named_parts(document, "loops").items():
        _say(console, "")
        measured = text(loop, "process_variable")
        _say(console, f"loop {tag}: linearised there, to {measured} as transmitted")
        console.print(_models(loop))


def _say(console: Console, words: str) -> None:
    # Text of files is no markup, and a path that wraps cannot be copied.
    console.print(Text(words), soft_wrap=True)


def _columns(titles: Iterable[str], right: Iterable[str] = ()) -> Table:
    """Return a table with these columns, some of them to the right."""
    table = plain_table()
    for title in titles:
        table.add_column(Text(title), justify="right" if title in right else "left")
    return table


def _register_map(rows: list[dict[str, object]]) -> Table:
    titles = ("from 0", "from 1", "point", "type", "access", "number")
    table = _columns(titles, right=titles[:2])
    for row in rows:
        kind = f"{text(row, 'encoding')} {text(row, 'word_order')}".rstrip()
        number_words = text(row, "scaling")
        if number_words == "value" and text(row, "unit"):
            number_words = f"value in {shown_unit(text(row, 'unit'))}"
        place = (text(row, "address"), text(row, "address_from_one"), text(row, "point"))
        cells = (*place, kind, text(row, "access"), number_words)
        # Only the last column may wrap: a point is looked for by its whole name.
        last = len(cells) - 1
        table.add_row(*(Text(cell, no_wrap=i < last) for i, cell in enumerate(cells)))
    return table


def _phases(phases: list[dict[str, object]]) -> Table:
    titles = ("phase", "mode", "about", "at most")
    table = _columns(titles, right=titles[2:])
    for phase in phases:
        table.add_row(
            Text(text(phase, "name")),
            text(phase, "mode"),
            duration(number(phase, "expected") or 0.0),
            duration(number(phase, "time_limit") or 0.0),
        )
    return table


def _operating_point(point: Mapping[str, object]) -> Table:
    """Return outputs, flows and levels, a line for each tag that has any of them."""
    outputs, flows, levels = (part(point, key) for key in ("outputs", "flows", "levels"))
    flow_unit, level_unit = (text(point, key) for key in ("flow_unit", "level_unit"))
    titles = ("tag", "output", "flow", "level")
    table = _columns(titles, right=titles[1:])
    for tag in dict.fromkeys((*outputs, *flows, *levels)):
        output = number(outputs, tag)
        table.add_row(
            Text(tag),
            _NONE if output is None else f"{100 * output:.1f} %",
            _with_unit(number(flows, tag), flow_unit),
            _with_unit(number(levels, tag), level_unit),
        )
    return table


def _with_unit(value: float | None, unit: str) -> str:
    return _NONE if value is None else f"{figure(value)} {shown_unit(unit)}"


def _models(loop: Mapping[str, object]) -> Table:
    unit = text(loop, "unit")
    titles = ("from", "gain %/%", f"{unit} per %", "total lag s", "lags s", "dead time s")
    table = _columns(titles, right=titles[1:])
    for path, model in named_parts(loop, "models").items():
        lags = " + ".join(figure(lag) for lag in numbers(model, "time_constants"))
        table.add_row(
            Text(f"{path} ({text(model, 'valve')})"),
            figure(number(model, "gain"), _NONE),
            figure(number(model, "gain_engineering"), _NONE),
            figure(number(model, "total_lag"), _NONE),
            lags or _NONE,
            figure(number(model, "dead_time"), _NONE),
        )
    return table
