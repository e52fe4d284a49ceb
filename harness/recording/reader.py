"""Reading a run folder back."""

from __future__ import annotations

import sqlite3
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Self

import numpy as np

from harness.domain.run import SCHEMA_VERSION, Closing, Column, Event, RunHeader
from harness.domain.signals import Exchange
from harness.errors import RecordError
from harness.recording.schema import (
    APPLICATION_ID,
    KEY_COLUMNS,
    TRACE_FILE,
    closing_from,
    event_from,
    header_from,
    quoted,
)

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    from numpy.typing import NDArray

ROWS_AT_ONCE = 4096  # keeps the objects of one fetch inside the processor's cache


@dataclass(frozen=True, slots=True, kw_only=True)
class RunFolder:
    """A run on disk, finished, cut off or still being written.

    Made by :meth:`open`. Each method opens the file for itself and only reads.

    Parameters
    ----------
    path : Path
        The folder.
    header : RunHeader
        First document.
    closing : Closing or None
        Last document; None for a run that was cut off, which counts as failed.
    """

    path: Path
    header: RunHeader
    closing: Closing | None

    @classmethod
    def open(cls, path: Path) -> Self:
        """Open a run folder.

        Raises
        ------
        RecordError
            If it is no run folder, of another schema version, or garbled.
        """
        file = path / TRACE_FILE
        if not file.is_file():
            raise RecordError(
                f"{path} is not a run folder: it holds no {TRACE_FILE}. "
                "Name the folder that a run wrote."
            )
        with _reading(file) as connection:
            _check_form(connection, file)
            documents = dict(connection.execute("SELECT kind, body FROM documents"))
        try:
            header = header_from(documents["header"])
            text = documents.get("closing")
            closing = None if text is None else closing_from(text)
        except (KeyError, TypeError, ValueError) as error:
            raise RecordError(
                f"The record {file} is garbled: its documents cannot be read ({error!r}). "
                "The run has to be repeated."
            ) from error
        return cls(path=path, header=header, closing=closing)

    @property
    def columns(self) -> tuple[Column, ...]:
        """Return the columns of the trace."""
        return self.header.columns

    def segments(self) -> tuple[int, ...]:
        """Return the numbers of the segments, in order.

        Raises
        ------
        RecordError
            If the file is garbled.
        """
        with self._reading() as connection:
            found = connection.execute("SELECT DISTINCT segment FROM trace ORDER BY segment")
            return tuple(int(row[0]) for row in found)

    def trace(
        self, segment: int | None = None, names: tuple[str, ...] | None = None
    ) -> dict[str, NDArray[np.float64]]:
        """Return the rows as one array per column, in the order of segment and tick.

        Parameters
        ----------
        segment : int or None
            Only this one; None for all [-].
        names : tuple of str or None
            Only these columns; None for all.

        Returns
        -------
        dict of str to ndarray, shape (n,)
            ``"segment"``, ``"tick"`` and ``"lateness"`` [s], and the header's columns; whole
            numbers are exact in their floats. Not a number stands for nothing recorded.

        Raises
        ------
        RecordError
            If a column is not in the record, or the file is garbled.
        """
        known = _names(self.columns)
        chosen = known if names is None else list(names)
        for name in chosen:
            if name not in known:
                raise RecordError(
                    f"{name!r} is not a column of {self.path / TRACE_FILE}; it has "
                    + ", ".join(known)
                )
        wanted = [*KEY_COLUMNS, *chosen]
        where, values = ("", ()) if segment is None else (" WHERE segment = ?", (segment,))
        with self._reading() as connection:
            # Parts that vary are quoted names of the header and one parameter.
            count = connection.execute(f"SELECT count(*) FROM trace{where}", values)  # noqa: S608
            table = np.empty((int(count.fetchone()[0]), len(wanted)))
            listed = ", ".join(map(quoted, wanted))
            rows = connection.execute(
                f"SELECT {listed} FROM trace{where} ORDER BY segment, tick",  # noqa: S608
                values,
            )
            table = _filled(table, rows)
        return {name: np.ascontiguousarray(table[:, i]) for i, name in enumerate(wanted)}

    def rows(self) -> Iterator[tuple[Any, ...]]:
        """Yield the rows one by one: segment, tick, lateness, and the header's columns.

        Raises
        ------
        RecordError
            If the file is garbled.
        """
        listed = ", ".join(quoted(name) for name in (*KEY_COLUMNS, *_names(self.columns)))
        with self._reading() as connection:
            yield from connection.execute(
                f"SELECT {listed} FROM trace ORDER BY segment, tick"  # noqa: S608  quoted names
            )

    def events(self) -> tuple[Event, ...]:
        """Return the events in the order in which they were recorded.

        Raises
        ------
        RecordError
            If the file is garbled.
        """
        with self._reading() as connection:
            rows = connection.execute(
                "SELECT tick, kind, subject, text, data FROM events ORDER BY id"
            ).fetchall()
        try:
            return tuple(event_from(*row) for row in rows)
        except (TypeError, ValueError) as error:
            raise RecordError(
                f"The record {self.path / TRACE_FILE} is garbled: an event cannot be read "
                f"({error})."
            ) from error

    def exchanges(self, link: str | None = None) -> tuple[tuple[int, Exchange], ...]:
        """Return the exchanges, each with the tick at which it was latched.

        Parameters
        ----------
        link : str or None
            Only those of this link; None for all.

        Raises
        ------
        RecordError
            If the file is garbled.
        """
        with self._reading() as connection:
            rows = connection.execute(
                "SELECT tick, link, arrival_ns, peer, connection, function, address, point,"
                " value, raw, image_tick FROM exchanges WHERE ? IS NULL OR link = ? ORDER BY id",
                (link, link),
            ).fetchall()
        return tuple((int(row[0]), _exchange(row)) for row in rows)

    def verify(self) -> None:
        """Check the whole file: its pages, its ticks, and the count in its closing document.

        Raises
        ------
        RecordError
            If a page is damaged, ticks are missing inside a segment, or rows are missing.
        """
        file = self.path / TRACE_FILE
        with self._reading() as connection:
            (answer,) = connection.execute("PRAGMA quick_check(1)").fetchone()
            if answer != "ok":
                raise RecordError(f"The record {file} is garbled: {answer}.")
            spans = connection.execute(
                "SELECT segment, min(tick), max(tick), count(*) FROM trace GROUP BY segment"
            ).fetchall()
        for segment, first, last, count in spans:
            if last - first + 1 != count:
                raise RecordError(
                    f"The record {file} has gaps: segment {segment} runs from tick {first} to "
                    f"{last} but holds {count} rows."
                )
        rows = sum(count for *_, count in spans)
        if self.closing is not None and self.closing.rows != rows:
            raise RecordError(
                f"The record {file} is incomplete: {rows} rows, where its closing document "
                f"counts {self.closing.rows}."
            )

    @contextmanager
    def _reading(self) -> Iterator[sqlite3.Connection]:
        with _reading(self.path / TRACE_FILE) as connection:
            yield connection


@contextmanager
def _reading(file: Path) -> Iterator[sqlite3.Connection]:
    """Open the file to read only; what SQLite says becomes a RecordError."""
    try:
        connection = sqlite3.connect(_address(file), uri=True, isolation_level=None)
        try:
            connection.execute("BEGIN")  # one state of the record, even while a run writes
            yield connection
        finally:
            connection.close()
    except sqlite3.DatabaseError as error:
        raise RecordError(
            f"The record {file} cannot be read ({error}): it is garbled, in use by another "
            "program, or not a record. Take a copy of the folder, or repeat the run."
        ) from error


def _address(file: Path) -> str:
    """Return the SQLite address; without a log beside it the file cannot change under us."""
    log = file.with_name(file.name + "-wal")
    return f"{file.resolve().as_uri()}?mode=ro" + ("" if log.exists() else "&immutable=1")


def _check_form(connection: sqlite3.Connection, file: Path) -> None:
    (application,) = connection.execute("PRAGMA application_id").fetchone()
    (version,) = connection.execute("PRAGMA user_version").fetchone()
    if application != APPLICATION_ID:
        raise RecordError(
            f"{file} is a database of something else, not the record of a run "
            f"(application id {application:#x}, expected {APPLICATION_ID:#x})."
        )
    if version != SCHEMA_VERSION:
        raise RecordError(
            f"The record {file} has schema version {version}; this program reads version "
            f"{SCHEMA_VERSION}. Read it with the program version named in its header."
        )


def _filled(table: NDArray[np.float64], rows: sqlite3.Cursor) -> NDArray[np.float64]:
    """Fill the table from the cursor, batch by batch; NULL becomes not-a-number."""
    start = 0
    while start < table.shape[0] and (batch := rows.fetchmany(ROWS_AT_ONCE)):
        end = min(start + len(batch), table.shape[0])
        table[start:end] = np.array(batch[: end - start], dtype=np.float64)
        start = end
    return table[:start]


def _names(columns: tuple[Column, ...]) -> list[str]:
    return [column.name for column in columns]


def _exchange(row: tuple[object, ...]) -> Exchange:
    _, link, arrival, peer, connection, function, address, point, value, raw, image = row
    return Exchange(
        link=str(link),
        arrival_ns=int(str(arrival)),
        peer=str(peer),
        connection=int(str(connection)),
        function=str(function),
        address=str(address),
        point=str(point),
        value=float("nan") if value is None else float(str(value)),
        raw=str(raw),
        image_tick=int(str(image)),
    )
