"""What registers say when they are taken one way or another, right or wrong."""

from __future__ import annotations

import math
import struct
from typing import TYPE_CHECKING

from harness.analysis.signal_case import LIVE_ZERO_MA, SPAN_MA
from harness.domain.rig import Encoding, Scaling, WordOrder

if TYPE_CHECKING:
    from harness.analysis.signal_case import Registers
    from harness.domain.rig import RegisterItem
    from harness.domain.signals import Range

_MICRO = 1000.0  # microamperes in a milliampere [-]
_PLACES = {  # where the bytes of the value A B C D stand on the wire
    WordOrder.ABCD: (0, 1, 2, 3),
    WordOrder.CDAB: (2, 3, 0, 1),
    WordOrder.BADC: (1, 0, 3, 2),
    WordOrder.DCBA: (3, 2, 1, 0),
}
_FORMATS = {
    Encoding.UINT16: ">H",
    Encoding.INT16: ">h",
    Encoding.UINT32: ">I",
    Encoding.INT32: ">i",
    Encoding.FLOAT32: ">f",
}
_REGISTER = 2  # bytes


def words_of(encoding: Encoding) -> int:
    """Return how many registers a type takes [-]."""
    return struct.calcsize(_FORMATS[encoding]) // _REGISTER


def taken_as(data: bytes, encoding: Encoding, order: WordOrder = WordOrder.ABCD) -> float:
    """Return the number in some bytes.

    Parameters
    ----------
    data : bytes
        Two bytes or four, as on the wire.
    encoding : Encoding
        Type.
    order : WordOrder
        Order of four bytes.

    Returns
    -------
    float
        The number [-].
    """
    if len(data) > _REGISTER:
        data = bytes(data[place] for place in _PLACES[order])
    return float(struct.unpack(_FORMATS[encoding], data)[0])


def registers_at(
    registers: Registers, address: int, encoding: Encoding, order: WordOrder = WordOrder.ABCD
) -> float:
    """Return the number that registers hold; not a number where they are not in the map.

    Parameters
    ----------
    registers : mapping of int to int
        Registers by address, counted from 0 [-].
    address : int
        First register [-].
    encoding : Encoding
        Type.
    order : WordOrder
        Order of a 32-bit value.

    Returns
    -------
    float
        The number [-].
    """
    wanted = range(address, address + words_of(encoding))
    if any(each not in registers for each in wanted):
        return math.nan
    data = b"".join(registers[each].to_bytes(_REGISTER, "big") for each in wanted)
    return taken_as(data, encoding, order)


def scaled(number: float, item: RegisterItem, limits: Range) -> float:
    """Return the value that the number of an item stands for.

    Parameters
    ----------
    number : float
        Number in the registers [-].
    item : RegisterItem
        Its scaling.
    limits : Range
        Range it is scaled onto.

    Returns
    -------
    float
        In the range's unit [unit].
    """
    match item.scaling:
        case Scaling.ENGINEERING:
            return number if item.encoding is Encoding.FLOAT32 else number / item.factor
        case Scaling.CURRENT:
            return limits.from_fraction((number / _MICRO - LIVE_ZERO_MA) / SPAN_MA)
        case Scaling.COUNTS:
            return limits.from_fraction(
                (number - item.counts_low) / (item.counts_high - item.counts_low)
            )
