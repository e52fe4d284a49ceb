"""Benchmark section: lateness at a tick of 10 ms, links under load, beside a bare timer.

Blocks alternate, all in one run: the rig's tick, and a loop that does nothing but sleep to
absolute deadlines, both while the clients poll; then the same bare loop on an idle machine.
The second says what a loaded machine does to any program, the third what this machine does.
"""

from __future__ import annotations

import time
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from _bench_load import Load
from _figures import Figure
from _reference_loops import GAIN, INTEGRAL_TIME, benchmark_rig

from harness.controllers.block import AUTOMATIC
from harness.domain.models import ControllerSettings
from harness.domain.points import points_of
from harness.domain.rig import Encoding, ModbusServerLink, OpcUaServerLink, RegisterItem
from harness.domain.signals import Point, PointKind, Range
from harness.engine.engine import Engine
from harness.links.opcua.mapping import NAMESPACE_URI
from harness.runtime.clock import PacedClock, TickSchedule
from harness.runtime.link_process import LinkProcess

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

    from numpy.typing import NDArray

    from harness.domain.rig import Rig

_TICK = 0.010  # [s]
_BLOCK = 500  # ticks of a block: five seconds
_TAGS = 50  # points that the subscriber watches [-]
_LOOP = "LIC-902"
_SETTLE_S = 3.0  # before the first block, so that every client is at work [s]


def lateness(minutes: float) -> Iterator[Figure]:
    """Measure the rig's tick and the bare timer in alternating blocks.

    Parameters
    ----------
    minutes : float
        Length of each series [min].

    Yields
    ------
    Figure
        Percentiles of the lateness, the load, and the time that a tick takes.
    """
    blocks = max(1, round(minutes * 60.0 / _TICK / _BLOCK))
    clock = PacedClock()
    bench = _Bench(clock)
    ticks: list[NDArray[np.float64]] = []
    bare: list[NDArray[np.float64]] = []
    with bench.links:
        load = Load(
            bench.links.addresses["modbus"],
            bench.links.addresses["opcua"],
            bench.names,
            NAMESPACE_URI,
        )
        try:
            bench.run(round(_SETTLE_S / _TICK))
            before, start = load.counts(), time.perf_counter()
            for _ in range(blocks):
                ticks.append(bench.run(_BLOCK))
                bare.append(_bare_timer(_BLOCK))
            after, taken = load.counts(), time.perf_counter() - start
            whole = load.alive()
        finally:
            load.close()
    idle = [_bare_timer(_BLOCK) for _ in range(blocks)]
    yield from _percentiles("tick_loaded", ticks)
    yield from _percentiles("bare_loaded", bare)
    yield from _percentiles("bare_idle", idle)
    yield Figure(
        name="lateness.work_of_a_tick",
        value=float(np.median(bench.work)),
        unit="us",
        note="drain, advance and publish: median",
    )
    note = "" if whole else "a client had stopped: these figures do not count"
    yield Figure(
        name="lateness.modbus_replies",
        value=(after.replies - before.replies) / taken,
        unit="1/s",
        note=note or "ten clients, 20 registers each time",
    )
    yield Figure(
        name="lateness.opcua_changes",
        value=(after.notifications - before.notifications) / taken,
        unit="1/s",
        note=note or f"one subscriber of {_TAGS} tags; none change during the bare blocks",
    )


class _Bench:
    """The rig's tick as in a live session: drain, advance, publish."""

    def __init__(self, clock: PacedClock) -> None:
        rig = _fast_rig()
        self._clock = clock
        self._engine = Engine(rig)
        self._engine.set_settings(
            _LOOP,
            ControllerSettings(
                gain=GAIN, integral_time=INTEGRAL_TIME, action=rig.loop(_LOOP).action
            ),
        )
        self._engine.set_mode(_LOOP, AUTOMATIC)
        self._engine.advance(1)  # compiles
        points = _points(rig)
        self.names = tuple(point.name for point in points)
        self._currents = np.full(_TAGS, np.nan)
        self._qualities = np.zeros(_TAGS)
        self.links = LinkProcess(
            (_modbus(self.names), OpcUaServerLink(name="opcua", host="127.0.0.1", port=0)),
            points,
            "benchmark",
        )
        self.work: list[float] = []

    def run(self, count: int) -> NDArray[np.float64]:
        """Run ticks and return their lateness [us]."""
        schedule = TickSchedule(start_ns=self._clock.now_ns() + 10_000_000, period=_TICK)
        late = np.empty(count)
        for k in range(count):
            late[k] = self._clock.wait_until(schedule.deadline_ns(k)) / 1e3
            start_ns = self._clock.now_ns()
            self.links.drain()
            self._engine.advance(1)
            # Every tag gets a new value at every tick, so that the subscriber is told of all.
            values = np.full(_TAGS, self._engine.measured("LT-902"))
            values += 1e-6 * (self._engine.tick % 1000)
            self.links.publish(self._engine.tick, values, self._currents, self._qualities)
            self.work.append((self._clock.now_ns() - start_ns) / 1e3)
        return late


def _fast_rig() -> Rig:
    rig = benchmark_rig()
    loops = tuple(replace(loop, scan=_TICK) for loop in rig.loops)
    return replace(rig, tick=_TICK, loops=loops)


def _points(rig: Rig) -> tuple[Point, ...]:
    """Return the rig's points, filled up to fifty."""
    points = list(points_of(rig, external=False))
    points += [
        Point(
            name=f"LT-{number}",
            kind=PointKind.MEASUREMENT,
            range=Range(lower=0.0, upper=2.0, unit="m"),
            writable=False,
            description="Level",
        )
        for number in range(950, 950 + _TAGS - len(points))
    ]
    return tuple(points)


def _modbus(names: tuple[str, ...]) -> ModbusServerLink:
    items = tuple(
        RegisterItem(point=name, address=2 * i, encoding=Encoding.FLOAT32)
        for i, name in enumerate(names)
    )
    return ModbusServerLink(name="modbus", host="127.0.0.1", port=0, unit=1, items=items)


def _bare_timer(count: int) -> NDArray[np.float64]:
    """Sleep to absolute deadlines and do nothing else; return the lateness [us]."""
    late = np.empty(count)
    start_ns = time.perf_counter_ns() + 10_000_000
    for k in range(count):
        deadline_ns = start_ns + k * round(_TICK * 1e9)
        left_ns = deadline_ns - time.perf_counter_ns()
        if left_ns > 0:
            time.sleep(left_ns / 1e9)  # noqa: TID251  this is the yardstick of the clocks
        late[k] = (time.perf_counter_ns() - deadline_ns) / 1e3
    return late


def _percentiles(name: str, blocks: list[NDArray[np.float64]]) -> Iterator[Figure]:
    late = np.concatenate(blocks)
    measures: dict[str, Callable[[NDArray[np.float64]], np.floating]] = {
        "p50": lambda x: np.percentile(x, 50.0),
        "p99": lambda x: np.percentile(x, 99.0),
        "p999": lambda x: np.percentile(x, 99.9),
        "max": np.max,
    }
    for measure, function in measures.items():
        yield Figure(
            name=f"lateness.{name}_{measure}",
            value=float(function(late)),
            unit="us",
            note=f"{late.size} ticks" if measure == "p50" else "",
        )
