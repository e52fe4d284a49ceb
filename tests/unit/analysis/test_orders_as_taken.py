"""An order seen in the data counts from the image that the controller's scan had read."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from harness.analysis.run_data import with_orders_as_taken
from harness.domain.run import Event, EventKind
from harness.domain.signals import Exchange

KNOWN, READ = 50, 46  # ticks


@pytest.fixture
def prompted(runs):
    """Return a maker of runs with a setpoint known at a tick, from a scan that read another."""
    data = runs.external("short")

    def make(evidence="seen in the data", known=KNOWN, written=KNOWN - 1, read=READ):
        trace = dict(data.trace)
        trace["LIC-102.setpoint"] = np.where(data.trace["tick"] < known, 0.75, 0.81)
        order = Event(
            tick=known, kind=EventKind.ORDER, subject="LIC-102", text="",
            data={"setpoint": 0.81, "by": "prompt", "evidence": evidence},
        )  # fmt: skip
        exchange = Exchange(
            link="modbus", arrival_ns=0, peer="plc", connection=1, function="FC16", address="40",
            point="FV-101", value=50.0, raw="", image_tick=read,
        )  # fmt: skip
        return dataclasses.replace(
            data, trace=trace, events=(order,), exchanges=((written, exchange),)
        )

    return make


def setpoint_from(data):
    """Return the tick from which the setpoint counts."""
    return int(np.argmax(with_orders_as_taken(data).trace["LIC-102.setpoint"] == 0.81))


def test_a_seen_order_counts_from_the_image_that_was_read(prompted):
    data = prompted()
    assert setpoint_from(data) == READ
    assert data.trace["LIC-102.setpoint"][READ] == 0.75  # the record itself is left alone


def test_the_output_in_manual_and_the_mode_are_left_where_they_were_not_ordered(prompted):
    data = prompted()
    taken = with_orders_as_taken(data).trace
    for column in ("LIC-102.mode", "LIC-102.manual_output", "LT-102.true"):
        assert taken[column] is data.trace[column]


@pytest.mark.parametrize(
    "how",
    [
        {"evidence": "confirmed"},  # nothing tells which scan had it first
        {"evidence": ""},
        {"written": KNOWN - 3},  # no scan at that tick
        {"read": -1},  # a writer that reads nothing
    ],
)
def test_other_orders_count_from_when_they_were_known(prompted, how):
    assert setpoint_from(prompted(**how)) == KNOWN


def test_an_order_at_the_very_end_has_no_row(prompted):
    data = prompted()
    last = dataclasses.replace(data.events[0], tick=data.rows)
    data = dataclasses.replace(data, events=(last,))
    assert setpoint_from(data) == KNOWN
