"""Tables for the terminal: the verdict of a trial, and the tags of a live session."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from rich.console import Group, JustifyMethod, RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from harness.domain.signals import Quality
from harness.domain.verdict import Outcome
from harness.reporting.document import Document, named_parts, number, part, text, texts
from harness.reporting.summary import findings_told, judged_phases, misses
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
    from collections.abc import Iterable, Mapping, Sequence

# Words stand beside every colour, so that none is needed to read the table.
OUTCOME_STYLES = {
    Outcome.PASS: "green",
    Outcome.FAIL: "bold red",
    Outcome.INVALID: "bold magenta",
    Outcome.NOT_DECIDABLE: "yellow",
    Outcome.SHOWN: "dim",
}
QUALITY_STYLES = {Quality.GOOD: "", Quality.UNCERTAIN: "yellow", Quality.BAD: "bold red"}
SUMMARY = (  # headings in two lines, so that all of them fit eighty characters
    ("Settling\n2 %", ("settling_time_2",)),
    ("Overshoot\nor peak", ("overshoot", "peak_deviation")),
    ("\nIAE", ("iae",)),
    ("\nOffset", ("offset",)),
)
SUMMARY_DIGITS = 3  # significant; the report has the fourth
MARKS = {
    Outcome.FAIL: "!",
    Outcome.NOT_DECIDABLE: "?",
}  # behind a figure, and told in the title
MARK_WORDS = {"!": "outside its limits", "?": "not decidable"}
LEAST_OFFSET = 1e-3  # [fraction of span]; a smaller one is rounding, not proportional control
LEAST_COLUMN = 6  # [characters]
TAG_TABLE_LINES = 4  # [lines]; title, head, what is left out, and the cursor


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
        Peer, or the letter that stands for it, and how long ago; empty for never.
    whole : bool
        Whether the value is a whole number, as of a counter.
    """

    name: str
    value: float
    unit: str
    raw: str
    quality: Quality
    read_by: str
    written_by: str
    whole: bool = False


def verdict_table(document: Mapping[str, object], *, full: bool = False) -> RenderableType:
    """Return the verdict of a trial for the terminal.

    Parameters
    ----------
    document : mapping
        The verdict document.
    full : bool
        Whether to list every metric; else a line a judged phase, and what failed.
    """
    phases = judged_phases(document)
    outcome = outcome_of(text(document, "verdict"))
    head = Text.assemble(
        (outcome.value.upper(), OUTCOME_STYLES[outcome]),
        f"  {text(document, 'rig')}, trial {text(document, 'trial')}",
    )
    remarks: list[RenderableType] = [
        _remark("", reason) for reason in texts(document, "reasons")
    ]
    remarks += [
        _remark(", ".join(names), finding) for finding, names in findings_told(document)
    ]
    remarks += [_remark(name, words) for name, words in misses(phases)]
    table = _metric_table(phases) if full else _summary_table(phases)
    scored = any(named_parts(phase, "metrics") for phase in phases)
    pieces: list[RenderableType] = [Text(""), table] if scored else []
    pieces.append(Text(""))
    return Group(*pieces, head, *remarks)


def tag_table(
    lines: Sequence[TagLine],
    title: str = "",
    peers: Mapping[str, str] | None = None,
    height: int | None = None,
) -> RenderableType:
    """Return the tags of a live session as a table, a line a tag.

    Parameters
    ----------
    lines : sequence of TagLine
        Tags, in order.
    title : str
        Title of the table.
    peers : mapping of str to str, or None
        Peers by the letters that stand for them in the table.
    height : int or None
        Lines that there is room for; None for as many as it takes [-].
    """
    told = [f"{letter} = {peer}" for letter, peer in (peers or {}).items()]
    room = len(lines) if height is None else max(1, height - TAG_TABLE_LINES - len(told))
    if len(lines) > room:
        told.append(f"{len(lines) - room} more points; a higher window shows them")
    names = ("Tag", "Value", "Unit", "Quality", "Last read", "Last written", "Raw")
    rows = [names, *(_tag_cells(line) for line in lines[:room])]
    table = plain_table(title)
    for index, name in enumerate(names):
        # Where room is short the raw content is cut, and nothing else.
        widest = max(len(row[index]) for row in rows) if name != "Raw" else LEAST_COLUMN
        justify: JustifyMethod = "right" if name == "Value" else "left"
        table.add_column(name, justify=justify, min_width=widest, no_wrap=True)
    for line, cells in zip(lines, rows[1:], strict=False):
        styles = [QUALITY_STYLES[line.quality] if name == "Quality" else "" for name in names]
        table.add_row(*(Text(c, style=s) for c, s in zip(cells, styles, strict=True)))
    return Group(table, *(Text(words, no_wrap=True, overflow="ellipsis") for words in told))


def _tag_cells(line: TagLine) -> tuple[str, ...]:
    return (
        line.name,
        f"{line.value:.0f}" if line.whole else figure(line.value, "none"),
        shown_unit(line.unit) if line.unit != "1" else "",
        line.quality.name.lower(),
        line.read_by or "never",
        line.written_by or "never",
        line.raw,
    )


def _remark(name: str, words: str) -> RenderableType:
    """Return a sentence with the phases that it is about, its further lines set in."""
    line = Text.assemble((f"{name}: " if name else "", "bold"), words)
    return Padding(line, (0, 0, 0, 2))


def _summary_table(phases: list[Document]) -> Table:
    """Return a line a phase, narrow enough for 80 characters."""
    shown = [column for column in SUMMARY if "Offset" not in column[0] or _has_offset(phases)]
    used = {
        mark
        for phase in phases
        for _, names in shown
        if (mark := _mark(_first_known(named_parts(phase, "metrics"), names)))
    }
    told = "".join(f"; {mark} {MARK_WORDS[mark]}" for mark in sorted(used))
    table = plain_table(f"Measured (predicted){told}")
    table.add_column("\nPhase")
    for title, names in shown:
        unit = shown_unit(_unit(phases, names))
        heading = Text(f"{title} [{unit}]" if unit else title)  # brackets are no markup here
        table.add_column(heading, justify="right")
    table.add_column("\nVerdict")
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
    """Return the first of the metrics that has any figure, marked where it failed."""
    metric = _first_known(metrics, names)
    if not metric:
        return Text("")
    unit = text(metric, "unit")
    measured = figure_in(number(metric, "measured"), unit, "never", SUMMARY_DIGITS)
    predicted = figure_in(number(metric, "predicted_nonlinear"), unit, "none", SUMMARY_DIGITS)
    style = OUTCOME_STYLES[Outcome.FAIL] if text(metric, "verdict") == Outcome.FAIL else ""
    return Text(f"{measured}{_mark(metric)} ({predicted})", style=style)


def _first_known(metrics: Mapping[str, Document], names: Iterable[str]) -> Document:
    """Return the first of these metrics that has any figure; empty when none has."""
    for name in names:
        metric = metrics.get(name, {})
        if any(number(metric, key) is not None for key in ("measured", "predicted_nonlinear")):
            return metric
    return {}


def _mark(metric: Document) -> str:
    """Return the sign behind a figure that did not pass, for readers without colours."""
    return MARKS.get(outcome_of(text(metric, "verdict")), "") if metric else ""


def _metric_table(phases: Iterable[Document]) -> Table:
    table = plain_table("")
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


def plain_table(title: str = "") -> Table:
    """Return a table with a rule under its head and nothing else.

    Parameters
    ----------
    title : str
        Title; empty for none.
    """
    return Table(
        title=Text(title) if title else None,
        title_justify="left",
        title_style="dim",
        box=None,
        pad_edge=False,
        padding=(0, 2, 0, 0),
        header_style="bold underline",
    )
