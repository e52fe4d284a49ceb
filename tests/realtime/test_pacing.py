"""How late the clock and the scan are on this machine; bounds are loose, figures are measured apart.

The bare loop beside it is the operating system's own grain, so that a busy machine is told from
a bad clock.
"""

from __future__ import annotations

import asyncio
import threading
import time

import numpy as np
import pytest

from harness.domain.points import points_of
from harness.domain.signals import Quality
from harness.links.client import Reading
from harness.runtime.clock import NS_PER_S, PacedClock, TickSchedule
from harness.runtime.plc_block import program_of, warm_up
from harness.runtime.soft_plc import SoftPlc

pytestmark = [pytest.mark.realtime, pytest.mark.slow]

TICK_S = 0.01


def late_us(clock, ticks):
    """Return the lateness of a row of ticks [us]."""
    schedule = TickSchedule(start_ns=clock.now_ns(), period=TICK_S)
    return np.array([clock.wait_until(schedule.deadline_ns(k)) for k in range(1, ticks)]) / 1e3


def bare_us(ticks):
    """Return the lateness of sleeping on an event in the standard library [us]."""
    never, late = threading.Event(), []
    start = time.perf_counter()
    for k in range(1, ticks):
        due = start + k * TICK_S
        never.wait(max(due - time.perf_counter(), 0.0))
        late.append((time.perf_counter() - due) * 1e6)
    return np.array(late)


def test_ticks_of_10_ms_come_when_they_are_due():
    late = late_us(PacedClock(), 200)
    bare = bare_us(100)
    assert (late >= 0).all()
    assert np.median(late) < max(500.0, 3 * np.median(bare))
    assert late[-50:].max() < 500_000.0  # absolute deadlines: lateness does not pile up


def test_a_spin_brings_the_median_below_20_microseconds():
    late = late_us(PacedClock(spin_ns=200_000), 100)
    assert (late >= 0).all()
    assert np.median(late) < 20.0


def test_a_stop_request_cuts_a_long_wait_short():
    clock = PacedClock()
    threading.Timer(0.05, clock.stop).start()
    start_ns = clock.now_ns()
    assert clock.wait_until(start_ns + 20 * NS_PER_S) < 0
    assert clock.now_ns() - start_ns < 2 * NS_PER_S


class Answering:
    """A far end that answers after a network's time."""

    def __init__(self, values):
        self.values = values
        self.at_ns = []
        self.stop = asyncio.Event()

    async def connect(self):
        pass

    async def read(self, names):
        self.at_ns.append(time.perf_counter_ns())
        await asyncio.sleep(0.001)
        if len(self.at_ns) == 60:
            self.stop.set()
        return {name: Reading(value=self.values[name], quality=Quality.GOOD) for name in names}

    async def write(self, values):
        await asyncio.sleep(0.001)

    async def close(self):
        pass


async def test_the_soft_plc_scans_once_in_16_7_ms_at_pace_60(two_tanks):
    rig = two_tanks()
    program = program_of(rig.loops[0], points_of(rig, external=True))
    warm_up(program)
    far_end = Answering(dict.fromkeys(program.reads, 1.0))
    await SoftPlc(far_end, program, PacedClock(), 60.0, lambda _: None).run(far_end.stop)
    periods_ms = np.diff(far_end.at_ns) / 1e6
    assert np.median(periods_ms) == pytest.approx(1000 / 60, abs=0.5)
