"""From the tables of a rig file, known to be right, to the domain's rig."""

from __future__ import annotations

from typing import TYPE_CHECKING, TypeVar

from harness.config.loop_checks import transmitter_range
from harness.config.quantities import FLOW, LENGTH, SHOWN_FLOW, parse_quantity
from harness.config.rig_tables import (
    ActuatorTable,
    ItemTable,
    LoopTable,
    ModbusServerTable,
    OpcUaServerTable,
    OrdersTable,
    OrificeTable,
    OverflowTable,
    RigTable,
    SourceTable,
    Table,
    TransmitterTable,
    ValveTable,
    VesselTable,
)
from harness.domain.orders import (
    BlockForm,
    BlockUnits,
    GainUnit,
    LoopOrders,
    OrderBy,
    TimeUnit,
)
from harness.domain.rig import (
    Action,
    Characteristic,
    ControlValve,
    Encoding,
    Loop,
    Measurement,
    ModbusServerLink,
    OpcUaServerLink,
    Orifice,
    Overflow,
    RegisterItem,
    Rig,
    Scaling,
    Source,
    Transmitter,
    VerticalCylinder,
    Vessel,
    WordOrder,
)

if TYPE_CHECKING:
    from harness.config.findings import Entry
    from harness.config.rig_draft import RigDraft

_Model = TypeVar("_Model", bound=Table)


def build_rig(draft: RigDraft) -> Rig:
    """Return the rig of a file that has no problem.

    Parameters
    ----------
    draft : RigDraft
        The file, checked.

    Returns
    -------
    Rig
        In SI units.
    """
    rig = parsed(draft.rig, RigTable)
    return Rig(
        name=rig.name,
        description=rig.description.strip(),
        tick=rig.tick,
        seed=rig.seed,
        gravity=rig.gravity,
        sources=tuple(_source(parsed(each, SourceTable)) for each in draft.sources),
        vessels=tuple(_vessel(parsed(each, VesselTable)) for each in draft.vessels),
        orifices=tuple(
            _orifice(parsed(each, OrificeTable)) for each in draft.of_kind(OrificeTable)
        ),
        overflows=tuple(
            _overflow(parsed(each, OverflowTable)) for each in draft.of_kind(OverflowTable)
        ),
        valves=_valves(draft),
        transmitters=tuple(_transmitter(each) for each in draft.transmitters),
        loops=tuple(_loop(parsed(each, LoopTable)) for each in draft.loops),
        links=tuple(_link(each, draft) for each in draft.links),
    )


def parsed(entry: Entry, model: type[_Model]) -> _Model:
    """Return the validated table of an entry that has no problem.

    Parameters
    ----------
    entry : Entry
        The entry.
    model : type
        Its model.

    Returns
    -------
    Table
        The table.

    Raises
    ------
    TypeError
        When the entry has problems; a fault of this package.
    """
    if not isinstance(entry.parsed, model):
        raise TypeError(f"{entry.path} is built before it is known to be right")
    return entry.parsed


def _source(table: SourceTable) -> Source:
    return Source(tag=table.tag, pressure=table.pressure, density=table.density)


def _vessel(table: VesselTable) -> Vessel:
    return Vessel(
        tag=table.tag,
        shape=VerticalCylinder(diameter=table.diameter, height=table.height),
        initial_level=table.initial_level,
    )


def _orifice(table: OrificeTable) -> Orifice:
    return Orifice(
        tag=table.tag,
        origin=table.origin,
        destination=table.destination,
        discharge_coefficient=table.discharge_coefficient,
        diameter=table.diameter,
    )


def _overflow(table: OverflowTable) -> Overflow:
    return Overflow(
        tag=table.tag,
        origin=table.origin,
        destination=table.destination,
        crest=table.crest,
        width=table.width,
        discharge_coefficient=table.discharge_coefficient,
        fraction=table.fraction,
    )


def _valves(draft: RigDraft) -> tuple[ControlValve, ...]:
    actuators = {each.tag: each for each in (parsed(a, ActuatorTable) for a in draft.actuators)}
    return tuple(
        _valve(table, actuators[table.tag])
        for table in (parsed(each, ValveTable) for each in draft.valves)
    )


def _valve(table: ValveTable, actuator: ActuatorTable) -> ControlValve:
    return ControlValve(
        tag=table.tag,
        origin=table.origin,
        destination=table.destination,
        kv=table.kv,
        characteristic=Characteristic(table.characteristic),
        rangeability=table.rangeability,
        line_kv=table.line_kv,
        stroke_time=actuator.stroke_time,
        lag=actuator.lag,
        fail_position=actuator.fail_position,
        initial_output=actuator.initial_output,
    )


def _transmitter(entry: Entry) -> Transmitter:
    table = parsed(entry, TransmitterTable)
    calibrated = transmitter_range(entry)
    if calibrated is None:
        raise TypeError(f"{entry.path}.range is built before it is known to be right")
    return Transmitter(
        tag=table.tag,
        measures=Measurement(table.measures),
        subject=table.subject,
        range=calibrated,
        damping=table.damping,
        noise=table.noise,
        resolution=table.resolution,
        failure_current_ma=table.failure_current,
    )


def _loop(table: LoopTable) -> Loop:
    return Loop(
        tag=table.tag,
        process_variable=table.process_variable,
        output=table.output,
        load=table.load,
        action=Action(table.action),
        initial_setpoint=_setpoint(table),
        output_low=table.output_limits[0],
        output_high=table.output_limits[1],
        scan=table.scan,
        scan_phase=table.scan_phase,
        output_delay=table.output_delay,
        watchdog=table.watchdog,
        heartbeat_timeout=table.heartbeat_timeout,
        orders=_orders(table.orders),
        block=_block(table),
    )


def _setpoint(table: LoopTable) -> float | None:
    if table.initial_setpoint is None:
        return None
    quantity = LENGTH if table.process_variable.startswith("L") else FLOW
    return parse_quantity(table.initial_setpoint, quantity)


def _orders(table: OrdersTable) -> LoopOrders:
    return LoopOrders(
        setpoint=OrderBy(table.setpoint),
        mode=OrderBy(table.mode),
        manual_output=OrderBy(table.manual_output),
        settings=OrderBy(table.settings),
        function=table.function,
    )


def _block(loop: LoopTable) -> BlockUnits:
    table = loop.block
    step = None
    if table.setpoint_resolution is not None:
        quantity = LENGTH if loop.process_variable.startswith("L") else SHOWN_FLOW
        step = parse_quantity(table.setpoint_resolution, quantity)
    return BlockUnits(
        form=BlockForm(table.form),
        gain_unit=GainUnit(table.gain_unit),
        time_unit=TimeUnit(table.time_unit),
        gain_resolution=table.gain_resolution,
        time_resolution=table.time_resolution,
        setpoint_resolution=step,
        output_resolution=table.output_resolution,
        process_variable_counts=table.process_variable_counts,
        output_counts=table.output_counts,
    )


def _link(entry: Entry, draft: RigDraft) -> ModbusServerLink | OpcUaServerLink:
    if entry.model is OpcUaServerTable:
        server = parsed(entry, OpcUaServerTable)
        return OpcUaServerLink(
            name=server.name, host=server.host, port=server.port, points=tuple(server.points)
        )
    table = parsed(entry, ModbusServerTable)
    return ModbusServerLink(
        name=table.name,
        host=table.host,
        port=table.port,
        unit=table.unit,
        items=tuple(_item(parsed(each, ItemTable)) for each in draft.items[entry.path]),
        max_connections=table.max_connections,
        idle_timeout=table.idle_timeout,
    )


def _item(table: ItemTable) -> RegisterItem:
    return RegisterItem(
        point=table.point,
        address=table.address,
        encoding=Encoding(table.encoding),
        word_order=WordOrder(table.word_order),
        scaling=Scaling(table.scaling),
        factor=table.factor,
        counts_low=table.counts[0],
        counts_high=table.counts[1],
        split_writes=table.split_writes,
    )
