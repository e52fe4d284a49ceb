"""Which requests read or write a set of points: as few as the map allows."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.domain.rig import Encoding
from harness.links.codecs import register_count
from harness.links.modbus.protocol import (
    READ_BITS_MAX,
    READ_REGISTERS_MAX,
    WRITE_BITS_MAX,
    WRITE_REGISTERS_MAX,
)

if TYPE_CHECKING:
    from collections.abc import Iterable

    from harness.domain.rig import RegisterItem


@dataclass(frozen=True, slots=True, kw_only=True)
class Block:
    """One request's worth of neighbouring registers or bits.

    Parameters
    ----------
    bits : bool
        Whether these are bits.
    address, count : int
        First address, counted from 0, and how many [-].
    items : tuple of RegisterItem
        The items wanted, by address.
    """

    bits: bool
    address: int
    count: int
    items: tuple[RegisterItem, ...]


def read_blocks(
    wanted: Iterable[RegisterItem], every: tuple[RegisterItem, ...]
) -> tuple[Block, ...]:
    """Return the requests that read some items.

    Items that are not wanted are read along where they join two that are: one request is one
    tick's values, and costs less than two.

    Parameters
    ----------
    wanted : iterable of RegisterItem
        The items asked for.
    every : tuple of RegisterItem
        The whole map; what lies between the items of a map is refused by a server.

    Returns
    -------
    tuple of Block
        Registers first.
    """
    wanted = tuple(wanted)
    return _blocks(wanted, every, bits=False, most=READ_REGISTERS_MAX) + _blocks(
        wanted, every, bits=True, most=READ_BITS_MAX
    )


def write_blocks(wanted: Iterable[RegisterItem]) -> tuple[Block, ...]:
    """Return the requests that write some items, and nothing but them.

    Parameters
    ----------
    wanted : iterable of RegisterItem
        The items to write.

    Returns
    -------
    tuple of Block
        Registers first.
    """
    wanted = tuple(wanted)
    return _blocks(wanted, wanted, bits=False, most=WRITE_REGISTERS_MAX) + _blocks(
        wanted, wanted, bits=True, most=WRITE_BITS_MAX
    )


def _blocks(
    wanted: tuple[RegisterItem, ...], every: tuple[RegisterItem, ...], bits: bool, most: int
) -> tuple[Block, ...]:
    present: set[int] = set()
    for item in every:
        if (item.encoding is Encoding.BIT) is bits:
            present.update(range(item.address, _end(item)))
    groups: list[list[RegisterItem]] = []
    for item in sorted(wanted, key=lambda item: item.address):
        if (item.encoding is Encoding.BIT) is not bits:
            continue
        if groups:
            first, last = groups[-1][0], groups[-1][-1]
            joined = all(cell in present for cell in range(_end(last), item.address))
            if joined and _end(item) - first.address <= most:
                groups[-1].append(item)
                continue
        groups.append([item])
    return tuple(
        Block(
            bits=bits,
            address=group[0].address,
            count=_end(group[-1]) - group[0].address,
            items=tuple(group),
        )
        for group in groups
    )


def _end(item: RegisterItem) -> int:
    return item.address + register_count(item.encoding)
