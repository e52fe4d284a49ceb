"""A rig in motion for a person, a trial or a controller: the one place where ticks happen.

In virtual time the rows of many ticks come at once and nobody outside takes part. Paced, every
tick waits for its time, publishes the image of its sample, latches what the controller wrote,
and takes the row.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np

from harness.controllers.block import AUTOMATIC
from harness.domain.points import heartbeat_point, points_of, shown_range
from harness.domain.run import Event, EventKind
from harness.domain.signals import PointKind
from harness.errors import InvalidRunError
from harness.runtime.clock import NS_PER_S, TickSchedule
from harness.runtime.controller_watch import ControllerWatch
from harness.runtime.image_values import ImageValues
from harness.runtime.news import Contact, LinkEventKind
from harness.runtime.read_backs import ReadBack, read_back_of
from harness.runtime.requests import Advance

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

    from numpy.typing import NDArray

    from harness.domain.models import ControllerSettings
    from harness.domain.rig import Loop
    from harness.domain.signals import Exchange, Point
    from harness.engine.engine import Engine
    from harness.recording.port import RecordWriter
    from harness.runtime.clock import Clock
    from harness.runtime.link_process import LinkProcess
    from harness.runtime.news import LinkEvent, LinkNews
    from harness.runtime.requests import Compute, Request, Script

    Floats = NDArray[np.float64]

_LOOK_NS = 200_000_000  # between two calls of the watcher [ns]
_ROWS_KEPT = 256  # rows gathered before they go to the recorder [-]
_HAND_OVER_NS = 100_000_000  # longest time rows are kept back from the recorder [ns]


class Computer(Protocol):
    """Computes beside the ticks."""

    def begin(self, request: Compute) -> None:
        """Start a computation."""
        ...

    def result(self) -> tuple[bool, Any]:
        """Return whether it is done, and its result; raises what it raised."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class Pacing:
    """Real time, and who else takes part in it.

    Parameters
    ----------
    clock : Clock
        The clock.
    pace : float
        Plant seconds per second of the clock [-].
    links : LinkProcess or None
        Open links.
    computer : Computer
        Where fits are made.
    """

    clock: Clock
    pace: float
    links: LinkProcess | None
    computer: Computer


class Session:
    """Ticks, orders, events and the record of one run.

    Parameters
    ----------
    engine : Engine
        The rig.
    recorder : RecordWriter or None
        Where rows and events go.
    pacing : Pacing or None
        None for virtual time.
    external : bool
        Whether a controller outside closes the loops.
    on_event : callable or None
        Told every event.
    on_look : callable or None
        Called a few times a second of wall time, for a live view.
    stop_asked : callable or None
        Looked at before each tick; when it says so, the run ends with a KeyboardInterrupt there.
    """

    def __init__(
        self,
        engine: Engine,
        recorder: RecordWriter | None,
        pacing: Pacing | None,
        *,
        external: bool = False,
        on_event: Callable[[Event], None] | None = None,
        on_look: Callable[[Session], None] | None = None,
        stop_asked: Callable[[], bool] | None = None,
    ) -> None:
        self.engine = engine
        self.rig = engine.rig
        self.external = external
        self.points = points_of(engine.rig, external)
        self.refusals = 0
        self.last_refusal = ""
        self.connected: dict[tuple[str, int], str] = {}
        self.rows_taken = 0
        self.last_writer: dict[str, Contact] = {}
        self.last_reader: dict[str, Contact] = {}
        self.read_backs: dict[str, ReadBack] = {}
        self.losses: dict[str, str] = {}
        self.prompt = ""  # what somebody is asked to do now
        self._recorder = recorder
        self._pacing = pacing
        self._on_event = on_event
        self._on_look = on_look
        self._stop_asked = stop_asked
        self._image = ImageValues(engine, self.points)
        self._by_name = {point.name: point for point in self.points}
        pace = pacing.pace if pacing else 1.0
        self.watches = {loop.tag: ControllerWatch(loop, pace) for loop in engine.rig.loops}
        self._loop_of_output = {loop.output: loop for loop in engine.rig.loops}
        self._loop_of_heartbeat = {heartbeat_point(loop.tag): loop for loop in engine.rig.loops}
        self._schedule: TickSchedule | None = None
        self._kept: list[Floats] = []
        self._kept_lateness: list[float] = []
        self._kept_first = 0
        self._kept_since_ns = 0
        self._last_look_ns = 0
        self._last_tick_ns = 0
        self._usual_ns = round(engine.rig.tick / pace * NS_PER_S)

    @property
    def tick(self) -> int:
        """Return the present tick [ticks]."""
        return self.engine.tick

    @property
    def time(self) -> float:
        """Return the plant time [s]."""
        return self.engine.tick * self.rig.tick

    @property
    def pace(self) -> float:
        """Return the pace; 0 stands for virtual time [-]."""
        return self._pacing.pace if self._pacing else 0.0

    # Orders.

    def order(
        self,
        loop: Loop,
        *,
        setpoint: float | None = None,
        mode: int | None = None,
        manual_output: float | None = None,
        settings: ControllerSettings | None = None,
        how: Mapping[str, object] | None = None,
    ) -> int:
        """Give orders to a loop's controller, from the present tick on.

        Parameters
        ----------
        loop : Loop
            The loop.
        setpoint : float or None
            Setpoint in the unit shown [unit].
        mode : int or None
            MANUAL or AUTOMATIC [-].
        manual_output : float or None
            Output in manual [-].
        settings : ControllerSettings or None
            Settings.
        how : mapping or None
            How the controller came to have them, where it was not over the link.

        Returns
        -------
        int
            Tick of the order [ticks].
        """
        orders: dict[str, object] = {}
        if settings is not None:
            self.engine.set_settings(loop.tag, settings)
            orders |= {"gain": settings.gain, "integral_time": settings.integral_time}
        if setpoint is not None:
            self.engine.set_setpoint(loop.tag, setpoint)
            orders["setpoint"] = setpoint
        if manual_output is not None:
            self.engine.set_manual_output(loop.tag, manual_output)
            orders["manual_output"] = manual_output
        if mode is not None:
            self.engine.set_mode(loop.tag, mode)
            orders["mode"] = mode
        unit = shown_range(self.rig.transmitter(loop.process_variable)).unit
        text = ", ".join(_order_words(name, value, unit) for name, value in orders.items())
        self.event(EventKind.ORDER, loop.tag, text, orders | dict(how or {}))
        return self.tick

    def set_load(self, valve: str, output: float) -> int:
        """Set a valve that no controller moves, from the present tick on.

        Parameters
        ----------
        valve : str
            Tag of the valve.
        output : float
            Output [-].

        Returns
        -------
        int
            The tick [ticks].
        """
        self.engine.set_output(valve, output)
        self.event(
            EventKind.ORDER, valve, f"load output {100.0 * output:.4g} %", {"output": output}
        )
        return self.tick

    def knows(self, loop: Loop, order_tick: int) -> bool:
        """Return whether the controller is known to work on an order.

        Parameters
        ----------
        loop : Loop
            The loop.
        order_tick : int
            Tick of the order [ticks].
        """
        return not self.external or self.watches[loop.tag].read_tick >= order_tick

    def event(
        self, kind: EventKind, subject: str, text: str, data: Mapping[str, object] | None = None
    ) -> None:
        """Record an event at the present tick.

        Parameters
        ----------
        kind : EventKind
            Kind.
        subject : str
            Tag, phase, link or peer.
        text : str
            One line.
        data : mapping or None
            Facts for programs.
        """
        event = Event(
            tick=self.tick, kind=kind, subject=subject, text=text, data=dict(data or {})
        )
        if self._recorder is not None:
            self._recorder.event(event)
        if self._on_event is not None:
            self._on_event(event)

    # Time.

    def run(self, script: Script) -> None:
        """Carry out a script to its end.

        Parameters
        ----------
        script : Script
            Yields requests and takes their answers.

        Raises
        ------
        InvalidRunError
            When the run cannot be judged: controller silent, links gone.
        KeyboardInterrupt
            When a stop was asked for; the tick before it is whole.
        """
        answer: object = None
        try:
            while True:
                request = script.send(answer)
                answer = self._answer(request)
        except StopIteration:
            pass
        finally:
            self.hand_over()

    def advance(self, ticks: int) -> Floats:
        """Let plant time pass.

        Parameters
        ----------
        ticks : int
            How long [ticks].

        Returns
        -------
        ndarray, shape (ticks, n_columns)
            The rows, each number in its column's unit.
        """
        if self._pacing is None:
            self._heed_stop()
            first = self.tick
            rows = self.engine.record(ticks)
            self.rows_taken += ticks
            if self._recorder is not None:
                self._recorder.rows(0, first, rows, None)
            if self._on_look is not None:
                self._on_look(self)
            return rows
        rows = np.empty((ticks, len(self.engine.columns)))
        for i in range(ticks):
            rows[i] = self._paced_tick(self._pacing)
        return rows

    def hand_over(self) -> None:
        """Give all rows that were kept back to the recorder."""
        rows, lateness = self._kept, self._kept_lateness
        # Let go of first: should the recorder fail, they are not handed over a second time.
        self._kept, self._kept_lateness = [], []
        if rows and self._recorder is not None:
            self._recorder.rows(0, self._kept_first, np.array(rows), np.array(lateness))

    def image(self) -> dict[str, tuple[Point, float, float, float]]:
        """Return every point with its value, current and quality, for people to look at."""
        values, currents, qualities = self._image.take()
        return {
            point.name: (point, float(values[i]), float(currents[i]), float(qualities[i]))
            for i, point in enumerate(self.points)
        }

    def _answer(self, request: Request) -> object:
        if isinstance(request, Advance):
            return self.advance(request.ticks)
        if self._pacing is None:
            return request.function(*request.arguments)
        computer = self._pacing.computer
        computer.begin(request)
        while True:
            done, result = computer.result()
            if done:
                return result
            self.advance(1)

    def _paced_tick(self, pacing: Pacing) -> Floats:
        """Wait for the present tick, publish, latch, take the row and go on to the next."""
        tick = self.tick
        clock = pacing.clock
        if self._schedule is None:
            self._schedule = TickSchedule(
                start_ns=clock.now_ns(),
                period=self.rig.tick,
                pace=pacing.pace,
                first_tick=tick,
            )
        late_ns = clock.wait_until(self._schedule.deadline_ns(tick))
        self._heed_stop()
        if pacing.links is not None:
            pacing.links.publish(tick, *self._image.take())
            news = pacing.links.drain()
            if news:
                self._take_news(news)
        now_ns = clock.now_ns()
        self._forgive_stall(now_ns)
        self._watch_controllers(now_ns)
        row: Floats = self.engine.record(1)[0]
        self.rows_taken += 1
        self._keep(tick, row, max(0.0, late_ns / NS_PER_S), now_ns)
        if self._on_look is not None and now_ns - self._last_look_ns > _LOOK_NS:
            self._last_look_ns = now_ns
            self._on_look(self)
        return row

    def _forgive_stall(self, now_ns: int) -> None:
        """Keep time in which this process did not run from counting as the controller's silence.

        At a high pace a watchdog of plant seconds is a blink of wall time, and a busy machine can
        hold the rig itself up for longer than that.
        """
        stall_ns = now_ns - self._last_tick_ns - self._usual_ns
        if self._last_tick_ns and stall_ns > self._usual_ns:
            for watch in self.watches.values():
                watch.stood_still(stall_ns)
        self._last_tick_ns = now_ns

    def _heed_stop(self) -> None:
        if self._stop_asked is not None and self._stop_asked():
            raise KeyboardInterrupt

    def _keep(self, tick: int, row: Floats, lateness: float, now_ns: int) -> None:
        if self._recorder is None:
            return
        if not self._kept:
            self._kept_first = tick
            self._kept_since_ns = now_ns
        self._kept.append(row)
        self._kept_lateness.append(lateness)
        if len(self._kept) >= _ROWS_KEPT or now_ns - self._kept_since_ns > _HAND_OVER_NS:
            self.hand_over()

    # What comes over the links.

    def _take_news(self, news: LinkNews) -> None:
        taken: list[tuple[int, Exchange]] = []
        first = [event for event in news.events if event.kind is LinkEventKind.CONNECTED]
        for event in first:  # a peer is there before it writes, and in the record as well
            self._link_event(event)
        for request in news.writes:
            for exchange in request:
                taken.append((self.tick, exchange))
                self._latch(exchange)
        self.last_reader.update(news.readers)
        for activity in news.activity:
            for watch in self.watches.values():
                watch.active(activity)
        for event in news.events:
            if event.kind is not LinkEventKind.CONNECTED:
                self._link_event(event)
        if taken and self._recorder is not None:
            self._recorder.exchanges(taken)

    def _latch(self, exchange: Exchange) -> None:
        self.last_writer[exchange.point] = Contact(
            link=exchange.link, peer=exchange.peer, arrival_ns=exchange.arrival_ns
        )
        loop = self._loop_of_output.get(exchange.point)
        if loop is not None:
            watch = self.watches[loop.tag]
            before = watch.peer
            if watch.output_written(exchange):
                self.event(
                    EventKind.CONTROLLER_FOUND,
                    loop.tag,
                    f"{watch.peer} writes {loop.output}"
                    + (f", which {before} wrote before" if before else ""),
                    {"link": exchange.link, "peer": exchange.peer},
                )
            self.engine.set_output(loop.output, exchange.value / 100.0)
            return
        loop = self._loop_of_heartbeat.get(exchange.point)
        if loop is not None:
            self._image.heartbeats[exchange.point] = exchange.value
            self.watches[loop.tag].heartbeat_written(exchange)
            return
        point = self._by_name.get(exchange.point)
        if point is not None and point.kind is PointKind.READ_BACK:
            self.read_backs[exchange.point] = read_back_of(exchange, self.tick)
            if math.isfinite(exchange.value):  # no number: the last one stays in the image
                self._image.read_backs[exchange.point] = exchange.value

    def _link_event(self, event: LinkEvent) -> None:
        kinds = {
            LinkEventKind.CONNECTED: EventKind.PEER_CONNECTED,
            LinkEventKind.GONE: EventKind.PEER_GONE,
            LinkEventKind.REFUSED: EventKind.REFUSED,
        }
        times = f" ({event.count} times)" if event.count > 1 else ""
        text = f"{event.peer}: {event.text}{times}" if event.text else event.peer
        match event.kind:
            case LinkEventKind.REFUSED:
                self.refusals += event.count
                self.last_refusal = text
            case LinkEventKind.CONNECTED:
                self.connected[event.link, event.connection] = event.peer
            case LinkEventKind.GONE:
                self.connected.pop((event.link, event.connection), None)
        self.event(kinds[event.kind], event.link, text, {"connection": event.connection})

    def _watch_controllers(self, now_ns: int) -> None:
        for watch in self.watches.values():
            lost = watch.check(now_ns)
            if lost is not None:
                self._lose(watch.loop, lost)
            elif watch.silent and watch.came_back(now_ns):
                self.event(EventKind.CONTROLLER_BACK, watch.loop.tag, f"{watch.peer} is back")

    def _lose(self, loop: Loop, why: str) -> None:
        """Drive the valve of a lost controller to where the rig says, and record it."""
        valve = self.rig.valve(loop.output)
        where = "holds its position"
        if valve.fail_position is not None:
            self.engine.set_output(valve.tag, valve.fail_position)
            where = f"goes to {100 * valve.fail_position:g} %"
        text = f"{why}; {valve.tag} {where}"
        self.losses[loop.tag] = text
        self.event(EventKind.CONTROLLER_SILENT, loop.tag, text)


def _order_words(name: str, value: object, unit: str) -> str:
    """Return an order as a person would give it, with its unit."""
    if name == "mode":
        return "automatic" if value == AUTOMATIC else "manual"
    if not isinstance(value, float):
        return "no integral action" if name == "integral_time" else f"{name} {value}"
    match name:
        case "manual_output":
            return f"manual output {100.0 * value:.4g} %"
        case "setpoint":
            return f"setpoint {value:.4g} {unit}"
        case "integral_time":
            return f"integral time {value:.4g} s"
        case _:
            return f"{name} {value:.4g} %/%"


def require_controllers(session: Session) -> None:
    """Stop a trial whose controller is lost.

    Parameters
    ----------
    session : Session
        The session.

    Raises
    ------
    InvalidRunError
        When a loop's controller is silent.
    """
    lost = [
        f"loop {tag}: {session.losses[tag]}"
        for tag, watch in session.watches.items()
        if watch.silent
    ]
    if lost:
        raise InvalidRunError(
            f"{'; '.join(lost)}. What the controller would have done cannot be judged: see whether "
            "it still scans and its link still holds, and run again"
        )
