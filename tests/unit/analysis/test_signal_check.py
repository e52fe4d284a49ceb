"""Each mistake is made on real registers and found by its name; none is found on the right one."""

import math
import struct
from dataclasses import replace

import pytest

from harness.analysis.signal_case import Band, Said, TransmitterCase, ValvePoint, band_of
from harness.analysis.signal_check import check_transmitter
from harness.analysis.signal_decode import registers_at, scaled
from harness.analysis.valve_check import check_valve, refusal_cause
from harness.domain.rig import Encoding, RegisterItem, Scaling, WordOrder
from harness.domain.signals import Point, PointKind, Range
from harness.domain.verdict import Outcome
from harness.links.codecs import ItemCodec

METRES = Range(lower=0.0, upper=1.5, unit="m")
CURRENTS = (4.0, 8.0, 12.0, 16.0, 20.0, 16.0, 12.0, 8.0, 4.0, 3.8, 20.5)
FAILURES = (3.6, 21.0)


def measurement(name, limits=METRES):
    return Point(
        name=name, kind=PointKind.MEASUREMENT, range=limits, writable=False, description=""
    )


LEVEL = measurement("LT-102")
OTHER = measurement("LT-101")
FLOAT = RegisterItem(point="LT-102", address=10, encoding=Encoding.FLOAT32)
COUNTS = RegisterItem(
    point="LT-102",
    address=20,
    encoding=Encoding.INT16,
    scaling=Scaling.COUNTS,
    counts_low=0,
    counts_high=32000,
)
WIDE = replace(COUNTS, encoding=Encoding.UINT16, counts_high=65535)
LONG = replace(COUNTS, encoding=Encoding.INT32, counts_high=1_000_000, address=24)
MICRO = RegisterItem(
    point="LT-102", address=30, encoding=Encoding.UINT16, scaling=Scaling.CURRENT
)
OTHER_ITEM = RegisterItem(point="LT-101", address=12, encoding=Encoding.FLOAT32)


def registers_of(current, item):
    """Encode with the rig's own codec; the diagnosis has another one."""
    registers = {8: 0x0102, 9: 0x4111, 14: 0x3333, 19: 77, 21: 4711, 23: 5, 26: 7}
    value = METRES.from_fraction((current - 4) / 16)
    failed = current <= 3.6 or current >= 21.0
    other = 0.7731
    for point, one, shown, ma in (
        (LEVEL, item, value, current),
        (OTHER, OTHER_ITEM, other, 4 + 16 * other / 1.5),
    ):
        data = ItemCodec(point, one).encode(shown, ma, 2 if failed and one is item else 0)
        for i in range(0, len(data), 2):
            registers[one.address + i // 2] = int.from_bytes(data[i : i + 2], "big")
    return registers


def case_of(item, read, currents=CURRENTS, tolerance=0.0025):
    points = []
    for current in currents:
        registers = registers_of(current, item)
        points.append(
            Said(
                current_ma=current,
                said=read(registers, current),
                registers=registers,
                others={"LT-101": 0.7731},
            )
        )
    return TransmitterCase(
        point=LEVEL,
        items=(item,),
        neighbours=((OTHER, OTHER_ITEM),),
        points=tuple(points),
        tolerance=tolerance,
    )


def by_registers(item, **changes):
    """Return a controller that reads with its own idea of the item."""
    own = replace(item, **changes)

    def read(registers, _):
        return scaled(
            registers_at(registers, own.address, own.encoding, own.word_order), own, METRES
        )

    return read


def value(current):
    return METRES.from_fraction((current - 4) / 16)


def test_the_right_one_is_right_in_every_way_to_show_it():
    for item in (FLOAT, COUNTS, WIDE, LONG, MICRO, replace(FLOAT, word_order=WordOrder.CDAB)):
        check = check_transmitter(case_of(item, by_registers(item)))
        assert (check.outcome, check.mistake) == (Outcome.PASS, ""), (item, check)


REGISTER_MISTAKES = [
    (FLOAT, {"word_order": WordOrder.CDAB}, "word order CDAB"),
    (FLOAT, {"word_order": WordOrder.BADC}, "word order BADC"),
    (FLOAT, {"word_order": WordOrder.DCBA}, "word order DCBA"),
    (LONG, {"word_order": WordOrder.CDAB}, "word order CDAB"),
    (FLOAT, {"address": 11}, "address base, off by one"),
    (FLOAT, {"address": 9}, "address base, off by one"),
    (COUNTS, {"address": 21}, "address base, off by one"),
    (COUNTS, {"encoding": Encoding.UINT16}, "unsigned for signed"),
    (WIDE, {"encoding": Encoding.INT16}, "signed for unsigned"),
    (FLOAT, {"encoding": Encoding.UINT16}, "half of a 32-bit value"),
    (LONG, {"encoding": Encoding.UINT16, "address": 25}, "half of a 32-bit value"),
    (FLOAT, {"encoding": Encoding.UINT32}, "integer for float"),
    (COUNTS, {"scaling": Scaling.ENGINEERING}, "counts for engineering units"),
    (MICRO, {"scaling": Scaling.ENGINEERING}, "counts for engineering units"),
    (FLOAT, {"address": 12}, "swapped tags: LT-101 for LT-102"),
]


@pytest.mark.parametrize(("item", "changes", "name"), REGISTER_MISTAKES)
def test_a_wrong_way_to_take_the_registers_is_named(item, changes, name):
    check = check_transmitter(case_of(item, by_registers(item, **changes)))
    assert (check.outcome, check.mistake) == (Outcome.FAIL, name), check
    assert check.evidence
    assert check.look_at


VALUE_MISTAKES = [
    (lambda i: 100 * (i - 4) / 16, "percent for engineering units"),
    (lambda i: (i - 4) / 16, "fraction for engineering units"),
    (lambda i: 1.5 * i / 20, "scaled 0-20 mA for 4-20 mA"),
    (lambda i: 1.5 * (20 * (i - 4) / 16 - 4) / 16, "scaled 4-20 mA for 0-20 mA"),
    (lambda i: 1.5 - value(i), "inverted signal"),
    (lambda i: 1000 * value(i), "unit mm for m"),
    (lambda i: value(i) / 0.3048, "unit ft for m"),
    (lambda i: 10 * value(i), "decimal factor 10"),
    (lambda i: min(max(value(i), 0.0), 1.5), "clamped ends"),
    (lambda _: 0.75, "stale value"),
    (lambda i: value(i) + 273.15, "offset"),
    (lambda i: 2.0 * (i - 4) / 16, "wrong range"),
    (lambda i: 0.25 + 1.2 * (i - 4) / 16, "wrong range"),
]


@pytest.mark.parametrize(("said", "name"), VALUE_MISTAKES)
def test_a_wrong_value_is_named(said, name):
    check = check_transmitter(case_of(FLOAT, lambda _, current: said(current)))
    assert (check.outcome, check.mistake) == (Outcome.FAIL, name), check


def test_a_wrong_range_is_told_with_its_ends():
    check = check_transmitter(case_of(FLOAT, lambda _, i: 0.25 + 1.2 * (i - 4) / 16))
    assert "4 to 20 mA for 0.25 to 1.45 m" in check.evidence


def test_swapped_tags_are_told_from_a_stale_value_where_the_other_tag_stands_still():
    check = check_transmitter(case_of(FLOAT, lambda *_: 0.7731))
    assert check.mistake == "swapped tags: LT-101 for LT-102"


def test_two_points_are_not_taken_for_more_than_they_tell():
    """At 25 and 75 % alone a factor of 1000 and millimetres are the same thing, and both told."""
    check = check_transmitter(
        case_of(FLOAT, lambda _, i: 1000 * value(i), currents=(8.0, 16.0))
    )
    assert check.mistake == "unit mm for m"
    assert check.others == ("decimal factor 1000",)


def test_what_no_mistake_explains_is_said_to_be_unexplained():
    check = check_transmitter(case_of(FLOAT, lambda _, i: value(i) ** 3 + 0.3))
    assert (check.outcome, check.mistake) == (Outcome.FAIL, "not explained")


def test_silence_is_invalid_not_failed():
    check = check_transmitter(case_of(FLOAT, lambda *_: None))
    assert check.outcome is Outcome.INVALID


def test_a_failure_current_taken_for_an_empty_vessel_is_named():
    def careless(_, current):
        return value(current) if 3.6 < current < 21 else 0.0

    check = check_transmitter(case_of(FLOAT, careless, currents=CURRENTS + FAILURES))
    assert check.mistake == "failure current not recognised"
    assert "3.6 mA" in check.evidence

    def careful(_, current):
        return value(current) if 3.6 < current < 21 else math.nan

    assert (
        check_transmitter(case_of(FLOAT, careful, currents=CURRENTS + FAILURES)).outcome
        is Outcome.PASS
    )


def test_a_register_that_cannot_show_a_failure_is_no_fault_of_the_controller():
    """A uint16 on 0 to 65535 holds 0 at 3.6 mA: nothing lower exists."""
    check = check_transmitter(
        case_of(WIDE, by_registers(WIDE), currents=CURRENTS + FAILURES[:1])
    )
    assert check.outcome is Outcome.PASS
    assert "cannot show" in check.notes[0]


def test_ends_cut_off_are_told_where_another_register_shows_them():
    """The map shows the tag in float32 too, so that nothing need be lost."""
    points = []
    for current in CURRENTS:
        registers = registers_of(current, WIDE) | registers_of(current, FLOAT)
        said = scaled(registers_at(registers, 20, Encoding.UINT16), WIDE, METRES)
        points.append(Said(current_ma=current, said=said, registers=registers))
    case = TransmitterCase(
        point=LEVEL, items=(FLOAT, WIDE), neighbours=(), points=tuple(points)
    )
    check = check_transmitter(case)
    assert check.mistake == "clamped ends"
    assert "uint16 at 20" in check.others[0]
    assert check_transmitter(replace(case, items=(WIDE,))).outcome is Outcome.PASS


def test_a_controller_that_holds_its_last_value_on_failure_is_noted():
    held = 1.5 * (20.75 - 4) / 16
    case = case_of(
        FLOAT,
        lambda _, i: value(i) if 3.6 < i < 21 else held,
        currents=(*CURRENTS, 20.75, *FAILURES),
    )
    check = check_transmitter(case)
    assert check.outcome is Outcome.PASS
    assert "holds the value" in check.notes[-1]


def test_bands_of_namur_ne_43():
    """NAMUR NE 43: measurement 3.8 to 20.5 mA, failure at most 3.6 or at least 21.0 mA."""
    told = {
        3.5: Band.FAILURE_LOW,
        3.6: Band.FAILURE_LOW,
        3.7: Band.BELOW,
        3.8: Band.UNDER_RANGE,
        4.0: Band.MEASUREMENT,
        20.0: Band.MEASUREMENT,
        20.5: Band.OVER_RANGE,
        20.7: Band.ABOVE,
        21.0: Band.FAILURE_HIGH,
        22.0: Band.FAILURE_HIGH,
    }
    assert {current: band_of(current) for current in told} == told


TOLD = (0.0, 25.0, 50.0, 75.0, 100.0)


def swapped_words(number):
    data = struct.pack(">f", number)
    return struct.unpack(">f", data[2:] + data[:2])[0]


VALVE_MISTAKES = [
    (lambda told: told / 100, "fraction for percent"),
    (lambda told: 100 - told, "inverted output"),
    (lambda _: 55.0, "output does not follow"),
    (lambda told: told + 3, "output offset"),
    (lambda told: 20 + 0.8 * told, "wrong output scale"),
    (swapped_words, "word order CDAB"),
]


@pytest.mark.parametrize(("arrives", "name"), VALVE_MISTAKES)
def test_a_wrong_output_is_named(arrives, name):
    points = [ValvePoint(told=told, received=arrives(told)) for told in TOLD]
    check = check_valve("FV-101", points)
    assert (check.outcome, check.mistake) == (Outcome.FAIL, name), check


def test_a_right_output_passes():
    points = [ValvePoint(told=told, received=told + 0.01) for told in TOLD]
    assert check_valve("FV-101", points).outcome is Outcome.PASS


def test_an_output_that_never_came_is_explained_by_what_was_refused():
    refused = (
        "FC16: FV-102 at 22 is read only; answered exception 02",
        "FC16: FV-101 = 27648 % is outside 0 to 100 %; answered exception 03",
    )
    check = check_valve("FV-101", [ValvePoint(told=50.0, received=None, refused=refused[:1])])
    assert check.mistake == "wrong valve register"
    scaled_up = [
        ValvePoint(
            told=told, received=None, refused=(f"FV-101 = {276.48 * told:g} % is outside",)
        )
        for told in TOLD[1:]
    ]
    assert check_valve("FV-101", scaled_up).mistake == "wrong output scale"
    assert (
        check_valve("FV-101", [ValvePoint(told=50.0, received=None)]).outcome is Outcome.INVALID
    )


def test_refusals_are_told_by_name():
    for text, name in (
        ("FC03: unit 7 is not here; the rig is unit 1", "wrong unit id"),
        (
            "FC03: address 25 is not in the map (asked for 1 to 25)",
            "address base or wrong address",
        ),
        ("FC06: half of FV-101, whose two registers", "half of a 32-bit value written"),
    ):
        assert refusal_cause((text,)).mistake == name
    assert refusal_cause(()) is None
