"""Asks people what a controller shows, where it does not read back itself."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from harness.domain.run import EventKind
from harness.runtime.answers import Ask

if TYPE_CHECKING:
    from collections.abc import Generator

    from harness.runtime.answers import Answers
    from harness.runtime.requests import Request
    from harness.runtime.signal_probe import SignalProbe

ASK_TIMEOUT = 120.0  # for somebody to look and to type a number [wall s]
NO_VALUE = (
    "bad",
    "none",
    "nan",
    "fail",
    "---",
)  # what may be typed for a display without value
_SKIP = "skip"


@dataclass(slots=True)
class SignalDesk:
    """Asks what the controller shows for a tag.

    Parameters
    ----------
    probe : SignalProbe
        Of the loop.
    answers : Answers
        Where answers come from.
    timeout : float
        Longest wait for an answer [wall s].
    """

    probe: SignalProbe
    answers: Answers
    timeout: float = ASK_TIMEOUT
    _number: int = 0

    def ask(self, tag: str, unit: str) -> Generator[Request, Any, float | None]:
        """Ask for the value shown, while the plant goes on.

        The value forced is not told, so that nobody types what is expected.

        Parameters
        ----------
        tag : str
            Tag of the transmitter.
        unit : str
            Its unit.

        Returns
        -------
        float or None
            The value; not a number where the controller shows none; None without an answer
            [unit].
        """
        session = self.probe.session
        self._number += 1
        text = (
            f"type what the controller shows now for {tag}, in {unit}; "
            f'"{NO_VALUE[0]}" where it shows a failure, "{_SKIP}" to pass over it'
        )
        session.prompt = text
        facts: dict[str, object] = {"tag": tag, "unit": unit}
        session.event(EventKind.PROMPT, tag, text, facts)
        ask = Ask(number=self._number, loop=self.probe.loop.tag, text=text, facts=facts)
        self.answers.ask(ask)
        try:
            return (yield from self._answer())
        finally:
            self.answers.done()
            session.prompt = ""

    def _answer(self) -> Generator[Request, Any, float | None]:
        session = self.probe.session
        span = self.probe.span(round(self.timeout * session.pace / session.rig.tick))
        while not span.over:
            answer = self.answers.poll()
            if answer is not None:
                understood, value = number_of(answer.text)
                if understood:
                    return value
                session.event(
                    EventKind.NOTE, "answer", f'"{answer.text}" is no number; type it again'
                )
            yield from self.probe.step()
        return None


def number_of(text: str) -> tuple[bool, float | None]:
    """Return whether a line was understood, and the value typed.

    Parameters
    ----------
    text : str
        The line; a comma may stand for the decimal point.

    Returns
    -------
    understood : bool
        Whether it is a number or one of the words.
    value : float or None
        The value; not a number where there is none; None to pass over it [unit].
    """
    word = text.strip().casefold()
    if word == _SKIP:
        return True, None
    if word in NO_VALUE:
        return True, math.nan
    try:
        value = float(word.replace(",", ".").split()[0])
    except (ValueError, IndexError):
        return False, None
    return math.isfinite(value), value
