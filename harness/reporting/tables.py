"""Tables for the terminal: the verdict of a trial, and the tags of a live session."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from harness.domain.signals import Quality
from harness.domain.verdict import Outcome
from harness.reporting.document import Document, named_parts, number, part, parts, text, texts
from harness.reporting.words import (
    figure,
    figure_in,
    limit_words,
    metric_title,
    outcome_of,
    quantity,
    shown_unit,
)

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

# Words stand beside every colour, so that none is needed to read the table.
OUTCOME_STYLES = {
    Outcome.PASS: "green",
    Outcome.FAIL: "bold red",
    Outcome.INVALID: "bold magenta",
    Outcome.NOT_DECIDABLE: "yellow",
    Outcome.SHOWN: "dim",
}
QUALITY_STYLES = {Quality.GOOD: "", Quality.UNCERTAIN: "yellow", Quality.BAD: "bold red"}
SUMMARY = (
    ("Settling 2 %", ("settling_time_2",)),
    ("Overshoot or peak", ("overshoot", "peak_deviation")),
    ("IAE", ("iae",)),
    ("Offset", ("offset",)),
)
LEAST_OFFSET = 1e-3  # [fraction of span]; a smaller one is rounding, not proportional control
LEAST_COLUMN = 6  # [characters]


@dataclass(frozen=True, slots=True, kw_only=True)
class TagLine:
    """One tag of a live session.

    Parameters
    ----------
    name : str
        Name of the point.
    value : float
        Value [unit].
    unit : str
        Unit.
    raw : str
        Register, current or node value as a peer sees it.
    quality : Quality
        Quality.
    read_by, written_by : str
        Peer and how long ago, in words; empty for never.
    """

    name: str
    value: float
    unit: str
    raw: str
    quality: Quality
    read_by: str
    written_by: str


def verdict_table(document: Mapping[str, object], *, full: bool = False) -> RenderableType:
    """Return the verdict of a trial for the terminal.

    Parameters
    ----------
    document : mapping
        The verdict document.
    full : bool
        Whether to list every metric; else a line a judged phase, and what failed.
    """
    phases = [phase for phase in parts(document, "phases") if _judged(phase)]
    outcome = outcome_of(text(document, "verdict"))
    head = Text.assemble(
        (outcome.value.upper(), OUTCOME_STYLES[outcome]),
        f"  {text(document, 'rig')}, trial {text(document, 'trial')}",
    )
    remarks = Table.grid(padding=(0, 2, 0, 0))
    for reason in texts(document, "reasons"):
        remarks.add_row(Text(""), Text(reason))
    for phase in phases:
        for finding in texts(phase, "findings"):
            remarks.add_row(Text(text(phase, "name"), no_wrap=True), Text(finding))
    table = _metric_table(phases) if full else _summary_table(phases)
    pieces: list[RenderableType] = [table, Text("")] if phases else []
    return Group(*pieces, head, remarks)


def tag_table(lines: Iterable[TagLine], title: str = "") -> Table:
    """Return the tags of a live session as a table.

    Parameters
    ----------
    lines : iterable of TagLine
        Tags, in order.
    title : str
        Title of the table.
    """
    table = _table(title)
    for name in ("Tag", "Value", "Unit", "Raw", "Quality", "Last read by", "Last written by"):
        right = name in {"Value", "Raw"}
        table.add_column(name, justify="right" if right else "left", min_width=LEAST_COLUMN)
    for line in lines:
        quality = Text(line.quality.name.lower(), style=QUALITY_STYLES[line.quality])
        table.add_row(
            Text(line.name),
            figure(line.value, "none"),
            Text(shown_unit(line.unit) if line.unit != "1" else ""),
            Text(line.raw),
            quality,
            Text(line.read_by or "never"),
            Text(line.written_by or "never"),
        )
    return table


def _judged(phase: Document) -> bool:
    return bool(named_parts(phase, "metrics")) or text(phase, "verdict") in {
        Outcome.FAIL,
        Outcome.INVALID,
    }


def _summary_table(phases: list[Document]) -> Table:
    """Return a line a phase; narrow enough for 80 characters unless an offset is to be shown."""
    table = _table("Measured (predicted)")
    table.add_column("Phase")
    shown = [column for column in SUMMARY if column[0] != "Offset" or _has_offset(phases)]
    for title, names in shown:
        unit = shown_unit(_unit(phases, names))
        heading = Text(f"{title} [{unit}]" if unit else title)  # brackets are no markup here
        table.add_column(heading, justify="right")
    table.add_column("Verdict")
    for phase in phases:
        metrics = named_parts(phase, "metrics")
        cells = [_summary(metrics, names) for _, names in shown]
        table.add_row(Text(text(phase, "name")), *cells, _verdict(text(phase, "verdict")))
    return table


def _has_offset(phases: Iterable[Document]) -> bool:
    """Return whether an offset is worth a column: one is predicted, or one failed."""
    offsets = [named_parts(phase, "metrics").get("offset", {}) for phase in phases]
    return any(
        text(offset, "verdict") == Outcome.FAIL
        or abs(number(offset, "predicted_nonlinear") or 0.0) >= LEAST_OFFSET
        for offset in offsets
    )


def _unit(phases: Iterable[Document], names: Iterable[str]) -> str:
    """Return the unit of the first of these metrics that a phase has."""
    for phase in phases:
        for name in names:
            metric = named_parts(phase, "metrics").get(name)
            if metric is not None:
                return text(metric, "unit")
    return ""


def _summary(metrics: Mapping[str, Document], names: Iterable[str]) -> Text:
    """Return the first of the metrics that has any figure, red where it failed."""
    for name in names:
        metric = metrics.get(name, {})
        unit = text(metric, "unit")
        measured, predicted = (
            number(metric, key) for key in ("measured", "predicted_nonlinear")
        )
        if measured is None and predicted is None:
            continue
        style = OUTCOME_STYLES[Outcome.FAIL] if text(metric, "verdict") == Outcome.FAIL else ""
        words = f"{figure_in(measured, unit)} ({figure_in(predicted, unit, 'none')})"
        return Text(words, style=style)
    return Text("")


def _metric_table(phases: Iterable[Document]) -> Table:
    table = _table("")
    for title in ("Phase", "Metric"):
        table.add_column(title)
    for title in ("Measured", "Predicted", "Allowed"):
        table.add_column(title, justify="right")
    table.add_column("Verdict")
    for phase in phases:
        name = text(phase, "name")
        for title, metric in named_parts(phase, "metrics").items():
            unit, limit = text(metric, "unit"), part(metric, "limit")
            measured, predicted = (
                number(metric, key) for key in ("measured", "predicted_nonlinear")
            )
            if measured is None and predicted is None and not limit:
                continue
            table.add_row(
                Text(name),
                Text(metric_title(title)),
                quantity(measured, unit),
                quantity(predicted, unit),
                f"{limit_words(limit, unit)} {shown_unit(unit)}" if limit else "not judged",
                _verdict(text(metric, "verdict")),
            )
            name = ""
        table.add_section()
    return table


def _verdict(words: str) -> Text:
    outcome = outcome_of(words)
    return Text(outcome.value, style=OUTCOME_STYLES[outcome])


def _table(title: str) -> Table:
    """Return a table with a rule under its head and nothing else."""
    return Table(
        title=Text(title) if title else None,
        title_justify="left",
        title_style="dim",
        box=None,
        pad_edge=False,
        padding=(0, 2, 0, 0),
        header_style="bold underline",
    )
