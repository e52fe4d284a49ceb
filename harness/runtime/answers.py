"""Where the answer to a prompt comes from: a terminal, a file, a point of the rig, or a test."""

from __future__ import annotations

import contextlib
import getpass
import json
import os
import queue
import threading
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Protocol

from harness.errors import UsageError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from harness.runtime.session import Session

_CHUNK = 4096  # of a terminal's line [bytes]


@dataclass(frozen=True, slots=True, kw_only=True)
class Ask:
    """A prompt.

    Parameters
    ----------
    number : int
        Number of the prompt in the run, from 1 [-].
    loop : str
        Tag of the loop.
    text : str
        What to do.
    facts : dict of str to object
        The same for programs.
    """

    number: int
    loop: str
    text: str
    facts: dict[str, object]


@dataclass(frozen=True, slots=True, kw_only=True)
class Answer:
    """What somebody said to a prompt.

    Parameters
    ----------
    text : str
        The line; empty for a bare Enter.
    who : str
        Who said it.
    """

    text: str
    who: str


class Answers(Protocol):
    """Takes a prompt to people and brings back what they say; it never waits."""

    @property
    def how(self) -> str:
        """Return how to answer, in words that end a sentence; empty where nobody can."""
        ...

    def ask(self, ask: Ask) -> None:
        """Show a prompt; what was said before it does not count."""
        ...

    def poll(self) -> Answer | None:
        """Return the next thing said since the prompt, or None."""
        ...

    def done(self) -> None:
        """Take the prompt away."""
        ...


def user_name() -> str:
    """Return the name under which this program runs."""
    try:
        return getpass.getuser()
    except (OSError, KeyError, ImportError):  # no such entry, or a system without accounts
        return "unknown user"


class TerminalAnswers:
    """Lines typed into a terminal, read by a thread so that no tick waits for them.

    Parameters
    ----------
    descriptor : int
        File descriptor to read; 0 is the standard input [-].
    """

    how = "press Enter here when it is done"

    def __init__(self, descriptor: int = 0) -> None:
        self._descriptor = descriptor
        self._lines: queue.SimpleQueue[str] = queue.SimpleQueue()
        self._thread: threading.Thread | None = None

    def ask(self, ask: Ask) -> None:
        """Forget what was typed before; the view shows the prompt."""
        if self._thread is None:
            self._thread = threading.Thread(target=self._read, name="answers", daemon=True)
            self._thread.start()
        while self._next() is not None:
            pass

    def poll(self) -> Answer | None:
        """Return the next line, or None."""
        line = self._next()
        return None if line is None else Answer(text=line, who=user_name())

    def done(self) -> None:
        """Do nothing: the view takes the prompt away."""

    def _next(self) -> str | None:
        with contextlib.suppress(queue.Empty):
            return self._lines.get_nowait()
        return None

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


class FileAnswers:
    """Lines appended to a file, for who has no terminal; the open prompt stands beside it.

    The prompt is a JSON document in a file of the same name with ``.prompt.json`` behind it,
    there only while somebody is asked.

    Parameters
    ----------
    path : Path
        The file; it need not be there yet.

    Raises
    ------
    UsageError
        When no file can be written in its folder.
    """

    def __init__(self, path: Path) -> None:
        self._path = path
        self._prompt = path.with_name(path.name + ".prompt.json")
        self._offset = 0
        self._lines: list[str] = []
        self.how = f'append a line "done" to {path} when it is done'
        try:
            self._prompt.unlink(missing_ok=True)
            path.touch()
        except OSError as error:
            raise UsageError(
                f"answers: {path} cannot be written: {error.strerror or error}; name a file in a "
                "folder that is there"
            ) from error

    def ask(self, ask: Ask) -> None:
        """Write the prompt, and skip what stands in the file."""
        self._offset = self._size()
        self._lines.clear()
        document = {
            "number": ask.number,
            "loop": ask.loop,
            "text": ask.text,
            "order": ask.facts,
        }
        text = json.dumps(document, indent=2, ensure_ascii=False) + "\n"
        # Written aside and moved, so that nobody reads half of it.
        aside = self._prompt.with_name(self._prompt.name + ".new")
        with contextlib.suppress(OSError):
            aside.write_text(text, encoding="utf-8")
            aside.replace(self._prompt)

    def poll(self) -> Answer | None:
        """Return the next whole line, or None."""
        if not self._lines and self._size() != self._offset:
            self._read()
        if not self._lines:
            return None
        return Answer(text=self._lines.pop(0), who=f"{user_name()}, in {self._path.name}")

    def done(self) -> None:
        """Remove the prompt."""
        with contextlib.suppress(OSError):
            self._prompt.unlink(missing_ok=True)

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
                self._lines += [line.strip() for line in text.split("\n")]


class PointAnswers:
    """A point that a peer writes: another value than at the prompt says that it is done.

    Parameters
    ----------
    session : Session
        Knows what was written last.
    point : str
        Name of the point.
    """

    def __init__(self, session: Session, point: str) -> None:
        self._session = session
        self._point = point
        self._before: float | None = None
        self.how = f"change {point} over a link when it is done"

    def ask(self, ask: Ask) -> None:
        """Note what stands there now."""
        self._before = self._value()

    def poll(self) -> Answer | None:
        """Return an answer once the value has changed, or None."""
        value = self._value()
        if value is None or value == self._before:
            return None
        self._before = value
        contact = self._session.last_writer.get(self._point)
        return Answer(text="", who=contact.peer if contact else self._point)

    def done(self) -> None:
        """Do nothing."""

    def _value(self) -> float | None:
        written = self._session.read_backs.get(self._point)
        return None if written is None else written.value


class AnyAnswers:
    """Several places at once; the first to answer counts.

    Parameters
    ----------
    places : sequence of Answers
        The places.
    """

    def __init__(self, places: Sequence[Answers]) -> None:
        self._places = tuple(places)

    @property
    def how(self) -> str:
        """Return every way to answer."""
        return ", or ".join(place.how for place in self._places if place.how)

    def ask(self, ask: Ask) -> None:
        """Show the prompt everywhere."""
        for place in self._places:
            place.ask(ask)

    def poll(self) -> Answer | None:
        """Return the first answer, or None."""
        for place in self._places:
            answer = place.poll()
            if answer is not None:
                return answer
        return None

    def done(self) -> None:
        """Take the prompt away everywhere."""
        for place in self._places:
            place.done()
