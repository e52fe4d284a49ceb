"""Documents as people read them in a terminal."""

from __future__ import annotations

from typing import TYPE_CHECKING

from rich.table import Table

from harness.reporting.document import named_parts, number, part, parts, text
from harness.reporting.tables import verdict_table
from harness.reporting.terminal import make_console
from harness.reporting.words import duration

if TYPE_CHECKING:
    from collections.abc import Mapping

    from harness.app.run_files import RunResult


def print_result(result: RunResult) -> None:
    """Print a verdict, what is wrong, and where the report is.

    Parameters
    ----------
    result : RunResult
        The scored run.
    """
    console = make_console()
    console.print(verdict_table(result.document))
    console.print(f"report: {result.folder / 'report.html'}", soft_wrap=True, markup=False)


def print_check(document: dict[str, object]) -> None:
    """Print what a check found.

    Parameters
    ----------
    document : dict
        From ``harness.app.check.check``.
    """
    console = make_console()
    console.print(f"rig {text(document, 'rig')}: in order", markup=False)
    for link in parts(document, "links"):
        console.print(f"link {text(link, 'name')}: {text(link, 'address')}", markup=False)
    phases = parts(document, "phases")
    if not phases:
        return
    table = Table(
        "phase", "mode", "expected", "limit", title=f"trial {text(document, 'trial')}"
    )
    for phase in phases:
        table.add_row(
            text(phase, "name"),
            text(phase, "mode"),
            duration(number(phase, "expected") or 0.0),
            duration(number(phase, "time_limit") or 0.0),
        )
    console.print(table)
    pace = number(document, "pace") or 1.0
    total = number(document, "expected") or 0.0
    console.print(
        f"about {duration(total)} of plant time, {duration(total / pace)} at pace {pace:g}"
    )


def print_model(document: dict[str, object]) -> None:
    """Print operating point and models.

    Parameters
    ----------
    document : dict
        From ``harness.app.model.model``.
    """
    console = make_console()
    point = part(document, "operating_point")
    table = Table("tag", "value", title=f"{text(document, 'rig')}: operating point")
    for key, unit, factor in (
        ("outputs", "%", 100.0),
        ("flows", "m3/h", 1.0),
        ("levels", "m", 1.0),
    ):
        for tag, value in part(point, key).items():
            table.add_row(tag, f"{float(str(value)) * factor:.4g} {unit}")
    console.print(table)
    for tag, loop in named_parts(document, "loops").items():
        console.print(_models(tag, loop))


def _models(tag: str, loop: Mapping[str, object]) -> Table:
    unit = text(loop, "unit")
    table = Table(
        "path",
        "gain",
        f"gain, {unit}/%",
        "time constants, s",
        "dead time, s",
        title=f"{tag}: linearised",
    )
    for path, model in named_parts(loop, "models").items():
        lags = model.get("time_constants")
        shown = (
            " and ".join(f"{float(lag):.4g}" for lag in lags) if isinstance(lags, list) else ""
        )
        table.add_row(
            f"{path} ({text(model, 'valve')})",
            f"{number(model, 'gain') or 0.0:.4g}",
            f"{number(model, 'gain_engineering') or 0.0:.4g}",
            shown,
            f"{number(model, 'dead_time') or 0.0:.3g}",
        )
    return table
