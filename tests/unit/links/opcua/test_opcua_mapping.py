"""The address space as a plan: units, types, status codes, and what is refused."""

from __future__ import annotations

import math

import pytest
from asyncua import ua

from harness.domain.signals import Point, PointKind, Quality, Range
from harness.errors import LinkError
from harness.links.opcua.mapping import (
    NodeType,
    plan_address_space,
    quality_of,
    representable,
    status_of,
    unit_id,
)


def point(name="LT-102", kind=PointKind.MEASUREMENT, *, lower=0.0, upper=2.0, unit="m"):
    return Point(
        name=name,
        kind=kind,
        range=Range(lower=lower, upper=upper, unit=unit),
        writable=kind is not PointKind.MEASUREMENT,
        description=f"what {name} is",
    )


# unitId: OPC 10000-8, 5.6.3.3, the characters of the UNECE Recommendation 20 code packed
# big-endian; the numbers are those of the OPC Foundation's UNECE_to_OPCUA table.
PUBLISHED_UNIT_IDS = {
    "CEL": 4408652,
    "P1": 20529,
    "MTR": 5067858,
    "MMT": 5066068,
    "MQH": 5067080,
    "MTQ": 5067857,
    "BAR": 4342098,
    "KPA": 4935745,
    "4K": 13387,
    "SEC": 5457219,
}


@pytest.mark.reference
@pytest.mark.parametrize(("code", "number"), PUBLISHED_UNIT_IDS.items())
def test_unit_id_is_the_published_one(code, number):
    assert unit_id(code) == number


@pytest.mark.reference
@pytest.mark.parametrize(
    ("unit", "number"),
    [
        ("m", 5067858),
        ("mm", 5066068),
        ("%", 20529),
        ("m3/h", 5067080),
        ("s", 5457219),
        ("mA", 13387),
        ("bar", 4342098),
    ],
)
def test_units_of_a_rig_get_their_published_id(unit, number):
    (plan,) = plan_address_space([point(unit=unit)], link="opc")
    assert plan.units is not None
    assert plan.units.unit_id == number


def test_a_number_without_unit_is_shown_as_one():
    (plan,) = plan_address_space([point(unit="")], link="opc")
    assert plan.units is not None
    assert (plan.units.code, plan.units.symbol) == ("C62", "1")


@pytest.mark.parametrize("code", ["", "ABCDE", "m³"])
def test_unit_id_refuses_what_is_no_code(code):
    with pytest.raises(ValueError, match="one to four ASCII"):
        unit_id(code)


@pytest.mark.reference
@pytest.mark.parametrize(
    ("quality", "number", "name"),
    [  # numbers: OPC 10000-6, annex A; names held against the library's own table
        (Quality.GOOD, 0x00000000, "Good"),
        (Quality.UNCERTAIN, 0x40940000, "UncertainEngineeringUnitsExceeded"),
        (Quality.BAD, 0x808C0000, "BadSensorFailure"),
    ],
)
def test_quality_becomes_the_published_status_and_comes_back(quality, number, name):
    assert status_of(quality) == number
    assert ua.StatusCode(status_of(quality)).name == name
    assert quality_of(number) is quality


@pytest.mark.parametrize(
    ("status", "quality"),
    [
        (0x00960000, Quality.GOOD),  # GoodLocalOverride
        (0x40000000, Quality.UNCERTAIN),
        (0x803C0000, Quality.BAD),  # BadOutOfRange
        (0xC0000000, Quality.BAD),  # severity 11 is reserved: "treat as Bad", OPC 10000-4, 7.39
    ],
)
def test_quality_follows_the_severity_bits(status, quality):
    assert quality_of(status) is quality


@pytest.mark.parametrize(
    ("kind", "upper", "data_type"),
    [
        (PointKind.MEASUREMENT, 2.0, NodeType.DOUBLE),
        (PointKind.POSITION, 100.0, NodeType.DOUBLE),
        (PointKind.COMMAND, 100.0, NodeType.DOUBLE),
        (PointKind.SETPOINT, 2.0, NodeType.DOUBLE),
        (PointKind.MANUAL_OUTPUT, 100.0, NodeType.DOUBLE),
        (PointKind.GAIN, 100.0, NodeType.DOUBLE),
        (PointKind.INTEGRAL_TIME, 1e4, NodeType.DOUBLE),
        (PointKind.MODE, 1.0, NodeType.INT32),
        (PointKind.HEARTBEAT, 65535.0, NodeType.INT32),
        (PointKind.HEARTBEAT, 2.0**32 - 1, NodeType.INT64),
        (PointKind.TICK, 2.0**32 - 1, NodeType.INT64),
    ],
)
def test_type_follows_from_the_kind(kind, upper, data_type):
    (plan,) = plan_address_space([point(kind=kind, upper=upper, unit="")], link="opc")
    assert plan.data_type is data_type
    assert (plan.units is None) == (data_type is not NodeType.DOUBLE)


def test_every_kind_has_a_type():
    for kind in PointKind:
        assert len(plan_address_space([point(kind=kind)], link="opc")) == 1


def test_shown_points_keep_their_place_in_the_image():
    points = [point("LT-101"), point("LT-102"), point("FV-101", PointKind.COMMAND)]
    plans = plan_address_space(points, ("FV-101", "LT-101"), link="opc")
    assert [(plan.name, plan.index, plan.writable) for plan in plans] == [
        ("FV-101", 2, True),
        ("LT-101", 0, False),
    ]
    assert plans[0].description == "what FV-101 is"


@pytest.mark.parametrize(
    ("points", "shown", "text"),
    [
        (
            [point()],
            ("LT-999",),
            r"points LT-999 are not points of this rig; use some of LT-102",
        ),
        ([point(), point()], (), "two points of the rig have the same name"),
        ([point()], ("LT-102", "LT-102"), "listed twice"),
        ([point(lower=2.0, upper=2.0)], (), "range of LT-102 is 2 to 2"),
        ([point(lower=math.nan)], (), "range of LT-102 is nan to 2"),
        ([point(unit="furlong")], (), "unit 'furlong' of LT-102 has no UNECE code here"),
    ],
)
def test_a_plan_that_cannot_be_is_refused_with_the_link_and_the_fix(points, shown, text):
    with pytest.raises(LinkError, match=text) as caught:
        plan_address_space(points, shown, link="cell-7")
    assert "'cell-7'" in str(caught.value)


@pytest.mark.parametrize(
    ("data_type", "value", "fits"),
    [
        (NodeType.DOUBLE, -1e300, True),
        (NodeType.DOUBLE, math.nan, False),
        (NodeType.DOUBLE, math.inf, False),
        (NodeType.INT32, 2.0**31 - 1, True),
        (NodeType.INT32, 2.0**31, False),
        (NodeType.INT32, -(2.0**31) - 1, False),
        (NodeType.INT32, math.nan, False),
        (NodeType.INT64, 2.0**53, True),
        (NodeType.INT64, 2.0**53 + 2, False),
        (NodeType.INT64, -math.inf, False),
    ],
)
def test_representable(data_type, value, fits):
    assert representable(data_type, value) is fits
