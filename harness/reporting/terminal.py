"""A run seen from the terminal: a live view, and plain lines where output is piped."""

from __future__ import annotations

import os
import sys
from typing import TYPE_CHECKING, Protocol, Self, TextIO

from rich.console import Console
from rich.live import Live
from rich.text import Text

from harness.domain.signals import Quality
from harness.reporting.frame import event_words, frame, pace_words, time_words
from harness.reporting.words import duration

if TYPE_CHECKING:
    from collections.abc import Callable

    from harness.reporting.view_state import ViewState

FRAME_EVERY_NS = 250_000_000  # [ns]; a frame costs some 8 ms of processor, measured


class View(Protocol):
    """Shows a run while it lasts; use it as a context."""

    def due(self) -> bool:
        """Return whether it is time for a frame, so that no state is made in vain."""
        ...

    def show(self, state: ViewState) -> None:
        """Show a state, whether due or not."""
        ...

    def __enter__(self) -> Self: ...

    def __exit__(self, *_: object) -> None: ...


class LiveView:
    """Draws the run in place, four times a second at most; the last frame stays."""

    def __init__(self, console: Console, now_ns: Callable[[], int]) -> None:
        self._console = console
        self._pacing = _Pacing(now_ns)
        # No thread of its own: a frame is drawn when the caller has the time for it.
        self._live = Live(console=console, auto_refresh=False, transient=False)

    def due(self) -> bool:
        """Return whether a quarter of a second has passed since the last frame."""
        return self._pacing.due()

    def show(self, state: ViewState) -> None:
        """Draw a state, whether due or not."""
        self._pacing.mark()
        self._live.update(frame(state, self._console), refresh=True)

    def __enter__(self) -> Self:
        self._live.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._live.stop()


class PlainView:
    """Prints a line for each event, for logs and pipes; never two for one change."""

    def __init__(self, console: Console, now_ns: Callable[[], int]) -> None:
        self._console = console
        self._pacing = _Pacing(now_ns)
        self._started = False
        self._qualities: dict[str, Quality] = {}
        self._events = 0

    def due(self) -> bool:
        """Return whether a quarter of a second has passed since the last look."""
        return self._pacing.due()

    def show(self, state: ViewState) -> None:
        """Print what changed since the last state."""
        self._pacing.mark()
        if not self._started:
            self._started = True
            self._say(_head_words(state))
        for event in state.events[max(0, self._events - state.events_before) :]:
            self._say(event_words(event))
        self._events = state.events_before + len(state.events)
        for loop in state.loops:
            if self._qualities.get(loop.tag, Quality.GOOD) != loop.quality:
                self._qualities[loop.tag] = loop.quality
                quality = loop.quality.name.lower()
                self._say(f"[{duration(state.elapsed)}] {loop.tag}: process variable {quality}")

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        return

    def _say(self, words: str) -> None:
        self._console.print(Text(words), soft_wrap=True)


def make_console(stream: TextIO | None = None) -> Console:
    """Return a console that never falls over a character its stream cannot encode.

    Parameters
    ----------
    stream : text stream or None
        Where to write; None for standard output.
    """
    target = sys.stdout if stream is None else stream
    # A pipe on Windows may have a code page without signs as common as a minus.
    reconfigure = getattr(target, "reconfigure", None)
    if reconfigure is not None:
        reconfigure(errors="replace")
    return _Console(file=target, highlight=False)


def make_view(console: Console, now_ns: Callable[[], int]) -> View:
    """Return the live view for a terminal, plain lines for anything else.

    Parameters
    ----------
    console : Console
        Where to show.
    now_ns : callable
        Monotonic wall clock [ns].
    """
    return LiveView(console, now_ns) if console.is_terminal else PlainView(console, now_ns)


class _Console(Console):
    """A console whose reader may go: the rest is said to nobody, and the run goes on."""

    def on_broken_pipe(self) -> None:
        """Fall silent; the base class would end the program, as if the run had failed."""
        self.quiet = True
        # The interpreter flushes at its end, and would complain of the broken pipe there.
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, self.file.fileno())
        os.close(nowhere)


class _Pacing:
    """Says when the next frame is due."""

    def __init__(self, now_ns: Callable[[], int]) -> None:
        self._now_ns = now_ns
        self._last: int | None = None

    def due(self) -> bool:
        return self._last is None or self._now_ns() - self._last >= FRAME_EVERY_NS

    def mark(self) -> None:
        self._last = self._now_ns()


def _head_words(state: ViewState) -> str:
    words = f"{state.rig}, {state.trial or 'live session'}: {pace_words(state)}"
    return f"{words}, {time_words(state, at_start=True)}"
