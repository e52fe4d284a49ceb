"""The points of a rig: names, ranges in the units shown, and who may write."""

from pathlib import Path

import pytest

from harness.config.load import rig_from_text
from harness.domain.points import points_of, position_point, read_back_point
from harness.domain.signals import PointKind

TEXT = (Path(__file__).parent.parent / "config" / "data" / "rig.toml").read_text(
    encoding="utf-8"
)
RIG = rig_from_text(TEXT, "rig.toml")
POINTS = {point.name: point for point in points_of(RIG, external=True)}


def test_names_and_order():
    assert [point.name for point in points_of(RIG, external=True)] == [
        "LT-101",
        "LT-102",
        "FT-101",
        "FV-101",
        "ZT-101",
        "FV-102",
        "ZT-102",
        "LIC-102.SP",
        "LIC-102.MODE",
        "LIC-102.MO",
        "LIC-102.KC",
        "LIC-102.TI",
        "LIC-102.HB",
        "TICK",
        "LT-101.RB",
        "LT-102.RB",
        "FT-101.RB",
        "LIC-102.SP.RB",
        "LIC-102.MODE.RB",
        "LIC-102.ACK",
    ]
    assert [point.name for point in points_of(RIG, external=False)] == list(POINTS)


def test_an_external_controller_writes_its_output_its_heartbeat_and_what_it_has():
    writable = [point.name for point in POINTS.values() if point.writable]
    backs = [name for name in POINTS if name.endswith((".RB", ".ACK"))]
    assert writable == ["FV-101", "LIC-102.HB", *backs]


def test_a_read_back_has_the_unit_of_its_point_and_takes_what_no_range_would():
    assert read_back_point("LT-102") == "LT-102.RB"
    for name in ("LT-102", "FT-101", "LIC-102.SP", "LIC-102.MODE"):
        back = POINTS[read_back_point(name)]
        assert back.kind is PointKind.READ_BACK
        assert back.range.unit == POINTS[name].range.unit
        assert back.range.lower < -65_535  # any 16-bit count
        assert back.range.upper > 65_535


def test_nobody_writes_beside_the_built_in_controller():
    assert not any(point.writable for point in points_of(RIG, external=False))


def test_flows_are_shown_in_cubic_metres_an_hour():
    flow = POINTS["FT-101"]
    assert (flow.range.lower, flow.range.unit) == (0.0, "m3/h")
    assert flow.range.upper == pytest.approx(12.0, rel=1e-15)


def test_a_setpoint_has_the_range_of_its_process_variable():
    assert POINTS["LIC-102.SP"].range == POINTS["LT-102"].range


def test_outputs_and_travel_are_percentages():
    for name in ("FV-101", "ZT-101", "LIC-102.MO"):
        shown = POINTS[name].range
        assert (shown.lower, shown.upper, shown.unit) == (0.0, 100.0, "%")


def test_kinds_follow_the_roles():
    assert POINTS["LT-102"].kind is PointKind.MEASUREMENT
    assert POINTS["ZT-102"].kind is PointKind.POSITION
    assert POINTS["FV-102"].kind is PointKind.COMMAND
    assert POINTS["LIC-102.TI"].kind is PointKind.INTEGRAL_TIME
    assert POINTS["TICK"].kind is PointKind.TICK


def test_position_tag_keeps_the_loop_number_and_suffix():
    assert position_point("FV-101") == "ZT-101"
    assert position_point("LV-12A") == "ZT-12A"
