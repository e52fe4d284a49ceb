"""From a rig as data to the arrays of the kernel."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.domain.points import shown_range
from harness.domain.rig import Action, Characteristic, Measurement
from harness.domain.run import Column
from harness.engine import places as place
from harness.errors import ModelError
from plants import layout as at
from plants.flow import liquid_flow, orifice_coefficient, weir_coefficient
from plants.noise import stream_of
from plants.transmitter import damping_weights
from plants.valve import EQUAL_PERCENTAGE, LINEAR

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.domain.rig import ControlValve, Loop, Orifice, Rig, Transmitter, Vessel


@dataclass(frozen=True, slots=True, kw_only=True)
class Arrays:
    """The constant arrays of a rig, and the sizes of the others.

    Parameters
    ----------
    table : ndarray of uint32
        Connections and offsets, see ``plants.layout`` and ``harness.engine.places``.
    parameters : ndarray of float64
        Parameters.
    state_size, work_size : int
        Lengths of the state and of the scratch array [-].
    """

    table: NDArray[np.uint32]
    parameters: NDArray[np.float64]
    state_size: int
    work_size: int


def columns_of(rig: Rig) -> tuple[Column, ...]:
    """Return the columns of a rig's trace, in the order in which the kernel writes them.

    Parameters
    ----------
    rig : Rig
        The rig.

    Returns
    -------
    tuple of Column
        For each transmitter true value, transmitted value, current and quality; for each valve
        command, position and flow; for each loop setpoint, mode and manual output; totals.
    """
    columns: list[Column] = []
    for transmitter in rig.transmitters:
        unit = shown_range(transmitter).unit
        columns += _columns(transmitter.tag, true=unit, value=unit, current="mA", quality="")
    for valve in rig.valves:
        columns += _columns(valve.tag, command="1", position="1", flow="m3/h")
    for loop in rig.loops:
        unit = shown_range(rig.transmitter(loop.process_variable)).unit
        columns += _columns(loop.tag, setpoint=unit, mode="", manual_output="1")
    columns += _columns("total", **{"in": "m3", "out": "m3", "spilled": "m3"})
    return tuple(columns)


def _columns(tag: str, **units: str) -> list[Column]:
    return [Column(name=f"{tag}.{name}", unit=unit) for name, unit in units.items()]


def assemble(rig: Rig) -> Arrays:
    """Build the arrays of a rig.

    Parameters
    ----------
    rig : Rig
        The rig; its references are known to be right.

    Returns
    -------
    Arrays
        Table, parameters and sizes.
    """
    counts = at.Counts(
        vessels=len(rig.vessels),
        valves=len(rig.valves),
        orifices=len(rig.orifices),
        overflows=len(rig.overflows),
        transmitters=len(rig.transmitters),
    )
    header = counts.state_offsets() | counts.parameter_offsets()
    header |= counts.table_offsets() | counts.work_offsets()
    header |= {
        at.N_VESSELS: counts.vessels,
        at.N_VALVES: counts.valves,
        at.N_ORIFICES: counts.orifices,
        at.N_OVERFLOWS: counts.overflows,
        at.N_TRANSMITTERS: counts.transmitters,
        at.N_LOOPS: len(rig.loops),
        at.SEED_LOW: rig.seed % 2**32,
        at.SEED_HIGH: rig.seed // 2**32,
    }
    longest_delay = max((loop.output_delay for loop in rig.loops), default=0)
    stride = place.DELAY_LINE + longest_delay + 1
    loop_parameters = header[at.PLANT_PARAMETERS]
    shown = loop_parameters + len(rig.loops) * place.LOOP_PARAMETERS
    header |= {
        place.AT_LOOP_STATE: header[at.PLANT_STATE],
        place.AT_LOOP_PARAMETERS: loop_parameters,
        place.AT_LOOP_LINKS: header[at.PLANT_TABLE],
        place.AT_SHOWN: shown,
        place.N_COLUMNS: len(columns_of(rig)),
        place.LOOP_STATE_STRIDE: stride,
    }
    vessels = upstream_first(rig)
    orifices = _outlets_of(rig, vessels)
    table = np.zeros(
        header[at.PLANT_TABLE] + len(rig.loops) * place.LOOP_LINKS, dtype=np.uint32
    )
    for entry, value in header.items():
        table[entry] = value
    table[at.HEADER :] = _vessel_links(rig, vessels) + _links(rig, orifices, header[at.AT_FLOW])
    parameters = np.array(_parameters(rig, orifices), dtype=np.float64)
    return Arrays(
        table=table,
        parameters=parameters,
        state_size=header[at.PLANT_STATE] + len(rig.loops) * stride,
        work_size=header[at.WORK],
    )


def upstream_first(rig: Rig) -> tuple[Vessel, ...]:
    """Return the vessels so that what feeds a vessel by an outlet stands before it.

    Parameters
    ----------
    rig : Rig
        The rig.

    Returns
    -------
    tuple of Vessel
        The same vessels, sorted.

    Raises
    ------
    ModelError
        When outlets form a ring.
    """
    left = list(rig.vessels)
    ordered: list[Vessel] = []
    while left:
        tags = {vessel.tag for vessel in left}
        inside = [path for path in rig.orifices if path.origin in tags]
        fed = {path.destination for path in inside}
        ready = [vessel for vessel in left if vessel.tag not in fed]
        if not ready:
            outlets = ", ".join(path.tag for path in inside if path.destination in tags)
            raise ModelError(
                f"rig {rig.name}: outlets {outlets} form a ring; gravity outlets must lead "
                "downwards: remove one of them"
            )
        ordered += ready
        left = [vessel for vessel in left if vessel not in ready]
    return tuple(ordered)


def _outlets_of(rig: Rig, vessels: tuple[Vessel, ...]) -> tuple[Orifice, ...]:
    return tuple(
        path for vessel in vessels for path in rig.orifices if path.origin == vessel.tag
    )


def _outlet_coefficient(rig: Rig, path: Orifice) -> float:
    return orifice_coefficient(path.discharge_coefficient, path.area, rig.gravity)


def _vessel_links(rig: Rig, vessels: tuple[Vessel, ...]) -> list[int]:
    numbers = {vessel.tag: i for i, vessel in enumerate(rig.vessels)}
    links: list[int] = []
    first = 0
    for vessel in vessels:
        outlets = sum(path.origin == vessel.tag for path in rig.orifices)
        links += [numbers[vessel.tag], first, outlets]
        first += outlets
    return links


def _links(rig: Rig, orifices: tuple[Orifice, ...], flows: int) -> list[int]:
    vessels = {vessel.tag: i for i, vessel in enumerate(rig.vessels)}
    valves = {valve.tag: i for i, valve in enumerate(rig.valves)}
    transmitters = {transmitter.tag: i for i, transmitter in enumerate(rig.transmitters)}
    links: list[int] = []
    for valve in rig.valves:
        linear = valve.characteristic is Characteristic.LINEAR
        links += [vessels[valve.destination], LINEAR if linear else EQUAL_PERCENTAGE]
    for path in orifices:
        links += [vessels[path.origin], vessels.get(path.destination, at.OUTSIDE)]
    for weir in rig.overflows:
        links += [vessels[weir.origin], vessels.get(weir.destination, at.OUTSIDE)]
    for transmitter in rig.transmitters:
        if transmitter.measures is Measurement.LEVEL:
            quantity = present = vessels[transmitter.subject]
        elif transmitter.subject in valves:
            quantity = len(vessels) + valves[transmitter.subject]
            present = flows + valves[transmitter.subject]
        else:
            outlet = next(path for path in orifices if path.tag == transmitter.subject)
            quantity = present = vessels[outlet.origin]
        links += [quantity, present, stream_of(transmitter.tag)]
    for loop in rig.loops:
        links += [
            transmitters[loop.process_variable],
            valves[loop.output],
            max(1, round(loop.scan / rig.tick)),
            loop.scan_phase,
            loop.output_delay,
            1,
        ]
    return links


def _parameters(rig: Rig, orifices: tuple[Orifice, ...]) -> list[float]:
    values = [rig.tick, rig.gravity, 0.0, 0.0]
    for vessel in rig.vessels:
        values += _vessel_parameters(rig, vessel)
    for valve in rig.valves:
        values += _valve_parameters(rig, valve)
    for path in orifices:
        coefficient = _outlet_coefficient(rig, path)
        values += [coefficient, coefficient / _outlets_coefficient(rig, path.origin)]
    for weir in rig.overflows:
        coefficient = weir_coefficient(weir.discharge_coefficient, weir.width, rig.gravity)
        values += [coefficient, weir.crest, weir.fraction]
    for transmitter in rig.transmitters:
        values += _transmitter_parameters(rig, transmitter)
    for loop in rig.loops:
        values += _loop_parameters(loop)
    for transmitter in rig.transmitters:
        shown = shown_range(transmitter)
        values += [shown.lower, shown.span, shown.span / transmitter.range.span]
    return values


def _outlets_coefficient(rig: Rig, vessel: str) -> float:
    return sum(
        (_outlet_coefficient(rig, path) for path in rig.orifices if path.origin == vessel), 0.0
    )


def _vessel_parameters(rig: Rig, vessel: Vessel) -> list[float]:
    area = vessel.shape.area
    crests = [weir.crest for weir in rig.overflows if weir.origin == vessel.tag]
    return [
        area,
        1.0 / area,
        _outlets_coefficient(rig, vessel.tag),
        min(crests, default=math.inf) * area,
    ]


def _valve_parameters(rig: Rig, valve: ControlValve) -> list[float]:
    source = next(source for source in rig.sources if source.tag == valve.origin)
    return [
        valve.kv,
        valve.rangeability,
        math.log(valve.rangeability),
        valve.line_kv or 0.0,
        liquid_flow(1.0, source.pressure, source.density),
        valve.stroke_time,
        valve.lag,
        math.exp(-rig.tick / 2 / valve.lag) if valve.lag > 0 else 0.0,
    ]


def _transmitter_parameters(rig: Rig, transmitter: Transmitter) -> list[float]:
    calibrated = transmitter.range
    vessel, coefficient = transmitter.subject, 0.0
    for path in rig.orifices:
        if path.tag == transmitter.subject:
            vessel = path.origin
            coefficient = _outlet_coefficient(rig, path)
    inverse_areas = {vessel.tag: 1.0 / vessel.shape.area for vessel in rig.vessels}
    return [
        1.0 / calibrated.span,
        -calibrated.lower / calibrated.span,
        transmitter.damping,
        transmitter.noise,
        transmitter.resolution,
        *damping_weights(rig.tick, transmitter.damping),
        inverse_areas.get(vessel, 1.0),
        coefficient,
        1.0 / transmitter.resolution if transmitter.resolution > 0.0 else 0.0,
    ]


def _loop_parameters(loop: Loop) -> list[float]:
    sign = 1.0 if loop.action is Action.REVERSE else -1.0
    return [sign, loop.output_low, loop.output_high, loop.scan]
