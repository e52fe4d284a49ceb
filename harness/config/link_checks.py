"""Checks of links: addresses to listen on, and register maps."""

from __future__ import annotations

import ipaddress
import math
from typing import TYPE_CHECKING

from harness.config.findings import not_one_of
from harness.config.loop_checks import transmitter_range
from harness.config.rig_tables import ModbusServerTable, OpcUaServerTable
from harness.domain.orders import LoopOrders
from harness.domain.points import acknowledge_point, points_of, read_back_point
from harness.domain.rig import (
    Action,
    Characteristic,
    ControlValve,
    Loop,
    Measurement,
    Rig,
    Transmitter,
)
from harness.domain.signals import PointKind, Range

if TYPE_CHECKING:
    from harness.config.findings import Entry
    from harness.config.rig_draft import RigDraft
    from harness.domain.signals import Point

_INTEGERS = {
    "uint16": (0, 65_535),
    "int16": (-32_768, 32_767),
    "uint32": (0, 4_294_967_295),
    "int32": (-2_147_483_648, 2_147_483_647),
}
_TWO_REGISTERS = ("uint32", "int32", "float32")
_LAST_ADDRESS = 65_535
_HIGHEST_CURRENT_UA = (
    23_000  # a loop current that no transmitter passes; fits every integer type
)
_STAND_IN = "?"  # tag of what a loop names and the file has not


def check_links(draft: RigDraft) -> None:
    """Note every problem of links and their maps.

    Parameters
    ----------
    draft : RigDraft
        The file; its findings take the problems.
    """
    _names(draft)
    _addresses(draft)
    points = {point.name: point for point in _points(draft)}
    for link in draft.of_kind(ModbusServerTable):
        items = draft.items[link.path]
        for item in items:
            _item(item, points)
        _overlaps(items)
    for link in draft.of_kind(OpcUaServerTable):
        for index, name in enumerate(link.get("points") or []):
            if name not in points:
                link.problem(f"points[{index}]", _unknown(name, points))


def _names(draft: RigDraft) -> None:
    seen: dict[str, str] = {}
    for link in draft.links:
        name = link.text("name")
        if name and seen.setdefault(name, link.path) != link.path:
            link.problem("name", f'"{name}" is already the name of {seen[name]}')


def _addresses(draft: RigDraft) -> None:
    taken: list[tuple[str, float, Entry]] = []
    for link in draft.links:
        host, port = link.text("host"), link.number("port")
        if host is None or port is None:
            continue
        host = "127.0.0.1" if host == "localhost" else host
        try:
            everywhere = ipaddress.ip_address(host).is_unspecified
        except ValueError:
            link.problem(
                "host",
                f'{link.shown("host")} is not an address to listen on, e.g. "127.0.0.1" for this'
                ' machine alone or "0.0.0.0" for every network it is on',
            )
            continue
        host = "*" if everywhere else host
        for other_host, other_port, other in taken:
            if port == other_port and (host == other_host or "*" in {host, other_host}):
                link.problem("port", f"{port} at {link.text('host')} is taken by {other.path}")
        taken.append((host, port, link))


def _points(draft: RigDraft) -> tuple[Point, ...]:
    """Return the points of the rig, with stand-ins for what is not right yet."""
    transmitters = [
        _stand_in_transmitter(each.raw["tag"], each.text("measures"), transmitter_range(each))
        for each in draft.transmitters
        if isinstance(each.raw.get("tag"), str)
    ]
    known = {each.tag for each in transmitters}
    transmitters.append(_stand_in_transmitter(_STAND_IN, None, None))
    loops = []
    for each in draft.loops:
        measured = each.text("process_variable")
        if isinstance(each.raw.get("tag"), str):
            chosen = measured if measured in known and measured else _STAND_IN
            loops.append(_stand_in_loop(each.raw["tag"], chosen, each.text("output") or ""))
    rig = Rig(
        name="",
        description="",
        tick=1.0,
        seed=0,
        gravity=1.0,
        sources=(),
        vessels=(),
        orifices=(),
        overflows=(),
        valves=tuple(
            _stand_in_valve(each.raw["tag"])
            for each in draft.valves
            if isinstance(each.raw.get("tag"), str)
        ),
        transmitters=tuple(transmitters),
        loops=tuple(loops),
        links=(),
    )
    stand_ins = (_STAND_IN, read_back_point(_STAND_IN))
    return tuple(
        point for point in points_of(rig, external=True) if point.name not in stand_ins
    )


def _stand_in_transmitter(tag: str, measures: str | None, found: Range | None) -> Transmitter:
    return Transmitter(
        tag=tag,
        measures=Measurement(measures or "level"),
        subject="",
        range=found or Range(lower=0.0, upper=1.0, unit="m"),
        damping=0.0,
        noise=0.0,
        resolution=0.0,
        failure_current_ma=0.0,
    )


def _stand_in_valve(tag: str) -> ControlValve:
    return ControlValve(
        tag=tag,
        origin="",
        destination="",
        kv=1.0,
        characteristic=Characteristic.LINEAR,
        rangeability=1.0,
        line_kv=None,
        stroke_time=0.0,
        lag=0.0,
        fail_position=None,
        initial_output=0.0,
    )


def _stand_in_loop(tag: str, measured: str, output: str) -> Loop:
    return Loop(
        tag=tag,
        process_variable=measured,
        output=output,
        load="",
        action=Action.REVERSE,
        initial_setpoint=None,
        output_low=0.0,
        output_high=1.0,
        scan=1.0,
        scan_phase=0,
        output_delay=0,
        watchdog=1.0,
        heartbeat_timeout=None,
        orders=LoopOrders(),
    )


def _item(item: Entry, points: dict[str, Point]) -> None:
    name, encoding = item.text("point"), item.text("encoding")
    point = points.get(name) if name else None
    if name and point is None:
        item.problem("point", _unknown(name, points))
    address = item.number("address")
    if encoding in _TWO_REGISTERS and address == _LAST_ADDRESS:
        item.problem(
            "address",
            f"{item.shown('address')} leaves no room for the second register of a {encoding};"
            f" the last address is {_LAST_ADDRESS}",
        )
    if encoding is not None:
        _idle_keys(item, encoding)
        _scaling(item, encoding, point)


def _unknown(name: str, points: dict[str, Point]) -> str:
    """Say that there is no such point; read-backs are suggested only to who asks for one."""
    asked = name.endswith((read_back_point(""), acknowledge_point("")))
    near = [
        each for each, point in points.items() if (point.kind is PointKind.READ_BACK) is asked
    ]
    return not_one_of(name, near or points, "this rig", "point")


def _idle_keys(item: Entry, encoding: str) -> None:
    """Refuse keys that would have no effect, so that nobody trusts in them."""
    two = encoding in _TWO_REGISTERS
    if "word_order" in item.raw and not two:
        item.problem("word_order", f"has no meaning for {encoding}, which is one register")
    if item.get("split_writes") and not two:
        item.problem("split_writes", f"has no meaning for {encoding}, which is one register")
    if "counts" in item.raw and item.text("scaling") != "counts":
        item.problem("counts", 'has a meaning only with scaling = "counts"')
    integer_value = encoding in _INTEGERS and item.text("scaling") == "engineering"
    if "factor" in item.raw and not integer_value:
        item.problem("factor", 'has a meaning only for integers with scaling = "engineering"')


def _scaling(item: Entry, encoding: str, point: Point | None) -> None:
    scaling = item.text("scaling")
    if encoding == "bit":
        if scaling not in {None, "engineering"}:
            item.problem("scaling", f"{item.shown('scaling')} has no meaning for a bit")
        if point is not None and point.kind is not PointKind.MODE:
            item.problem("encoding", f'"bit" cannot hold {point.name}; only a mode is a bit')
        return
    if point is not None and point.kind is PointKind.READ_BACK:
        _read_back(item, point)
        return
    if scaling == "counts":
        _counts(item, encoding)
    elif scaling == "current":
        _current(item, point)
    elif scaling == "engineering" and encoding in _INTEGERS and point is not None:
        _engineering(item, encoding, point)


def _read_back(item: Entry, point: Point) -> None:
    """Refuse scalings onto a range: a read-back has none, and takes whatever its type holds."""
    if item.text("scaling") not in {None, "engineering"}:
        item.problem(
            "scaling",
            f"{item.shown('scaling')}: {point.name} is what the controller says it has, in"
            ' engineering units; leave it out, or give an integer a "factor"',
        )


def _counts(item: Entry, encoding: str) -> None:
    if encoding not in _INTEGERS:
        item.problem("scaling", '"counts" are integers; the encoding is float32')
        return
    counts = item.pair("counts") or (0, _LAST_ADDRESS)
    low, high = _INTEGERS[encoding]
    if not counts[0] < counts[1]:
        item.problem(
            "counts", f"{item.shown('counts')} is crossed; the first end lies below the second"
        )
    elif counts[0] < low or counts[1] > high:
        item.problem(
            "counts" if "counts" in item.raw else "encoding",
            f"[{counts[0]}, {counts[1]}] does not fit {encoding}, {low} to {high}",
        )


def _current(item: Entry, point: Point | None) -> None:
    if point is not None and point.kind is not PointKind.MEASUREMENT:
        item.problem("scaling", f'"current": {point.name} is no transmitter\'s signal')


def _engineering(item: Entry, encoding: str, point: Point) -> None:
    factor = item.number("factor")
    if factor is None:
        return
    low, high = _INTEGERS[encoding]
    ends = (point.range.lower * factor, point.range.upper * factor)
    if math.floor(ends[0] + 0.5) < low or math.floor(ends[1] + 0.5) > high:
        item.problem(
            "factor" if "factor" in item.raw else "encoding",
            f"{point.name} goes from {ends[0]:g} to {ends[1]:g} in the register;"
            f" {encoding} holds {low} to {high}",
        )


def _overlaps(items: tuple[Entry, ...]) -> None:
    """Note registers, or bits, that two lines of a map claim; the two are spaces apart."""
    taken: dict[tuple[bool, int], Entry] = {}
    for item in items:
        address, encoding = item.get("address"), item.text("encoding")
        if address is None or encoding is None:
            continue
        width = 2 if encoding in _TWO_REGISTERS else 1
        for place in range(address, address + width):
            other = taken.setdefault((encoding == "bit", place), item)
            if other is not item:
                item.problem(
                    "address",
                    f"{place} is taken by {other.raw.get('point')} at {other.raw['address']}",
                )
                break
