"""What people are shown as raw is what the servers' own code puts on the wire."""

from __future__ import annotations

import math

import numpy as np
import pytest

from harness.domain.rig import (
    Encoding,
    ModbusServerLink,
    OpcUaServerLink,
    RegisterItem,
    Scaling,
    WordOrder,
)
from harness.domain.signals import Point, PointKind, Quality, Range
from harness.links.port import Snapshot
from harness.links.raw import RawView
from harness.links.registers import RegisterBank

LEVEL = Range(lower=0.0, upper=1.5, unit="m")
POINTS = (
    Point(name="LT-1", kind=PointKind.MEASUREMENT, range=LEVEL, writable=False, description=""),
    Point(name="FT-1", kind=PointKind.MEASUREMENT, range=LEVEL, writable=False, description=""),
    Point(name="M", kind=PointKind.MODE, range=Range(lower=0, upper=1, unit=""), writable=False, description=""),
    Point(name="TICK", kind=PointKind.TICK, range=Range(lower=0, upper=2.0**32 - 1, unit=""), writable=False, description=""),
    Point(name="SP", kind=PointKind.SETPOINT, range=LEVEL, writable=False, description=""),
)  # fmt: skip
ITEMS = (
    RegisterItem(point="LT-1", address=0, encoding=Encoding.FLOAT32, word_order=WordOrder.CDAB),
    RegisterItem(point="FT-1", address=2, encoding=Encoding.INT16, scaling=Scaling.COUNTS, counts_high=30000),
    RegisterItem(point="LT-1", address=3, encoding=Encoding.UINT16, scaling=Scaling.CURRENT),
    RegisterItem(point="TICK", address=4, encoding=Encoding.UINT32),
    RegisterItem(point="M", address=7, encoding=Encoding.BIT),
)  # fmt: skip
MODBUS = ModbusServerLink(name="plc", host="127.0.0.1", port=0, unit=1, items=ITEMS)
OPCUA = OpcUaServerLink(name="ua", host="127.0.0.1", port=0)


def raw(name, value, current=math.nan, quality=Quality.GOOD, links=(OPCUA, MODBUS)):
    return RawView(POINTS, links).of(name, value, current, float(quality))


def test_a_modbus_link_comes_before_opc_ua_and_its_first_item_counts():
    shown = raw("LT-1", 0.75, 12.0)
    assert (shown.link, shown.address, shown.encoding) == ("plc", "0", "float32")
    # 0.75 is 3F40 0000 (IEEE 754 binary32); CDAB sends the low word first.
    assert (shown.content, shown.number) == ("0000 3F40", None)


def test_a_register_is_shown_in_both_bases_with_its_sign():
    # (I - 4)/16 of the count span (arithmetic of the 4-20 mA signal): -0.025 * 30000 = -750.
    shown = raw("FT-1", -0.0375, 3.6, Quality.BAD)
    assert (shown.address, shown.content, shown.number) == ("2", "FD12", -750)
    assert raw("FT-1", 0.75, 12.0).number == 15_000


def test_a_bit_is_0_or_1():
    assert [raw("M", value).content for value in (0.0, 1.0)] == ["0", "1"]


@pytest.mark.parametrize(
    ("name", "value", "quality", "content"),
    [
        ("SP", 0.75, Quality.GOOD, "0.75"),
        ("SP", 0.1, Quality.UNCERTAIN, "0.10000000000000001"),
        ("SP", 0.75, Quality.BAD, "0x808C0000"),  # BadSensorFailure, OPC 10000-6, annex A
        ("SP", math.nan, Quality.GOOD, "0x808C0000"),
    ],
)
def test_what_no_modbus_link_shows_is_told_as_its_node(name, value, quality, content):
    shown = raw(name, value, quality=quality)
    assert (shown.link, shown.address, shown.encoding) == ("ua", "SP", "Double")
    assert shown.content == content


def test_an_integer_node_is_a_whole_number():
    shown = raw("TICK", 1234.0, links=(OPCUA,))
    assert (shown.encoding, shown.content) == ("Int64", "1234")


def test_what_no_link_shows_has_no_raw_content():
    assert raw("SP", 0.5, links=(MODBUS,)) is None


def test_the_content_is_that_of_the_register_bank():
    values = [0.7525, 1.1, 1.0, 70_000.0, 0.8]
    currents = [12.0267, 15.733, math.nan, math.nan, math.nan]
    bank = RegisterBank(POINTS, ITEMS)
    bank.load(
        Snapshot(
            tick=3,
            values=np.array(values),
            currents=np.array(currents),
            qualities=np.zeros(len(POINTS)),
        )
    )
    view = RawView(POINTS, (MODBUS,))
    for name, address, count, place in (
        ("LT-1", 0, 2, 0),
        ("FT-1", 2, 1, 1),
        ("TICK", 4, 2, 3),
    ):
        shown = view.of(name, values[place], currents[place], 0.0)
        assert shown is not None
        read = bank.read_registers(address, count)
        assert bytes.fromhex(shown.content.replace(" ", "")) == read
