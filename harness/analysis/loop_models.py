"""The linear models of a loop that follow from the rig itself, by linearisation."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.domain.models import LagModel, LoopModels
from harness.domain.rig import Measurement
from harness.errors import ModelError
from harness.tuning.reduction import half_rule
from plants.operating import linearise, steady_volumes

if TYPE_CHECKING:
    from harness.domain.rig import Loop, Rig, Vessel
    from harness.engine.engine import Engine

_MOST_LAGS = 2


@dataclass(frozen=True, slots=True, kw_only=True)
class OperatingPoint:
    """A steady state of the rig.

    Parameters
    ----------
    outputs : dict of str to float
        Output of every valve [-].
    flows : dict of str to float
        Flow through every valve [m3/s].
    levels : dict of str to float
        Level of every vessel [m].
    """

    outputs: dict[str, float]
    flows: dict[str, float]
    levels: dict[str, float]


def operating_point(engine: Engine, outputs: dict[str, float] | None = None) -> OperatingPoint:
    """Return the steady state for given outputs.

    Parameters
    ----------
    engine : Engine
        Engine of the rig; it is not changed.
    outputs : dict of str to float or None
        By tag of the valve; those not named stand at their initial output [-].

    Returns
    -------
    OperatingPoint
        The steady state.

    Raises
    ------
    ModelError
        When there is none.
    """
    rig = engine.rig
    travels = {valve.tag: valve.initial_output for valve in rig.valves} | (outputs or {})
    flows = engine.valve_flows(travels)
    volumes = steady_volumes(engine.table, engine.parameters, flows)
    if volumes is None:
        raise ModelError(
            f"rig {rig.name}: no steady state with outputs {travels}; inflow and outflow of some "
            "vessel never balance"
        )
    return OperatingPoint(
        outputs=travels,
        flows={valve.tag: float(flow) for valve, flow in zip(rig.valves, flows, strict=True)},
        levels={
            vessel.tag: float(volume) / vessel.shape.area
            for vessel, volume in zip(rig.vessels, volumes, strict=True)
        },
    )


def linearised_models(
    engine: Engine, loop: Loop, outputs: dict[str, float] | None = None
) -> LoopModels:
    """Return the linearised output and load path of a loop.

    The vessels' modes give the lags; the lags of actuator and transmitter, short beside them,
    are counted as dead time, which keeps the sum of lags and delays (the residence time) exact.
    More than two lags are brought down to two by the half rule.

    Parameters
    ----------
    engine : Engine
        Engine of the rig; it is not changed.
    loop : Loop
        The loop.
    outputs : dict of str to float or None
        Outputs of the operating point; those not named stand at their initial output [-].

    Returns
    -------
    LoopModels
        Gains in fraction of span per fraction of output.

    Raises
    ------
    ModelError
        When there is no steady state, or the process variable is not a level.
    """
    point = operating_point(engine, outputs)
    return LoopModels(
        output=_path(engine, loop, loop.output, point),
        load=_path(engine, loop, loop.load, point),
    )


def _path(engine: Engine, loop: Loop, valve_tag: str, point: OperatingPoint) -> LagModel:
    rig = engine.rig
    transmitter = rig.transmitter(loop.process_variable)
    if transmitter.measures is not Measurement.LEVEL:
        raise ModelError(
            f"loop {loop.tag}: its process variable {transmitter.tag} is not a level; only level "
            "loops are linearised"
        )
    volumes = np.array([_volume(vessel, point) for vessel in rig.vessels])
    travels = np.array([point.outputs[valve.tag] for valve in rig.valves])
    linear = linearise(engine.table, engine.parameters, volumes, travels)
    valve_number = _number(rig, valve_tag)
    vessel_number = [vessel.tag for vessel in rig.vessels].index(transmitter.subject)
    gain, lags = linear.path(valve_number, vessel_number)
    valve = rig.valve(valve_tag)
    model = LagModel(
        gain=gain / transmitter.range.span,
        time_constants=lags[:_MOST_LAGS],
        dead_time=valve.lag + transmitter.damping,
    )
    if len(lags) <= _MOST_LAGS:
        return model
    reduced = half_rule(lags, order=_MOST_LAGS, dead_time=model.dead_time)
    return LagModel(
        gain=model.gain, time_constants=reduced.time_constants, dead_time=reduced.dead_time
    )


def _volume(vessel: Vessel, point: OperatingPoint) -> float:
    return point.levels[vessel.tag] * vessel.shape.area


def _number(rig: Rig, valve_tag: str) -> int:
    return [valve.tag for valve in rig.valves].index(valve_tag)
