"""Other forms of a record: the trace as comma-separated values, and files written whole."""

from __future__ import annotations

import csv
import math
from contextlib import contextmanager
from typing import TYPE_CHECKING, TextIO

from harness.errors import RecordError

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    from harness.recording.reader import RunFolder

CSV_FILE = "trace.csv"


def export_csv(run: RunFolder, target: Path | None = None) -> Path:
    """Write the trace as comma-separated values, one row a tick.

    The first columns are the segment, the tick and the plant time since tick 0; each title
    carries its unit in brackets. Numbers are the shortest that read back exactly; an empty
    field stands for nothing recorded. Rows are streamed, and the file appears whole or not at
    all.

    Parameters
    ----------
    run : RunFolder
        The run.
    target : Path or None
        File to write; None for ``trace.csv`` in the run folder.

    Returns
    -------
    Path
        The file written.

    Raises
    ------
    RecordError
        If the record cannot be read or the file cannot be written.
    """
    target = run.path / CSV_FILE if target is None else target
    with replacing(target) as file:
        writer = csv.writer(file, lineterminator="\n")
        titles = [f"{column.name} [{column.unit or '-'}]" for column in run.columns]
        writer.writerow(["segment [-]", "tick [ticks]", "time [s]", *titles, "lateness [s]"])
        tick_s = run.header.tick
        for segment, tick, lateness, *values in run.rows():
            row = [segment, tick, _time(tick, tick_s), *values, lateness]
            writer.writerow(row)
    return target


def write_file(target: Path, text: str) -> Path:
    """Write a text file whole or not at all, in UTF-8 with line feeds.

    Raises
    ------
    RecordError
        If it cannot be written.
    """
    with replacing(target) as file:
        file.write(text)
    return target


@contextmanager
def replacing(target: Path) -> Iterator[TextIO]:
    """Open a new file beside the target; it takes the target's place when all went well.

    Raises
    ------
    RecordError
        If it cannot be written; what was there before stays.
    """
    temporary = target.with_name(target.name + ".part")
    try:
        with temporary.open("w", encoding="utf-8", newline="") as file:
            yield file
        temporary.replace(target)
    except OSError as error:
        raise RecordError(
            f"{target} could not be written ({error}). Free the disk, close the program that "
            "holds the file, or choose another place."
        ) from error
    finally:
        if temporary.exists():
            temporary.unlink()


def _time(tick: int, tick_s: float) -> float:
    """Return the plant time of a tick, without the digits that binary fractions add [s]."""
    digits = max(0, 12 - math.floor(math.log10(max(tick * tick_s, tick_s))))
    return round(tick * tick_s, digits)
