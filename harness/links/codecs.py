"""From a point's value to bytes on the wire and back, one register item at a time.

Rounding is half up, and what does not fit the type is clamped to the type's end: 12 mA on
0 to 65535 counts is 32768. A failed transmitter is never shown as a plausible level:

- as loop current, it shows its failure current (NAMUR NE 43: 3.6 mA and below, or 21.0 mA and above);
- as counts, the failure current on the count scale, clamped by the type: -750 for 3.6 mA on
  0 to 30000 in an int16, 0 on 0 to 65535 in a uint16, where nothing lower exists;
- as float32 in engineering units, NaN: there is no current to look at, and any number would be
  taken for a level;
- as integer in engineering units, the value that its failure current stands for, clamped.

Where there is no number at all (NaN, and no current), integers show the type's mark: the lowest
value of a signed type, the highest of an unsigned one.
"""

from __future__ import annotations

import math
import struct
from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.domain.rig import Encoding, RegisterItem, Scaling, WordOrder
from harness.domain.signals import PointKind, Quality
from harness.errors import PeerError

if TYPE_CHECKING:
    from collections.abc import Callable

    from harness.domain.signals import Point

CURRENT_LOW_MA = 4.0  # live zero of a 4-20 mA loop [mA] (IEC 60381-1, value from memory)
CURRENT_SPAN_MA = 16.0  # from 4 to 20 mA [mA] (IEC 60381-1, value from memory)
FAILURE_LOW_MA = 3.6  # at or below: failure [mA] (NAMUR NE 43)
FAILURE_HIGH_MA = 21.0  # at or above: failure [mA] (NAMUR NE 43)
MEASUREMENT_LOW_MA = 3.8  # lowest current that is a measurement [mA] (NAMUR NE 43)
MEASUREMENT_HIGH_MA = 20.5  # highest current that is a measurement [mA] (NAMUR NE 43)
MICRO_PER_MILLI = 1000.0  # microamperes in a milliampere [-]
FLOAT32_MAX = struct.unpack(">f", b"\x7f\x7f\xff\xff")[0]  # largest finite (IEEE 754)
QUIET_NAN = b"\x7f\xc0\x00\x00"  # float32 quiet NaN without payload (IEEE 754)


class ValueRefusedError(PeerError):
    """A peer wrote a value that the point does not take."""


@dataclass(frozen=True, slots=True, kw_only=True)
class IntegerType:
    """Limits of an integer on the wire.

    Parameters
    ----------
    low, high : int
        Smallest and largest value [-].
    size : int
        Length [bytes].
    """

    low: int
    high: int
    size: int

    @property
    def mark(self) -> int:
        """Return the value that stands for "no number" [-]."""
        return self.low if self.low < 0 else self.high


INTEGER_TYPES = {
    Encoding.UINT16: IntegerType(low=0, high=2**16 - 1, size=2),
    Encoding.INT16: IntegerType(low=-(2**15), high=2**15 - 1, size=2),
    Encoding.UINT32: IntegerType(low=0, high=2**32 - 1, size=4),
    Encoding.INT32: IntegerType(low=-(2**31), high=2**31 - 1, size=4),
}

_PERMUTATIONS: dict[WordOrder, Callable[[bytes], bytes]] = {  # each is its own inverse
    WordOrder.ABCD: lambda four: four,
    WordOrder.CDAB: lambda four: four[2:] + four[:2],
    WordOrder.BADC: lambda four: bytes((four[1], four[0], four[3], four[2])),
    WordOrder.DCBA: lambda four: four[::-1],
}


def reorder(data: bytes, order: WordOrder) -> bytes:
    """Return the four bytes of a 32-bit value in another order; twice gives the original.

    Parameters
    ----------
    data : bytes
        Four bytes.
    order : WordOrder
        Order on the wire.

    Returns
    -------
    bytes
        Four bytes.
    """
    return _PERMUTATIONS[order](data)


def register_count(encoding: Encoding) -> int:
    """Return how many registers (or bits, for a bit) a value takes [-]."""
    if encoding is Encoding.FLOAT32:
        return 2
    return 1 if encoding is Encoding.BIT else INTEGER_TYPES[encoding].size // 2


def round_half_up(number: float) -> int:
    """Return the nearest integer, halves towards plus infinity [-]."""
    return math.floor(number + 0.5)


class ItemCodec:
    """Encodes and decodes one item of a register map (registers, not bits).

    Parameters
    ----------
    point : Point
        The point shown.
    item : RegisterItem
        Where and how; ``check_map`` must have found nothing wrong with it.
    """

    def __init__(self, point: Point, item: RegisterItem) -> None:
        self._point = point
        self._item = item
        self._integer = INTEGER_TYPES.get(item.encoding)
        self.size = 2 * register_count(item.encoding)
        # An end of the range may round to a number just outside it: that number is taken too.
        ends = [self._value_of(self._rounded(end)) for end in self._range_ends()]
        self._accept_low = min(*ends, point.range.lower)
        self._accept_high = max(*ends, point.range.upper)
        edges = (FAILURE_LOW_MA, MEASUREMENT_LOW_MA, MEASUREMENT_HIGH_MA, FAILURE_HIGH_MA)
        self._edges = tuple(self._rounded(self._number_at(edge)) for edge in edges)
        self._rising = self._edges[0] <= self._edges[-1]

    def encode(self, value: float, current: float, quality: int) -> bytes:
        """Return the value as bytes in wire order.

        Parameters
        ----------
        value : float
            Value in the point's unit [unit].
        current : float
            Loop current; NaN where the point is no 4-20 mA signal [mA].
        quality : int
            ``Quality`` number [-].

        Returns
        -------
        bytes
            Two bytes, or four.
        """
        return self._bytes_of(self._number(value, current, quality))

    def encode_written(self, value: float) -> bytes:
        """Return a value to be written as bytes in wire order [unit]."""
        return self.encode(value, math.nan, Quality.GOOD)

    def decode_written(self, data: bytes) -> float:
        """Return the value that a peer has written.

        Parameters
        ----------
        data : bytes
            Two bytes, or four, in wire order.

        Returns
        -------
        float
            Value within the point's range; a read-back may also be not a number, which says
            that the controller has no value [unit].

        Raises
        ------
        ValueRefusedError
            If it is NaN, infinite or outside the point's range.
        """
        value = self._value_of(self._raw(data))
        limits = self._point.range
        if self._point.kind is PointKind.READ_BACK and math.isnan(value):
            return value  # the controller says that it has no value
        if not self._accept_low <= value <= self._accept_high:  # NaN is not either
            raise ValueRefusedError(
                f"{self._point.name} = {value:g} {limits.unit}".rstrip()
                + f" is outside {limits.lower:g} to {limits.upper:g} {limits.unit}".rstrip()
            )
        return min(max(value, limits.lower), limits.upper)

    def decode_reading(self, data: bytes) -> tuple[float, Quality]:
        """Return a value read from a server, with what the bytes tell of its quality.

        Parameters
        ----------
        data : bytes
            Two bytes, or four, in wire order.

        Returns
        -------
        value : float
            Value in the point's unit; NaN where there is none [unit].
        quality : Quality
            From the loop current (NAMUR NE 43) for currents and measurements, from NaN or the
            type's mark otherwise.
        """
        raw = self._raw(data)
        value = self._value_of(raw)
        if not math.isfinite(value) or self._is_mark(raw, value):
            return math.nan, Quality.BAD
        if self._item.scaling is Scaling.CURRENT or self._point.kind is PointKind.MEASUREMENT:
            return value, self._quality_of(raw)
        return value, Quality.GOOD

    def _range_ends(self) -> tuple[float, float]:
        limits = self._point.range
        return (
            self._number(limits.lower, math.nan, Quality.GOOD),
            self._number(limits.upper, math.nan, Quality.GOOD),
        )

    def _number(self, value: float, current: float, quality: int) -> float:
        """Return the number to go into the registers, neither rounded nor clamped."""
        item, limits = self._item, self._point.range
        if item.scaling is Scaling.ENGINEERING:
            if quality == Quality.BAD and self._integer is None:
                return math.nan
            if quality == Quality.BAD and not math.isnan(current):
                value = limits.from_fraction((current - CURRENT_LOW_MA) / CURRENT_SPAN_MA)
            return value * item.factor if self._integer is not None else value
        if math.isnan(current):
            current = CURRENT_LOW_MA + CURRENT_SPAN_MA * limits.to_fraction(value)
        if item.scaling is Scaling.CURRENT:
            return current * MICRO_PER_MILLI
        fraction = (current - CURRENT_LOW_MA) / CURRENT_SPAN_MA
        return item.counts_low + fraction * (item.counts_high - item.counts_low)

    def _bytes_of(self, number: float) -> bytes:
        kind = self._integer
        if kind is None:
            data = QUIET_NAN
            if not math.isnan(number):
                data = struct.pack(">f", min(max(number, -FLOAT32_MAX), FLOAT32_MAX))
        else:
            whole = kind.mark
            if not math.isnan(number):
                whole = round_half_up(min(max(number, kind.low), kind.high))
            data = whole.to_bytes(kind.size, "big", signed=kind.low < 0)
        return data if len(data) == 2 else reorder(data, self._item.word_order)  # noqa: PLR2004  bytes of one register

    def _raw(self, data: bytes) -> float:
        """Return the number in the registers."""
        if len(data) == 4:  # noqa: PLR2004  bytes of two registers
            data = reorder(data, self._item.word_order)
        if self._integer is None:
            return float(struct.unpack(">f", data)[0])
        return int.from_bytes(data, "big", signed=self._integer.low < 0)

    def _value_of(self, raw: float) -> float:
        item, limits = self._item, self._point.range
        if item.scaling is Scaling.ENGINEERING:
            return raw / item.factor if self._integer is not None else raw
        if item.scaling is Scaling.CURRENT:
            return limits.from_fraction(
                (raw / MICRO_PER_MILLI - CURRENT_LOW_MA) / CURRENT_SPAN_MA
            )
        return limits.from_fraction(
            (raw - item.counts_low) / (item.counts_high - item.counts_low)
        )

    def _is_mark(self, raw: float, value: float) -> bool:
        limits = self._point.range
        outside = not limits.lower <= value <= limits.upper
        return self._integer is not None and raw == self._integer.mark and outside

    def _quality_of(self, raw: float) -> Quality:
        """Return the quality from the NE 43 bands, whose edges went through the same rounding."""
        failure_low, low, high, failure_high = (
            self._edges if self._rising else reversed(self._edges)
        )
        if low <= raw <= high:
            return Quality.GOOD
        if raw <= failure_low or raw >= failure_high:
            return Quality.BAD
        return Quality.UNCERTAIN

    def _number_at(self, current: float) -> float:
        """Return the number that a loop current gives in the registers."""
        limits = self._point.range
        value = limits.from_fraction((current - CURRENT_LOW_MA) / CURRENT_SPAN_MA)
        return self._number(value, current, Quality.GOOD)

    def _rounded(self, number: float) -> float:
        """Return what is left of a number after rounding and clamping by the type."""
        return self._raw(self._bytes_of(number))
