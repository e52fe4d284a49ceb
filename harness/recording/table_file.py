"""Columns of a table in a text file from elsewhere: historians, loggers, spreadsheets.

Comma, semicolon or tab between fields; decimal point or comma; a byte order mark; units in the
titles or in a line of their own; times as numbers or as stamps. What cannot be read is said with
file and line, and nothing is guessed about values.
"""

from __future__ import annotations

import csv
import math
import re
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import TYPE_CHECKING

import numpy as np

from harness.errors import DataError, UsageError

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from numpy.typing import NDArray

    Array = NDArray[np.float64]

_ENCODINGS = {b"\xff\xfe": "utf-16", b"\xfe\xff": "utf-16", b"\xef\xbb\xbf": "utf-8-sig"}
_FALLBACK = "cp1252"  # what older Windows programs write
_DELIMITERS = (";", "\t", ",")
_SHOWN = 5  # problems told in full
_UNIT = re.compile(r"^(?P<name>.*?)\s*[\[(](?P<unit>[^\[\]()]*)[\])]\s*$")
_STAMP_FORMATS = (
    "%d.%m.%Y %H:%M:%S.%f", "%d.%m.%Y %H:%M:%S", "%d.%m.%Y %H:%M",
    "%Y/%m/%d %H:%M:%S.%f", "%Y/%m/%d %H:%M:%S", "%Y/%m/%d %H:%M",
)  # fmt: skip
_CLOCK = re.compile(r"^(\d{1,2}):(\d{2}):(\d{2}(?:[.,]\d+)?)$")
_SECONDS = {
    "": 1.0, "s": 1.0, "sec": 1.0, "seconds": 1.0, "second": 1.0,
    "ms": 1e-3, "msec": 1e-3, "milliseconds": 1e-3,
    "min": 60.0, "minutes": 60.0, "minute": 60.0,
    "h": 3600.0, "hr": 3600.0, "hours": 3600.0, "hour": 3600.0, "d": 86400.0, "days": 86400.0,
}  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class TableColumns:
    """Chosen columns of a file.

    Parameters
    ----------
    path : Path
        The file.
    time : ndarray, shape (n,)
        Time since the first row, rising [s].
    values : dict of str to ndarray
        Columns by the name asked for, each of shape (n,) [unit of the column].
    units : dict of str to str
        Units that the titles give, empty where they give none.
    lines : ndarray of int, shape (n,)
        Line of the file of each row [-].
    skipped : int
        Rows left out because a value was missing or no number [-].
    start : float
        Time of the first row, as `parse_time` reads it [s].
    time_scale : float
        Seconds in one unit of the time column [s].
    """

    path: Path
    time: Array
    values: dict[str, Array]
    units: dict[str, str]
    lines: NDArray[np.int64]
    skipped: int
    start: float
    time_scale: float


def read_columns(
    path: Path, time: str, names: Sequence[str], *, skip_bad: bool = False
) -> TableColumns:
    """Read the time and chosen columns of a file.

    Parameters
    ----------
    path : Path
        The file.
    time : str
        Title of the time column, with or without its unit.
    names : sequence of str
        Titles of the other columns, with or without their units.
    skip_bad : bool
        Whether rows with a missing value or text in it are left out.

    Returns
    -------
    TableColumns
        The columns.

    Raises
    ------
    UsageError
        When the file cannot be read or has no such column.
    DataError
        When it is empty or garbled, a value is no number, or the time does not rise.
    """
    text = _text(path)
    rows = _rows(path, text)
    header_line, titles = rows[0]
    places = {name: _place(path, header_line, titles, name) for name in (time, *names)}
    units = {name: _split_unit(titles[place])[1] for name, place in places.items()}
    body = rows[1:]
    if body and _is_unit_row([_field(body[0][1], place) for place in places.values()]):
        for name, place in places.items():
            units[name] = units[name] or _field(body[0][1], place).strip("[]() ")
        body = body[1:]
    if not body:
        raise DataError(f"{path}:{header_line}: there is a header and no rows below it")
    found = _Rows(path=path, scale=_time_scale(path, header_line, units[time]))
    for line, fields in body:
        found.take(line, {name: _field(fields, place) for name, place in places.items()}, time)
    found.finish(len(body), skip_bad=skip_bad)
    stamps = np.array(found.times)
    lines = np.array(found.lines, dtype=np.int64)
    _check_time(path, time, stamps, lines)
    return TableColumns(
        path=path,
        time=stamps - stamps[0],
        values={name: np.array(found.values[name]) for name in names},
        units=units,
        lines=lines,
        skipped=len(found.problems),
        start=float(stamps[0]),
        time_scale=found.scale,
    )


def parse_time(text: str, scale: float = 1.0) -> float | None:
    """Return a time from a number, an ISO stamp, or a clock time.

    Parameters
    ----------
    text : str
        The text.
    scale : float
        Seconds in one unit, for a number [s].

    Returns
    -------
    float or None
        Time; None for anything else [s].
    """
    value = _number(text)
    if value is not None:
        return value * scale
    clock = _CLOCK.match(text)
    if clock:
        hours, minutes, seconds = clock.groups()
        return 3600.0 * int(hours) + 60.0 * int(minutes) + float(seconds.replace(",", "."))
    stamp = _stamp(text)
    return None if stamp is None else stamp.timestamp()


class _Rows:
    """Collects good rows, and what is wrong with the others."""

    def __init__(self, *, path: Path, scale: float) -> None:
        self.path = path
        self.scale = scale
        self.times: list[float] = []
        self.values: dict[str, list[float]] = {}
        self.lines: list[int] = []
        self.problems: list[str] = []

    def take(self, line: int, fields: dict[str, str], time: str) -> None:
        row: dict[str, float] = {}
        for name, field in fields.items():
            value = parse_time(field, self.scale) if name == time else _number(field)
            if value is None:
                what = f'"{field}" is no {"time" if name == time else "number"}'
                self.problems.append(
                    f"{self.path}:{line}: column {name}: "
                    + (what if field else "the field is empty")
                )
                return
            row[name] = value
        self.lines.append(line)
        for name, value in row.items():
            if name == time:
                self.times.append(value)
            else:
                self.values.setdefault(name, []).append(value)

    def finish(self, rows: int, *, skip_bad: bool) -> None:
        if self.problems and (not skip_bad or not self.lines):
            shown = self.problems[:_SHOWN]
            more = len(self.problems) - len(shown)
            if more:
                shown.append(f"and {more} more of {rows} rows")
            shown.append("repair these, or leave such rows out with --skip-bad")
            raise DataError("\n".join(shown))


def _text(path: Path) -> str:
    try:
        data = path.read_bytes()
    except OSError as error:
        raise UsageError(f"{path}: cannot be read ({error.strerror})") from error
    if not data.strip():
        raise DataError(f"{path}: the file is empty")
    encoding = next(
        (name for mark, name in _ENCODINGS.items() if data.startswith(mark)), "utf-8"
    )
    try:
        text = data.decode(encoding)
    except UnicodeDecodeError:
        text = data.decode(_FALLBACK, errors="replace")
    if "\x00" in text:
        raise DataError(
            f"{path}: is no text file (it has null bytes); export it as comma-separated values"
        )
    return text


def _rows(path: Path, text: str) -> list[tuple[int, list[str]]]:
    """Return header and rows with their line numbers; comment lines are left out."""
    lines = text.splitlines()
    start, told = 0, ""
    while start < len(lines) and (
        not lines[start].strip(" ;,\t")
        or lines[start].startswith("#")
        or lines[start].lower().startswith("sep=")
    ):
        if lines[start].lower().startswith("sep="):
            told = lines[start][4:5]
        start += 1
    if start == len(lines):
        raise DataError(f"{path}: there is no header with the names of the columns")
    delimiter = told or max(_DELIMITERS, key=lambda mark: _outside_quotes(lines[start], mark))
    try:
        reader = csv.reader(lines[start:], delimiter=delimiter, strict=True)
        rows = [
            (start + reader.line_num, [field.strip() for field in fields])
            for fields in reader
            if any(field.strip() for field in fields) and not fields[0].startswith("#")
        ]
    except csv.Error as error:
        raise DataError(f"{path}:{start + 1}: garbled ({error}); export it again") from error
    width = len(rows[0][1])
    if width < 2:  # noqa: PLR2004  a time and something else
        raise DataError(
            f"{path}:{rows[0][0]}: only one column found; commas, semicolons or tabs must stand "
            "between the columns"
        )
    for line, fields in rows[1:]:
        if len(fields) > width and any(fields[width:]):
            raise DataError(
                f"{path}:{line}: {len(fields)} fields where the header has {width}; decimal commas "
                "need semicolons or tabs between the columns, or quotes around the numbers"
            )
    return rows


def _outside_quotes(line: str, mark: str) -> int:
    return re.sub(r'"[^"]*"', "", line).count(mark)


def _field(fields: list[str], place: int) -> str:
    return fields[place] if place < len(fields) else ""


def _split_unit(title: str) -> tuple[str, str]:
    found = _UNIT.match(title)
    return (found["name"], found["unit"].strip()) if found else (title, "")


def _place(path: Path, line: int, titles: list[str], name: str) -> int:
    """Return where a column stands: by its whole title, without its unit, without its case."""
    wanted = name.strip()
    for same in (
        lambda title: title == wanted,
        lambda title: _split_unit(title)[0] == wanted,
        lambda title: _split_unit(title)[0].lower() == _split_unit(wanted)[0].lower(),
    ):
        places = [place for place, title in enumerate(titles) if same(title)]
        if len(places) == 1:
            return places[0]
        if places:
            raise UsageError(
                f'{path}:{line}: {len(places)} columns are called "{name}"; give the whole title'
            )
    raise UsageError(f'{path}:{line}: no column "{name}"; there are {", ".join(titles)}')


def _is_unit_row(fields: list[str]) -> bool:
    """Return whether a line below the header holds units: text without any digit."""
    return any(fields) and not any(char.isdigit() for field in fields for char in field)


def _time_scale(path: Path, line: int, unit: str) -> float:
    scale = _SECONDS.get(unit.lower())
    if scale is None:
        raise UsageError(
            f'{path}:{line}: the time column is in "{unit}"; s, ms, min, h and d are known'
        )
    return scale


def _number(field: str) -> float | None:
    """Return a number with decimal point or comma, None for anything else."""
    plain = field.replace("\u00a0", "").replace("\u202f", "").replace(" ", "")
    if "," in plain:
        if plain.count(",") > 1 or ("." in plain and plain.index(",") < plain.index(".")):
            return (
                None  # commas between thousands: a guess would be off by a factor of a thousand
            )
        plain = plain.replace(".", "").replace(",", ".")
    try:
        value = float(plain)
    except ValueError:
        return None
    return value if math.isfinite(value) and "_" not in plain else None


def _stamp(field: str) -> datetime | None:
    try:
        found = datetime.fromisoformat(field.replace(",", "."))
    except ValueError:
        for pattern in _STAMP_FORMATS:
            try:
                return datetime.strptime(field, pattern).replace(tzinfo=UTC)
            except ValueError:
                continue
        return None
    return found if found.tzinfo is not None else found.replace(tzinfo=UTC)


def _check_time(path: Path, name: str, time: Array, lines: NDArray[np.int64]) -> None:
    steps = np.diff(time)
    wrong = np.flatnonzero(steps <= 0.0)
    if wrong.size == 0:
        return
    first = int(wrong[0])
    where = f"{path}:{int(lines[first + 1])}: column {name}"
    if wrong.size == steps.size:
        raise DataError(f"{where}: the time runs backwards throughout; sort the rows by time")
    if steps[first] == 0.0:
        raise DataError(
            f"{where}: the same time as in the row before ({wrong.size} such places or reversals); "
            "give each row its own time"
        )
    raise DataError(
        f"{where}: the time goes back by {-steps[first]:g} s ({wrong.size} such places); sort the "
        "rows, or cut the file where the clock was set"
    )
