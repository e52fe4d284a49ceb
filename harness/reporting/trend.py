"""A small trend of two signals, drawn with characters."""

from __future__ import annotations

import math
from itertools import groupby
from typing import TYPE_CHECKING

from rich.text import Text

from harness.reporting.words import figure

if TYPE_CHECKING:
    from collections.abc import Sequence

BRAILLE = 0x2800  # first of the 256 patterns of Unicode's block Braille Patterns
# Bit of each dot in its cell, by column and row from the top (Unicode, Braille Patterns).
DOTS = ((0x01, 0x02, 0x04, 0x40), (0x08, 0x10, 0x20, 0x80))
LEAST_RANGE = 1e-2  # of the size of the values: a flat line is drawn as one, not as its noise
LABEL_WIDTH = 8  # [characters]
SIGNAL_STYLE, REFERENCE_STYLE = "bold", "cyan"


def trend(
    signal: Sequence[float],
    reference: Sequence[float],
    *,
    width: int,
    height: int,
    braille: bool = True,
) -> Text:
    """Return a drawing of a signal against its reference, oldest at the left.

    Parameters
    ----------
    signal, reference : sequence of float
        Process variable and setpoint at the same times [any unit]; what is not finite is left
        out.
    width, height : int
        Size with the labels of the scale [characters].
    braille : bool
        Whether to draw with braille dots, two by four to a character, the reference dashed; else
        with ``*`` and ``-``.

    Returns
    -------
    Text
        ``height`` lines.
    """
    columns = max(1, width - LABEL_WIDTH - 1)
    low, high = _scale([*signal, *reference])
    across, down = (2, 4) if braille else (1, 1)
    drawn, behind = (
        _cells(
            _raster(values, low, high, columns * across, height * down), height, braille=braille
        )
        for values in (signal, reference)
    )
    behind = [_dashed(row) for row in behind] if braille else behind
    text = Text(no_wrap=True)
    for row in range(height):
        label = {0: figure(high), height - 1: figure(low)}.get(row, "")
        text.append(f"{label:>{LABEL_WIDTH}} ", style="dim")
        cells = zip(drawn[row], behind[row], strict=True)
        for is_signal, run in groupby(cells, key=lambda cell: cell[0] > 0):
            style = SIGNAL_STYLE if is_signal else REFERENCE_STYLE
            text.append(
                "".join(_character(*cell, braille=braille) for cell in run), style=style
            )
        if row < height - 1:
            text.append("\n")
    return text


def _dashed(row: list[int]) -> list[int]:
    """Return a row of the reference with every other pair of dots left out, told by its dashes."""
    return [dots if column % 2 == 0 else 0 for column, dots in enumerate(row)]


def _scale(values: Sequence[float]) -> tuple[float, float]:
    """Return the ends of the scale, a little wider than the values."""
    known = [value for value in values if math.isfinite(value)] or [0.0]
    low, high = min(known), max(known)
    room = max(0.05 * (high - low), LEAST_RANGE * max(abs(low), abs(high), LEAST_RANGE))
    return low - room, high + room


def _raster(
    values: Sequence[float], low: float, high: float, columns: int, rows: int
) -> list[list[int]]:
    """Return for each dot column the dot rows that are set, joined so that no line is broken."""
    raster: list[list[int]] = [[] for _ in range(columns)]
    last: int | None = None
    for column in range(columns if values else 0):
        value = values[min(len(values) - 1, column * len(values) // columns)]
        if not math.isfinite(value):
            last = None
            continue
        row = min(rows - 1, int((high - value) / (high - low) * rows))
        start = row if last is None else last + (row > last) - (row < last)
        raster[column] = list(range(min(start, row), max(start, row) + 1))
        last = row
    return raster


def _cells(raster: list[list[int]], height: int, *, braille: bool) -> list[list[int]]:
    """Return by row and column the dots of each character as bits; 1 or 0 without braille."""
    across, down = (2, 4) if braille else (1, 1)
    cells = [[0] * (len(raster) // across) for _ in range(height)]
    for x, rows in enumerate(raster):
        for y in rows:
            cells[y // down][x // across] |= DOTS[x % across][y % down]
    return cells


def _character(signal: int, reference: int, *, braille: bool) -> str:
    """Return one character; where both signals meet, the process variable wins."""
    if braille:
        return chr(BRAILLE + (signal | reference))
    return "*" if signal else "-" if reference else " "
