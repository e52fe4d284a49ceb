"""Steps near an empty vessel or a weir's crest: adapted by step doubling."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from plants import layout as at
from plants.compile import kernel
from plants.course import move_valves
from plants.instruments import follow
from plants.network import level_in, outlet_flow, rates

Floats = NDArray[np.float64]
Table = NDArray[np.uint32]

# Local error allowed to an adapted step, absolute and relative [m3], [-].
_ABSOLUTE_TOLERANCE = 1e-13
_RELATIVE_TOLERANCE = 1e-12
# A level below which a vessel whose inflow cannot raise it passes its inflow on [m].
_DRY_LEVEL = 1e-10
# The classical tableau: weight of a stage's slope, and how far it reaches to the next stage.
_WEIGHTS = (1.0, 2.0, 2.0, 1.0)
_REACHES = (0.5, 0.5, 1.0, 0.0)
_SMALLEST_STEP = 2.0**-40  # of a tick; only to bound the loop


@kernel
def _runge_kutta(
    table: Table, parameters: Floats, state: Floats, work: Floats, interval: float
) -> None:
    """Integrate volumes, totals, valves and damping over an interval."""
    n_vessels = int(table[at.N_VESSELS])
    n = n_vessels + at.N_TOTALS
    start, stage, first, slope, total = 0, n, 2 * n, 3 * n, 4 * n
    course = int(table[at.AT_COURSE])
    block = n_vessels + int(table[at.N_VALVES])

    move_valves(table, parameters, state, work, interval)
    for i in range(n):
        work[start + i] = work[stage + i] = state[i]
        work[total + i] = 0.0
    for number in range(len(_WEIGHTS)):
        rates(table, parameters, work, stage, (number + 1) // 2, slope)
        weight = _WEIGHTS[number]
        reach = _REACHES[number] * interval
        for i in range(n):
            if number == 0:
                work[first + i] = work[slope + i]
            work[total + i] += weight * work[slope + i]
            work[stage + i] = work[start + i] + reach * work[slope + i]
    for i in range(n):
        state[i] = work[start + i] + interval / 6.0 * work[total + i]
    for i in range(n_vessels):
        # The parabola through both ends with the slope at the start gives the middle.
        work[course + i] = work[start + i]
        work[course + block + i] = 0.75 * work[start + i] + 0.25 * (
            state[i] + interval * work[first + i]
        )
        work[course + 2 * block + i] = state[i]
    follow(table, parameters, state, work, interval)


@kernel
def _mark_dry(table: Table, parameters: Floats, state: Floats, work: Floats) -> None:
    """Mark vessels that only pass their inflow on, and let go of the film they hold."""
    n_vessels = int(table[at.N_VESSELS])
    n = n_vessels + at.N_TOTALS
    for vessel in range(n_vessels):
        work[table[at.AT_DRY] + vessel] = 0.0
    for valve in range(table[at.N_VALVES]):
        flow = state[table[at.AT_FLOW] + valve]
        work[table[at.AT_COURSE] + n_vessels + valve] = flow
    for path in range(table[at.N_ORIFICES]):
        link = table[at.AT_ORIFICE_LINKS] + path * at.PATH_LINKS
        origin = table[link + at.ORIGIN]
        level = level_in(table, parameters, state, 0, origin)
        if level >= _DRY_LEVEL:
            continue
        for i in range(n):
            work[i] = state[i]
        rates(table, parameters, work, 0, 0, n)
        inflow = work[n + origin] + outlet_flow(table, parameters, path, level)
        if inflow >= outlet_flow(table, parameters, path, _DRY_LEVEL):
            continue
        work[table[at.AT_DRY] + origin] = 1.0
        destination = table[link + at.DESTINATION]
        if destination == at.OUTSIDE:
            destination = n_vessels + at.TOTAL_OUT
        state[destination] += state[origin]
        state[origin] = 0.0


@kernel
def adapted_steps(  # noqa: C901  one function, since each is compiled anew into its caller
    table: Table, parameters: Floats, state: Floats, work: Floats, interval: float
) -> None:
    """Integrate an interval in adapted steps, by step doubling.

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
    interval : float
        Length [s].
    """
    size = int(table[at.PLANT_STATE])
    kept = int(table[at.AT_KEPT])
    whole_step = kept + size
    smallest = interval * _SMALLEST_STEP
    done = 0.0
    step = interval
    while done < interval:
        _mark_dry(table, parameters, state, work)
        remaining = interval - done
        if remaining - step < smallest:
            step = remaining
        for i in range(size):
            work[kept + i] = state[i]
        for part in range(3):  # the whole step, then its halves from the same start
            _runge_kutta(table, parameters, state, work, step if part == 0 else 0.5 * step)
            if part == 0:
                for i in range(table[at.N_VESSELS]):
                    work[whole_step + i] = state[i]
                for i in range(size):
                    state[i] = work[kept + i]
        error = 0.0  # relative to what is allowed
        for i in range(table[at.N_VESSELS]):
            allowed = _ABSOLUTE_TOLERANCE + _RELATIVE_TOLERANCE * abs(state[i])
            error = max(error, abs(state[i] - work[whole_step + i]) / 15.0 / allowed)
            if state[i] < 0.0:
                error = max(error, 1e3)
        if error > 1.0 and step > smallest:
            for i in range(size):
                state[i] = work[kept + i]
            step *= max(0.1, 0.8 * error**-0.2)
            continue
        done = interval if step == remaining else done + step
        step *= min(4.0, 0.8 * max(error, 1e-8) ** -0.2)
