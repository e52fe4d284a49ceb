"""Points to registers and back: word orders, scalings, rounding, failure, refusal."""

from __future__ import annotations

import math
import struct

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from harness.domain.rig import Encoding, RegisterItem, Scaling, WordOrder
from harness.domain.signals import Point, PointKind, Quality, Range
from harness.links.codecs import (
    INTEGER_TYPES,
    ItemCodec,
    ValueRefusedError,
    register_count,
    reorder,
    round_half_up,
)

# What is tested is the result; how long an example takes is the machine's affair.
UNHURRIED = settings(deadline=None, suppress_health_check=[HealthCheck.too_slow])

LEVEL = Range(lower=0.0, upper=4.0, unit="m")
PERCENT = Range(lower=0.0, upper=100.0, unit="%")
INTEGERS = tuple(INTEGER_TYPES)
ORDERS = tuple(WordOrder)


def make(encoding, limits=LEVEL, kind=PointKind.MEASUREMENT, **item):
    point = Point(name="LT-1", kind=kind, range=limits, writable=True, description="level")
    return ItemCodec(point, RegisterItem(point="LT-1", address=0, encoding=encoding, **item))


def counts(low, high, encoding=Encoding.UINT16, **rest):
    return make(encoding, scaling=Scaling.COUNTS, counts_low=low, counts_high=high, **rest)


def number(data, signed=False):
    return int.from_bytes(data, "big", signed=signed)


@pytest.mark.reference
def test_float32_of_123_456():
    # IEEE 754 binary32: 123.456 is 42 F6 E9 79.
    codec = make(Encoding.FLOAT32, Range(lower=0, upper=1000, unit="m"))
    assert codec.encode(123.456, math.nan, 0) == bytes.fromhex("42F6E979")


@pytest.mark.parametrize(
    ("order", "wire"),
    [("ABCD", "42F6E979"), ("CDAB", "E97942F6"), ("BADC", "F64279E9"), ("DCBA", "79E9F642")],
)
def test_word_orders_say_what_they_do(order, wire):
    # Each letter is a byte of the value, A the most significant: the name is the wire's order.
    codec = make(
        Encoding.FLOAT32, Range(lower=0, upper=1000, unit="m"), word_order=WordOrder(order)
    )
    assert codec.encode(123.456, math.nan, 0) == bytes.fromhex(wire)
    assert codec.decode_written(bytes.fromhex(wire)) == pytest.approx(123.456, rel=1e-7)
    letters = {"A": "42", "B": "F6", "C": "E9", "D": "79"}
    assert "".join(letters[letter] for letter in order) == wire


@UNHURRIED
@given(st.binary(min_size=4, max_size=4), st.sampled_from(ORDERS))
def test_each_order_is_its_own_inverse(data, order):
    assert reorder(reorder(data, order), order) == data


@pytest.mark.reference
@pytest.mark.parametrize(
    ("current", "low", "high", "due"),
    [
        (12.0, 0, 65535, 32768),  # 32767.5, half up
        (12.0, 0, 4096, 2048),  # 12 bit
        (4.0, 0, 30000, 0),
        (20.0, 0, 30000, 30000),
        (8.0, 30000, 0, 22500),  # a scale that falls
    ],
)
def test_counts_of_a_loop_current(current, low, high, due):
    # Percent = (I - 4)/16 of the count span (arithmetic of the 4-20 mA signal).
    codec = counts(low, high)
    value = LEVEL.from_fraction((current - 4) / 16)
    assert number(codec.encode(value, current, 0)) == due
    assert number(codec.encode(value, math.nan, 0)) == due  # and without a current


@pytest.mark.reference
@pytest.mark.parametrize(
    ("current", "due"), [(3.6, 3600), (4.0, 4000), (12.0, 12000), (20.5, 20500), (21.0, 21000)]
)
def test_current_in_microamperes(current, due):
    codec = make(Encoding.UINT16, scaling=Scaling.CURRENT)
    assert number(codec.encode(1.0, current, 0)) == due


def test_current_of_a_point_without_one_is_that_of_its_value():
    codec = make(Encoding.UINT16, PERCENT, PointKind.COMMAND, scaling=Scaling.CURRENT)
    assert number(codec.encode(50.0, math.nan, 0)) == 12000
    assert codec.decode_written((12000).to_bytes(2, "big")) == 50.0


@pytest.mark.parametrize(
    ("given_number", "due"), [(0.5, 1), (1.5, 2), (2.5, 3), (-0.5, 0), (-1.5, -1), (0.49, 0)]
)
def test_halves_round_up(given_number, due):
    assert round_half_up(given_number) == due


@pytest.mark.parametrize("encoding", INTEGERS)
@pytest.mark.parametrize("value", [1e30, -1e30, math.inf, -math.inf])
def test_what_does_not_fit_is_clamped(encoding, value):
    kind = INTEGER_TYPES[encoding]
    codec = make(encoding, Range(lower=0, upper=100, unit=""), PointKind.COMMAND)
    due = kind.high if value > 0 else kind.low
    assert number(codec.encode(value, math.nan, 0), signed=kind.low < 0) == due


@pytest.mark.parametrize("value", [1e300, math.inf])
def test_a_float_that_does_not_fit_is_the_largest_finite_one(value):
    data = make(Encoding.FLOAT32).encode(value, math.nan, 0)
    assert data == bytes.fromhex("7F7FFFFF")
    assert make(Encoding.FLOAT32).encode(-value, math.nan, 0) == bytes.fromhex("FF7FFFFF")


@UNHURRIED
@given(
    st.sampled_from(INTEGERS),
    st.sampled_from(ORDERS),
    st.floats(min_value=-1e4, max_value=1e4),
    st.sampled_from([0.1, 1.0, 2.5]),
)
def test_engineering_integers_come_back_within_half_a_count(encoding, order, value, factor):
    kind = INTEGER_TYPES[encoding]
    low = -1e4 if kind.low < 0 else 0.0
    value = max(value, low)
    limits = Range(lower=low, upper=1e4, unit="kg")
    codec = make(encoding, limits, PointKind.COMMAND, word_order=order, factor=factor)
    data = codec.encode_written(value)
    assert len(data) == codec.size == 2 * register_count(encoding)
    assert abs(codec.decode_written(data) - value) <= 0.5 / factor * (1 + 1e-9)


@UNHURRIED
@given(st.sampled_from(ORDERS), st.floats(min_value=0.0, max_value=100.0))
def test_floats_come_back_to_single_precision(order, value):
    codec = make(Encoding.FLOAT32, PERCENT, PointKind.COMMAND, word_order=order)
    back = codec.decode_written(codec.encode_written(value))
    assert back == struct.unpack(">f", struct.pack(">f", value))[0]


@UNHURRIED
@given(st.floats(min_value=0.0, max_value=4.0), st.booleans())
def test_counts_come_back_within_half_a_count(value, falling):
    codec = counts(30000, 0) if falling else counts(0, 30000)
    assert (
        abs(codec.decode_written(codec.encode_written(value)) - value)
        <= 0.5 * 4 / 30000 + 1e-12
    )


@pytest.mark.parametrize("encoding", [*INTEGERS, Encoding.FLOAT32])
@pytest.mark.parametrize("limits", [(0.0, 0.3), (-0.7, 1.1), (0.0, 1 / 3), (0.05, 99.95)])
def test_both_ends_of_a_range_can_be_written(encoding, limits):
    # 0.3 as float32 is above 0.3, and an end may round to the next count: neither is refused.
    lower = max(limits[0], 0.0) if encoding in {Encoding.UINT16, Encoding.UINT32} else limits[0]
    codec = make(encoding, Range(lower=lower, upper=limits[1], unit=""), PointKind.COMMAND)
    for end in (lower, limits[1]):
        assert lower <= codec.decode_written(codec.encode_written(end)) <= limits[1]


@pytest.mark.parametrize("raw", ["7FC00000", "FFC00001", "7F800000", "FF800000"])
def test_nan_and_infinity_are_not_taken(raw):
    codec = make(Encoding.FLOAT32, PERCENT, PointKind.COMMAND)
    with pytest.raises(ValueRefusedError, match="outside 0 to 100 %"):
        codec.decode_written(bytes.fromhex(raw))


@pytest.mark.parametrize("value", [-0.001, 100.001, -1e30, 1e30])
def test_values_out_of_range_are_not_taken(value):
    codec = make(Encoding.FLOAT32, PERCENT, PointKind.COMMAND)
    with pytest.raises(ValueRefusedError, match="LT-1 = "):
        codec.decode_written(struct.pack(">f", value))


def test_a_failed_transmitter_shows_its_failure_and_never_a_level():
    bad = int(Quality.BAD)
    low, high = LEVEL.from_fraction(-0.025), LEVEL.from_fraction(1.0625)
    assert number(make(Encoding.UINT16, scaling=Scaling.CURRENT).encode(low, 3.6, bad)) == 3600
    assert number(counts(0, 30000, Encoding.INT16).encode(low, 3.6, bad), signed=True) == -750
    assert number(counts(0, 65535).encode(low, 3.6, bad)) == 0
    assert number(counts(0, 65535).encode(high, 21.0, bad)) == 65535
    integer = make(Encoding.INT16, factor=1000.0)
    assert number(integer.encode(2.0, 3.6, bad), signed=True) == -100  # the current counts
    assert make(Encoding.FLOAT32).encode(2.0, 3.6, bad) == bytes.fromhex("7FC00000")


@pytest.mark.parametrize("encoding", INTEGERS)
def test_no_number_at_all_shows_the_mark_and_is_read_as_bad(encoding):
    codec = make(encoding)
    data = codec.encode(math.nan, math.nan, int(Quality.BAD))
    assert number(data, signed=INTEGER_TYPES[encoding].low < 0) == INTEGER_TYPES[encoding].mark
    value, quality = codec.decode_reading(data)
    assert math.isnan(value)
    assert quality is Quality.BAD


BANDS = [
    # NAMUR NE 43: failure at or below 3.6 and at or above 21.0 mA, measurement 3.8 to 20.5 mA.
    (3.5, Quality.BAD),
    (3.6, Quality.BAD),
    (3.7, Quality.UNCERTAIN),
    (3.8, Quality.GOOD),
    (4.0, Quality.GOOD),
    (20.0, Quality.GOOD),
    (20.5, Quality.GOOD),
    (20.7, Quality.UNCERTAIN),
    (21.0, Quality.BAD),
    (22.0, Quality.BAD),
]


@pytest.mark.reference
@pytest.mark.parametrize(("current", "due"), BANDS)
@pytest.mark.parametrize(
    "codec",
    [
        make(Encoding.UINT16, scaling=Scaling.CURRENT),
        make(Encoding.FLOAT32, scaling=Scaling.CURRENT, word_order=WordOrder.CDAB),
        make(Encoding.UINT32, scaling=Scaling.CURRENT, word_order=WordOrder.DCBA),
        counts(0, 30000, Encoding.INT16),
        counts(30000, 0, Encoding.INT16),
        counts(0, 1000, Encoding.INT16),
        counts(6553, 32767, Encoding.UINT16),
        make(Encoding.INT16, factor=1000.0),
        make(Encoding.FLOAT32),
    ],
    ids=["uA", "uA float", "uA 32", "counts", "falling", "coarse", "offset", "mm", "float"],
)
def test_quality_of_a_reading_follows_the_current(codec, current, due):
    value = LEVEL.from_fraction((current - 4) / 16)
    read, quality = codec.decode_reading(codec.encode(value, current, int(due)))
    assert quality is due
    if due is Quality.GOOD:
        assert read == pytest.approx(value, abs=0.003)


@pytest.mark.parametrize("current", [4.0, 12.0, 20.0])
def test_a_scale_too_coarse_for_the_bands_calls_nothing_bad(current):
    codec = counts(0, 10)
    value = LEVEL.from_fraction((current - 4) / 16)
    assert codec.decode_reading(codec.encode(value, current, 0))[1] is Quality.GOOD


def test_full_scale_of_an_unsigned_type_is_no_mark():
    codec = counts(0, 65535)
    assert codec.decode_reading(b"\xff\xff") == (pytest.approx(4.0), Quality.GOOD)


def test_a_command_is_good_whatever_its_value():
    codec = make(Encoding.FLOAT32, PERCENT, PointKind.COMMAND)
    assert codec.decode_reading(struct.pack(">f", -10.0)) == (-10.0, Quality.GOOD)


def test_a_read_back_may_say_that_there_is_no_value():
    point = Point(
        name="LT-2.RB",
        kind=PointKind.READ_BACK,
        range=Range(lower=-3.4e38, upper=3.4e38, unit="m"),
        writable=True,
        description="",
    )
    codec = ItemCodec(
        point, RegisterItem(point="LT-2.RB", address=0, encoding=Encoding.FLOAT32)
    )
    assert math.isnan(codec.decode_written(struct.pack(">f", math.nan)))
    with pytest.raises(ValueRefusedError):
        codec.decode_written(struct.pack(">f", math.inf))
