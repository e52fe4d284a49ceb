"""Who the controller is, and what it is known to have read."""

from __future__ import annotations

import dataclasses

import pytest

from harness.domain.signals import Exchange
from harness.runtime.controller_watch import ControllerWatch
from harness.runtime.news import LinkActivity

S = 1_000_000_000


def write(at, value=50.0, connection=1, image_tick=0, point="FV-1"):
    return Exchange(
        link="modbus",
        arrival_ns=round(at * S),
        peer=f"10.0.0.{connection}:4711",
        connection=connection,
        function="FC16",
        address="40",
        point=point,
        value=value,
        raw="",
        image_tick=image_tick,
    )


def request(at, connection=1, link="modbus"):
    return LinkActivity(
        link=link,
        connection=connection,
        peer=f"10.0.0.{connection}:4711",
        requests=1,
        arrival_ns=round(at * S),
        image_tick=0,
    )


@pytest.fixture
def watch_of(two_tanks):
    def make(**changes):
        return ControllerWatch(dataclasses.replace(two_tanks().loops[0], **changes), pace=1.0)

    return make


def test_nobody_is_the_controller_before_the_output_is_written(watch_of):
    watch = watch_of()
    watch.active(request(0.0))
    assert (watch.found, watch.peer, watch.read_tick) == (False, "", -1)
    assert watch.output_written(write(0.0))
    assert (watch.found, watch.peer) == (True, "10.0.0.1:4711 on modbus")


def test_a_late_message_of_an_early_request_takes_nothing_back(watch_of):
    watch = watch_of()  # allows 10 s
    watch.output_written(write(8.0))
    watch.active(request(2.0))
    assert watch.check(17 * S) is None


def test_the_same_number_on_another_link_is_another_connection(watch_of):
    watch = watch_of()
    watch.output_written(write(0.0))
    watch.active(request(0.1))  # one that reads as well
    watch.active(request(9.0, link="opcua"))
    assert watch.check(11 * S) is not None


def test_another_peer_that_writes_takes_over_and_each_is_told_once(watch_of):
    watch = watch_of()
    assert watch.output_written(write(0.0, connection=1))
    assert watch.output_written(write(5.0, connection=2))
    assert watch.peer == "10.0.0.2:4711 on modbus"
    assert not watch.output_written(write(6.0, connection=1))  # the first again
    assert not watch.output_written(write(7.0, connection=2))
    watch.active(request(16.0, connection=1))
    assert watch.check(18 * S) is not None


def test_it_knows_an_order_once_it_wrote_after_reading_it(watch_of):
    watch = watch_of()
    watch.output_written(write(0.0, image_tick=7))
    assert watch.read_tick == 7
    watch.output_written(write(1.0, image_tick=5))  # an older image tells nothing new
    assert watch.read_tick == 7
    watch.output_written(write(2.0, image_tick=9))
    assert watch.read_tick == 9


def test_a_heartbeat_that_never_beats_counts_from_the_first_output(watch_of):
    watch = watch_of(heartbeat_timeout=3.0)
    watch.output_written(write(1.0))
    watch.active(request(3.9))
    assert watch.check(4 * S) is None
    assert "heartbeat" in watch.check(4 * S + S // 10)


def test_without_a_limit_no_heartbeat_is_asked_for(watch_of):
    watch = watch_of(heartbeat_timeout=None)
    watch.output_written(write(0.0))
    watch.heartbeat_written(write(0.0, 1, point="LIC-2.HB"))
    watch.active(request(9.0))
    assert watch.check(18 * S) is None
