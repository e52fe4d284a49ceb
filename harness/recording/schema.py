"""The form of the record: its tables, and the documents of a run as JSON text."""

from __future__ import annotations

import json
import math
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

from harness.domain.run import (
    SCHEMA_VERSION,
    Closing,
    Column,
    Event,
    EventKind,
    RunEnd,
    RunHeader,
)
from harness.errors import RecordError

if TYPE_CHECKING:
    from collections.abc import Sequence

TRACE_FILE = "trace.sqlite"
RIG_FILE = "rig.toml"
TRIAL_FILE = "trial.toml"
APPLICATION_ID = 0x44525947  # "DRYG" in ASCII: SQLite's own mark of whose file this is
KEY_COLUMNS = ("segment", "tick", "lateness")  # stand before the columns of the header
MAX_COLUMNS = 1990  # SQLite allows 2000 columns unless compiled otherwise (its limits page)


def quoted(name: str) -> str:
    """Return a name as an SQL identifier in double quotes."""
    return '"' + name.replace('"', '""') + '"'


def create_statements(columns: Sequence[Column]) -> tuple[str, ...]:
    """Return the statements that make the tables of an empty record.

    Parameters
    ----------
    columns : sequence of Column
        Columns of the trace.

    Raises
    ------
    RecordError
        If two names are equal but for their case, or one is taken by the record itself.
    """
    _check_names(columns)
    trace = ", ".join(f"{quoted(column.name)} REAL" for column in columns)
    return (
        f"PRAGMA application_id = {APPLICATION_ID}",
        f"PRAGMA user_version = {SCHEMA_VERSION}",
        "CREATE TABLE documents (kind TEXT PRIMARY KEY, body TEXT NOT NULL)",
        "CREATE TABLE trace (segment INTEGER NOT NULL, tick INTEGER NOT NULL, lateness REAL"
        + (f", {trace}" if trace else "")
        + ", PRIMARY KEY (segment, tick)) WITHOUT ROWID",
        "CREATE TABLE events (id INTEGER PRIMARY KEY, tick INTEGER NOT NULL,"
        " kind TEXT NOT NULL, subject TEXT NOT NULL, text TEXT NOT NULL, data TEXT NOT NULL)",
        "CREATE TABLE exchanges (id INTEGER PRIMARY KEY, tick INTEGER NOT NULL,"
        " link TEXT NOT NULL, arrival_ns INTEGER NOT NULL, peer TEXT NOT NULL,"
        " connection INTEGER NOT NULL, function TEXT NOT NULL, address TEXT NOT NULL,"
        " point TEXT NOT NULL, value REAL, raw TEXT NOT NULL, image_tick INTEGER NOT NULL)",
    )


def insert_rows_statement(columns: Sequence[Column], rows: int) -> str:
    """Return the statement that inserts the rows of so many ticks at once.

    Parameters
    ----------
    columns : sequence of Column
        Columns of the trace.
    rows : int
        Rows of one execution [-].
    """
    one = "(" + ", ".join("?" * (len(KEY_COLUMNS) + len(columns))) + ")"
    marks = ", ".join([one] * rows)
    return f"INSERT INTO trace VALUES {marks}"  # noqa: S608  nothing but question marks


def _check_names(columns: Sequence[Column]) -> None:
    if len(columns) > MAX_COLUMNS:
        raise RecordError(
            f"The record would have {len(columns)} columns; at most {MAX_COLUMNS} fit. "
            "Record fewer tags."
        )
    seen = {name: name for name in KEY_COLUMNS}
    for column in columns:
        folded = column.name.casefold()
        if folded in seen:
            raise RecordError(
                f"Column {column.name!r} of the record collides with {seen[folded]!r}: names "
                "must differ in more than their case. Rename the tag."
            )
        seen[folded] = column.name


def plain(value: object) -> object:
    """Return a value made of what JSON knows; numbers that are not finite become None.

    Raises
    ------
    RecordError
        If the value holds something that has no JSON form.
    """
    if hasattr(value, "tolist"):  # numpy scalars and arrays, without importing numpy here
        value = value.tolist()
    if value is None or isinstance(value, (str, bool, int)):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, dict):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    raise RecordError(
        f"A value of type {type(value).__name__} has no JSON form: {value!r}. "
        "Events take text, numbers, lists and objects by name."
    )


def header_text(header: RunHeader) -> str:
    """Return the header document as JSON text."""
    return _document(asdict(header))


def closing_text(closing: Closing) -> str:
    """Return the closing document as JSON text."""
    return _document(asdict(closing))


def data_text(event: Event) -> str:
    """Return the facts of an event as JSON text."""
    return json.dumps(plain(event.data), allow_nan=False, sort_keys=True)


def header_from(text: str) -> RunHeader:
    """Return the header of its JSON text.

    Raises
    ------
    KeyError, TypeError, ValueError
        If the text is not such a document.
    """
    fields: dict[str, Any] = json.loads(text)
    fields.pop("schema_version")
    fields["columns"] = tuple(Column(**column) for column in fields["columns"])
    return RunHeader(**fields)


def closing_from(text: str) -> Closing:
    """Return the closing document of its JSON text.

    Raises
    ------
    KeyError, TypeError, ValueError
        If the text is not such a document.
    """
    fields: dict[str, Any] = json.loads(text)
    fields.pop("schema_version")
    fields["end"] = RunEnd(fields["end"])
    return Closing(**fields)


def event_from(tick: int, kind: str, subject: str, text: str, data: str) -> Event:
    """Return the event of its stored fields.

    Raises
    ------
    ValueError
        If kind or data are not what the record writes.
    """
    return Event(
        tick=tick, kind=EventKind(kind), subject=subject, text=text, data=json.loads(data)
    )


def _document(fields: dict[str, Any]) -> str:
    return json.dumps({"schema_version": SCHEMA_VERSION, **fields}, ensure_ascii=False)
