"""Vessels, outlets, overflows and valves as tables, and the right-hand side of any of them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from plants import layout as at
from plants.compile import kernel
from plants.flow import orifice_flow, weir_flow
from plants.valve import installed_flow

Floats = NDArray[np.float64]
Table = NDArray[np.uint32]


@kernel
def valve_flow(table: Table, parameters: Floats, valve: int, travel: float) -> float:
    """Return the flow through a control valve at a travel.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig, see ``plants.layout``.
    parameters : ndarray of float64
        Parameters of the rig.
    valve : int
        Number of the valve [-].
    travel : float
        Travel [-].

    Returns
    -------
    float
        Flow [m3/s].
    """
    p = table[at.AT_VALVE_PARAMETERS] + valve * at.VALVE_STRIDE
    return installed_flow(
        travel,
        table[table[at.AT_VALVE_LINKS] + valve * at.VALVE_LINKS + at.VALVE_CHARACTERISTIC],
        parameters[p + at.RANGEABILITY],
        parameters[p + at.LOG_RANGEABILITY],
        parameters[p + at.KV],
        parameters[p + at.LINE_KV],
        parameters[p + at.FLOW_PER_KV],
    )


@kernel
def rates(
    table: Table, parameters: Floats, work: Floats, volumes: int, moment: int, result: int
) -> None:
    """Write the rates of change of all volumes and totals.

    A vessel marked dry in ``work`` passes its inflow on. The flows of the valves are those in
    the course of the step, at its start, middle or end.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    work : ndarray of float64
        Scratch array that holds inputs and result.
    volumes, result : int
        Where in ``work`` the volumes [m3] and the result [m3/s] stand [-].
    moment : int
        0 for the start of the step, 1 for its middle, 2 for its end [-].
    """
    n_vessels = table[at.N_VESSELS]
    n_valves = table[at.N_VALVES]
    flows = table[at.AT_COURSE] + n_vessels + moment * (n_vessels + n_valves)
    into = out = spilled = 0.0
    for place in range(result, result + n_vessels + at.N_TOTALS):
        work[place] = 0.0
    for valve in range(n_valves):
        link = table[at.AT_VALVE_LINKS] + valve * at.VALVE_LINKS
        flow = work[flows + valve]
        work[result + table[link + at.VALVE_DESTINATION]] += flow
        into += flow
    for path in range(table[at.N_OVERFLOWS]):
        link = table[at.AT_OVERFLOW_LINKS] + path * at.PATH_LINKS
        p = table[at.AT_OVERFLOW_PARAMETERS] + path * at.OVERFLOW_STRIDE
        origin = table[link + at.ORIGIN]
        destination = table[link + at.DESTINATION]
        head = level_in(table, parameters, work, volumes, origin) - parameters[p + at.CREST]
        flow = weir_flow(parameters[p + at.WEIR_COEFFICIENT], head)
        caught = flow * parameters[p + at.CAUGHT_FRACTION]
        spilled += flow - caught
        work[result + origin] -= flow
        if destination != at.OUTSIDE:
            work[result + destination] += caught
        else:
            out += caught
    for path in range(table[at.N_ORIFICES]):
        link = table[at.AT_ORIFICE_LINKS] + path * at.PATH_LINKS
        origin = table[link + at.ORIGIN]
        destination = table[link + at.DESTINATION]
        if work[table[at.AT_DRY] + origin] > 0.0:
            flow = max(work[result + origin], 0.0)
        else:
            level = level_in(table, parameters, work, volumes, origin)
            flow = outlet_flow(table, parameters, path, level)
        work[result + origin] -= flow
        if destination != at.OUTSIDE:
            work[result + destination] += flow
        else:
            out += flow
    totals = result + n_vessels
    work[totals + at.TOTAL_IN] = into
    work[totals + at.TOTAL_OUT] = out
    work[totals + at.TOTAL_SPILLED] = spilled


@kernel
def level_in(
    table: Table, parameters: Floats, volumes: Floats, first: int, vessel: int
) -> float:
    """Return the level of a vessel whose volume stands in an array.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    volumes : ndarray of float64
        Array with the volumes [m3].
    first, vessel : int
        Where the volumes stand in it, and the number of the vessel [-].

    Returns
    -------
    float
        Level [m].
    """
    p = table[at.AT_VESSEL_PARAMETERS] + vessel * at.VESSEL_STRIDE
    level: float = volumes[first + vessel] * parameters[p + at.INVERSE_AREA]
    return level


@kernel
def outlet_flow(table: Table, parameters: Floats, path: int, level: float) -> float:
    """Return the flow of an outlet under a level.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    path : int
        Number of the outlet [-].
    level : float
        Level [m].

    Returns
    -------
    float
        Flow [m3/s].
    """
    p = table[at.AT_ORIFICE_PARAMETERS] + path * at.ORIFICE_STRIDE
    return orifice_flow(parameters[p + at.ORIFICE_COEFFICIENT], level)
