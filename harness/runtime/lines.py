"""Lines that people or programs write while something else goes on; reading them never waits."""

from __future__ import annotations

import contextlib
import os
import queue
import threading
from typing import TYPE_CHECKING, Protocol

from harness.errors import UsageError

if TYPE_CHECKING:
    from pathlib import Path

_CHUNK = 4096  # of a terminal's line [bytes]


class Lines(Protocol):
    """Where lines come from."""

    def next(self) -> str | None:
        """Return the next line without the white space around it, or None for none yet."""
        ...

    def skip(self) -> None:
        """Forget every line that is there."""
        ...


class TypedLines:
    """Lines typed into a terminal, or piped, read by a thread from the first look on.

    Parameters
    ----------
    descriptor : int
        File descriptor to read; 0 is the standard input [-].
    """

    def __init__(self, descriptor: int = 0) -> None:
        self._descriptor = descriptor
        self._lines: queue.SimpleQueue[str] = queue.SimpleQueue()
        self._thread: threading.Thread | None = None

    def next(self) -> str | None:
        """Return the next line, or None."""
        if self._thread is None:
            self._thread = threading.Thread(target=self._read, name="lines", daemon=True)
            self._thread.start()
        with contextlib.suppress(queue.Empty):
            return self._lines.get_nowait()
        return None

    def skip(self) -> None:
        """Forget what was typed until now."""
        while self.next() is not None:
            pass

    def _read(self) -> None:
        """Read lines until the end; the body of the thread.

        The descriptor and no file object: the lock of one held by a daemon thread would stop the
        interpreter from ending.
        """
        kept = b""
        while True:
            try:
                chunk = os.read(self._descriptor, _CHUNK)
            except OSError:
                return
            if not chunk:
                return
            *lines, kept = (kept + chunk).split(b"\n")
            for line in lines:
                self._lines.put(line.decode("utf-8", "replace").strip())


class AppendedLines:
    """Lines appended to a file.

    Parameters
    ----------
    path : Path
        The file; it is made when it is not there.

    Raises
    ------
    UsageError
        When it cannot be written.
    """

    def __init__(self, path: Path) -> None:
        self._path = path
        self._offset = 0
        self._kept: list[str] = []
        try:
            path.touch()
        except OSError as error:
            raise UsageError(
                f"{path} cannot be written: {error.strerror or error}; name a file in a folder "
                "that is there"
            ) from error
        self.skip()

    def next(self) -> str | None:
        """Return the next whole line, or None."""
        if not self._kept and self._size() != self._offset:
            self._read()
        return self._kept.pop(0) if self._kept else None

    def skip(self) -> None:
        """Forget what stands in the file."""
        self._offset = self._size()
        self._kept.clear()

    def _size(self) -> int:
        try:
            return self._path.stat().st_size
        except OSError:
            return 0

    def _read(self) -> None:
        with contextlib.suppress(OSError), self._path.open("rb") as file:
            if self._size() < self._offset:
                self._offset = 0  # somebody wrote the file anew
            file.seek(self._offset)
            whole, newline, _ = file.read().rpartition(b"\n")
            self._offset += len(whole) + len(newline)
            if newline:
                text = whole.decode("utf-8-sig", "replace")
                self._kept += [line.strip() for line in text.split("\n")]
