"""From the engine's state to what a link shows, point by point."""

from __future__ import annotations

import math

import pytest

from harness.controllers.block import AUTOMATIC
from harness.domain.models import ControllerSettings
from harness.domain.points import points_of
from harness.domain.rig import Action
from harness.domain.signals import PointKind, Quality
from harness.engine.engine import Engine
from harness.runtime.image_values import ImageValues


class Shown:
    """The image of an engine, by the names of its points."""

    def __init__(self, rig, *, external=True):
        self.engine = Engine(rig, built_in=not external)
        self.points = points_of(rig, external)
        self.image = ImageValues(self.engine, self.points)
        self.numbers = {point.name: i for i, point in enumerate(self.points)}

    def __getitem__(self, name):
        values, currents, qualities = self.image.take()
        i = self.numbers[name]
        return values[i], currents[i], qualities[i]


def test_a_measurement_has_value_current_and_quality_of_one_signal(two_tanks):
    shown = Shown(two_tanks())
    shown.engine.advance(20)
    for tag in ("LT-1", "LT-2", "FT-1", "FT-2"):
        value, current, quality = shown[tag]
        point = shown.points[shown.numbers[tag]]
        # 4 mA is the lower, 20 mA the upper range value (IEC 60381-1)
        assert value == pytest.approx(point.range.from_fraction((current - 4.0) / 16.0))
        assert value == shown.engine.measured(tag)
        assert quality == Quality.GOOD


def test_a_flow_is_shown_per_hour(two_tanks):
    shown = Shown(two_tanks())
    point = shown.points[shown.numbers["FT-1"]]
    assert point.range.unit == "m3/h"
    flow = shown.engine.valve_flows({})[0] * 3600.0
    assert shown["FT-1"][0] == pytest.approx(flow, rel=0.01)


@pytest.mark.parametrize(("current", "quality"), [(3.5, Quality.BAD), (21.5, Quality.BAD)])
def test_a_failure_current_is_bad(two_tanks, current, quality):
    # NE 43: below 3.6 and from 21 mA a transmitter signals its failure
    shown = Shown(two_tanks())
    shown.engine.force_current("LT-2", current)
    shown.engine.advance(1)
    value, got, found = shown["LT-2"]
    assert got == pytest.approx(current)
    assert found == quality
    assert value == pytest.approx(1.5 * (current - 4.0) / 16.0)


def test_everything_but_measurements_has_no_current_and_is_good(two_tanks):
    shown = Shown(two_tanks())
    shown.engine.advance(5)
    for point in shown.points:
        _, current, quality = shown[point.name]
        assert math.isnan(current) == (point.kind is not PointKind.MEASUREMENT)
        assert quality == Quality.GOOD


def test_valves_are_in_percent_and_the_position_follows_the_command(two_tanks):
    shown = Shown(two_tanks())
    assert shown["FV-1"][0] == pytest.approx(55.0)
    shown.engine.set_output("FV-1", 0.80)
    shown.engine.advance(2)  # 1 s of a stroke of 8 s, behind a lag
    assert shown["FV-1"][0] == pytest.approx(80.0)
    assert 55.0 < shown["ZT-1"][0] < 68.0
    shown.engine.advance(200)
    assert shown["ZT-1"][0] == pytest.approx(80.0, abs=1e-6)


def test_orders_are_in_the_units_that_a_controller_has(two_tanks):
    shown = Shown(two_tanks())
    engine = shown.engine
    engine.set_setpoint("LIC-2", 0.9)
    engine.set_mode("LIC-2", AUTOMATIC)
    engine.set_manual_output("LIC-2", 0.3)
    engine.set_settings(
        "LIC-2", ControllerSettings(gain=2.5, integral_time=40.0, action=Action.REVERSE)
    )
    found = {name: shown[f"LIC-2.{name}"][0] for name in ("SP", "MODE", "MO", "KC", "TI")}
    assert found == pytest.approx({"SP": 0.9, "MODE": 1.0, "MO": 30.0, "KC": 2.5, "TI": 40.0})


def test_no_integral_action_is_shown_as_zero(two_tanks):
    shown = Shown(two_tanks())
    assert shown["LIC-2.TI"][0] == 0.0  # as it starts
    shown.engine.set_settings(
        "LIC-2", ControllerSettings(gain=2.5, integral_time=None, action=Action.REVERSE)
    )
    assert shown["LIC-2.TI"][0] == 0.0


def test_the_tick_counts(two_tanks):
    shown = Shown(two_tanks())
    shown.engine.advance(7)
    assert shown["TICK"][0] == 7.0


def test_a_heartbeat_is_what_was_written(two_tanks):
    shown = Shown(two_tanks())
    assert shown["LIC-2.HB"][0] == 0.0
    shown.image.heartbeats["LIC-2.HB"] = 41.0
    assert shown["LIC-2.HB"][0] == 41.0


def test_nothing_shown_is_ever_not_a_number(two_tanks):
    shown = Shown(two_tanks(), external=False)
    shown.engine.advance(3)
    values, _, _ = shown.image.take()
    assert all(math.isfinite(value) for value in values)
