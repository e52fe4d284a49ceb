"""A running trial as a view sees it, and the process that draws it."""

from __future__ import annotations

import math
import multiprocessing
import signal
import sys
import threading
import time
from collections import deque
from typing import TYPE_CHECKING, Protocol, Self

from harness.domain.points import manual_output_point, mode_point, setpoint_point
from harness.domain.run import EventKind
from harness.domain.signals import Quality
from harness.domain.trial import Mode
from harness.recording.children import interrupts_blocked
from harness.reporting.terminal import make_console, make_view
from harness.reporting.view_state import (
    EventLine,
    LoopView,
    PhaseState,
    PhaseView,
    ViewState,
)
from harness.reporting.words import duration, event_text

if TYPE_CHECKING:
    from multiprocessing.connection import Connection

    from rich.console import Console

    from harness.app.forecast import Forecast
    from harness.domain.run import Event
    from harness.domain.trial import Trial
    from harness.runtime.session import Session

_TREND = 240  # values of the trend: two to a character of a wide terminal [-]
_TREND_PHASES = 2.0  # how much a trend covers, in longest phases [-]
_USUAL_PHASE = 600.0  # where nothing is known of the phases [s]
_EVENTS = 200  # events kept for the view [-]
_OF_PHASE = (EventKind.PHASE_STARTED, EventKind.PHASE_ENDED)
_QUIET = (EventKind.ORDER, EventKind.ORDER_KNOWN)  # too many for a view; the record has them
_LAST_FRAME = 3.0  # longest wait for the last frame [s]


class ViewPort(Protocol):
    """Where states go."""

    def show(self, state: ViewState) -> None:
        """Show a state some time soon; a later one may replace it."""
        ...


class TrialView:
    """Gathers what a view shows of a trial.

    Parameters
    ----------
    port : ViewPort
        Where states go.
    rig_name : str
        Name of the rig.
    trial : Trial
        The trial.
    expected : Forecast
        Expected durations.
    """

    def __init__(self, port: ViewPort, rig_name: str, trial: Trial, expected: Forecast) -> None:
        self._port = port
        self._rig_name = rig_name
        self._trial = trial
        self._expected = {name: plan.duration for name, plan in expected.phases.items()}
        self._transfer = expected.transfer
        self._started: dict[str, int] = {}
        self._ended: dict[str, tuple[int, bool]] = {}
        self._events: deque[tuple[int, str, bool]] = deque(maxlen=_EVENTS)
        self._dropped = 0
        longest = max(self._expected.values(), default=0.0) or _USUAL_PHASE
        self._trends = {
            phase.loop: _Trend(_TREND_PHASES * longest / _TREND) for phase in trial.phases
        }

    def take_event(self, event: Event) -> None:
        """Take an event.

        Parameters
        ----------
        event : Event
            The event.
        """
        if event.kind is EventKind.PHASE_STARTED:
            self._started[event.subject] = event.tick
            self._expected[event.subject] = float(str(event.data.get("expected", 0.0)))
        elif event.kind is EventKind.PHASE_ENDED:
            self._ended[event.subject] = (event.tick, bool(event.data.get("steady")))
        if event.kind not in _QUIET:
            self._dropped += len(self._events) == _EVENTS
            self._events.append((event.tick, _event_words(event), event.kind in _OF_PHASE))

    def look(self, session: Session) -> None:
        """Show the present state.

        Parameters
        ----------
        session : Session
            The session.
        """
        tick = session.rig.tick
        self._port.show(
            ViewState(
                rig=self._rig_name,
                trial=self._trial.name,
                pace=session.pace,
                elapsed=session.time,
                expected=session.time + self._remaining(session),
                phases=tuple(self._phase(phase.name, session) for phase in self._trial.phases),
                loops=tuple(self._loop(tag, session) for tag in self._trends),
                events=tuple(
                    EventLine(time=at * tick, text=text, of_phase=of_phase)
                    for at, text, of_phase in self._events
                ),
                events_before=self._dropped,
                prompt=session.prompt,
            )
        )

    def _remaining(self, session: Session) -> float:
        """Return how long the phases that are not over should still take [s]."""
        left = 0.0
        for phase in self._trial.phases:
            if phase.name not in self._ended:
                view = self._phase(phase.name, session)
                left += max(0.0, view.expected - view.elapsed)
        automatic = [
            p.name in self._started for p in self._trial.phases if p.mode is Mode.AUTOMATIC
        ]
        return left if any(automatic) else left + self._transfer

    def _phase(self, name: str, session: Session) -> PhaseView:
        state, elapsed = PhaseState.WAITING, 0.0
        if name in self._ended:
            end, steady = self._ended[name]
            state = PhaseState.DONE if steady else PhaseState.INVALID
            elapsed = (end - self._started[name]) * session.rig.tick
        elif name in self._started:
            state = PhaseState.RUNNING
            elapsed = session.time - self._started[name] * session.rig.tick
        return PhaseView(
            name=name, state=state, elapsed=elapsed, expected=self._expected.get(name, 0.0)
        )

    def _loop(self, tag: str, session: Session) -> LoopView:
        loop = session.rig.loop(tag)
        image = session.image()
        point, value, _, quality = image[loop.process_variable]
        setpoint = image[setpoint_point(tag)][1]
        automatic = image[mode_point(tag)][1] > 0.0
        trend = self._trends[tag]
        trend.take(session.time, setpoint, value)
        output = session.engine.output(loop.output)
        if not automatic and not session.external:
            output = image[manual_output_point(tag)][1] / 100.0
        return LoopView(
            tag=tag,
            unit=point.range.unit,
            setpoint=setpoint,
            process_variable=value,
            output=output,
            load=session.engine.output(loop.load),
            mode="automatic" if automatic else "manual",
            quality=Quality(int(quality)),
            recent_setpoint=tuple(trend.setpoints),
            recent_process_variable=tuple(trend.values),
            recent_span=trend.spacing * _TREND,
        )


class _Trend:
    """Setpoint and process variable at equal distances of plant time, the latest of them."""

    def __init__(self, spacing: float) -> None:
        self.spacing = spacing
        # Filled with gaps from the start, so that the scale of time never changes.
        self.setpoints = deque([math.nan] * _TREND, maxlen=_TREND)
        self.values = deque([math.nan] * _TREND, maxlen=_TREND)
        self._next = 0.0

    def take(self, time: float, setpoint: float, value: float) -> None:
        """Take the values of a moment; they stand for every distance since the last."""
        while time >= self._next:
            self.setpoints.append(setpoint)
            self.values.append(value)
            self._next += self.spacing


def _event_words(event: Event) -> str:
    """Return an event in one line: who, what kind, and its text."""
    if event.kind in _OF_PHASE:
        words = f"{event.subject}: {event.text}"
        expected = float(str(event.data.get("expected", 0.0)))
        return f"{words}, about {duration(expected)}" if expected > 0.0 else words
    return event_text(event.subject, event.kind.value, event.text)


class DirectView:
    """A view in this process, for virtual time, where drawing holds nobody up.

    Parameters
    ----------
    to_stderr : bool
        Whether standard output is kept free for a document.
    """

    def __init__(self, *, to_stderr: bool) -> None:
        self._view = make_view(_console(to_stderr=to_stderr), time.perf_counter_ns)
        self._last: ViewState | None = None

    def show(self, state: ViewState) -> None:
        """Show a state when one is due."""
        self._last = state
        if self._view.due():
            self._view.show(state)

    def __enter__(self) -> Self:
        self._view.__enter__()
        return self

    def __exit__(self, *_: object) -> None:
        if self._last is not None:
            self._view.show(self._last)
        self._view.__exit__(None, None, None)


class ViewProcess:
    """A view in a process of its own, so that no tick waits for a frame.

    Parameters
    ----------
    to_stderr : bool
        Whether standard output is kept free for a document.
    """

    def __init__(self, *, to_stderr: bool) -> None:
        context = multiprocessing.get_context("spawn")
        receiver, self._pipe = context.Pipe(duplex=False)
        self._process = context.Process(
            target=_draw, args=(receiver, to_stderr), name="view", daemon=True
        )
        self._receiver = receiver
        self._latest: ViewState | None = None
        self._changed = threading.Condition()
        self._closed = False
        self._sender = threading.Thread(target=self._send, name="view sender", daemon=True)

    def show(self, state: ViewState) -> None:
        """Have a state drawn; one that comes before the last was sent replaces it."""
        with self._changed:
            self._latest = state
            self._changed.notify()

    def __enter__(self) -> Self:
        with interrupts_blocked():
            self._process.start()
        self._receiver.close()
        self._sender.start()
        return self

    def __exit__(self, *_: object) -> None:
        with self._changed:
            self._closed = True
            self._changed.notify()
        self._sender.join(_LAST_FRAME)
        self._pipe.close()
        self._process.join(_LAST_FRAME)
        if self._process.is_alive():
            self._process.kill()
            self._process.join()

    def _send(self) -> None:
        while True:
            with self._changed:
                self._changed.wait_for(lambda: self._latest is not None or self._closed)
                state, self._latest = self._latest, None
            if state is None:
                return
            try:
                self._pipe.send(state)
            except OSError:
                return  # the view has gone; the run goes on without it


def _draw(receiver: Connection, to_stderr: bool) -> None:
    """Draw what comes up the pipe until it closes; the body of the view's process."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    with make_view(_console(to_stderr=to_stderr), time.perf_counter_ns) as view:
        while True:
            try:
                view.show(receiver.recv())
            except EOFError:
                return


def _console(*, to_stderr: bool) -> Console:
    return make_console(sys.stderr if to_stderr else None)
