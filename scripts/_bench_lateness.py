"""Benchmark section: lateness at a tick of 10 ms, links under load, beside a bare timer.

Blocks alternate, all in one run: the ticks of a live session, with links and recorder in their
processes, and a loop that does nothing but sleep to absolute deadlines, both while the clients
poll; then the same bare loop without them. The second says what a loaded machine does to any
program, the third what this machine does. The ratios set the first against the second. Both of
them run on a real-time thread where the system grants one, the third on an ordinary one.
"""

from __future__ import annotations

import time
from contextlib import ExitStack
from dataclasses import replace
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import TYPE_CHECKING

import numpy as np
from _bench_load import Load
from _figures import Figure
from _reference_loops import GAIN, INTEGRAL_TIME, benchmark_rig

from harness.controllers.block import AUTOMATIC
from harness.domain.models import ControllerSettings
from harness.domain.points import points_of
from harness.domain.rig import Encoding, ModbusServerLink, OpcUaServerLink, RegisterItem
from harness.domain.run import RunHeader
from harness.engine.engine import Engine
from harness.links.opcua.mapping import NAMESPACE_URI
from harness.recording.process import RecorderProcess
from harness.runtime.clock import PacedClock
from harness.runtime.link_process import LinkProcess
from harness.runtime.requests import NothingToCompute
from harness.runtime.session import Pacing, Session
from harness.runtime.steadiness import steady_memory, steady_threads

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

    from harness.domain.rig import Rig
    from harness.recording.port import RecordWriter

_TICK = 0.010  # [s]
_BLOCK = 500  # ticks of a block: five seconds
_TAGS = 50  # points that the subscriber watches [-]
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
    ticks: list[NDArray[np.float64]] = []
    bare: list[NDArray[np.float64]] = []
    bench = _Bench()
    with ExitStack() as stack:
        folder = Path(stack.enter_context(TemporaryDirectory()))
        recorder = stack.enter_context(RecorderProcess.create(folder, bench.header()))
        stack.enter_context(bench.links)
        stack.enter_context(steady_memory())
        granted = stack.enter_context(steady_threads())
        load = Load(
            bench.links.addresses["modbus"],
            bench.links.addresses["opcua"],
            bench.names,
            NAMESPACE_URI,
        )
        stack.callback(load.close)
        bench.run(recorder, round(_SETTLE_S / _TICK))
        bench.clock.work.clear()
        before, start = load.counts(), time.perf_counter()
        for _ in range(blocks):
            ticks.append(bench.run(recorder, _BLOCK))
            bare.append(_bare_timer(_BLOCK))
        after, taken = load.counts(), time.perf_counter() - start
        whole = load.alive()
    idle = [_bare_timer(_BLOCK) for _ in range(blocks)]
    yield from _percentiles("tick_loaded", ticks)
    yield from _percentiles("bare_loaded", bare)
    yield from _percentiles("bare_idle", idle)
    yield from _ratios(ticks, bare)
    yield Figure(
        name="lateness.real_time_thread",
        value=float(granted),
        unit="1",
        note="whether the system granted one to ticks and bare timer",
    )
    yield Figure(
        name="lateness.work_of_a_tick",
        value=float(np.median(bench.clock.work)),
        unit="us",
        note="publish, drain, advance, keep the row: median",
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


class _NotingClock:
    """A paced clock that remembers how late each wait returned, and the time between waits."""

    def __init__(self) -> None:
        self._clock = PacedClock()
        self._back_ns = 0
        self.late: list[float] = []
        self.work: list[float] = []

    def now_ns(self) -> int:
        """Return the time on this clock [ns]."""
        return self._clock.now_ns()

    def wait_until(self, deadline_ns: int) -> int:
        """Sleep until the deadline; see `Clock.wait_until`."""
        self.work.append((self._clock.now_ns() - self._back_ns) / 1e3)
        late_ns = self._clock.wait_until(deadline_ns)
        self._back_ns = deadline_ns + late_ns
        self.late.append(late_ns / 1e3)
        return late_ns


class _Bench:
    """A live session as a trial has it: both links, a recorder in its process, no view."""

    def __init__(self) -> None:
        self._rig = _wide_rig()
        self._engine = Engine(self._rig, built_in=True)
        loop = self._rig.loops[0]
        settings = ControllerSettings(
            gain=GAIN, integral_time=INTEGRAL_TIME, action=loop.action
        )
        self._engine.set_settings(loop.tag, settings)
        self._engine.set_mode(loop.tag, AUTOMATIC)
        self._engine.record(2)  # compiles
        points = points_of(self._rig, external=False)
        self.names = tuple(point.name for point in points)[:_TAGS]
        self.links = LinkProcess(
            (_modbus(self.names), OpcUaServerLink(name="opcua", host="127.0.0.1", port=0)),
            points,
            "benchmark",
        )
        self.clock = _NotingClock()

    def header(self) -> RunHeader:
        """Return a header for the record."""
        return RunHeader(
            run="benchmark",
            started_utc="",
            rig_name=self._rig.name,
            trial_name="",
            rig_text="",
            trial_text="",
            versions={},
            seed=self._rig.seed,
            tick=_TICK,
            clock="paced",
            pace=1.0,
            controller="builtin",
            columns=self._engine.columns,
        )

    def run(self, recorder: RecordWriter, count: int) -> NDArray[np.float64]:
        """Run ticks and return their lateness [us]."""
        self.clock.late.clear()
        # A session of its own for each block: its first tick is due at once.
        pacing = Pacing(
            clock=self.clock, pace=1.0, links=self.links, computer=NothingToCompute()
        )
        session = Session(self._engine, recorder, pacing)
        session.advance(count)
        session.hand_over()
        return np.array(self.clock.late)


def _wide_rig() -> Rig:
    """Return the benchmark's rig at a tick of 10 ms, with transmitters enough for fifty tags."""
    rig = benchmark_rig()
    more = _TAGS - len(points_of(rig, external=False))
    first = rig.transmitters[0]
    return replace(
        rig,
        tick=_TICK,
        loops=tuple(replace(loop, scan=_TICK) for loop in rig.loops),
        transmitters=(
            *rig.transmitters,
            *(replace(first, tag=f"LT-{910 + number}") for number in range(more)),
        ),
    )


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


_SHARES = {"p50": 50.0, "p99": 99.0, "p999": 99.9, "max": 100.0}  # [%]


def _percentiles(name: str, blocks: list[NDArray[np.float64]]) -> Iterator[Figure]:
    late = np.concatenate(blocks)
    for measure, share in _SHARES.items():
        yield Figure(
            name=f"lateness.{name}_{measure}",
            value=float(np.percentile(late, share)),
            unit="us",
            note=f"{late.size} ticks" if measure == "p50" else "",
        )


def _ratios(
    ticks: list[NDArray[np.float64]], bare: list[NDArray[np.float64]]
) -> Iterator[Figure]:
    """Set the lateness of ticks against that of the bare timer in the same run."""
    for measure, share in _SHARES.items():
        yield Figure(
            name=f"lateness.ratio_{measure}",
            value=float(
                np.percentile(np.concatenate(ticks), share)
                / np.percentile(np.concatenate(bare), share)
            ),
            unit="1",
            note="tick to bare timer, both beside the clients" if measure == "p50" else "",
        )
