"""The register bank: an image of the rig as registers and bits, and guarded writes into it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.domain.rig import Encoding, RegisterItem
from harness.domain.signals import Quality
from harness.errors import LinkError, PeerError
from harness.links.codecs import ItemCodec, ValueRefusedError, register_count
from harness.links.register_map import MapRow, check_map, describe_map

if TYPE_CHECKING:
    from collections.abc import Sequence

    from harness.domain.signals import Point
    from harness.links.port import Snapshot

__all__ = [
    "AddressRefusedError",
    "MapRow",
    "RegisterBank",
    "ValueRefusedError",
    "Written",
    "check_map",
    "describe_map",
]

CATCH_UP_TICKS = (
    2  # a write is latched in the next tick, and seen in the image of the one after
)
_WORD = 2  # bytes in a register
_AREAS_MAX = 1_000  # areas whose points are kept; only a scanner reads more [-]
_NEVER = -2  # tick of a bank that holds no image yet; an image before the first has -1

Pending = dict[int, dict[int, bytes]]  # by item: halves of a split value, by 0 or 1


class AddressRefusedError(PeerError):
    """A peer asked for an address that is not in the map, or may not be written."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Written:
    """One value taken from a peer.

    Parameters
    ----------
    point : str
        Name of the point.
    address : int
        First register or bit of the item, counted from 0 [-].
    value : float
        Value in the point's unit.
    raw : str
        Its registers as hexadecimal text, or ``"0"`` or ``"1"`` for a bit.
    """

    point: str
    address: int
    value: float
    raw: str


@dataclass(frozen=True, slots=True, kw_only=True)
class _Overlay:
    """A written value that the image does not show yet."""

    tick: int
    value: float
    item: int
    raw: bytes


class RegisterBank:
    """Registers and bits of one rig, read and written by any number of connections.

    Each value stands once: functions 03 and 04 read the same registers, 01 and 02 the same
    bits. Addresses between the items are refused, not answered with zero, so that a map that
    is off by one is found at once.

    Parameters
    ----------
    points : tuple of Point
        Points of the rig, in the order of the image.
    items : tuple of RegisterItem
        The map.

    Raises
    ------
    LinkError
        If the map has problems; all are listed.
    """

    def __init__(self, points: tuple[Point, ...], items: tuple[RegisterItem, ...]) -> None:
        problems = check_map(points, items)
        if problems:
            listed = "\n".join(f"items[{index}]: {text}" for index, text in problems)
            raise LinkError(f"register map with {len(problems)} problem(s):\n{listed}")
        by_name = {point.name: index for index, point in enumerate(points)}
        self._points = points
        self._items = items
        self._point_of = [by_name[item.point] for item in items]
        self._items_of: dict[int, list[int]] = {}
        for place, index in enumerate(self._point_of):
            self._items_of.setdefault(index, []).append(place)
        self._codecs = [
            None if item.encoding is Encoding.BIT else ItemCodec(points[index], item)
            for item, index in zip(items, self._point_of, strict=True)
        ]
        self._registers = _Cells(items, bits=False)
        self._bits = _Cells(items, bits=True)
        self._overlays: dict[int, _Overlay] = {}
        self.tick = _NEVER
        # Replies to reads of the present content and the points in them, by request: clients
        # that poll flat out ask the same again and again between two ticks. Emptied whenever
        # the content changes.
        self.replies: dict[bytes, tuple[bytes, tuple[str, ...]]] = {}
        self._points_at: dict[tuple[int, int, bool], tuple[str, ...]] = {}

    def load(self, snapshot: Snapshot) -> None:
        """Take an image; the same tick again costs nothing.

        Parameters
        ----------
        snapshot : Snapshot
            One tick's values, in the order of the points.
        """
        if snapshot.tick == self.tick:
            return
        values = snapshot.values.tolist()
        currents = snapshot.currents.tolist()
        qualities = snapshot.qualities.tolist()
        for index, point in enumerate(self._point_of):
            self._show(index, values[point], currents[point], qualities[point])
        self.tick = snapshot.tick
        self._lay_over()
        self.replies.clear()

    def read_registers(self, address: int, count: int) -> bytes:
        """Return registers as bytes in wire order.

        Parameters
        ----------
        address, count : int
            First register, counted from 0, and number of registers [-].

        Returns
        -------
        bytes
            Two bytes a register.

        Raises
        ------
        AddressRefusedError
            If a register of them is not in the map.
        """
        cells = self._registers
        if cells.run_end.get(address, 0) < address + count:
            raise AddressRefusedError(cells.absent(address, count))
        return bytes(cells.content[_WORD * address : _WORD * (address + count)])

    def read_bits(self, address: int, count: int) -> bytes:
        """Return bits packed as on the wire, the first in the lowest bit of the first byte.

        Parameters
        ----------
        address, count : int
            First bit, counted from 0, and number of bits [-].

        Returns
        -------
        bytes
            One byte for eight bits, the last filled up with zeros.

        Raises
        ------
        AddressRefusedError
            If a bit of them is not in the map.
        """
        cells = self._bits
        if cells.run_end.get(address, 0) < address + count:
            raise AddressRefusedError(cells.absent(address, count))
        digits = cells.content[address : address + count]
        return int(digits[::-1], 2).to_bytes((count + 7) // 8, "little")

    def points_at(self, address: int, count: int, *, bits: bool = False) -> tuple[str, ...]:
        """Return the points that stand at addresses of the map, each once.

        Parameters
        ----------
        address, count : int
            First register or bit, counted from 0, and number of them; all in the map [-].
        bits : bool
            Whether bits are meant.

        Returns
        -------
        tuple of str
            Their names by address; the same tuple for the same addresses.
        """
        area = (address, count, bits)
        names = self._points_at.get(area)
        if names is None:
            cells = self._bits if bits else self._registers
            items = cells.touched(address, count)
            names = tuple(dict.fromkeys(self._items[index].point for index in items))
            if len(self._points_at) < _AREAS_MAX:
                self._points_at[area] = names
        return names

    def check_writable_registers(self, address: int, count: int) -> None:
        """Raise AddressRefusedError unless a peer may write all of these registers."""
        self._check_writable(self._registers, address, count)

    def write_registers(self, address: int, data: bytes, pending: Pending) -> list[Written]:
        """Take registers from a peer, all or none.

        Parameters
        ----------
        address : int
            First register, counted from 0 [-].
        data : bytes
            Two bytes a register.
        pending : dict
            Halves of split values that this connection has written so far; changed in place.

        Returns
        -------
        list of Written
            The values that are whole now, by address; none where only halves were written.

        Raises
        ------
        AddressRefusedError
            If a register of them is not in the map or not writable.
        ValueRefusedError
            If a value is NaN, infinite, out of range or only half written.
        """
        count = len(data) // _WORD
        self.check_writable_registers(address, count)
        whole: dict[int, bytes] = {}
        halves: Pending = {}
        for index in self._registers.touched(address, count):
            item = self._items[index]
            size = _WORD * register_count(item.encoding)
            start = _WORD * (item.address - address)
            if start >= 0 and start + size <= len(data):
                whole[index] = data[start : start + size]
                continue
            which = 1 if start < 0 else 0
            half = data[:_WORD] if which == 1 else data[-_WORD:]
            parts = self._with_half(index, which, half, pending)
            if len(parts) == _WORD:
                whole[index] = parts[0] + parts[1]
            else:
                halves[index] = parts
        values = self._decoded(whole, pending)
        for index in whole:
            pending.pop(index, None)
        pending.update(halves)
        return [self._take(index, values[index], whole[index]) for index in whole]

    def write_bits(self, address: int, bits: Sequence[bool]) -> list[Written]:
        """Take bits from a peer, all or none.

        Parameters
        ----------
        address : int
            First bit, counted from 0 [-].
        bits : sequence of bool
            Values.

        Returns
        -------
        list of Written
            The values taken.

        Raises
        ------
        AddressRefusedError
            If a bit of them is not in the map or not writable.
        ValueRefusedError
            If a point does not take the value.
        """
        self._check_writable(self._bits, address, len(bits))
        touched = self._bits.touched(address, len(bits))
        for index, bit in zip(touched, bits, strict=True):
            limits = self._points[self._point_of[index]].range
            if not limits.lower <= float(bit) <= limits.upper:
                raise ValueRefusedError(
                    f"{self._items[index].point} = {bit:d} is outside "
                    f"{limits.lower:g} to {limits.upper:g}"
                )
        return [
            self._take(index, float(bit), b"1" if bit else b"0")
            for index, bit in zip(touched, bits, strict=True)
        ]

    def pending_register(self, address: int, pending: Pending) -> bytes:
        """Return a register as this connection last wrote it, or else as it stands.

        Parameters
        ----------
        address : int
            Register, counted from 0; it must be in the map [-].
        pending : dict
            Halves written so far.

        Returns
        -------
        bytes
            Two bytes.
        """
        index = self._registers.item_at[address]
        half = pending.get(index, {}).get(address - self._items[index].address)
        return self.read_registers(address, 1) if half is None else half

    def _check_writable(self, cells: _Cells, address: int, count: int) -> None:
        if cells.run_end.get(address, 0) < address + count:
            raise AddressRefusedError(cells.absent(address, count))
        for index in cells.touched(address, count):
            if not self._points[self._point_of[index]].writable:
                item = self._items[index]
                raise AddressRefusedError(f"{item.point} at {item.address} is read only")

    def _with_half(
        self, index: int, which: int, half: bytes, pending: Pending
    ) -> dict[int, bytes]:
        """Return the halves of a split value that are there with this one."""
        item = self._items[index]
        if not item.split_writes:
            raise ValueRefusedError(
                f"half of {item.point}, whose two registers at {item.address} are written "
                "together (function 16), or one at a time with split_writes in the map"
            )
        return {**pending.get(index, {}), which: half}

    def _decoded(self, whole: dict[int, bytes], pending: Pending) -> dict[int, float]:
        """Return the values of whole items; a value refused takes its other half with it."""
        values: dict[int, float] = {}
        for index, data in whole.items():
            codec = self._codecs[index]
            assert codec is not None  # noqa: S101  an item among the registers has a codec
            try:
                values[index] = codec.decode_written(data)
            except ValueRefusedError:
                pending.pop(index, None)
                raise
        return values

    def _take(self, index: int, value: float, raw: bytes) -> Written:
        item = self._items[index]
        self._overlays[self._point_of[index]] = _Overlay(
            tick=self.tick, value=value, item=index, raw=raw
        )
        self._show_written(self._point_of[index])
        self.replies.clear()
        text = raw.decode() if item.encoding is Encoding.BIT else raw.hex().upper()
        return Written(point=item.point, address=item.address, value=value, raw=text)

    def _lay_over(self) -> None:
        """Show written values until the image has caught up, or was set back."""
        for point, overlay in list(self._overlays.items()):
            if overlay.tick <= self.tick < overlay.tick + CATCH_UP_TICKS:
                self._show_written(point)
            else:
                del self._overlays[point]

    def _show_written(self, point: int) -> None:
        """Show a written value wherever its point stands, in its own place as it was written."""
        overlay = self._overlays[point]
        for index in self._items_of[point]:
            self._show(index, overlay.value, math.nan, Quality.GOOD)
        item = self._items[overlay.item]
        cells = self._bits if item.encoding is Encoding.BIT else self._registers
        cells.put(item.address, overlay.raw)

    def _show(self, index: int, value: float, current: float, quality: float) -> None:
        codec = self._codecs[index]
        address = self._items[index].address
        if codec is not None:
            self._registers.put(address, codec.encode(value, current, int(quality)))
        else:
            on = value >= 0.5  # noqa: PLR2004  midway between 0 and 1; NaN is off
            self._bits.put(address, b"1" if on else b"0")


class _Cells:
    """One address space: its content, which item stands where, and how far a run goes on."""

    def __init__(self, items: tuple[RegisterItem, ...], bits: bool) -> None:
        self.item_at: dict[int, int] = {}
        for index, item in enumerate(items):
            if (item.encoding is Encoding.BIT) is bits:
                cells = range(item.address, item.address + register_count(item.encoding))
                self.item_at.update(dict.fromkeys(cells, index))
        self._size = 1 if bits else _WORD
        cells_to = max(self.item_at, default=-1) + 1
        self.content = bytearray(b"0" if bits else bytes(_WORD)) * cells_to
        self.run_end: dict[int, int] = {}  # by address in the map: where its run of them ends
        for address in sorted(self.item_at, reverse=True):
            self.run_end[address] = self.run_end.get(address + 1, address + 1)

    def put(self, address: int, data: bytes) -> None:
        start = self._size * address
        self.content[start : start + len(data)] = data

    def touched(self, address: int, count: int) -> list[int]:
        """Return the items that stand at these addresses, by address, each once."""
        at = self.item_at
        return list(dict.fromkeys(at[cell] for cell in range(address, address + count)))

    def absent(self, address: int, count: int) -> str:
        """Return which address of a range is the first that is not in the map, in words."""
        missing = self.run_end.get(address, address)
        asked = f"{address}" if count == 1 else f"{address} to {address + count - 1}"
        return f"address {missing} is not in the map (asked for {asked}, counted from 0)"
