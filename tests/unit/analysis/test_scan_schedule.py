"""When a controller read and acted, from exchange logs written by hand."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from harness.analysis.schedule import ScanLog, scan_log, schedule_of
from harness.domain.signals import Exchange


def written(tick, image_tick, percent, point="FV-101"):
    return tick, Exchange(
        link="modbus",
        arrival_ns=0,
        peer="plc",
        connection=1,
        function="FC16",
        address="40",
        point=point,
        value=percent,
        raw="",
        image_tick=image_tick,
    )


@pytest.fixture
def external(runs):
    """Return a maker of data whose exchange log is given."""
    data = runs.external("short")

    def make(*exchanges):
        return dataclasses.replace(data, exchanges=exchanges)

    return make


def test_reads_actions_and_outputs_come_from_the_exchange_log(external):
    data = external(written(3, 2, 50.0), written(5, 4, 51.0), written(8, 6, 52.5))
    log = scan_log(data, data.rig.loops[0])
    assert log.read.tolist() == [2, 4, 6]
    assert log.acted.tolist() == [3, 5, 8]
    assert log.outputs == pytest.approx([0.50, 0.51, 0.525])
    assert log.period == 2.0
    assert log.delay == 1.0
    # The first has nothing before it: the rig's own scan of 1 s; then what passed, at 0.5 s a tick.
    assert log.durations == pytest.approx([1.0, 1.0, 1.0])


def test_other_points_and_writers_without_an_image_do_not_count(external):
    data = external(written(3, 2, 50.0), written(3, 2, 1.0, "LIC-102.HB"), written(4, -1, 90.0))
    log = scan_log(data, data.rig.loops[0])
    assert log.read.tolist() == [2]


def test_the_last_of_several_writes_counts(external):
    """Two in one tick, and two answers to one image: what acted in the end."""
    data = external(
        written(3, 2, 50.0), written(3, 2, 51.0), written(4, 2, 52.0), written(6, 5, 53.0)
    )
    log = scan_log(data, data.rig.loops[0])
    assert log.read.tolist() == [2, 5]
    assert log.acted.tolist() == [4, 6]
    assert log.outputs == pytest.approx([0.52, 0.53])


def test_durations_are_the_time_passed_since_the_scan_before(external):
    data = external(*(written(k + 1, k, 50.0) for k in (0, 2, 4, 9, 10)))
    log = scan_log(data, data.rig.loops[0])
    assert log.durations == pytest.approx([1.0, 1.0, 1.0, 2.5, 0.5])
    assert log.within(5, 11).durations == pytest.approx([1.0, 2.5])


def test_a_hold_counts_to_the_end_of_the_phase(external):
    data = external(*(written(k + 1, k, 50.0) for k in range(0, 20, 2)))  # the last acts at 19
    log = scan_log(data, data.rig.loops[0])
    assert log.longest_hold_within(4, 20) == 2
    assert log.longest_hold_within(4, 40) == 21
    assert log.longest_hold_within(25, 40) == 15  # nothing was written at all


def test_the_built_in_block_scans_as_the_rig_says(runs):
    data = runs.builtin("short")
    loop = dataclasses.replace(data.rig.loops[0], scan=1.5, scan_phase=1, output_delay=2)
    log = scan_log(data, loop)
    assert log.read[:3].tolist() == [1, 4, 7]
    assert log.acted[:3].tolist() == [3, 6, 9]
    assert log.acted[-1] < data.rows
    assert np.array_equal(log.outputs, data.trace["FV-101.command"][log.acted])
    assert set(log.durations) == {1.5}


def log_of(reads, delay=1):
    read = np.array(reads, dtype=np.int64)
    return ScanLog(
        read=read,
        acted=read + delay,
        outputs=np.zeros(len(read)),
        durations=np.ones(len(read)),
    )


def test_the_nearest_regular_schedule_counts_its_phase_from_the_first_row(runs):
    loop = runs.rig().loops[0]
    log = log_of([1, 4, 7, 10, 14, 16, 19])
    schedule = schedule_of(log, loop, 0.5)
    assert (schedule.scan_ticks, schedule.phase_ticks, schedule.delay_ticks) == (3, 1, 1)
    shifted = schedule_of(log, loop, 0.5, start=5)
    first = next(k for k in range(20) if (k - shifted.phase_ticks) % shifted.scan_ticks == 0)
    assert 5 + first == 7  # the first scan from row 5 on


def test_too_few_scans_fall_back_on_the_rig(runs):
    loop = dataclasses.replace(runs.rig().loops[0], scan_phase=1, output_delay=3)
    schedule = schedule_of(log_of([4]), loop, 0.5, start=2)
    assert (schedule.scan_ticks, schedule.phase_ticks, schedule.delay_ticks) == (2, 1, 3)
