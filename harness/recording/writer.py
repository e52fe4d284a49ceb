"""Writing the record of a run, in the caller's own process."""

from __future__ import annotations

import sqlite3
from typing import TYPE_CHECKING, Self

import numpy as np

from harness.domain.run import RunHeader
from harness.errors import RecordError
from harness.recording.schema import (
    KEY_COLUMNS,
    TRACE_FILE,
    closing_text,
    create_statements,
    data_text,
    header_text,
    insert_rows_statement,
)

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence
    from pathlib import Path

    from numpy.typing import NDArray

    from harness.domain.run import Closing, Event
    from harness.domain.signals import Exchange

COMMIT_EVERY_NS = 400_000_000  # [ns]; well inside the promised second, and measured as free
ROWS_AT_ONCE = 1000  # fastest of 100 to 10,000 on 25 columns, and a commit is never far away
ROWS_A_STATEMENT = 20  # a third faster than one row a statement; 50 gave no more
PAGE_SIZE = 16_384  # [bytes]; a quarter faster than SQLite's 4,096 for rows of 25 columns
INSERT_EXCHANGE = (
    "INSERT INTO exchanges (tick, link, arrival_ns, peer, connection, function, address, point,"
    " value, raw, image_tick) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)"
)
INSERT_EVENT = "INSERT INTO events (tick, kind, subject, text, data) VALUES (?, ?, ?, ?, ?)"


class Recorder:
    """A record that is written by the process that calls it.

    Made by :meth:`create`. What is handed over is committed by the first call that comes
    ``COMMIT_EVERY_NS`` after the last commit, and by ``flush`` and ``close``.
    """

    def __init__(
        self,
        connection: sqlite3.Connection,
        header: RunHeader,
        folder: Path,
        now_ns: Callable[[], int],
    ) -> None:
        self._connection = connection
        self._columns = len(header.columns)
        limit = connection.getlimit(sqlite3.SQLITE_LIMIT_VARIABLE_NUMBER)
        width = len(KEY_COLUMNS) + self._columns
        self._grouped = max(1, min(ROWS_A_STATEMENT, limit // width))
        self._insert_group = insert_rows_statement(header.columns, self._grouped)
        self._insert_one = insert_rows_statement(header.columns, 1)
        self._folder = folder
        self._now_ns = now_ns
        self._committed_ns = now_ns()
        self._open = True

    @classmethod
    def create(cls, folder: Path, header: RunHeader, now_ns: Callable[[], int]) -> Self:
        """Begin the record in a run folder.

        Parameters
        ----------
        folder : Path
            The run folder; it exists and holds no record yet.
        header : RunHeader
            First document of the run.
        now_ns : callable
            Monotonic wall clock that decides when to commit [ns].

        Raises
        ------
        RecordError
            If the folder cannot be written, holds a record already, or column names collide.
        """
        path = folder / TRACE_FILE
        statements = create_statements(header.columns)
        if path.exists():
            raise RecordError(
                f"{path} is there already; a run never writes into another's record. "
                "Take a new run folder."
            )
        try:
            connection = sqlite3.connect(path, isolation_level=None)
        except sqlite3.Error as error:
            raise RecordError(_text(path, error)) from error
        try:
            _prepare(connection, statements, header)
        except sqlite3.Error as error:
            connection.close()
            raise RecordError(_text(path, error)) from error
        return cls(connection, header, folder, now_ns)

    def rows(
        self,
        segment: int,
        first_tick: int,
        block: NDArray[np.float64],
        lateness: NDArray[np.float64] | None,
    ) -> None:
        """Take the rows of consecutive ticks.

        Parameters
        ----------
        segment : int
            Segment; a new one begins at every restore, freeze or change of pace [-].
        first_tick : int
            Tick of the first row [ticks].
        block : ndarray, shape (n, columns)
            One row a tick, in the order and the units of the header's columns.
        lateness : ndarray, shape (n,), or None
            By how much each tick was late; None without a wall clock [s].

        Raises
        ------
        RecordError
            If the block has another number of columns, a tick was recorded already, or the
            disk does not take it.
        """
        count, columns = block.shape
        if columns != self._columns:
            raise RecordError(
                f"A block of {columns} columns was handed to a record of {self._columns}; "
                "its header says which."
            )
        for start in range(0, count, ROWS_AT_ONCE):
            part = block[start : start + ROWS_AT_ONCE]
            late = None if lateness is None else lateness[start : start + ROWS_AT_ONCE]
            keyed = _keyed(segment, first_tick + start, part, late)
            grouped = keyed.shape[0] // self._grouped * self._grouped
            groups = keyed[:grouped].reshape(-1, self._grouped * keyed.shape[1])
            self._insert_many(self._insert_group, groups.tolist())
            self._insert_many(self._insert_one, keyed[grouped:].tolist())

    def event(self, event: Event) -> None:
        """Take an event.

        Raises
        ------
        RecordError
            If its data have no JSON form, or the disk does not take it.
        """
        row = (event.tick, str(event.kind), event.subject, event.text, data_text(event))
        self._insert_many(INSERT_EVENT, [row])

    def exchanges(self, exchanges: Sequence[tuple[int, Exchange]]) -> None:
        """Take exchanges, each with the tick at which it was latched.

        Raises
        ------
        RecordError
            If the disk does not take them.
        """
        rows = [
            (
                tick,
                item.link,
                item.arrival_ns,
                item.peer,
                item.connection,
                item.function,
                item.address,
                item.point,
                item.value,
                item.raw,
                item.image_tick,
            )
            for tick, item in exchanges
        ]
        self._insert_many(INSERT_EXCHANGE, rows)

    def flush(self) -> None:
        """Commit everything taken so far.

        Raises
        ------
        RecordError
            If the disk does not take it.
        """
        self._require_open()
        try:
            self._commit()
        except sqlite3.Error as error:
            self._fail(error)

    def close(self, closing: Closing) -> None:
        """Write the closing document and close the record.

        Raises
        ------
        RecordError
            If the disk does not take it; what was committed before stays readable.
        """
        self._require_open()
        try:
            self._begin()
            self._connection.execute(
                "INSERT INTO documents VALUES ('closing', ?)", (closing_text(closing),)
            )
            self._commit()
            self._shut()
        except sqlite3.Error as error:
            self._fail(error)

    def abandon(self) -> None:
        """Close the record without closing document: the run counts as cut off."""
        if not self._open:
            return
        try:
            self._commit()
            self._shut()
        except sqlite3.Error:
            self._open = False
            self._connection.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.abandon()

    def _insert_many(self, statement: str, rows: Sequence[Sequence[object]]) -> None:
        self._require_open()
        if not rows:
            return
        try:
            self._begin()
            self._connection.executemany(statement, rows)
            if self._now_ns() - self._committed_ns >= COMMIT_EVERY_NS:
                self._commit()
        except sqlite3.Error as error:
            self._fail(error)

    def _begin(self) -> None:
        if not self._connection.in_transaction:
            self._connection.execute("BEGIN")

    def _commit(self) -> None:
        if self._connection.in_transaction:
            self._connection.execute("COMMIT")
        self._committed_ns = self._now_ns()

    def _shut(self) -> None:
        """Leave one plain file behind, readable from read-only media; a reader may forbid it."""
        self._open = False
        try:
            self._connection.execute("PRAGMA journal_mode = DELETE")
        except sqlite3.OperationalError as error:
            if error.sqlite_errorcode != sqlite3.SQLITE_BUSY:
                raise
        self._connection.close()

    def _fail(self, error: sqlite3.Error) -> None:
        """Keep what was committed, and tell the caller."""
        self._open = False
        if self._connection.in_transaction:
            self._connection.rollback()
        self._connection.close()
        raise RecordError(_text(self._folder / TRACE_FILE, error)) from error

    def _require_open(self) -> None:
        if not self._open:
            raise RecordError(
                f"The record {self._folder / TRACE_FILE} is closed, by its end or an earlier error."
            )


def _prepare(
    connection: sqlite3.Connection, statements: Sequence[str], header: RunHeader
) -> None:
    connection.execute(f"PRAGMA page_size = {PAGE_SIZE}")
    connection.execute("PRAGMA journal_mode = WAL")
    connection.execute("PRAGMA synchronous = NORMAL")
    connection.execute("BEGIN")
    for statement in statements:
        connection.execute(statement)
    connection.execute("INSERT INTO documents VALUES ('header', ?)", (header_text(header),))
    connection.execute("COMMIT")


def _keyed(
    segment: int,
    first_tick: int,
    block: NDArray[np.float64],
    lateness: NDArray[np.float64] | None,
) -> NDArray[np.float64]:
    """Return the block with its key columns before it; SQLite makes the keys integers."""
    keyed = np.empty((block.shape[0], len(KEY_COLUMNS) + block.shape[1]))
    keyed[:, 0] = segment
    keyed[:, 1] = np.arange(first_tick, first_tick + block.shape[0])
    keyed[:, 2] = np.nan if lateness is None else lateness
    keyed[:, 3:] = block
    return keyed


def _text(path: Path, error: sqlite3.Error) -> str:
    """Say what happened, what is safe, and what to do."""
    code = getattr(error, "sqlite_errorcode", None)
    primary = None if code is None else code & 0xFF  # extended codes carry the primary below
    reasons = {
        sqlite3.SQLITE_FULL: "the disk is full. Free some space and run again",
        sqlite3.SQLITE_IOERR: "the disk reported an error. Check it, and run again",
        sqlite3.SQLITE_READONLY: "the folder may not be written. Choose another with --out",
        sqlite3.SQLITE_CANTOPEN: "it cannot be opened for writing. Choose another place with --out",
        sqlite3.SQLITE_CONSTRAINT: "a tick was recorded twice in one segment",
    }
    reason = reasons.get(primary) if primary is not None else None
    return (
        f"The record {path} could not be written: {reason or 'SQLite refused it'} "
        f"({error}). What was committed before is kept and readable."
    )
