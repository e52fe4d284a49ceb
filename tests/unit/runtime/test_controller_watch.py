"""When a controller counts as silent: what keeps it alive, in whose time, and whose requests count."""

from __future__ import annotations

import dataclasses

import pytest

from harness.domain.signals import Exchange
from harness.runtime.controller_watch import ControllerWatch
from harness.runtime.news import LinkActivity

SECOND_NS = 1_000_000_000
PLC, SECOND, THIRD = 1, 2, 3


@pytest.fixture
def watch(two_tanks):
    """Make a watch with a watchdog of 10 s of plant time."""

    def make(pace=1.0, heartbeat_timeout=None):
        (loop,) = two_tanks().loops
        return ControllerWatch(
            dataclasses.replace(loop, watchdog=10.0, heartbeat_timeout=heartbeat_timeout), pace
        )

    return make


def write(at, connection=PLC, value=50.0, image_tick=7, host="10.0.0.5", link="modbus"):
    return Exchange(
        link=link, arrival_ns=round(at * SECOND_NS), peer=f"{host}:{40_000 + connection}",
        connection=connection, function="FC16", address="40", point="FV-1", value=value,
        raw="", image_tick=image_tick,
    )  # fmt: skip


def request(at, connection=PLC, image_tick=7, host="10.0.0.5", link="modbus"):
    return LinkActivity(
        link=link, connection=connection, peer=f"{host}:{40_000 + connection}", requests=1,
        arrival_ns=round(at * SECOND_NS), image_tick=image_tick,
    )  # fmt: skip


def lost(watch, at):
    return watch.check(round(at * SECOND_NS)) is not None


def test_nobody_is_lost_before_somebody_wrote_the_output(watch):
    quiet = watch()
    quiet.active(request(0.0))
    assert not lost(quiet, 1000.0)


def test_a_read_is_a_sign_of_life_as_a_write_is(watch):
    reader = watch()
    reader.output_written(write(0.0))
    for second in range(8, 100, 8):
        reader.active(request(second))
        assert not lost(reader, second + 7.9)


def test_silence_is_told_once_with_time_and_limit(watch):
    quiet = watch()
    quiet.output_written(write(0.0))
    assert not lost(quiet, 10.0)
    text = quiet.check(round(10.1 * SECOND_NS))
    assert text is not None
    assert "10.0.0.5:40001 on modbus for 10.1 s of plant time" in text
    assert "allows 10 s" in text
    assert quiet.silent
    assert not lost(quiet, 20.0)


def test_the_watchdog_counts_plant_seconds(watch):
    fast = watch(pace=60.0)
    fast.output_written(write(0.0))
    assert not lost(fast, 9.9 / 60.0)
    assert lost(fast, 10.1 / 60.0)


def test_a_request_brings_it_back_and_the_watchdog_starts_anew(watch):
    back = watch()
    back.output_written(write(0.0))
    assert lost(back, 11.0)
    assert not back.came_back(12 * SECOND_NS)
    back.active(request(13.0))
    assert back.came_back(14 * SECOND_NS)
    assert not back.silent
    assert not lost(back, 22.9)
    assert lost(back, 23.1)


def test_another_peer_keeps_nobody_alive(watch):
    alone = watch()
    alone.output_written(write(0.0))
    alone.active(request(0.1))
    alone.active(request(9.0, connection=SECOND))  # a panel on the same machine
    alone.active(request(9.0, connection=PLC, link="opcua"))
    assert lost(alone, 10.2)


def test_reads_on_a_second_connection_count_for_one_that_only_writes(watch):
    split = watch()
    split.output_written(write(0.0, image_tick=-1))
    split.active(request(0.0, image_tick=-1))
    split.active(request(9.0, connection=SECOND))
    assert not lost(split, 18.9)
    split.active(request(18.5, connection=SECOND, link="opcua"))
    split.active(request(18.5, connection=THIRD, host="10.0.0.6"))
    assert lost(split, 19.1)


def test_a_connection_that_reads_must_show_itself(watch):
    one = watch()
    one.output_written(write(0.0, image_tick=-1))
    one.active(request(1.0, image_tick=3))
    one.active(request(9.0, connection=SECOND))
    assert lost(one, 11.1)


def test_time_in_which_the_rig_stood_still_is_not_the_controllers(watch):
    paused = watch(heartbeat_timeout=4.0)
    paused.output_written(write(0.0))
    paused.active(request(3.0))
    paused.stood_still(20 * SECOND_NS)
    assert not lost(paused, 23.9)
    assert lost(paused, 24.1)


def test_a_heartbeat_tightens_the_watchdog_and_only_a_change_counts(watch):
    heart = watch(heartbeat_timeout=3.0)
    heart.output_written(write(0.0))
    heart.heartbeat_written(write(1.0, value=1.0))
    heart.heartbeat_written(write(2.0, value=2.0))
    heart.active(request(5.0))
    assert not lost(heart, 4.9)
    heart.heartbeat_written(write(4.9, value=2.0))
    text = heart.check(round(5.1 * SECOND_NS))
    assert text is not None
    assert "heartbeat of 10.0.0.5:40001 on modbus stood still for 3.1 s" in text
    heart.active(request(6.0))
    assert not heart.came_back(6 * SECOND_NS)  # reads alone do not do
    heart.heartbeat_written(write(6.5, value=3.0))
    assert heart.came_back(7 * SECOND_NS)
