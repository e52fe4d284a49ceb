"""One tick of any plant: valves exactly, volumes by Runge-Kutta, instruments exactly.

The commands are held over a tick. The tick is split where a valve reaches its command (a corner
of its rate limit); between corners every right-hand side is smooth, except near an empty vessel
and at a weir's crest, where the step is adapted.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from plants import layout as at
from plants.compile import kernel
from plants.flow import liquid_flow, orifice_flow, series_coefficient, weir_flow
from plants.noise import standard_normal
from plants.transmitter import BAD, damping_weights, loop_current, quantised
from plants.valve import inherent_characteristic, lagged_travel, time_to_corner
from plants.vessel import cylinder_level

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

# A step over which an outlet's own time constant is passed by more than this is adapted;
# at the limit the local error of one Runge-Kutta step is about 0.03**5/120 = 2e-10 of the level.
_SMOOTH_RATIO = 0.03
# Local error allowed to an adapted step, absolute and relative [m3], [-].
_ABSOLUTE_TOLERANCE = 1e-13
_RELATIVE_TOLERANCE = 1e-12
# A level below which a vessel whose inflow cannot raise it passes its inflow on [m].
_DRY_LEVEL = 1e-10
_SMALLEST_STEP = 2.0**-40  # of a tick; only to bound the loop


@kernel
def valve_flow(table: Integers, parameters: Floats, valve: int, travel: float) -> float:
    """Return the flow through a control valve at a travel.

    Parameters
    ----------
    table : ndarray of int64
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
    kind = table[table[at.AT_VALVE_LINKS] + valve * at.VALVE_LINKS + at.VALVE_CHARACTERISTIC]
    relative = inherent_characteristic(travel, kind, parameters[p + at.RANGEABILITY])
    kv = series_coefficient(parameters[p + at.KV] * relative, parameters[p + at.LINE_KV])
    flow: float = liquid_flow(kv, parameters[p + at.PRESSURE_DROP], parameters[p + at.DENSITY])
    return flow


@kernel
def rates(
    table: Integers,
    parameters: Floats,
    work: Floats,
    volumes: int,
    flows: int,
    dry: int,
    result: int,
) -> None:
    """Write the rates of change of all volumes and totals.

    Parameters
    ----------
    table : ndarray of int64
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    work : ndarray of float64
        Scratch array that holds inputs and result.
    volumes, flows, dry, result : int
        Where in ``work`` the volumes [m3], the valves' flows [m3/s], the flags of dry vessels
        and the result [m3/s] stand [-].
    """
    totals = result + table[at.N_VESSELS]
    for place in range(result, totals + at.N_TOTALS):
        work[place] = 0.0
    links = table[at.AT_VALVE_LINKS]
    for valve in range(table[at.N_VALVES]):
        flow = work[flows + valve]
        destination = table[links + valve * at.VALVE_LINKS + at.VALVE_DESTINATION]
        work[result + destination] += flow
        work[totals + at.TOTAL_IN] += flow
    _overflow_rates(table, parameters, work, volumes, result)
    _orifice_rates(table, parameters, work, volumes, dry, result)


@kernel
def _level(
    table: Integers, parameters: Floats, levels_of: Floats, volumes: int, vessel: int
) -> float:
    """Return the level of a vessel whose volume stands in an array."""
    area = parameters[table[at.AT_VESSEL_PARAMETERS] + vessel * at.VESSEL_STRIDE]
    return cylinder_level(levels_of[volumes + vessel], area)


@kernel
def _overflow_rates(
    table: Integers, parameters: Floats, work: Floats, volumes: int, result: int
) -> None:
    """Add the flow over every weir."""
    links = table[at.AT_OVERFLOW_LINKS]
    totals = result + table[at.N_VESSELS]
    for path in range(table[at.N_OVERFLOWS]):
        origin = table[links + path * at.PATH_LINKS + at.ORIGIN]
        p = table[at.AT_OVERFLOW_PARAMETERS] + path * at.OVERFLOW_STRIDE
        head = _level(table, parameters, work, volumes, origin) - parameters[p + at.CREST]
        if head <= 0.0:
            continue
        flow = weir_flow(parameters[p + at.WEIR_COEFFICIENT], head)
        caught = flow * parameters[p + at.CAUGHT_FRACTION]
        work[result + origin] -= flow
        destination = table[links + path * at.PATH_LINKS + at.DESTINATION]
        if destination >= 0:
            work[result + destination] += caught
        else:
            work[totals + at.TOTAL_OUT] += caught
        work[totals + at.TOTAL_SPILLED] += flow - caught


@kernel
def _orifice_rates(
    table: Integers, parameters: Floats, work: Floats, volumes: int, dry: int, result: int
) -> None:
    """Add the flow of every outlet; upstream ones come first, for the sake of dry vessels."""
    links = table[at.AT_ORIFICE_LINKS]
    totals = result + table[at.N_VESSELS]
    for path in range(table[at.N_ORIFICES]):
        origin = table[links + path * at.PATH_LINKS + at.ORIGIN]
        if work[dry + origin] > 0.0:
            flow = max(work[result + origin], 0.0)
        else:
            flow = _outlet_flow(
                table, parameters, path, _level(table, parameters, work, volumes, origin)
            )
        work[result + origin] -= flow
        destination = table[links + path * at.PATH_LINKS + at.DESTINATION]
        if destination >= 0:
            work[result + destination] += flow
        else:
            work[totals + at.TOTAL_OUT] += flow


@kernel
def _outlet_flow(table: Integers, parameters: Floats, path: int, level: float) -> float:
    """Return the flow of an outlet under a level."""
    p = table[at.AT_ORIFICE_PARAMETERS] + path * at.ORIFICE_STRIDE
    return orifice_flow(parameters[p + at.ORIFICE_COEFFICIENT], level)


@kernel
def _measured(
    table: Integers,
    parameters: Floats,
    work: Floats,
    transmitter: int,
    volumes: int,
    flows: int,
) -> float:
    """Return the true level or flow that a transmitter sees, from places in ``work``."""
    link = table[at.AT_TRANSMITTER_LINKS] + transmitter * at.TRANSMITTER_LINKS
    subject = table[link + at.SUBJECT]
    kind = table[link + at.KIND]
    if kind == at.MEASURES_VALVE_FLOW:
        flow: float = work[flows + subject]
        return flow
    vessel = subject
    if kind == at.MEASURES_ORIFICE_FLOW:
        vessel = table[table[at.AT_ORIFICE_LINKS] + subject * at.PATH_LINKS + at.ORIGIN]
    level = _level(table, parameters, work, volumes, vessel)
    if kind == at.MEASURES_LEVEL:
        return level
    return _outlet_flow(table, parameters, subject, level)


@kernel
def _move_valves(
    table: Integers,
    parameters: Floats,
    state: Floats,
    work: Floats,
    interval: float,
    flows: int,
) -> None:
    """Move every valve over an interval without corners; write flows at start, middle, end."""
    n_valves = table[at.N_VALVES]
    whole = interval == parameters[at.TICK]
    for valve in range(n_valves):
        p = table[at.AT_VALVE_PARAMETERS] + valve * at.VALVE_STRIDE
        position = state[table[at.AT_RAMP] + valve]
        travel = state[table[at.AT_TRAVEL] + valve]
        command = state[table[at.AT_COMMAND] + valve]
        flow = state[table[at.AT_FLOW] + valve]
        work[flows + valve] = flow
        if position == command and travel == position:
            work[flows + n_valves + valve] = flow
            work[flows + 2 * n_valves + valve] = flow
            continue
        stroke_time = parameters[p + at.STROKE_TIME]
        lag = parameters[p + at.LAG]
        rate = 0.0
        if position != command:
            rate = math.copysign(1.0 / stroke_time, command - position)
        half_decay = 0.0
        if lag > 0.0:
            half_decay = (
                parameters[p + at.HALF_DECAY] if whole else math.exp(-interval / 2 / lag)
            )
        half = lagged_travel(travel, position, rate, interval / 2, lag, half_decay)
        end = lagged_travel(travel, position, rate, interval, lag, half_decay * half_decay)
        work[flows + n_valves + valve] = valve_flow(table, parameters, valve, half)
        flow = valve_flow(table, parameters, valve, end)
        work[flows + 2 * n_valves + valve] = flow
        state[table[at.AT_FLOW] + valve] = flow
        state[table[at.AT_TRAVEL] + valve] = end
        state[table[at.AT_RAMP] + valve] = position + rate * interval


@kernel
def _runge_kutta(
    table: Integers, parameters: Floats, state: Floats, work: Floats, interval: float
) -> None:
    """Integrate volumes, totals, valves and damping over an interval without corners."""
    n_vessels = table[at.N_VESSELS]
    n_valves = table[at.N_VALVES]
    n_transmitters = table[at.N_TRANSMITTERS]
    n = n_vessels + at.N_TOTALS
    start, stage, k1, k, total = 0, n, 2 * n, 3 * n, 4 * n
    dry = 5 * n
    flows = dry + n_vessels
    inputs = flows + 3 * n_valves

    _move_valves(table, parameters, state, work, interval, flows)
    for i in range(n):
        work[start + i] = state[i]
    for transmitter in range(n_transmitters):
        work[inputs + transmitter] = _measured(
            table, parameters, work, transmitter, start, flows
        )
    rates(table, parameters, work, start, flows, dry, k1)
    for i in range(n):
        work[total + i] = work[k1 + i]
        work[stage + i] = work[start + i] + 0.5 * interval * work[k1 + i]
    rates(table, parameters, work, stage, flows + n_valves, dry, k)
    for i in range(n):
        work[total + i] += 2.0 * work[k + i]
        work[stage + i] = work[start + i] + 0.5 * interval * work[k + i]
    rates(table, parameters, work, stage, flows + n_valves, dry, k)
    for i in range(n):
        work[total + i] += 2.0 * work[k + i]
        work[stage + i] = work[start + i] + interval * work[k + i]
    rates(table, parameters, work, stage, flows + 2 * n_valves, dry, k)
    for i in range(n):
        work[total + i] += work[k + i]
        work[stage + i] = work[start + i] + interval / 6.0 * work[total + i]
        state[i] = work[stage + i]
        # The parabola through both ends with the slope at the start gives the middle.
        work[k + i] = 0.75 * work[start + i] + 0.25 * (
            work[stage + i] + interval * work[k1 + i]
        )
    _damp(table, parameters, state, work, interval, stage, k, flows, inputs)


@kernel
def _damp(
    table: Integers,
    parameters: Floats,
    state: Floats,
    work: Floats,
    interval: float,
    end: int,
    middle: int,
    flows: int,
    inputs: int,
) -> None:
    """Move the damping of every transmitter over an interval."""
    n_valves = table[at.N_VALVES]
    whole = interval == parameters[at.TICK]
    for transmitter in range(table[at.N_TRANSMITTERS]):
        p = table[at.AT_TRANSMITTER_PARAMETERS] + transmitter * at.TRANSMITTER_STRIDE
        damped = table[at.AT_DAMPED] + transmitter
        x1 = _measured(table, parameters, work, transmitter, end, flows + 2 * n_valves)
        if parameters[p + at.DAMPING] <= 0.0:
            state[damped] = x1
            continue
        xm = _measured(table, parameters, work, transmitter, middle, flows + n_valves)
        if whole:
            w_decay = parameters[p + at.WEIGHT_DECAY]
            w_start = parameters[p + at.WEIGHT_START]
            w_middle = parameters[p + at.WEIGHT_MIDDLE]
            w_end = parameters[p + at.WEIGHT_END]
        else:
            w_decay, w_start, w_middle, w_end = damping_weights(
                interval, parameters[p + at.DAMPING]
            )
        state[damped] = (
            w_decay * state[damped]
            + w_start * work[inputs + transmitter]
            + w_middle * xm
            + w_end * x1
        )


@kernel
def _needs_care(table: Integers, parameters: Floats, state: Floats, interval: float) -> bool:
    """Return whether an interval comes near an empty vessel or a weir's crest."""
    passing = 0.0
    for valve in range(table[at.N_VALVES]):
        # Doubled, for a valve that opens meanwhile.
        passing += 2.0 * state[table[at.AT_FLOW] + valve]
    for path in range(table[at.N_ORIFICES]):
        origin = table[table[at.AT_ORIFICE_LINKS] + path * at.PATH_LINKS + at.ORIGIN]
        level = _level(table, parameters, state, 0, origin)
        flow = _outlet_flow(table, parameters, path, level)
        if flow * interval >= 2.0 * _SMOOTH_RATIO * state[origin]:
            return True
        passing += flow
    for path in range(table[at.N_OVERFLOWS]):
        origin = table[table[at.AT_OVERFLOW_LINKS] + path * at.PATH_LINKS + at.ORIGIN]
        p = table[at.AT_OVERFLOW_PARAMETERS] + path * at.OVERFLOW_STRIDE
        area = parameters[table[at.AT_VESSEL_PARAMETERS] + origin * at.VESSEL_STRIDE]
        # All that flows anywhere in the rig bounds the rise of any level.
        if (state[origin] + passing * interval) / area > parameters[p + at.CREST]:
            return True
    return False


@kernel
def _mark_dry(table: Integers, parameters: Floats, state: Floats, work: Floats) -> None:
    """Mark vessels that only pass their inflow on, and let go of the film they hold."""
    n = table[at.N_VESSELS] + at.N_TOTALS
    dry = 5 * n
    flows = dry + table[at.N_VESSELS]
    for vessel in range(table[at.N_VESSELS]):
        work[dry + vessel] = 0.0
    for valve in range(table[at.N_VALVES]):
        work[flows + valve] = state[table[at.AT_FLOW] + valve]
    for path in range(table[at.N_ORIFICES]):
        link = table[at.AT_ORIFICE_LINKS] + path * at.PATH_LINKS
        origin = table[link + at.ORIGIN]
        level = _level(table, parameters, state, 0, origin)
        if level >= _DRY_LEVEL:
            continue
        for i in range(n):
            work[i] = state[i]
        rates(table, parameters, work, 0, flows, dry, n)
        inflow = work[n + origin] + _outlet_flow(table, parameters, path, level)
        if inflow >= _outlet_flow(table, parameters, path, _DRY_LEVEL):
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
    kept: int,
) -> float:
    """Take two half steps and return the error of a whole one, relative to what is allowed."""
    n_vessels = table[at.N_VESSELS]
    size = table[at.PLANT_STATE]
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
def _careful(
    table: Integers, parameters: Floats, state: Floats, work: Floats, interval: float
) -> None:
    """Integrate an interval without corners in adapted steps, by step doubling."""
    n = table[at.N_VESSELS] + at.N_TOTALS
    kept = 5 * n + table[at.N_VESSELS] + 3 * table[at.N_VALVES] + table[at.N_TRANSMITTERS]
    smallest = interval * _SMALLEST_STEP
    done = 0.0
    step = interval
    while done < interval:
        _mark_dry(table, parameters, state, work)
        remaining = interval - done
        if remaining - step < smallest:
            step = remaining
        error = _doubling_error(table, parameters, state, work, step, kept)
        if error > 1.0 and step > smallest:
            for i in range(table[at.PLANT_STATE]):
                state[i] = work[kept + i]
            step *= max(0.1, 0.8 * error**-0.2)
            continue
        done = interval if step == remaining else done + step
        step *= min(4.0, 0.8 * max(error, 1e-8) ** -0.2)
    for vessel in range(table[at.N_VESSELS]):
        work[5 * n + vessel] = 0.0


@kernel
def plant_tick(table: Integers, parameters: Floats, state: Floats, work: Floats) -> None:
    """Integrate the plant over one tick with its commands held.

    Parameters
    ----------
    table : ndarray of int64
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    state : ndarray of float64
        State of the rig; changed in place.
    work : ndarray of float64
        Scratch of ``Counts.work_size`` places.
    """
    remaining = parameters[at.TICK]
    ramps = table[at.AT_RAMP]
    commands = table[at.AT_COMMAND]
    n_valves = table[at.N_VALVES]
    while remaining > 0.0:
        interval = remaining
        for valve in range(n_valves):
            p = table[at.AT_VALVE_PARAMETERS] + valve * at.VALVE_STRIDE
            corner = time_to_corner(
                state[ramps + valve], state[commands + valve], parameters[p + at.STROKE_TIME]
            )
            if corner <= 0.0:
                state[ramps + valve] = state[commands + valve]
            elif corner < interval:
                interval = corner
        if _needs_care(table, parameters, state, interval):
            _careful(table, parameters, state, work, interval)
        else:
            _runge_kutta(table, parameters, state, work, interval)
        for valve in range(n_valves):
            p = table[at.AT_VALVE_PARAMETERS] + valve * at.VALVE_STRIDE
            left = time_to_corner(
                state[ramps + valve], state[commands + valve], parameters[p + at.STROKE_TIME]
            )
            # Rounding leaves a corner that was just reached within a few units of the last place.
            if left <= 1e-12 * parameters[p + at.STROKE_TIME]:
                state[ramps + valve] = state[commands + valve]
        remaining -= interval


@kernel
def sample(table: Integers, parameters: Floats, state: Floats, work: Floats, tick: int) -> None:
    """Sample every transmitter: true value, current and quality.

    Parameters
    ----------
    table : ndarray of int64
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    state : ndarray of float64
        State of the rig; the samples are written into it.
    work : ndarray of float64
        Scratch.
    tick : int
        Tick of the sample, for the noise [ticks].
    """
    n = table[at.N_VESSELS] + at.N_TOTALS
    flows = 5 * n + table[at.N_VESSELS]
    for i in range(n):
        work[i] = state[i]
    for valve in range(table[at.N_VALVES]):
        work[flows + valve] = state[table[at.AT_FLOW] + valve]
    for transmitter in range(table[at.N_TRANSMITTERS]):
        p = table[at.AT_TRANSMITTER_PARAMETERS] + transmitter * at.TRANSMITTER_STRIDE
        state[table[at.AT_TRUE] + transmitter] = _measured(
            table, parameters, work, transmitter, 0, flows
        )
        forced = state[table[at.AT_FORCED] + transmitter]
        if forced > 0.0:
            state[table[at.AT_CURRENT] + transmitter] = forced
            state[table[at.AT_QUALITY] + transmitter] = BAD
            continue
        fraction = (
            state[table[at.AT_DAMPED] + transmitter] * parameters[p + at.SCALE]
            + parameters[p + at.OFFSET]
        )
        noise = parameters[p + at.NOISE]
        if noise > 0.0:
            stream = table[
                table[at.AT_TRANSMITTER_LINKS] + transmitter * at.TRANSMITTER_LINKS + at.STREAM
            ]
            fraction += noise * standard_normal(table[at.SEED], stream, tick)
        current, quality = loop_current(quantised(fraction, parameters[p + at.RESOLUTION]))
        state[table[at.AT_CURRENT] + transmitter] = current
        state[table[at.AT_QUALITY] + transmitter] = quality
