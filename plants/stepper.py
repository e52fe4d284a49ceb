"""One tick of any plant: valves exactly, volumes by Runge-Kutta, instruments exactly.

The commands are held over a tick. Each valve gives its flow over the tick as a parabola that
takes the corners of its rate limit into account, so that every right-hand side is smooth, except
near an empty vessel and at a weir's crest, where the step is adapted.

Away from these, outlets lead downwards only, so that the classical Runge-Kutta step can be
taken vessel by vessel, all four stages at a time: the same tableau as in ``plants.careful``,
with every connection looked up once instead of four times.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from plants import layout as at
from plants.compile import inlined_kernel
from plants.course import move_valves, restore_valves

Floats = NDArray[np.float64]
Table = NDArray[np.uint32]

# A step that lets out more than this part of a vessel is adapted: an outlet's time constant is
# 2 V/q, so that at the limit the local error of one Runge-Kutta step is about
# 0.03**5/120 = 2e-10 of the level.
_SMOOTH_SHARE = 0.06


@inlined_kernel
def _smooth_step(  # noqa: PLR0915  one pass, so that its numbers stay in registers
    table: Table, parameters: Floats, state: Floats, work: Floats, interval: float
) -> bool:
    """Step volumes and totals; where that needs care, change nothing and return False."""
    n_vessels = table[at.N_VESSELS]
    n_valves = table[at.N_VALVES]
    starts = table[at.AT_COURSE]
    middles = starts + n_vessels + n_valves
    ends = middles + n_vessels + n_valves
    inflows = table[at.AT_INFLOWS]
    links = table[at.AT_VALVE_LINKS] + at.VALVE_DESTINATION
    half = 0.5 * interval
    sixth = interval * (1.0 / 6.0)
    into = out = 0.0
    for place in range(inflows, inflows + at.STAGES * n_vessels):
        work[place] = 0.0
    for valve in range(n_valves):
        stage = inflows + at.STAGES * table[links + valve * at.VALVE_LINKS]
        flow_1 = work[starts + n_vessels + valve]
        flow_2 = work[middles + n_vessels + valve]
        flow_4 = work[ends + n_vessels + valve]
        work[stage] += flow_1
        work[stage + 1] += flow_2
        work[stage + 2] += flow_2
        work[stage + 3] += flow_4
        into += flow_1 + 4.0 * flow_2 + flow_4

    for position in range(n_vessels):
        link = table[at.AT_VESSEL_LINKS] + position * at.VESSEL_LINKS
        vessel = table[link + at.VESSEL]
        p = table[at.AT_VESSEL_PARAMETERS] + vessel * at.VESSEL_STRIDE
        inverse = parameters[p + at.INVERSE_AREA]
        coefficient = parameters[p + at.OUTLETS_COEFFICIENT]
        stage = inflows + at.STAGES * vessel
        in_1, in_2, in_3, in_4 = work[stage], work[stage + 1], work[stage + 2], work[stage + 3]
        volume = state[vessel]
        out_1 = coefficient * math.sqrt(volume * inverse)
        most = volume + interval * max(in_1, in_2, in_3, in_4)
        if most > parameters[p + at.LOWEST_CREST] or (
            coefficient > 0.0 and out_1 * interval >= _SMOOTH_SHARE * volume
        ):
            return False
        slope_1 = in_1 - out_1
        out_2 = coefficient * math.sqrt((volume + half * slope_1) * inverse)
        slope_2 = in_2 - out_2
        out_3 = coefficient * math.sqrt((volume + half * slope_2) * inverse)
        slope_3 = in_3 - out_3
        out_4 = coefficient * math.sqrt((volume + interval * slope_3) * inverse)
        slope_4 = in_4 - out_4
        change = sixth * (slope_1 + 2.0 * (slope_2 + slope_3) + slope_4)
        work[starts + vessel] = volume
        work[ends + vessel] = volume + change
        # The parabola through both ends with the slope at the start gives the middle.
        work[middles + vessel] = volume + 0.25 * (change + interval * slope_1)
        first = table[link + at.FIRST_OUTLET]
        for path in range(first, first + table[link + at.N_OUTLETS]):
            destination = table[
                table[at.AT_ORIFICE_LINKS] + path * at.PATH_LINKS + at.DESTINATION
            ]
            share = parameters[
                table[at.AT_ORIFICE_PARAMETERS] + path * at.ORIFICE_STRIDE + at.SHARE
            ]
            if destination == at.OUTSIDE:
                out += share * (out_1 + 2.0 * (out_2 + out_3) + out_4)
                continue
            stage = inflows + at.STAGES * destination
            work[stage] += share * out_1
            work[stage + 1] += share * out_2
            work[stage + 2] += share * out_3
            work[stage + 3] += share * out_4

    for vessel in range(n_vessels):
        state[vessel] = work[ends + vessel]
    totals = table[at.AT_TOTALS]
    state[totals + at.TOTAL_IN] += sixth * into
    state[totals + at.TOTAL_OUT] += sixth * out
    return True


@inlined_kernel
def smooth_tick(table: Table, parameters: Floats, state: Floats, work: Floats) -> bool:
    """Integrate the plant over one tick with its commands held, if one step will do.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    state : ndarray of float64
        State of the rig; changed in place.
    work : ndarray of float64
        Scratch of the length in the table.

    Returns
    -------
    bool
        True when the tick is done, except that the instruments have still to follow its
        course; False when nothing was done, and ``plants.careful.adapted_steps`` is called for.
    """
    interval = parameters[at.TICK]
    move_valves(table, parameters, state, work, interval)
    smooth = _smooth_step(table, parameters, state, work, interval)
    if not smooth:
        restore_valves(table, state, work)
    return smooth
