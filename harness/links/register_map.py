"""A register map for people, and what is wrong with one."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.domain.rig import Encoding, RegisterItem, Scaling
from harness.domain.signals import PointKind
from harness.links.codecs import (
    CURRENT_LOW_MA,
    CURRENT_SPAN_MA,
    FLOAT32_MAX,
    INTEGER_TYPES,
    MICRO_PER_MILLI,
    register_count,
)

if TYPE_CHECKING:
    from collections.abc import Iterator

    from harness.domain.signals import Point

ADDRESS_MAX = 65535  # the address field has 16 bits (Modbus Application Protocol V1.1b3, 4.4)


@dataclass(frozen=True, slots=True, kw_only=True)
class MapRow:
    """One line of a register map, for people.

    Parameters
    ----------
    point : str
        Name of the point.
    address : int
        First register or bit, counted from 0, as it goes over the wire [-].
    address_from_one : int
        The same, counted from 1, as many programming tools show it [-].
    count : int
        Registers or bits taken [-].
    functions : str
        Function codes that read it, and those that write it.
    encoding : str
        Type, e.g. ``"float32"``.
    word_order : str
        Byte order of a 32-bit value; empty for 16 bits.
    scaling : str
        How the number stands for the value.
    unit : str
        Unit of the point.
    access : str
        ``"read"`` or ``"read, write"``.
    description : str
        One line on the point.
    """

    point: str
    address: int
    address_from_one: int
    count: int
    functions: str
    encoding: str
    word_order: str
    scaling: str
    unit: str
    access: str
    description: str


def describe_map(
    points: tuple[Point, ...], items: tuple[RegisterItem, ...]
) -> tuple[MapRow, ...]:
    """Return a register map for people, registers first, each part by address.

    Parameters
    ----------
    points : tuple of Point
        Points of the rig.
    items : tuple of RegisterItem
        The map; items of unknown points are left out.

    Returns
    -------
    tuple of MapRow
        One row an item.
    """
    by_name = {point.name: point for point in points}
    known = [item for item in items if item.point in by_name]
    known.sort(key=lambda item: (item.encoding is Encoding.BIT, item.address))
    return tuple(_row(by_name[item.point], item) for item in known)


def _row(point: Point, item: RegisterItem) -> MapRow:
    count = register_count(item.encoding)
    bit = item.encoding is Encoding.BIT
    reading, writing = ("01, 02", "05, 15") if bit else ("03, 04, 23", "06, 16, 22, 23")
    if count > 1 and not item.split_writes:
        writing = "16, 23"
    return MapRow(
        point=point.name,
        address=item.address,
        address_from_one=item.address + 1,
        count=count,
        functions=f"{reading}; {writing}" if point.writable else reading,
        encoding=item.encoding.value,
        word_order=item.word_order.value if count > 1 else "",
        scaling=scaling_text(point, item),
        unit=point.range.unit,
        access="read, write" if point.writable else "read",
        description=point.description,
    )


def scaling_text(point: Point, item: RegisterItem) -> str:
    """Return how the number in the registers stands for the point's value, in words.

    Parameters
    ----------
    point : Point
        The point.
    item : RegisterItem
        Its place in the map.

    Returns
    -------
    str
        E.g. ``"0 to 32000 for 0 to 4 m"``.
    """
    limits = point.range
    span = f"for {limits.lower:g} to {limits.upper:g} {limits.unit}".rstrip()
    if item.encoding is Encoding.BIT:
        return "0 or 1"
    match item.scaling:
        case Scaling.COUNTS:
            return f"{item.counts_low} to {item.counts_high} {span}"
        case Scaling.CURRENT:
            low = CURRENT_LOW_MA * MICRO_PER_MILLI
            high = low + CURRENT_SPAN_MA * MICRO_PER_MILLI
            return f"{low:g} to {high:g} microamperes {span}"
        case Scaling.ENGINEERING:
            return "value" if item.factor == 1.0 else f"value times {item.factor:g}"


def check_map(
    points: tuple[Point, ...], items: tuple[RegisterItem, ...]
) -> list[tuple[int, str]]:
    """Return everything that is wrong with a register map.

    Parameters
    ----------
    points : tuple of Point
        Points of the rig.
    items : tuple of RegisterItem
        The map.

    Returns
    -------
    list of (int, str)
        Index of the item [-] and the problem, in order of the items; empty for a good map.
    """
    by_name = {point.name: point for point in points}
    problems = list(_overlaps(items))
    for index, item in enumerate(items):
        problems.extend((index, text) for text in _address_problems(item))
        problems.extend((index, text) for text in _scaling_problems(item))
        point = by_name.get(item.point)
        if point is None:
            names = ", ".join(by_name) or "none"
            problems.append(
                (index, f'"{item.point}" is not a point of this rig; it has {names}')
            )
        else:
            problems.extend((index, text) for text in _range_problems(point, item))
    return sorted(problems, key=lambda problem: problem[0])


def _overlaps(items: tuple[RegisterItem, ...]) -> Iterator[tuple[int, str]]:
    """Yield every item that starts inside, or takes over, another one of its address space."""
    for bits in (False, True):
        taken: dict[int, int] = {}
        for index, item in enumerate(items):
            if (item.encoding is Encoding.BIT) is not bits:
                continue
            cells = range(item.address, item.address + register_count(item.encoding))
            rivals = dict.fromkeys(taken[cell] for cell in cells if cell in taken)
            for rival in rivals:
                other = items[rival]
                last = other.address + register_count(other.encoding) - 1
                yield (
                    index,
                    f'address {item.address} of "{item.point}" ({item.encoding.value}) overlaps '
                    f'"{other.point}" at {other.address} to {last}; give each its own addresses',
                )
            taken.update(dict.fromkeys(cells, index))


def _address_problems(item: RegisterItem) -> Iterator[str]:
    last = item.address + register_count(item.encoding) - 1
    if item.address < 0 or last > ADDRESS_MAX:
        yield (
            f'"{item.point}" takes addresses {item.address} to {last}; '
            f"they must lie within 0 to {ADDRESS_MAX}, counted from 0"
        )


def _scaling_problems(item: RegisterItem) -> Iterator[str]:
    name, encoding = f'"{item.point}"', item.encoding
    if not math.isfinite(item.factor) or item.factor <= 0.0:
        yield f"{name} has the factor {item.factor:g}; it must be a finite number above 0"
    elif item.factor != 1.0 and (
        item.scaling is not Scaling.ENGINEERING or encoding not in INTEGER_TYPES
    ):
        yield (
            f"{name} has the factor {item.factor:g}, which counts only for an integer in "
            f"engineering scaling, not for {encoding.value} in {item.scaling.value}; leave it out"
        )
    if encoding is Encoding.BIT and item.scaling is not Scaling.ENGINEERING:
        yield f"{name} is a bit with {item.scaling.value} scaling; a bit is 0 or 1, leave it out"
    if item.split_writes and register_count(encoding) == 1:
        yield f"{name} is {encoding.value}, which has no halves; split writes need a 32-bit type"
    if item.scaling is Scaling.COUNTS and encoding is not Encoding.BIT:
        yield from _counts_problems(item)


def _counts_problems(item: RegisterItem) -> Iterator[str]:
    kind = INTEGER_TYPES.get(item.encoding)
    if kind is None:
        yield f'"{item.point}" has counts in {item.encoding.value}; counts need an integer type'
        return
    if item.counts_low == item.counts_high:
        yield f'"{item.point}" has {item.counts_low} counts at both ends of its range'
    for count in (item.counts_low, item.counts_high):
        if not kind.low <= count <= kind.high:
            yield (
                f'"{item.point}" has the count {count}; '
                f"{item.encoding.value} holds {kind.low} to {kind.high}"
            )


def _range_problems(point: Point, item: RegisterItem) -> Iterator[str]:
    """Yield where the ends of the point's range do not fit the type."""
    kind = INTEGER_TYPES.get(item.encoding)
    bit = item.encoding is Encoding.BIT
    factor = item.factor if kind is not None else 1.0
    if (item.scaling is Scaling.COUNTS and not bit) or not 0.0 < factor < math.inf:
        return  # the counts, or the factor, are told of already
    if point.kind is PointKind.READ_BACK:
        return  # as wide as any value that its type can hold
    low, high = (0.0, 1.0) if bit else (-FLOAT32_MAX, FLOAT32_MAX)
    if kind is not None:
        low, high = kind.low, kind.high
    for end in (point.range.lower, point.range.upper):
        number = end * factor
        if item.scaling is Scaling.CURRENT and not bit:
            fraction = point.range.to_fraction(end)
            number = (CURRENT_LOW_MA + CURRENT_SPAN_MA * fraction) * MICRO_PER_MILLI
        if not low <= number <= high:
            yield (
                f'"{point.name}" reaches {end:g} {point.range.unit}'.rstrip()
                + f", which is {number:g} in the register; "
                f"{item.encoding.value} holds {low:g} to {high:g}"
            )
