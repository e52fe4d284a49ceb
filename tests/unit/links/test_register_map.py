"""A register map for people, and what is wrong with one."""

from __future__ import annotations

import pytest

from harness.domain.rig import Encoding, RegisterItem, Scaling, WordOrder
from harness.domain.signals import Point, PointKind, Range
from harness.links.registers import check_map, describe_map

POINTS = (
    Point(name="LT-1", kind=PointKind.MEASUREMENT, range=Range(lower=0, upper=4, unit="m"), writable=False, description="Level of TK-1"),
    Point(name="FV-1", kind=PointKind.COMMAND, range=Range(lower=0, upper=100, unit="%"), writable=True, description="Command to FV-1"),
    Point(name="MODE", kind=PointKind.MODE, range=Range(lower=0, upper=1, unit=""), writable=True, description="Mode"),
)  # fmt: skip


def item(point="LT-1", address=0, encoding=Encoding.FLOAT32, **rest):
    return RegisterItem(point=point, address=address, encoding=encoding, **rest)


def problems(*items):
    return check_map(POINTS, items)


def only(*items):
    found = problems(*items)
    assert len(found) == 1, found
    return found[0]


def test_a_good_map_has_no_problems():
    good = (
        item(address=0),
        item(address=2, encoding=Encoding.UINT16, scaling=Scaling.CURRENT),
        item(address=3, encoding=Encoding.INT16, scaling=Scaling.COUNTS, counts_high=32000),
        item("FV-1", 65534, Encoding.UINT32, factor=100.0, split_writes=True),
        item("MODE", 0, Encoding.BIT),  # bits have addresses of their own
        item("MODE", 65535, Encoding.BIT),
    )
    assert problems(*good) == []
    assert problems() == []


@pytest.mark.parametrize("second", [0, 1])
def test_overlap(second):
    index, text = only(item(address=0), item("FV-1", second, Encoding.UINT16))
    assert index == 1
    assert f'address {second} of "FV-1"' in text
    assert '"LT-1" at 0 to 1' in text


def test_overlap_by_the_second_word_and_of_bits():
    assert '"LT-1" at 1 to 2' in only(item(address=1), item("FV-1", 0))[1]
    index, text = only(item("MODE", 7, Encoding.BIT), item("MODE", 7, Encoding.BIT))
    assert (index, '"MODE" at 7 to 7' in text) == (1, True)


@pytest.mark.parametrize(
    ("bad", "words"),
    [
        (item("LT-9"), '"LT-9" is not a point of this rig; it has LT-1, FV-1, MODE'),
        (item(address=-1), "-1 to 0; they must lie within 0 to 65535"),
        (item(address=65535), "65535 to 65536"),
        (item(factor=10.0), "factor 10, which counts only for an integer"),
        (item(encoding=Encoding.UINT16, factor=0.0), "factor 0; it must be"),
        (item(encoding=Encoding.UINT16, factor=float("nan")), "factor nan; it must be"),
        (item(scaling=Scaling.COUNTS), "counts need an integer type"),
        (item(encoding=Encoding.INT16, scaling=Scaling.COUNTS), "the count 65535; int16 holds -32768 to 32767"),
        (item(encoding=Encoding.UINT16, scaling=Scaling.COUNTS, counts_high=0), "0 counts at both ends"),
        (item("MODE", 0, Encoding.BIT, scaling=Scaling.CURRENT), "a bit is 0 or 1"),
        (item(encoding=Encoding.UINT16, split_writes=True), "no halves"),
        (item("FV-1", 0, Encoding.BIT), "reaches 100 %"),
        (item("FV-1", 0, Encoding.INT16, factor=1000.0), "which is 100000 in the register"),
    ],
)  # fmt: skip
def test_each_problem_is_told(bad, words):
    index, text = only(bad)
    assert index == 0
    assert words in text


def test_every_problem_is_told_in_order_of_the_items():
    found = problems(item("X", -3), item(address=5), item(address=6), item("FV-1", 70000))
    assert [index for index, _ in found] == [0, 0, 2, 3]


def test_rows_for_people():
    rows = describe_map(
        POINTS,
        (
            item("MODE", 3, Encoding.BIT),
            item("FV-1", 10, word_order=WordOrder.CDAB),
            item("FV-1", 12, Encoding.INT32, factor=1000.0, split_writes=True),
            item(address=2, encoding=Encoding.UINT16, scaling=Scaling.CURRENT),
            item(address=1, encoding=Encoding.UINT16, scaling=Scaling.COUNTS),
            item("GONE", 100),
        ),
    )
    assert [(row.point, row.address, row.address_from_one, row.count) for row in rows] == [
        ("LT-1", 1, 2, 1),
        ("LT-1", 2, 3, 1),
        ("FV-1", 10, 11, 2),
        ("FV-1", 12, 13, 2),
        ("MODE", 3, 4, 1),
    ]
    assert [row.scaling for row in rows] == [
        "0 to 65535 for 0 to 4 m",
        "4000 to 20000 microamperes for 0 to 4 m",
        "value",
        "value times 1000",
        "0 or 1",
    ]
    assert [row.functions for row in rows] == [
        "03, 04, 23",
        "03, 04, 23",
        "03, 04, 23; 16, 23",
        "03, 04, 23; 06, 16, 22, 23",
        "01, 02; 05, 15",
    ]
    assert [row.access for row in rows] == [
        "read",
        "read",
        "read, write",
        "read, write",
        "read, write",
    ]
    assert rows[2].word_order == "CDAB"
    assert rows[0].word_order == ""
    assert (rows[0].unit, rows[0].description, rows[0].encoding) == (
        "m",
        "Level of TK-1",
        "uint16",
    )
