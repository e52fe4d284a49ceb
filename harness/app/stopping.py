"""Ctrl-C, a terminal that closes, and the system's request to end, taken between two ticks."""

from __future__ import annotations

import signal
import threading
from typing import TYPE_CHECKING, Any, Self

if TYPE_CHECKING:
    from collections.abc import Callable

_SIGNALS = ("SIGINT", "SIGTERM", "SIGBREAK", "SIGHUP")  # the last two not on every system


class StopRequest:
    """Holds a request to stop until the run looks at it; use it as a context.

    Raised at once, it could fall into the middle of a tick or of a message, and the record would
    lose or repeat what was under way. Before `defer` the request is raised at once, for nothing
    is under way yet; after it the first is kept, and only a second is raised.
    """

    def __init__(self) -> None:
        self._asked = False
        self._on_stop: Callable[[], None] | None = None
        self._before: list[tuple[int, Any]] = []

    def asked(self) -> bool:
        """Return whether a stop was asked for."""
        return self._asked

    def defer(self, on_stop: Callable[[], None]) -> None:
        """Keep the first request from now on.

        Parameters
        ----------
        on_stop : callable
            Called once when it comes, in the signal's handler: ends a wait.
        """
        self._on_stop = on_stop

    def __enter__(self) -> Self:
        if threading.current_thread() is threading.main_thread():  # others may not ask for it
            numbers = [getattr(signal, name) for name in _SIGNALS if _is_open_to(name)]
            self._before = [(number, signal.signal(number, self._take)) for number in numbers]
        return self

    def __exit__(self, *_: object) -> None:
        for number, handler in self._before:
            signal.signal(number, handler)
        self._before = []

    def _take(self, *_: object) -> None:
        if self._on_stop is None or self._asked:
            raise KeyboardInterrupt
        self._asked = True
        self._on_stop()


def _is_open_to(name: str) -> bool:
    """Return whether a signal is there; whoever started us with nohup(1) wants no end by SIGHUP."""
    number = getattr(signal, name, None)
    ignored = number is not None and signal.getsignal(number) is signal.SIG_IGN
    return number is not None and not (ignored and name == "SIGHUP")
