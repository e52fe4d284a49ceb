"""One tick of any plant: valves exactly, volumes by Runge-Kutta, instruments exactly.

The commands are held over a tick. Each valve gives its flow over the tick as a parabola that
takes the corners of its rate limit into account, so that every right-hand side is smooth, except
near an empty vessel and at a weir's crest, where the step is adapted.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from plants import layout as at
from plants.compile import kernel
from plants.flow import orifice_flow, weir_flow
from plants.noise import standard_normal
from plants.transmitter import BAD, damping_weights, loop_current, quantised
from plants.valve import installed_flow, valve_course

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
    table: Integers,
    parameters: Floats,
    work: Floats,
    volumes: int,
    flows: int,
    result: int,
    dry: int,
) -> None:
    """Write the rates of change of all volumes and totals.

    The offsets are taken out of the table once, at the top: the compiler cannot know that
    writing a rate leaves the table alone.

    Parameters
    ----------
    table : ndarray of int64
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    work : ndarray of float64
        Scratch array that holds inputs and result.
    volumes, flows, result : int
        Where in ``work`` the volumes [m3], the valves' flows [m3/s] and the result [m3/s]
        stand [-].
    dry : int
        Where the flags of dry vessels stand; -1 when no vessel is dry and no weir is reached [-].
    """
    totals = result + table[at.N_VESSELS]
    vessels = table[at.AT_VESSEL_PARAMETERS] + at.INVERSE_AREA
    links = table[at.AT_VALVE_LINKS] + at.VALVE_DESTINATION
    outlets = table[at.AT_ORIFICE_LINKS]
    coefficients = table[at.AT_ORIFICE_PARAMETERS]
    n_outlets = table[at.N_ORIFICES]
    for place in range(result, totals + at.N_TOTALS):
        work[place] = 0.0
    into = 0.0
    for valve in range(table[at.N_VALVES]):
        flow = work[flows + valve]
        work[result + table[links + valve * at.VALVE_LINKS]] += flow
        into += flow
    if dry >= 0:
        _weir_rates(table, parameters, work, volumes, result)
    out = work[totals + at.TOTAL_OUT]
    for path in range(n_outlets):
        link = outlets + path * at.PATH_LINKS
        origin = table[link + at.ORIGIN]
        destination = table[link + at.DESTINATION]
        if dry >= 0 and work[dry + origin] > 0.0:
            flow = max(work[result + origin], 0.0)
        else:
            level = work[volumes + origin] * parameters[vessels + origin * at.VESSEL_STRIDE]
            flow = orifice_flow(parameters[coefficients + path * at.ORIFICE_STRIDE], level)
        work[result + origin] -= flow
        if destination >= 0:
            work[result + destination] += flow
        else:
            out += flow
    work[totals + at.TOTAL_IN] = into
    work[totals + at.TOTAL_OUT] = out


@kernel
def _weir_rates(
    table: Integers, parameters: Floats, work: Floats, volumes: int, result: int
) -> None:
    """Add the flow over every weir."""
    totals = result + table[at.N_VESSELS]
    for path in range(table[at.N_OVERFLOWS]):
        link = table[at.AT_OVERFLOW_LINKS] + path * at.PATH_LINKS
        origin = table[link + at.ORIGIN]
        p = table[at.AT_OVERFLOW_PARAMETERS] + path * at.OVERFLOW_STRIDE
        head = _level(table, parameters, work, volumes, origin) - parameters[p + at.CREST]
        flow = weir_flow(parameters[p + at.WEIR_COEFFICIENT], head)
        caught = flow * parameters[p + at.CAUGHT_FRACTION]
        work[result + origin] -= flow
        destination = table[link + at.DESTINATION]
        if destination >= 0:
            work[result + destination] += caught
        else:
            work[totals + at.TOTAL_OUT] += caught
        work[totals + at.TOTAL_SPILLED] += flow - caught


@kernel
def _level(
    table: Integers, parameters: Floats, volumes: Floats, first: int, vessel: int
) -> float:
    """Return the level of a vessel whose volume stands in an array."""
    p = table[at.AT_VESSEL_PARAMETERS] + vessel * at.VESSEL_STRIDE
    level: float = volumes[first + vessel] * parameters[p + at.INVERSE_AREA]
    return level


@kernel
def _outlet_flow(table: Integers, parameters: Floats, path: int, level: float) -> float:
    """Return the flow of an outlet under a level."""
    p = table[at.AT_ORIFICE_PARAMETERS] + path * at.ORIFICE_STRIDE
    return orifice_flow(parameters[p + at.ORIFICE_COEFFICIENT], level)


@kernel
def _move_valves(
    table: Integers,
    parameters: Floats,
    state: Floats,
    work: Floats,
    interval: float,
    flows: int,
) -> None:
    """Move every valve over an interval; write the parabolas of their flows."""
    n_valves = table[at.N_VALVES]
    whole = interval == parameters[at.TICK]
    for valve in range(n_valves):
        position = state[table[at.AT_RAMP] + valve]
        travel = state[table[at.AT_TRAVEL] + valve]
        command = state[table[at.AT_COMMAND] + valve]
        start = middle = end = flow = state[table[at.AT_FLOW] + valve]
        if position != command or travel != position:
            p = table[at.AT_VALVE_PARAMETERS] + valve * at.VALVE_STRIDE
            lag = parameters[p + at.LAG]
            half_decay = 0.0
            if lag > 0.0:
                half_decay = (
                    parameters[p + at.HALF_DECAY] if whole else math.exp(-interval / 2 / lag)
                )
            start, middle, end, travel, position, flow = valve_course(
                travel,
                position,
                command,
                flow,
                interval,
                parameters[p + at.STROKE_TIME],
                lag,
                half_decay,
                table[
                    table[at.AT_VALVE_LINKS] + valve * at.VALVE_LINKS + at.VALVE_CHARACTERISTIC
                ],
                parameters[p + at.RANGEABILITY],
                parameters[p + at.LOG_RANGEABILITY],
                parameters[p + at.KV],
                parameters[p + at.LINE_KV],
                parameters[p + at.FLOW_PER_KV],
            )
            state[table[at.AT_FLOW] + valve] = flow
            state[table[at.AT_TRAVEL] + valve] = travel
            state[table[at.AT_RAMP] + valve] = position
        work[flows + valve] = start
        work[flows + n_valves + valve] = middle
        work[flows + 2 * n_valves + valve] = end


@kernel
def _runge_kutta(
    table: Integers,
    parameters: Floats,
    state: Floats,
    work: Floats,
    interval: float,
    careful: bool,
) -> None:
    """Integrate volumes, totals, valves and damping over an interval."""
    n_vessels = table[at.N_VESSELS]
    n_valves = table[at.N_VALVES]
    n = n_vessels + at.N_TOTALS
    start, stage, k1, k, total = 0, n, 2 * n, 3 * n, 4 * n
    flows = 5 * n + n_vessels
    dry = 5 * n if careful else -1

    _move_valves(table, parameters, state, work, interval, flows)
    for i in range(n):
        work[start + i] = state[i]
    rates(table, parameters, work, start, flows, k1, dry)
    for i in range(n):
        work[total + i] = work[k1 + i]
        work[stage + i] = work[start + i] + 0.5 * interval * work[k1 + i]
    rates(table, parameters, work, stage, flows + n_valves, k, dry)
    for i in range(n):
        work[total + i] += 2.0 * work[k + i]
        work[stage + i] = work[start + i] + 0.5 * interval * work[k + i]
    rates(table, parameters, work, stage, flows + n_valves, k, dry)
    for i in range(n):
        work[total + i] += 2.0 * work[k + i]
        work[stage + i] = work[start + i] + interval * work[k + i]
    rates(table, parameters, work, stage, flows + 2 * n_valves, k, dry)
    for i in range(n):
        work[total + i] += work[k + i]
        work[stage + i] = work[start + i] + interval / 6.0 * work[total + i]
        state[i] = work[stage + i]
        # The parabola through both ends with the slope at the start gives the middle.
        work[k + i] = 0.75 * work[start + i] + 0.25 * (
            work[stage + i] + interval * work[k1 + i]
        )
    _damp(table, parameters, state, work, interval, start, k, stage, flows)


@kernel
def _damp(
    table: Integers,
    parameters: Floats,
    state: Floats,
    work: Floats,
    interval: float,
    start: int,
    middle: int,
    end: int,
    flows: int,
) -> None:
    """Move the damping of every transmitter over an interval."""
    n_valves = table[at.N_VALVES]
    whole = interval == parameters[at.TICK]
    damped = table[at.AT_DAMPED]
    links = table[at.AT_TRANSMITTER_LINKS]
    first = table[at.AT_TRANSMITTER_PARAMETERS]
    held_flows = table[at.AT_FLOW]
    for transmitter in range(table[at.N_TRANSMITTERS]):
        p = first + transmitter * at.TRANSMITTER_STRIDE
        link = links + transmitter * at.TRANSMITTER_LINKS
        subject = table[link + at.SUBJECT]
        kind = table[link + at.KIND]
        damping = parameters[p + at.DAMPING]
        if kind == at.MEASURES_VALVE_FLOW:
            x0 = work[flows + subject]
            xm = work[flows + n_valves + subject]
            x1 = work[flows + 2 * n_valves + subject]
            if damping <= 0.0:
                x1 = state[held_flows + subject]
        else:
            inverse = parameters[p + at.INVERSE_SUBJECT_AREA]
            x0 = work[start + subject] * inverse
            xm = work[middle + subject] * inverse
            x1 = work[end + subject] * inverse
            if kind == at.MEASURES_ORIFICE_FLOW:
                coefficient = parameters[p + at.SUBJECT_COEFFICIENT]
                x0 = orifice_flow(coefficient, x0)
                xm = orifice_flow(coefficient, xm)
                x1 = orifice_flow(coefficient, x1)
        if damping <= 0.0:
            state[damped + transmitter] = x1
            continue
        if whole:
            w_decay = parameters[p + at.WEIGHT_DECAY]
            w_start = parameters[p + at.WEIGHT_START]
            w_middle = parameters[p + at.WEIGHT_MIDDLE]
            w_end = parameters[p + at.WEIGHT_END]
        else:
            w_decay, w_start, w_middle, w_end = damping_weights(interval, damping)
        state[damped + transmitter] = (
            w_decay * state[damped + transmitter] + w_start * x0 + w_middle * xm + w_end * x1
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
        inverse = parameters[
            table[at.AT_VESSEL_PARAMETERS] + origin * at.VESSEL_STRIDE + at.INVERSE_AREA
        ]
        # All that flows anywhere in the rig bounds the rise of any level.
        if (state[origin] + passing * interval) * inverse > parameters[p + at.CREST]:
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
        rates(table, parameters, work, 0, flows, n, dry)
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
    _runge_kutta(table, parameters, state, work, step, True)
    for i in range(n_vessels):
        work[whole_step + i] = state[i]
    for i in range(size):
        state[i] = work[kept + i]
    _runge_kutta(table, parameters, state, work, step / 2, True)
    _runge_kutta(table, parameters, state, work, step / 2, True)
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
    """Integrate an interval in adapted steps, by step doubling."""
    n = table[at.N_VESSELS] + at.N_TOTALS
    kept = 5 * n + table[at.N_VESSELS] + 3 * table[at.N_VALVES]
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
    interval = parameters[at.TICK]
    if _needs_care(table, parameters, state, interval):
        _careful(table, parameters, state, work, interval)
    else:
        _runge_kutta(table, parameters, state, work, interval, False)


@kernel
def sample(table: Integers, parameters: Floats, state: Floats, tick: int) -> None:
    """Sample every transmitter: true value, current and quality.

    Parameters
    ----------
    table : ndarray of int64
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    state : ndarray of float64
        State of the rig; the samples are written into it.
    tick : int
        Tick of the sample, for the noise [ticks].
    """
    links = table[at.AT_TRANSMITTER_LINKS]
    first = table[at.AT_TRANSMITTER_PARAMETERS]
    damped = table[at.AT_DAMPED]
    true = table[at.AT_TRUE]
    currents = table[at.AT_CURRENT]
    qualities = table[at.AT_QUALITY]
    forced = table[at.AT_FORCED]
    flows = table[at.AT_FLOW]
    seed = table[at.SEED]
    for transmitter in range(table[at.N_TRANSMITTERS]):
        p = first + transmitter * at.TRANSMITTER_STRIDE
        link = links + transmitter * at.TRANSMITTER_LINKS
        subject = table[link + at.SUBJECT]
        kind = table[link + at.KIND]
        if kind == at.MEASURES_VALVE_FLOW:
            value = state[flows + subject]
        else:
            value = state[subject] * parameters[p + at.INVERSE_SUBJECT_AREA]
            if kind == at.MEASURES_ORIFICE_FLOW:
                value = orifice_flow(parameters[p + at.SUBJECT_COEFFICIENT], value)
        state[true + transmitter] = value
        if state[forced + transmitter] > 0.0:
            state[currents + transmitter] = state[forced + transmitter]
            state[qualities + transmitter] = BAD
            continue
        fraction = (
            state[damped + transmitter] * parameters[p + at.SCALE] + parameters[p + at.OFFSET]
        )
        noise = parameters[p + at.NOISE]
        if noise > 0.0:
            fraction += noise * standard_normal(seed, table[link + at.STREAM], tick)
        current, quality = loop_current(quantised(fraction, parameters[p + at.RESOLUTION]))
        state[currents + transmitter] = current
        state[qualities + transmitter] = quality
