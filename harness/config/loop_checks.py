"""Checks of transmitters and loops that no table can make alone: subjects, ranges, limits."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.config.findings import not_one_of, show
from harness.config.quantities import FLOW, LENGTH, SHOWN_FLOW, parse_quantity
from harness.config.rig_draft import tags, with_tag
from harness.config.rig_tables import BlockTable, OrdersTable
from harness.domain.points import position_point
from harness.domain.signals import Range

if TYPE_CHECKING:
    from harness.config.findings import Entry
    from harness.config.rig_draft import RigDraft

# NAMUR NE 43: a failure current is at most 3.6 mA or at least 21.0 mA.
FAILURE_LOW_MA = 3.6
FAILURE_HIGH_MA = 21.0

_WHOLE = 1e-9  # scans: rounding of a ratio of two decimal numbers


def check_loops(draft: RigDraft) -> None:
    """Note every problem of transmitters and loops.

    Parameters
    ----------
    draft : RigDraft
        The file; its findings take the problems.
    """
    for transmitter in draft.transmitters:
        _transmitter(transmitter, draft)
    _position_points(draft)
    for loop in draft.loops:
        _loop_parts(loop, draft)
        _loop_times(loop, draft)
        _output_limits(loop, draft)
        _setpoint(loop, draft)
        _orders(loop)
        _block(loop, draft)
    _shared_outputs(draft)


def transmitter_range(transmitter: Entry) -> Range | None:
    """Return the range of a transmitter, or None while it is not right.

    Parameters
    ----------
    transmitter : Entry
        A ``[[transmitter]]``.

    Returns
    -------
    Range or None
        In ``m`` or ``m3/s``.
    """
    ends, measures = transmitter.pair("range"), transmitter.text("measures")
    if ends is None or measures is None:
        return None
    quantity = LENGTH if measures == "level" else FLOW
    try:
        lower, upper = (parse_quantity(end, quantity) for end in ends)
    except ValueError:
        return None
    return Range(lower=lower, upper=upper, unit=quantity.unit) if lower < upper else None


def _transmitter(transmitter: Entry, draft: RigDraft) -> None:
    _subject(transmitter, draft)
    ends, measures = transmitter.pair("range"), transmitter.text("measures")
    if ends is not None and measures is not None:
        quantity = LENGTH if measures == "level" else FLOW
        sound = True
        for index, end in enumerate(ends):
            try:
                parse_quantity(end, quantity)
            except ValueError as error:
                shown = transmitter.raw["range"][index]
                transmitter.problem(f"range[{index}]", f"{_quoted(shown)} {error}")
                sound = False
        if sound and transmitter_range(transmitter) is None:
            transmitter.problem(
                "range",
                f"{transmitter.shown('range')} is crossed; the first end lies below the second",
            )
    current = transmitter.number("failure_current")
    if current is not None and FAILURE_LOW_MA < current < FAILURE_HIGH_MA:
        transmitter.problem(
            "failure_current",
            f"{transmitter.shown('failure_current')} is no failure current; at most"
            f" {FAILURE_LOW_MA} mA or at least {FAILURE_HIGH_MA} mA (NAMUR NE 43)",
        )


def _subject(transmitter: Entry, draft: RigDraft) -> None:
    tag, subject = transmitter.text("tag"), transmitter.text("subject")
    measures = transmitter.text("measures")
    if measures is None:
        return
    letter, kind, there = {
        "level": ("L", "vessel", tags(draft.vessels)),
        "flow": ("F", "path", tags(draft.paths)),
    }[measures]
    if subject and subject not in there:
        transmitter.problem("of", not_one_of(subject, there, "this rig", kind))
    if tag and not tag.startswith(letter):
        transmitter.problem(
            "tag", f'"{tag}" measures {measures}; its first letter is {letter} after ISA-5.1'
        )


def _position_points(draft: RigDraft) -> None:
    """Each valve's position is shown as ZT and its number, which must not meet another's."""
    seen: dict[str, str] = {}
    for valve in draft.valves:
        tag = valve.text("tag")
        if tag and seen.setdefault(position_point(tag), tag) != tag:
            point = position_point(tag)
            valve.problem(
                "tag", f'"{tag}" and "{seen[point]}" would both show their travel as {point}'
            )


def _loop_parts(loop: Entry, draft: RigDraft) -> None:
    transmitters, valves = tags(draft.transmitters), tags(draft.valves)
    measured = loop.text("process_variable")
    if measured and measured not in transmitters:
        loop.problem(
            "process_variable", not_one_of(measured, transmitters, "this rig", "transmitter")
        )
    tag = loop.text("tag")
    if tag and measured in transmitters and measured and tag[0] != measured[0]:
        loop.problem(
            "tag",
            f'"{tag}" controls {measured}; its first letter is {measured[0]} after ISA-5.1',
        )
    for key in ("output", "load"):
        valve = loop.text(key)
        if valve and valve not in valves:
            loop.problem(key, not_one_of(valve, valves, "this rig", "valve"))
    if loop.text("load") and loop.text("load") == loop.text("output"):
        loop.problem(
            "load", f"{loop.shown('load')} is the loop's output; the load is another valve"
        )


def _loop_times(loop: Entry, draft: RigDraft) -> None:
    tick, scan = draft.rig.number("tick"), loop.number("scan")
    if scan is not None and tick is not None:
        ticks = round(scan / tick)
        if ticks < 1 or abs(scan / tick - ticks) > _WHOLE * ticks:
            loop.problem(
                "scan",
                f"{loop.shown('scan')} is not a whole number of ticks of"
                f" {draft.rig.shown('tick')}",
            )
        elif (loop.number("scan_phase") or 0) >= ticks:
            loop.problem(
                "scan_phase",
                f"{loop.shown('scan_phase')} is not below the {ticks} ticks of a scan",
            )
    for key in ("watchdog", "heartbeat_timeout"):
        silence = loop.number(key)
        if silence is not None and scan is not None and silence < scan:
            loop.problem(
                key, f"{loop.shown(key)} is shorter than the scan of {loop.shown('scan')}"
            )


def _output_limits(loop: Entry, draft: RigDraft) -> None:
    limits = loop.pair("output_limits")
    if limits is None:
        return
    if not limits[0] < limits[1]:
        loop.problem(
            "output_limits",
            f"{loop.shown('output_limits')} is crossed; the first limit lies below the second",
        )
        return
    actuator = with_tag(draft.actuators, loop.text("output"))
    initial = actuator.number("initial_output") if actuator else None
    if actuator and initial is not None and not limits[0] <= initial <= limits[1]:
        actuator.problem(
            "initial_output",
            f"{actuator.shown('initial_output')} is outside the output limits"
            f" {loop.shown('output_limits')} of {loop.raw.get('tag')}",
        )


def _setpoint(loop: Entry, draft: RigDraft) -> None:
    transmitter = with_tag(draft.transmitters, loop.text("process_variable"))
    written = loop.get("initial_setpoint")
    if written is None or transmitter is None:
        return
    quantity = LENGTH if transmitter.text("measures") == "level" else FLOW
    try:
        setpoint = parse_quantity(written, quantity)
    except ValueError as error:
        loop.problem("initial_setpoint", f"{loop.shown('initial_setpoint')} {error}")
        return
    measured = transmitter_range(transmitter)
    if measured and not measured.lower <= setpoint <= measured.upper:
        loop.problem(
            "initial_setpoint",
            f"{loop.shown('initial_setpoint')} is outside the range"
            f" {transmitter.shown('range')} of {transmitter.raw['tag']}",
        )


def _orders(loop: Entry) -> None:
    """Note a function that is missing, without a use, or no name of one."""
    orders = loop.get("orders")
    if not isinstance(orders, OrdersTable):
        return
    ways = (orders.setpoint, orders.mode, orders.manual_output, orders.settings)
    module, _, name = orders.function.partition(":")
    if "callable" in ways and not orders.function:
        loop.problem(
            "orders",
            '"callable" wants a function that takes the order; write it as a table with'
            ' function = "module:name"',
        )
    elif orders.function and "callable" not in ways:
        loop.problem("orders.function", f'"{orders.function}" has no use; no order goes by it')
    elif orders.function and not (
        all(part.isidentifier() for part in module.split(".")) and name.isidentifier()
    ):
        loop.problem(
            "orders.function", f'"{orders.function}" is no function; write "module:name"'
        )


def _block(loop: Entry, draft: RigDraft) -> None:
    """Note what does not go together in the units of a block."""
    block = loop.get("block")
    if not isinstance(block, BlockTable):
        return
    for key in ("process_variable_counts", "output_counts"):
        if key in block.model_fields_set and block.gain_unit != "counts":
            loop.problem(f"block.{key}", 'has a meaning only with gain_unit = "counts"')
    transmitter = with_tag(draft.transmitters, loop.text("process_variable"))
    if block.setpoint_resolution is None or transmitter is None:
        return
    quantity = LENGTH if transmitter.text("measures") == "level" else SHOWN_FLOW
    written = show(block.setpoint_resolution)
    try:
        step = parse_quantity(block.setpoint_resolution, quantity)
    except ValueError as error:
        loop.problem("block.setpoint_resolution", f"{written} {error}")
        return
    if not step > 0.0:
        loop.problem("block.setpoint_resolution", f"{written} is no step; it must be above 0")


def _shared_outputs(draft: RigDraft) -> None:
    owners: dict[str, Entry] = {}
    for loop in draft.loops:
        output = loop.text("output")
        if output and owners.setdefault(output, loop) is not loop:
            owner = owners[output].raw.get("tag")
            loop.problem(
                "output", f'"{output}" is the output of {owner}; a valve has one master'
            )
    for loop in draft.loops:
        load = loop.text("load")
        other = owners.get(load) if load else None
        if load and other is not None and other is not loop:
            loop.problem("load", f'"{load}" is the output of {other.raw.get("tag")}')


def _quoted(value: object) -> str:
    return f'"{value}"' if isinstance(value, str) else str(value)
