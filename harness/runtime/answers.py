"""Where the answer to a prompt comes from: a terminal, a file, a point of the rig, or a test."""

from __future__ import annotations

import contextlib
import getpass
import json
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

from harness.runtime.lines import AppendedLines, TypedLines

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from harness.runtime.session import Session


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
    """Lines typed into a terminal; the view shows the prompt.

    Parameters
    ----------
    descriptor : int
        File descriptor to read; 0 is the standard input [-].
    """

    how = "press Enter here when it is done"

    def __init__(self, descriptor: int = 0) -> None:
        self._lines = TypedLines(descriptor)

    def ask(self, ask: Ask) -> None:
        """Forget what was typed before."""
        self._lines.skip()

    def poll(self) -> Answer | None:
        """Return the next line, or None."""
        line = self._lines.next()
        return None if line is None else Answer(text=line, who=user_name())

    def done(self) -> None:
        """Do nothing: the view takes the prompt away."""


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
        self._lines = AppendedLines(path)
        self._name = path.name
        self._prompt = path.with_name(path.name + ".prompt.json")
        self.how = f'append a line "done" to {path} when it is done'
        self.done()

    def ask(self, ask: Ask) -> None:
        """Write the prompt, and skip what stands in the file."""
        self._lines.skip()
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
        line = self._lines.next()
        return (
            None if line is None else Answer(text=line, who=f"{user_name()}, in {self._name}")
        )

    def done(self) -> None:
        """Remove the prompt."""
        with contextlib.suppress(OSError):
            self._prompt.unlink(missing_ok=True)


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
