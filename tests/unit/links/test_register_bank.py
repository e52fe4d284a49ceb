"""The register bank: what is read, what may be written, and when a write shows."""

from __future__ import annotations

import math
import struct

import numpy as np
import pytest

from harness.domain.rig import Encoding, RegisterItem, Scaling, WordOrder
from harness.domain.signals import Point, PointKind, Quality, Range
from harness.errors import LinkError
from harness.links.port import Snapshot
from harness.links.registers import AddressRefusedError, RegisterBank, ValueRefusedError

PERCENT = Range(lower=0.0, upper=100.0, unit="%")
SWITCH = Range(lower=0.0, upper=1.0, unit="")


def point(name, writable, limits=PERCENT, kind=PointKind.COMMAND):
    return Point(name=name, kind=kind, range=limits, writable=writable, description=name)


POINTS = (
    point("LT", False, kind=PointKind.MEASUREMENT),
    point("A", True),
    point("B", True),
    point("C", True),
    point("ON", True, SWITCH),
    point("SEEN", False, SWITCH),
)
ITEMS = (
    RegisterItem(point="LT", address=0, encoding=Encoding.FLOAT32),
    RegisterItem(point="A", address=2, encoding=Encoding.FLOAT32),
    RegisterItem(point="B", address=4, encoding=Encoding.FLOAT32, split_writes=True),
    RegisterItem(point="C", address=6, encoding=Encoding.UINT16, factor=100.0),
    RegisterItem(point="A", address=20, encoding=Encoding.UINT16, scaling=Scaling.CURRENT),
    RegisterItem(point="ON", address=0, encoding=Encoding.BIT),
    RegisterItem(point="SEEN", address=1, encoding=Encoding.BIT),
)


def snapshot(tick, lt=1.0, a=2.0, b=3.0, c=4.0, on=0.0, seen=1.0, quality=0.0):
    return Snapshot(
        tick=tick,
        values=np.array([lt, a, b, c, on, seen]),
        currents=np.full(6, math.nan),
        qualities=np.array([quality, 0.0, 0.0, 0.0, 0.0, 0.0]),
    )


@pytest.fixture
def bank():
    made = RegisterBank(POINTS, ITEMS)
    made.load(snapshot(10))
    return made


def floats(*values):
    return struct.pack(f">{len(values)}f", *values)


def test_reads_the_image(bank):
    assert bank.read_registers(0, 7) == floats(1, 2, 3) + (400).to_bytes(2, "big")
    assert bank.read_registers(20, 1) == (4320).to_bytes(2, "big")  # 4 mA + 2 % of 16 mA
    assert bank.read_bits(0, 2) == b"\x02"


def test_half_a_value_may_be_read(bank):
    assert bank.read_registers(1, 2) == floats(1, 2)[2:6]


@pytest.mark.parametrize(("address", "count", "missing"), [(0, 8, 7), (7, 1, 7), (6, 2, 7), (65535, 1, 65535), (65535, 125, 65535), (19, 2, 19)])  # fmt: skip
def test_what_is_not_in_the_map_is_refused(bank, address, count, missing):
    with pytest.raises(AddressRefusedError, match=f"address {missing} is not in the map"):
        bank.read_registers(address, count)
    with pytest.raises(AddressRefusedError):
        bank.write_registers(address, bytes(2 * count), {})
    with pytest.raises(AddressRefusedError):
        bank.read_bits(2, 1)


def test_an_image_of_the_same_tick_is_not_encoded_again(bank):
    bank.load(snapshot(10, lt=50.0))
    assert bank.read_registers(0, 2) == floats(1)
    bank.load(snapshot(11, lt=50.0))
    assert bank.read_registers(0, 2) == floats(50)


def test_before_the_first_image_a_measurement_is_no_number():
    bank = RegisterBank(POINTS, ITEMS)
    bank.load(snapshot(-1, lt=math.nan, quality=float(Quality.BAD)))
    assert math.isnan(struct.unpack(">f", bank.read_registers(0, 2))[0])


def test_a_write_is_told_and_shows_until_the_image_has_caught_up(bank):
    (written,) = bank.write_registers(2, floats(55.5), {})
    assert (written.point, written.address, written.value) == ("A", 2, 55.5)
    assert written.raw == "425E0000"
    assert bank.read_registers(2, 2) == floats(55.5)
    assert bank.read_registers(20, 1) == (12880).to_bytes(2, "big")  # the same point elsewhere
    bank.load(snapshot(11, a=2.0))
    assert bank.read_registers(2, 2) == floats(55.5)
    bank.load(snapshot(12, a=7.0))
    assert bank.read_registers(2, 2) == floats(7)
    assert bank.read_registers(20, 1) == (5120).to_bytes(2, "big")


def test_a_write_does_not_outlive_an_image_that_was_set_back(bank):
    bank.write_registers(2, floats(55.5), {})
    bank.load(snapshot(3, a=9.0))
    assert bank.read_registers(2, 2) == floats(9)


def test_several_values_are_taken_together(bank):
    written = bank.write_registers(2, floats(10, 20) + (3000).to_bytes(2, "big"), {})
    assert [(one.point, one.value) for one in written] == [("A", 10), ("B", 20), ("C", 30)]


@pytest.mark.parametrize(
    "data",
    [
        floats(10, math.nan),
        floats(10, 101),
        floats(10, 20) + (10001).to_bytes(2, "big"),
        floats(math.inf, 20),
    ],
)
def test_one_bad_value_refuses_all(bank, data):
    before = bank.read_registers(0, 7)
    with pytest.raises(ValueRefusedError):
        bank.write_registers(2, data, {})
    assert bank.read_registers(0, 7) == before


def test_read_only_anywhere_in_the_range_refuses_all(bank):
    before = bank.read_registers(0, 7)
    with pytest.raises(AddressRefusedError, match="LT at 0 is read only"):
        bank.write_registers(0, floats(1, 10), {})
    with pytest.raises(AddressRefusedError, match="SEEN at 1 is read only"):
        bank.write_bits(0, (True, True))
    assert bank.read_registers(0, 7) == before
    assert bank.read_bits(0, 2) == b"\x02"


@pytest.mark.parametrize("address", [2, 3])
def test_half_a_value_may_not_be_written(bank, address):
    with pytest.raises(ValueRefusedError, match="half of A"):
        bank.write_registers(address, b"\x00\x00", {})


def test_a_range_that_cuts_a_value_at_its_end_is_refused_whole(bank):
    with pytest.raises(ValueRefusedError, match="half of A"):
        bank.write_registers(3, floats(0, 20)[2:], {})
    assert bank.read_registers(2, 4) == floats(2, 3)


@pytest.mark.parametrize("first", [0, 1])
def test_a_split_value_is_taken_when_both_halves_are_there(bank, first):
    data, pending = floats(33.25), {}
    halves = [(4, data[:2]), (5, data[2:])]
    assert bank.write_registers(*halves[first], pending) == []
    assert bank.read_registers(4, 2) == floats(3)
    (written,) = bank.write_registers(*halves[1 - first], pending)
    assert (written.point, written.address, written.value) == ("B", 4, 33.25)
    assert pending == {}
    assert bank.read_registers(4, 2) == data


def test_halves_of_two_connections_are_never_joined(bank):
    one, other = {}, {}
    bank.write_registers(4, floats(33.25)[:2], one)
    assert bank.write_registers(5, floats(1.0)[2:], other) == []
    assert bank.read_registers(4, 2) == floats(3)


def test_a_half_written_twice_counts_as_written_last(bank):
    pending = {}
    bank.write_registers(4, floats(90.0)[:2], pending)
    bank.write_registers(4, floats(33.25)[:2], pending)
    (written,) = bank.write_registers(5, floats(33.25)[2:], pending)
    assert written.value == 33.25


def test_a_whole_write_forgets_a_half(bank):
    pending = {}
    bank.write_registers(4, floats(90.0)[:2], pending)
    bank.write_registers(4, floats(20.0), pending)
    assert pending == {}


def test_two_halves_that_make_a_bad_value_are_both_forgotten(bank):
    pending = {}
    bank.write_registers(4, floats(1000.0)[:2], pending)
    with pytest.raises(ValueRefusedError, match="B = 1000"):
        bank.write_registers(5, floats(1000.0)[2:], pending)
    assert pending == {}


def test_a_split_value_may_hang_out_of_a_larger_write(bank):
    # A whole, and the first half of B: A is taken at once, B when its other half comes.
    pending = {}
    (written,) = bank.write_registers(2, floats(10, 33.25)[:6], pending)
    assert written.point == "A"
    (written,) = bank.write_registers(5, floats(33.25)[2:] + b"\x03\xe8", pending)[:1]
    assert (written.point, written.value) == ("B", 33.25)


def test_a_half_is_kept_out_when_another_value_is_refused(bank):
    pending = {}
    with pytest.raises(ValueRefusedError):
        bank.write_registers(2, floats(101, 33.25)[:6], pending)
    assert pending == {}


def test_bits(bank):
    (written,) = bank.write_bits(0, (True,))
    assert (written.point, written.value, written.raw) == ("ON", 1.0, "1")
    assert bank.read_bits(0, 2) == b"\x03"
    bank.load(snapshot(12, on=0.0, seen=math.nan))
    assert bank.read_bits(0, 2) == b"\x00"


def test_a_bit_that_its_point_does_not_take():
    locked = (point("ON", True, Range(lower=0.0, upper=0.5, unit="")),)
    bank = RegisterBank(locked, (RegisterItem(point="ON", address=0, encoding=Encoding.BIT),))
    with pytest.raises(ValueRefusedError, match=r"ON = 1 is outside 0 to 0\.5"):
        bank.write_bits(0, (True,))


def test_word_orders_stand_in_the_registers():
    items = tuple(
        RegisterItem(point="A", address=2 * place, encoding=Encoding.FLOAT32, word_order=order)
        for place, order in enumerate(WordOrder)
    )
    bank = RegisterBank(POINTS, items)
    bank.load(snapshot(1, a=12.5))
    assert bank.read_registers(0, 8).hex().upper() == "41480000000041484841000000004841"


def test_a_bad_map_is_refused_with_every_problem():
    with pytest.raises(
        LinkError, match=r"2 problem\(s\)(.|\n)*items\[1\]: .*overlaps(.|\n)*LT-9"
    ):
        RegisterBank(POINTS, (ITEMS[0], ITEMS[0], RegisterItem(point="LT-9", address=9, encoding=Encoding.INT16)))  # fmt: skip
