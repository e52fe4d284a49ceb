"""Orders to a controller, whichever way they go, and since when it is known to have them.

Whichever way, plant time goes on: nothing here waits but by letting ticks pass.
"""

from __future__ import annotations

import importlib
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from harness.domain.orders import OrderBy
from harness.domain.run import EventKind
from harness.errors import InvalidRunError, ModelError, UsageError
from harness.runtime.order_takers import CallableTaker, Known, LinkTaker, PromptTaker
from harness.runtime.order_words import Order, ordered, parts_by_way
from harness.runtime.requests import Advance
from harness.runtime.session import require_controllers

if TYPE_CHECKING:
    from collections.abc import Callable, Generator

    import numpy as np
    from numpy.typing import NDArray

    from harness.domain.rig import Loop
    from harness.runtime.answers import Answers
    from harness.runtime.order_takers import OrderTaker
    from harness.runtime.requests import Request
    from harness.runtime.session import Session

    Floats = NDArray[np.float64]

ORDER_TIMEOUT = 300.0  # for somebody to walk to the controller and type [wall s]


@dataclass(frozen=True, slots=True, kw_only=True)
class Taken:
    """An order that the controller is known to have.

    Parameters
    ----------
    order : Order
        As the controller has it, after rounding.
    asked : int
        Tick at which it was given [ticks].
    by : OrderBy
        The way of its last part.
    who : str
        Who carried it out; empty over the link.
    evidence : str
        What it is known from.
    rows : list of ndarray, shape (n, n_columns)
        The rows until then [unit of the column].
    """

    order: Order
    asked: int
    by: OrderBy = OrderBy.LINK
    who: str = ""
    evidence: str = ""
    rows: list[Floats] = field(default_factory=list)

    @property
    def facts(self) -> dict[str, object]:
        """Return what an event tells of it."""
        facts: dict[str, object] = {"order": self.asked, "by": self.by.value}
        if self.by is not OrderBy.LINK:
            facts |= {"who": self.who, "evidence": self.evidence}
        return facts


class OrderDesk:
    """Gives orders the way that each loop says.

    Parameters
    ----------
    session : Session
        The session. Without a controller outside every order goes to the built-in block.
    answers : Answers
        Where answers to prompts come from.
    wait : float
        Longest wait for a controller to read an order [wall s].
    timeout : float
        Longest wait for an order by prompt or callable [wall s].
    """

    def __init__(
        self,
        session: Session,
        answers: Answers,
        wait: float,
        timeout: float = ORDER_TIMEOUT,
    ) -> None:
        self._session = session
        self._timeout = timeout
        self._link = LinkTaker(session, wait)
        self._prompt = PromptTaker(session, answers, timeout)

    def give(self, order: Order) -> Generator[Request, Any, Taken]:
        """Give an order, and let time pass until the controller is known to have it.

        Parameters
        ----------
        order : Order
            The order.

        Yields
        ------
        Request
            Time to pass.

        Returns
        -------
        Taken
            The order as the controller has it.

        Raises
        ------
        InvalidRunError
            When it takes too long, is refused, or the controller falls silent.
        """
        session = self._session
        loop = session.rig.loop(order.loop)
        asked = session.tick
        parts = parts_by_way(order, loop) if session.external else ((OrderBy.LINK, order),)
        rows: list[Floats] = []
        changes: dict[str, Any] = {}
        way, known = OrderBy.LINK, Known(who="", evidence="")
        for way, part in parts:
            taker = self._taker(way, loop)
            try:
                try:
                    typed = taker.begin(part, loop)
                except ModelError as error:
                    raise InvalidRunError(f"loop {loop.tag}: {error}") from error
                known = yield from self._until_known(taker, rows)
            finally:
                taker.end()
            changes |= ordered(typed) | ({"typed": typed.typed} if typed.typed else {})
        taken = Taken(
            order=Order(loop=order.loop, **changes),
            asked=asked,
            by=way,
            who=known.who,
            evidence=known.evidence,
            rows=rows,
        )
        if way is not OrderBy.LINK:
            after = (session.tick - asked) * session.rig.tick
            text = f"{known.evidence} after {after:.3g} s, by {known.who}"
            session.event(EventKind.ORDER_KNOWN, order.loop, text, taken.facts)
        return taken

    def _until_known(
        self, taker: OrderTaker, rows: list[Floats]
    ) -> Generator[Request, Any, Known]:
        session, ticks = self._session, 0
        while (known := taker.known()) is None:
            # Virtual time has no wall; nobody outside takes part in it.
            late = taker.overdue(ticks * session.rig.tick / max(session.pace, 1e-9))
            if late is not None:
                raise InvalidRunError(late)
            rows.append((yield Advance(ticks=1)))
            ticks += 1
            require_controllers(session)
        return known

    def _taker(self, way: OrderBy, loop: Loop) -> OrderTaker:
        match way:
            case OrderBy.LINK:
                return self._link
            case OrderBy.PROMPT:
                return self._prompt
            case OrderBy.CALLABLE:
                function = load_function(loop.orders.function)
                return CallableTaker(self._session, function, self._timeout)


def load_function(name: str) -> Callable[[Order], object]:
    """Return the function of a name.

    Parameters
    ----------
    name : str
        ``"module:name"``.

    Raises
    ------
    UsageError
        When there is none.
    """
    module, _, attribute = name.partition(":")
    try:
        function = getattr(importlib.import_module(module), attribute)
    except (ImportError, AttributeError) as error:
        raise UsageError(
            f'orders: the function "{name}" is not there: {error}; write it as "module:name", with '
            "the module where Python finds it"
        ) from error
    if not callable(function):
        raise UsageError(f'orders: "{name}" is no function but {function!r}')
    found: Callable[[Order], object] = function
    return found
