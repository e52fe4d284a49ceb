"""The three ways of an order behind one port: over the link, by prompt, by a Python function."""

from __future__ import annotations

import threading
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

from harness.domain.orders import OrderBy
from harness.domain.points import shown_range
from harness.domain.run import EventKind
from harness.errors import InvalidRunError
from harness.runtime.answers import Ask, user_name
from harness.runtime.order_evidence import Evidence
from harness.runtime.order_words import as_typed, instruction, order_facts, ordered

if TYPE_CHECKING:
    from collections.abc import Callable

    from harness.domain.rig import Loop
    from harness.runtime.answers import Answers
    from harness.runtime.order_words import Order
    from harness.runtime.session import Session

_YES = ("", "done", "ok", "y", "yes")
_NO = ("no", "cannot", "stop")


@dataclass(frozen=True, slots=True, kw_only=True)
class Known:
    """How a part of an order came to be known."""

    who: str
    evidence: str


class OrderTaker(Protocol):
    """Takes one part of an order to a loop's controller."""

    def begin(self, order: Order, loop: Loop) -> Order:
        """Start, and return the order as the controller will have it."""
        ...

    def known(self) -> Known | None:
        """Return how the controller is known to have it, or None for not yet.

        Raises ``InvalidRunError`` when it never will.
        """
        ...

    def overdue(self, waited: float) -> str | None:
        """Return why it has taken too long [wall s], or None."""
        ...

    def end(self) -> None:
        """Clean up, however it ended."""
        ...


class LinkTaker:
    """Shows the order on the link; it is known once the controller acts on what it read since.

    Parameters
    ----------
    session : Session
        The session.
    wait : float
        Longest wait [wall s].
    """

    def __init__(self, session: Session, wait: float) -> None:
        self._session = session
        self._wait = wait
        self._loop: Loop | None = None
        self._tick = -1

    def begin(self, order: Order, loop: Loop) -> Order:
        """Order it."""
        self._loop = loop
        self._tick = self._session.order(loop, **ordered(order))
        return order

    def known(self) -> Known | None:
        """Return whether the controller acts on what it has read since the order."""
        if self._loop is None or not self._session.knows(self._loop, self._tick):
            return None
        return Known(who="", evidence="read over the link")

    def overdue(self, waited: float) -> str | None:
        """Return why the controller does not read.

        Parameters
        ----------
        waited : float
            Time since it began [wall s].
        """
        if waited <= self._wait or self._loop is None:
            return None
        return (
            f"loop {self._loop.tag}: the controller wrote {self._loop.output} without having read "
            f"the rig since the order of tick {self._tick}, for {self._wait:g} s; have it read "
            "setpoint, mode, manual output and settings in every scan, on the connection that it "
            "writes on"
        )

    def end(self) -> None:
        """Do nothing."""


class PromptTaker:
    """Has somebody type it in; it is known once the data show it, or somebody says so.

    Parameters
    ----------
    session : Session
        The session, which shows the prompt.
    answers : Answers
        Where answers come from.
    timeout : float
        Longest wait [wall s].
    """

    def __init__(self, session: Session, answers: Answers, timeout: float) -> None:
        self._session = session
        self._answers = answers
        self._timeout = timeout
        self._number = 0
        self._text = ""
        self._said: str | None = None
        self._evidence: Evidence | None = None
        self._doubted = False

    def begin(self, order: Order, loop: Loop) -> Order:
        """Ask for it."""
        session = self._session
        measured = shown_range(session.rig.transmitter(loop.process_variable))
        typed = as_typed(order, loop, measured)
        self._evidence = evidence = Evidence(session, typed, loop)
        self._said, self._doubted = None, False
        if all(evidence.look().values()):
            return typed  # the data show it before anybody has to be asked
        self._number += 1
        self._text = instruction(typed, loop, measured)
        how = self._answers.how
        if not evidence.complete() and not how:
            raise InvalidRunError(
                f"{self._text}: nobody can say here that it is done, and the controller writes no "
                "read-back that shows it; run in a terminal, give --answers FILE, or have the "
                f"controller write {' and '.join(evidence.places())}"
            )
        hint = f"; {how}"
        if evidence.complete():
            hint = "; it is seen in the data, nothing to confirm"
        elif evidence.shows_a_jump:
            hint += ", unless the output has shown it by then"
        session.prompt = f"{self._text}{hint}"
        facts = order_facts(typed)
        session.event(EventKind.PROMPT, loop.tag, session.prompt, facts)
        self._answers.ask(Ask(number=self._number, loop=loop.tag, text=self._text, facts=facts))
        return typed

    def known(self) -> Known | None:
        """Return how it is known: from the data alone, or from somebody whom they do not belie."""
        if self._evidence is None:
            return None
        self._take_answer()
        seen = self._evidence.look()
        if all(seen.values()):
            return self._take(Known(who=user_name(), evidence=self._evidence.words))
        if self._said is None:
            return None
        belied = [kind for kind, sight in seen.items() if sight is False]
        if not belied:
            return self._take(Known(who=self._said, evidence="confirmed"))
        if not self._doubted:
            self._doubted = True
            self._session.event(
                EventKind.NOTE,
                self._evidence.loop.tag,
                f"said to be done, but the data do not show it yet: {self._evidence.found(belied)}",
            )
        return None

    def overdue(self, waited: float) -> str | None:
        """Return that nobody has done it in time, and what the data show.

        Parameters
        ----------
        waited : float
            Time since it began [wall s].
        """
        if waited <= self._timeout or self._evidence is None:
            return None
        seen = self._evidence.look()
        missing = [kind for kind, sight in seen.items() if sight is False]
        found = f"; the data show {self._evidence.found(missing)}" if missing else ""
        said = (
            "nobody said that it was done" if self._said is None else "it was said to be done"
        )
        return (
            f"{self._text}: {said}, within {self._timeout:g} s{found}. Take up the run again with "
            "--resume, and give more time with --order-timeout"
        )

    def end(self) -> None:
        """Take the prompt away."""
        self._session.prompt = ""
        self._answers.done()
        self._evidence = None

    def _take(self, known: Known) -> Known:
        if self._evidence is not None:
            order = self._evidence.order
            how = {"by": OrderBy.PROMPT.value, "who": known.who, "evidence": known.evidence}
            self._session.order(self._evidence.loop, **ordered(order), how=how)
        return known

    def _take_answer(self) -> None:
        answer = self._answers.poll()
        if answer is None:
            return
        word = answer.text.split(maxsplit=1)[0].lower().rstrip(":,;.") if answer.text else ""
        if answer.text.lower() in _YES:
            self._said = answer.who
        elif word in _NO:
            raise InvalidRunError(
                f"{self._text}: {answer.who} answered {answer.text!r}; nothing can be judged. "
                "Take up the run again with --resume"
            )
        else:
            self._session.event(
                EventKind.NOTE,
                "answers",
                f"{answer.text!r} was not understood; done (or Enter), or no and why",
            )


class CallableTaker:
    """Has a Python function carry it out, beside the ticks.

    Parameters
    ----------
    session : Session
        The session.
    function : callable
        Takes the `Order`, returns when the controller has it: a text for the record, or None.
    timeout : float
        Longest wait [wall s].
    """

    def __init__(
        self, session: Session, function: Callable[[Order], object], timeout: float
    ) -> None:
        self._session = session
        self._function = function
        self._timeout = timeout
        self._order: Order | None = None
        self._loop: Loop | None = None
        self._thread: threading.Thread | None = None
        self._result: list[tuple[bool, object]] = []

    def begin(self, order: Order, loop: Loop) -> Order:
        """Start the function in a thread."""
        measured = shown_range(self._session.rig.transmitter(loop.process_variable))
        typed = as_typed(order, loop, measured)
        self._order, self._loop = typed, loop
        result: list[tuple[bool, object]] = []
        self._result = result

        def carry_out() -> None:
            try:
                result.append((True, self._function(typed)))
            except Exception as error:  # noqa: BLE001  told as why the run cannot be judged
                result.append((False, error))

        self._thread = threading.Thread(target=carry_out, name="order", daemon=True)
        self._thread.start()
        return typed

    def known(self) -> Known | None:
        """Return that the function has returned.

        Raises
        ------
        InvalidRunError
            When it raised.
        """
        if not self._result or self._order is None or self._loop is None:
            return None
        sound, result = self._result[0]
        if not sound:
            raise InvalidRunError(
                f"loop {self._loop.tag}: the function {self._loop.orders.function} failed to carry "
                f"out the order: {result!r}"
            )
        known = Known(who=self._loop.orders.function, evidence=str(result or "returned"))
        how = {"by": OrderBy.CALLABLE.value, "who": known.who, "evidence": known.evidence}
        self._session.order(self._loop, **ordered(self._order), how=how)
        return known

    def overdue(self, waited: float) -> str | None:
        """Return that the function has not returned.

        Parameters
        ----------
        waited : float
            Time since it began [wall s].
        """
        if waited <= self._timeout or self._loop is None:
            return None
        return (
            f"loop {self._loop.tag}: the function {self._loop.orders.function} has not returned "
            f"within {self._timeout:g} s; give it longer with --order-timeout"
        )

    def end(self) -> None:
        """Leave the thread alone; it cannot be stopped, and ends with the program."""
        self._order = None
