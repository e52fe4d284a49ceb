"""The recorder in a process of its own, so that the tick's process never waits for the disk.

A thread here hands what was queued to a pipe; the child reads the pipe and owns the file. The
backlog is bounded: when the disk is slower than the run for long, a call waits, and after
``PATIENCE`` it gives up with a RecordError rather than let memory grow.
"""

from __future__ import annotations

import multiprocessing
import signal
import threading
import time
from collections import deque
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any, Self

import numpy as np

from harness.errors import RecordError
from harness.recording.children import interrupts_blocked
from harness.recording.schema import data_text
from harness.recording.writer import Recorder

if TYPE_CHECKING:
    from collections.abc import Sequence
    from multiprocessing.connection import Connection

    from numpy.typing import NDArray

    from harness.domain.run import Closing, Event, RunHeader
    from harness.domain.signals import Exchange

BACKLOG = 20_000  # [rows]; what a kill can cost: less than 0.3 s of writing at full speed
ROWS_A_MESSAGE = 2000  # [rows]
PATIENCE = 20.0  # [s]; a disk that takes nothing for this long counts as gone
STARTING = 60.0  # [s]; a cold import from a slow disk, with room
IDLE = 0.4  # [s]; after this long without a message the child commits what it holds


class RecorderProcess:
    """A record that is written by a process of its own; the same calls as ``Recorder``.

    Made by :meth:`create`. A call returns before anything is on disk; an error of the child is
    raised by a later call, at the latest by ``close``.
    """

    def __init__(self, process: Any, to_child: Connection, from_child: Connection) -> None:
        self._process = process
        self._to_child = to_child
        self._from_child = from_child
        self._backlog = _Backlog()
        self._failure: str | None = None
        self._closed = threading.Event()  # the child has said its last word
        self._open = True
        self._sender = threading.Thread(target=self._send, name="recorder sender", daemon=True)
        self._listener = threading.Thread(
            target=self._listen, name="recorder news", daemon=True
        )
        self._sender.start()
        self._listener.start()

    @classmethod
    def create(cls, folder: Path, header: RunHeader) -> Self:
        """Start the process and begin the record; returns when the file is there.

        Parameters
        ----------
        folder : Path
            The run folder; it exists and holds no record yet.
        header : RunHeader
            First document of the run.

        Raises
        ------
        RecordError
            If the record cannot be begun, with the child's reason.
        """
        context = multiprocessing.get_context("spawn")
        child_receives, to_child = context.Pipe(duplex=False)
        from_child, child_sends = context.Pipe(duplex=False)
        process = context.Process(
            target=_write_record,
            args=(child_receives, child_sends, str(folder), header),
            name="recorder",
            daemon=True,
        )
        with interrupts_blocked():
            process.start()
        child_receives.close()
        child_sends.close()
        failure = _first_word(from_child)
        if failure is not None:
            to_child.close()
            from_child.close()
            process.join(PATIENCE)
            raise RecordError(failure)
        return cls(process, to_child, from_child)

    @property
    def pid(self) -> int:
        """Return the id of the child process [-]."""
        return int(self._process.pid)

    def rows(
        self,
        segment: int,
        first_tick: int,
        block: NDArray[np.float64],
        lateness: NDArray[np.float64] | None,
    ) -> None:
        """Take a copy of the rows of consecutive ticks.

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
            If the child reported an error or went, or took nothing for ``PATIENCE``.
        """
        for start in range(0, block.shape[0], ROWS_A_MESSAGE):
            part = np.ascontiguousarray(block[start : start + ROWS_A_MESSAGE], dtype=np.float64)
            late = None if lateness is None else lateness[start : start + ROWS_A_MESSAGE]
            self._put(
                (
                    "rows",
                    segment,
                    first_tick + start,
                    part.shape,
                    part.tobytes(),
                    None if late is None else np.asarray(late, dtype=np.float64).tobytes(),
                ),
                part.shape[0],
            )

    def event(self, event: Event) -> None:
        """Take an event.

        Raises
        ------
        RecordError
            If its data have no JSON form, or as for ``rows``.
        """
        data_text(event)  # refuse here, where the caller can still be told which event
        self._put(("event", event))

    def exchanges(self, exchanges: Sequence[tuple[int, Exchange]]) -> None:
        """Take exchanges, each with the tick at which it was latched.

        Raises
        ------
        RecordError
            As for ``rows``.
        """
        self._put(("exchanges", list(exchanges)))

    def flush(self) -> None:
        """Have everything taken so far committed, without waiting for it.

        Raises
        ------
        RecordError
            As for ``rows``.
        """
        self._put(("flush",))

    def close(self, closing: Closing) -> None:
        """Have the closing document written, and wait until the record is closed.

        Raises
        ------
        RecordError
            If the child reports an error or went; what it committed before stays readable.
        """
        try:
            self._put(("close", closing))
        finally:
            self._end()
        if self._failure is not None:
            raise RecordError(self._failure)

    def abandon(self) -> None:
        """Close the record without closing document: the run counts as cut off."""
        if self._open:
            with suppress(RecordError):
                self._put(("abandon",))
            self._end()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.abandon()

    def _put(self, message: tuple[object, ...], rows: int = 1) -> None:
        if self._failure is not None:
            raise RecordError(self._failure)
        if not self._open:
            raise RecordError("The record is closed; nothing can be added to it.")
        if not self._backlog.put(message, rows, PATIENCE):
            self._failure = (
                f"The recorder's process {self.pid} took nothing for {PATIENCE:g} s: the disk "
                "hangs or is far too slow. What it committed before is kept and readable."
            )
            raise RecordError(self._failure)

    def _send(self) -> None:
        """Hand the backlog to the pipe; after a failure only empty it, so that nobody waits."""
        while (message := self._backlog.get()) is not None:
            if self._failure is None:
                # A broken pipe is told by the listener, who also knows the child's last words.
                with suppress(OSError):
                    self._to_child.send(message)

    def _listen(self) -> None:
        """Take the child's last word: how the record ended."""
        try:
            failure = self._from_child.recv()
        except (EOFError, OSError):
            failure = (
                f"The recorder's process {self.pid} ended without a word, killed perhaps. "
                "What it committed before is kept and readable."
            )
        if self._failure is None:
            self._failure = failure
        self._closed.set()

    def _end(self) -> None:
        """Wait for the child, and let go of everything."""
        self._open = False
        if not self._closed.wait(PATIENCE):
            if self._failure is None:
                self._failure = (
                    f"The recorder's process {self.pid} did not close the record in "
                    f"{PATIENCE:g} s. What it committed before is kept and readable."
                )
            self._process.kill()
        self._backlog.finish()
        for part in (self._process, self._sender, self._listener):
            part.join(PATIENCE)
        self._to_child.close()
        self._from_child.close()


class _Backlog:
    """A queue bounded by the rows that wait in it; one thread puts, one gets."""

    def __init__(self) -> None:
        self._messages: deque[tuple[tuple[object, ...], int]] = deque()
        self._rows = 0
        self._finished = False
        self._changed = threading.Condition()

    def put(self, message: tuple[object, ...], rows: int, patience: float) -> bool:
        """Queue a message; return False when there was no room for it within the patience."""
        with self._changed:
            if not self._changed.wait_for(lambda: self._rows < BACKLOG, patience):
                return False
            self._messages.append((message, rows))
            self._rows += rows
            self._changed.notify_all()
            return True

    def get(self) -> tuple[object, ...] | None:
        """Return the next message, or None when all are taken and none will follow."""
        with self._changed:
            self._changed.wait_for(lambda: self._messages or self._finished)
            if not self._messages:
                return None
            message, rows = self._messages.popleft()
            self._rows -= rows
            self._changed.notify_all()
            return message

    def finish(self) -> None:
        """Let the getter end when everything is taken."""
        with self._changed:
            self._finished = True
            self._changed.notify_all()


def _first_word(from_child: Connection) -> str | None:
    """Return None when the record has begun, or why not."""
    if not from_child.poll(STARTING):
        return f"The recorder's process did not start in {STARTING:g} s."
    try:
        failure = from_child.recv()
    except EOFError:
        return "The recorder's process ended while it started; its error is printed above."
    return None if failure is None else str(failure)


def _write_record(
    messages: Connection, answers: Connection, folder: str, header: RunHeader
) -> None:
    """Be the child: write what comes until the end, and say how it ended."""
    _heed_only_the_parent()
    failure: str | None = None
    try:
        with Recorder.create(Path(folder), header, time.perf_counter_ns) as recorder:
            answers.send(None)
            _take_messages(messages, recorder)
    except RecordError as error:
        failure = str(error)
    with suppress(OSError):  # the parent is gone: nobody to tell
        answers.send(failure)


def _heed_only_the_parent() -> None:
    """Ignore what is meant for the group; end in order when the parent terminates the child."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    for name in (
        "SIGBREAK",
        "SIGHUP",
    ):  # Ctrl-Break on Windows; elsewhere a terminal that closes
        if hasattr(signal, name):
            signal.signal(getattr(signal, name), signal.SIG_IGN)

    def leave(*_: object) -> None:
        raise SystemExit(0)

    signal.signal(signal.SIGTERM, leave)


def _take_messages(messages: Connection, recorder: Recorder) -> None:
    """Write messages until the last one, or until the parent is gone."""
    with suppress(EOFError):
        while True:
            if not messages.poll(IDLE):
                recorder.flush()
                continue
            if not _take(messages.recv(), recorder):
                return


def _take(message: tuple[Any, ...], recorder: Recorder) -> bool:
    """Write one message; return whether more may follow."""
    match message:
        case ("rows", segment, first_tick, shape, block, lateness):
            recorder.rows(
                segment,
                first_tick,
                np.frombuffer(block).reshape(shape),
                None if lateness is None else np.frombuffer(lateness),
            )
        case ("event", event):
            recorder.event(event)
        case ("exchanges", exchanges):
            recorder.exchanges(exchanges)
        case ("flush",):
            recorder.flush()
        case ("close", closing):
            recorder.close(closing)
            return False
        case _:
            return False
    return True
