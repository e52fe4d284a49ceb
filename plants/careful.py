"""Steps near an empty vessel or a weir's crest: adapted by step doubling."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from plants import layout as at
from plants.compile import kernel
from plants.course import move_valves
from plants.instruments import damp
from plants.network import level_in, outlet_flow, rates

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

# Local error allowed to an adapted step, absolute and relative [m3], [-].
_ABSOLUTE_TOLERANCE = 1e-13
_RELATIVE_TOLERANCE = 1e-12
# A level below which a vessel whose inflow cannot raise it passes its inflow on [m].
_DRY_LEVEL = 1e-10
_SMALLEST_STEP = 2.0**-40  # of a tick; only to bound the loop


@kernel
def _runge_kutta(
    table: Integers,
    parameters: Floats,
    state: Floats,
    work: Floats,
    interval: float,
) -> None:
    """Integrate volumes, totals, valves and damping over an interval."""
    n_valves = table[at.N_VALVES]
    n = table[at.N_VESSELS] + at.N_TOTALS
    start, stage, k1, k, total = 0, n, 2 * n, 3 * n, 4 * n
    flows = table[at.AT_PARABOLAS]

    move_valves(table, parameters, state, work, interval)
    for i in range(n):
        work[start + i] = state[i]
    rates(table, parameters, work, start, flows, k1)
    for i in range(n):
        work[total + i] = work[k1 + i]
        work[stage + i] = work[start + i] + 0.5 * interval * work[k1 + i]
    rates(table, parameters, work, stage, flows + n_valves, k)
    for i in range(n):
        work[total + i] += 2.0 * work[k + i]
        work[stage + i] = work[start + i] + 0.5 * interval * work[k + i]
    rates(table, parameters, work, stage, flows + n_valves, k)
    for i in range(n):
        work[total + i] += 2.0 * work[k + i]
        work[stage + i] = work[start + i] + interval * work[k + i]
    rates(table, parameters, work, stage, flows + 2 * n_valves, k)
    for i in range(n):
        work[total + i] += work[k + i]
        work[stage + i] = work[start + i] + interval / 6.0 * work[total + i]
        state[i] = work[stage + i]
        # The parabola through both ends with the slope at the start gives the middle.
        work[k + i] = 0.75 * work[start + i] + 0.25 * (
            work[stage + i] + interval * work[k1 + i]
        )
    damp(table, parameters, state, work, interval, start, k, stage)


@kernel
def _mark_dry(table: Integers, parameters: Floats, state: Floats, work: Floats) -> None:
    """Mark vessels that only pass their inflow on, and let go of the film they hold."""
    n = table[at.N_VESSELS] + at.N_TOTALS
    dry = table[at.AT_DRY]
    flows = table[at.AT_PARABOLAS]
    for vessel in range(table[at.N_VESSELS]):
        work[dry + vessel] = 0.0
    for valve in range(table[at.N_VALVES]):
        work[flows + valve] = state[table[at.AT_FLOW] + valve]
    for path in range(table[at.N_ORIFICES]):
        link = table[at.AT_ORIFICE_LINKS] + path * at.PATH_LINKS
        origin = table[link + at.ORIGIN]
        level = level_in(table, parameters, state, 0, origin)
        if level >= _DRY_LEVEL:
            continue
        for i in range(n):
            work[i] = state[i]
        rates(table, parameters, work, 0, flows, n)
        inflow = work[n + origin] + outlet_flow(table, parameters, path, level)
        if inflow >= outlet_flow(table, parameters, path, _DRY_LEVEL):
            continue
        work[dry + origin] = 1.0
        destination = table[link + at.DESTINATION]
        if destination < 0:
            destination = table[at.N_VESSELS] + at.TOTAL_OUT
        state[destination] += state[origin]
        state[origin] = 0.0


@kernel
def _doubling_error(
    table: Integers,
    parameters: Floats,
    state: Floats,
    work: Floats,
    step: float,
) -> float:
    """Take two half steps and return the error of a whole one, relative to what is allowed."""
    n_vessels = table[at.N_VESSELS]
    size = table[at.PLANT_STATE]
    kept = table[at.AT_KEPT]
    whole_step = kept + size
    for i in range(size):
        work[kept + i] = state[i]
    _runge_kutta(table, parameters, state, work, step)
    for i in range(n_vessels):
        work[whole_step + i] = state[i]
    for i in range(size):
        state[i] = work[kept + i]
    _runge_kutta(table, parameters, state, work, step / 2)
    _runge_kutta(table, parameters, state, work, step / 2)
    error = 0.0
    for i in range(n_vessels):
        allowed = _ABSOLUTE_TOLERANCE + _RELATIVE_TOLERANCE * abs(state[i])
        error = max(error, abs(state[i] - work[whole_step + i]) / 15.0 / allowed)
        if state[i] < 0.0:
            error = max(error, 1e3)
    return error


@kernel
def adapted_steps(
    table: Integers, parameters: Floats, state: Floats, work: Floats, interval: float
) -> None:
    """Integrate an interval in adapted steps, by step doubling.

    Parameters
    ----------
    table : ndarray of int64
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    state : ndarray of float64
        State of the rig; changed in place.
    work : ndarray of float64
        Scratch of the length in the table.
    interval : float
        Length [s].
    """
    kept = table[at.AT_KEPT]
    smallest = interval * _SMALLEST_STEP
    done = 0.0
    step = interval
    while done < interval:
        _mark_dry(table, parameters, state, work)
        remaining = interval - done
        if remaining - step < smallest:
            step = remaining
        error = _doubling_error(table, parameters, state, work, step)
        if error > 1.0 and step > smallest:
            for i in range(table[at.PLANT_STATE]):
                state[i] = work[kept + i]
            step *= max(0.1, 0.8 * error**-0.2)
            continue
        done = interval if step == remaining else done + step
        step *= min(4.0, 0.8 * max(error, 1e-8) ** -0.2)
