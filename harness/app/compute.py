"""Fits beside the ticks, in a process of their own."""

from __future__ import annotations

import importlib
import multiprocessing
import signal
from concurrent.futures import Future, ProcessPoolExecutor
from typing import TYPE_CHECKING, Any, Self

if TYPE_CHECKING:
    from harness.runtime.requests import Compute


class ProcessComputer:
    """Computes one thing at a time in another process; use it as a context."""

    def __init__(self) -> None:
        self._executor = ProcessPoolExecutor(
            max_workers=1,
            mp_context=multiprocessing.get_context("spawn"),
            initializer=_ignore_interrupts,
        )
        self._running: Future[Any] | None = None
        # The first call pays for the imports of the fit, while nothing waits for it.
        self._warm = self._executor.submit(_warm_up)

    def begin(self, request: Compute) -> None:
        """Start a computation.

        Parameters
        ----------
        request : Compute
            Function and arguments.
        """
        self._running = self._executor.submit(request.function, *request.arguments)

    def result(self) -> tuple[bool, Any]:
        """Return whether the computation is done, and its result; raises what it raised."""
        if self._running is None or not self._running.done():
            return False, None
        running, self._running = self._running, None
        return True, running.result()

    def wait_until_warm(self) -> None:
        """Wait until the process stands by."""
        self._warm.result()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self._executor.shutdown(wait=True, cancel_futures=True)


def _ignore_interrupts() -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)


def _warm_up() -> str:
    """Import what the first fit needs, while nothing waits for it."""
    return importlib.import_module("harness.tuning.identification").__name__
