"""Fits beside the ticks, in a process of their own."""

from __future__ import annotations

import importlib
import multiprocessing
import signal
from typing import TYPE_CHECKING, Any, Self

from harness.errors import InvalidRunError
from harness.recording.children import interrupts_blocked

if TYPE_CHECKING:
    from multiprocessing.connection import Connection

    from harness.runtime.requests import Compute

_STARTING = 60.0  # a cold import of the fit's libraries from a slow disk, with room [s]
_ENDING = 3.0  # for the process to end by itself once its pipe is closed [s]


class ProcessComputer:
    """Computes one thing at a time in another process; use it as a context.

    A pipe and no pool: the pipe ends with this process, however it ends, and the other with it.
    """

    def __init__(self) -> None:
        context = multiprocessing.get_context("spawn")
        self._pipe, self._theirs = context.Pipe()
        self._process = context.Process(
            target=_compute, args=(self._theirs,), name="fits", daemon=True
        )
        self._computing = False

    def begin(self, request: Compute) -> None:
        """Start a computation.

        Parameters
        ----------
        request : Compute
            Function and arguments.

        Raises
        ------
        InvalidRunError
            When the process is gone.
        """
        try:
            self._pipe.send((request.function, request.arguments))
        except OSError as error:
            raise self._gone() from error
        self._computing = True

    def result(self) -> tuple[bool, Any]:
        """Return whether the computation is done, and its result.

        Raises
        ------
        InvalidRunError
            When the process is gone; else what the computation raised.
        """
        if not self._computing:
            return False, None
        try:
            if not self._pipe.poll(0):
                return False, None
            raised, result = self._pipe.recv()
        except (EOFError, OSError) as error:
            raise self._gone() from error
        self._computing = False
        if raised:
            raise result
        return True, result

    def wait_until_warm(self) -> None:
        """Wait until the process stands by.

        Raises
        ------
        InvalidRunError
            When it does not come up.
        """
        try:
            if not self._pipe.poll(_STARTING):
                raise InvalidRunError(
                    f"fits: their process did not start within {_STARTING:g} s; is the machine "
                    "very busy? Close what else runs on it"
                )
            self._pipe.recv()
        except (EOFError, OSError) as error:
            raise self._gone() from error

    def __enter__(self) -> Self:
        with interrupts_blocked():
            self._process.start()
        self._theirs.close()
        return self

    def __exit__(self, *_: object) -> None:
        self._pipe.close()
        if self._computing:
            self._process.kill()  # nobody waits for the result any more
        self._process.join(_ENDING)
        if self._process.is_alive():
            self._process.kill()
            self._process.join()

    def _gone(self) -> InvalidRunError:
        self._process.join(_ENDING)
        return InvalidRunError(
            f"fits: their process ended by itself with code {self._process.exitcode}; was it "
            "killed, or is memory short? What was recorded until now is kept; run again"
        )


def _compute(pipe: Connection) -> None:
    """Answer requests until the pipe ends; the body of the process."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    if hasattr(signal, "SIGBREAK"):
        signal.signal(signal.SIGBREAK, signal.SIG_IGN)
    # The first fit pays for its imports here, while nothing waits for it.
    importlib.import_module("harness.tuning.identification")
    try:
        pipe.send("warm")
        while True:
            function, arguments = pipe.recv()
            pipe.send(_answer(function, arguments))
    except (EOFError, OSError):
        return  # whoever asked is gone


def _answer(function: Any, arguments: tuple[Any, ...]) -> tuple[bool, Any]:
    """Return whether the function raised, and its result or its exception."""
    try:
        return False, function(*arguments)
    except Exception as error:  # noqa: BLE001  raised again where the result is asked for
        return True, error
