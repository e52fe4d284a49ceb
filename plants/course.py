"""The course of a valve over an interval: its flow as a parabola, and where it stands after."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from plants import layout as at
from plants.compile import inlined_kernel, kernel
from plants.flow import series_coefficient
from plants.valve import LINEAR, SEAT_TRAVEL, installed_flow, lagged_travel

Floats = NDArray[np.float64]
Table = NDArray[np.uint32]

# A course is cut into pieces over which the flow is nearly a parabola. Of a lag, at most this
# part of it: Simpson's rule is then within 0.25**4 / 2880 = 1.4e-6 of the change over a piece.
_PIECE = 0.25
# Of travel times ln R, at most this: within (1/16)**4 / 2880 = 5e-9 of the flow.
_CHANGE = 1.0 / 16.0
# Near the seat, where the characteristic bends, at most this travel [-].
_SEAT_CHANGE = SEAT_TRAVEL / 16.0
# A lag this close to its input has arrived: rounding of a travel of 1, and no denormals [-].
_LANDED = 1e-16
_MOST_PIECES = 200
# A lag this close to its input has settled, as far as the flow's integral goes [-].
_SETTLED = 1e-9


@kernel
def power_near(relative: float, exponent: float) -> float:
    """Return ``relative * exp(exponent)``, by a short series where the exponent is small.

    Parameters
    ----------
    relative : float
        Relative flow coefficient [-].
    exponent : float
        Change of travel times ln R [-].

    Returns
    -------
    float
        Up to an exponent of 1/16 by the series to the sixth power, whose relative error is
        below (1/16)**7 / 5040 = 8e-13 [-].
    """
    z = exponent
    if abs(z) > _CHANGE:
        return relative * math.exp(z)
    square = z * z
    low = 1.0 + z
    high = 0.5 + z * (1.0 / 6.0)
    rest = 1.0 / 24.0 + z * (1.0 / 120.0) + square * (1.0 / 720.0)
    return relative * (low + square * (high + square * rest))


@kernel
def _flow_near(
    travel: float,
    change: float,
    last_relative: float,
    kind: int,
    rangeability: float,
    log_rangeability: float,
    kv: float,
    line_kv: float,
    flow_per_kv: float,
) -> float:
    """Return the flow at a travel above the seat, a small change away from a known coefficient."""
    if kind == LINEAR:
        return installed_flow(
            travel, kind, rangeability, log_rangeability, kv, line_kv, flow_per_kv
        )
    relative = power_near(last_relative, change * log_rangeability)
    return flow_per_kv * series_coefficient(kv * relative, line_kv)


@kernel
def _moments(
    flow: float, middle: float, last: float, done: float, width: float, interval: float
) -> tuple[float, float, float]:
    """Return the moments of a parabola over a piece, in parts of the interval."""
    w = width / interval
    z = done / interval + 0.5 * w
    bend = flow - 2.0 * middle + last
    p0 = middle + bend * (1.0 / 6.0)
    p1 = (last - flow) * (1.0 / 12.0)
    p2 = middle * (1.0 / 12.0) + bend * (1.0 / 40.0)
    return w * p0, w * (z * p0 + w * p1), w * (z * z * p0 + 2.0 * z * w * p1 + w * w * p2)


@kernel
def _parabola(mean: float, first: float, second: float) -> tuple[float, float, float]:
    """Return start, middle and end of the parabola with these moments."""
    slope = 12.0 * (first - mean / 2.0)
    curvature = 180.0 * (second - first + mean * (1.0 / 6.0))
    return (
        mean - slope / 2.0 + curvature * (1.0 / 6.0),
        mean - curvature * (1.0 / 12.0),
        mean + slope / 2.0 + curvature * (1.0 / 6.0),
    )


@kernel
def _pieces(
    travel: float,
    position: float,
    rate: float,
    width: float,
    lag: float,
    log_rangeability: float,
) -> int:
    """Return into how many pieces a segment without a corner is cut."""
    change = abs(rate) * width
    wanted = 1.0
    if lag > 0.0:
        change += abs(travel - position + rate * lag)
        wanted = width / (_PIECE * lag)
    wanted = max(wanted, change * log_rangeability / _CHANGE)
    if min(travel, position + rate * width) < SEAT_TRAVEL:
        wanted = max(wanted, change / _SEAT_CHANGE)
    return min(_MOST_PIECES, math.ceil(wanted))


@kernel
def _course_in_pieces(
    travel: float,
    position: float,
    command: float,
    flow: float,
    interval: float,
    corner: float,
    rate: float,
    lag: float,
    kind: int,
    rangeability: float,
    log_rangeability: float,
    kv: float,
    line_kv: float,
    flow_per_kv: float,
) -> tuple[float, float, float, float, float, float]:
    """Move a valve over an interval in as many pieces as it takes."""
    mean = first = second = done = 0.0
    while done < interval:
        until = corner if done < corner < interval else interval
        pieces = _pieces(travel, position, rate, until - done, lag, log_rangeability)
        width = (until - done) / pieces
        decay = math.exp(-width / 2 / lag) if lag > 0.0 else 0.0
        for piece in range(pieces):
            half = lagged_travel(travel, position, rate, width / 2, lag, decay)
            travel = lagged_travel(travel, position, rate, width, lag, decay * decay)
            position += rate * width
            middle = installed_flow(
                half, kind, rangeability, log_rangeability, kv, line_kv, flow_per_kv
            )
            last = installed_flow(
                travel, kind, rangeability, log_rangeability, kv, line_kv, flow_per_kv
            )
            m0, m1, m2 = _moments(flow, middle, last, done + piece * width, width, interval)
            mean += m0
            first += m1
            second += m2
            flow = last
        done = until
        if until == corner:
            position = command
            rate = 0.0
    start, middle, end = _parabola(mean, first, second)
    return start, middle, end, travel, position, flow


@kernel
def valve_course(  # noqa: PLR0915  straight-line arithmetic; parts would pass on twenty scalars
    travel: float,
    position: float,
    command: float,
    flow: float,
    interval: float,
    stroke_time: float,
    lag: float,
    half_decay: float,
    kind: int,
    rangeability: float,
    log_rangeability: float,
    kv: float,
    line_kv: float,
    flow_per_kv: float,
) -> tuple[float, float, float, float, float, float]:
    """Move a valve over an interval and return its flow as a parabola, and where it stands.

    The stem is limited in rate and followed by a lag; both are moved exactly. Where the flow is
    smooth over the interval the parabola goes through its start, middle and end. Where the stem
    reaches its command inside the interval, or the flow bends strongly over it, the parabola has
    the same integral and first two moments as the flow, which is what a vessel downstream,
    slow against the interval, can tell of it: the corner need not cut the interval of all.

    Parameters
    ----------
    travel, position, command : float
        Travel, rate-limited position and command at the start [-].
    flow : float
        Flow at the start [m3/s].
    interval : float
        Length [s].
    stroke_time, lag : float
        Time for full travel, and lag [s].
    half_decay : float
        exp(-interval / 2 / lag), or 0 without a lag [-].
    kind : int
        LINEAR or EQUAL_PERCENTAGE [-].
    rangeability, log_rangeability : float
        R and its natural logarithm [-].
    kv, line_kv : float
        Kv of valve and line [m3/h at 1 bar].
    flow_per_kv : float
        Flow of a Kv of 1 [m3/s].

    Returns
    -------
    start, middle, end : float
        The parabola [m3/s].
    travel, position : float
        At the end of the interval [-].
    flow : float
        True flow at the end [m3/s].
    """
    corner = abs(command - position) * stroke_time
    rate = 0.0
    if corner > 0.0:
        rate = math.copysign(1.0 / stroke_time, command - position)
    else:
        position = command
        if abs(travel - position) < _LANDED:
            last = installed_flow(
                position, kind, rangeability, log_rangeability, kv, line_kv, flow_per_kv
            )
            return last, last, last, position, position, last
    split = 0.0 < corner < interval
    first, first_decay, second_decay = interval, half_decay, 1.0
    if split:
        first = corner
        if lag > 0.0:
            first_decay = math.exp(-0.5 * corner / lag)
            second_decay = half_decay / first_decay
        else:
            second_decay = 0.0
    half = lagged_travel(travel, position, rate, 0.5 * first, lag, first_decay)
    turn = lagged_travel(travel, position, rate, first, lag, first_decay * first_decay)
    after = end = turn
    if split:
        after = command + (turn - command) * second_decay
        end = command + (turn - command) * (second_decay * second_decay)
    change = max(abs(half - travel), abs(turn - half), abs(after - turn), abs(end - after))
    bends = lag > 0.0 and interval > _PIECE * lag
    if bends and not split:
        bends = abs(travel - position + rate * lag) >= _SETTLED
    if (
        bends
        or change * log_rangeability > 0.5 * _CHANGE
        or (change > 0.0 and min(travel, turn, end) < SEAT_TRAVEL)
    ):
        return _course_in_pieces(
            travel, position, command, flow, interval, corner, rate, lag,
            kind, rangeability, log_rangeability, kv, line_kv, flow_per_kv,
        )  # fmt: skip

    if kind == LINEAR:
        relative = 1.0
        last = installed_flow(
            end, kind, rangeability, log_rangeability, kv, line_kv, flow_per_kv
        )
    else:
        relative = math.exp((end - 1.0) * log_rangeability)
        last = flow_per_kv * series_coefficient(kv * relative, line_kv)
    middle = _flow_near(
        half, half - end, relative,
        kind, rangeability, log_rangeability, kv, line_kv, flow_per_kv,
    )  # fmt: skip
    if not split:
        return flow, middle, last, end, position + rate * interval, last
    turned = _flow_near(
        turn, turn - end, relative,
        kind, rangeability, log_rangeability, kv, line_kv, flow_per_kv,
    )  # fmt: skip
    middle_after = _flow_near(
        after, after - end, relative,
        kind, rangeability, log_rangeability, kv, line_kv, flow_per_kv,
    )  # fmt: skip
    m0, m1, m2 = _moments(flow, middle, turned, 0.0, corner, interval)
    n0, n1, n2 = _moments(turned, middle_after, last, corner, interval - corner, interval)
    start, middle, final = _parabola(m0 + n0, m1 + n1, m2 + n2)
    return start, middle, final, end, command, last


@inlined_kernel
def move_valves(
    table: Table, parameters: Floats, state: Floats, work: Floats, interval: float
) -> None:
    """Move every valve over an interval; write the parabolas of their flows.

    What the valves were before is kept in ``work``, see ``restore_valves``.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    state : ndarray of float64
        State of the rig; the valves' part is changed in place.
    work : ndarray of float64
        Scratch.
    interval : float
        Length [s].
    """
    n_valves = table[at.N_VALVES]
    ramps = table[at.AT_RAMP]
    travels = table[at.AT_TRAVEL]
    commands = table[at.AT_COMMAND]
    held_flows = table[at.AT_FLOW]
    stride = table[at.N_VESSELS] + n_valves
    course = table[at.AT_COURSE] + table[at.N_VESSELS]
    before = table[at.AT_VALVES_BEFORE]
    whole = interval == parameters[at.TICK]
    for valve in range(n_valves):
        position = state[ramps + valve]
        travel = state[travels + valve]
        command = state[commands + valve]
        start = middle = end = flow = state[held_flows + valve]
        work[before + 3 * valve] = position
        work[before + 3 * valve + 1] = travel
        work[before + 3 * valve + 2] = flow
        if position != command or travel != position:
            p = table[at.AT_VALVE_PARAMETERS] + valve * at.VALVE_STRIDE
            link = table[at.AT_VALVE_LINKS] + valve * at.VALVE_LINKS
            lag = parameters[p + at.LAG]
            half_decay = parameters[p + at.HALF_DECAY]
            if not whole and lag > 0.0:
                half_decay = math.exp(-0.5 * interval / lag)
            start, middle, end, travel, position, flow = valve_course(
                travel,
                position,
                command,
                flow,
                interval,
                parameters[p + at.STROKE_TIME],
                lag,
                half_decay,
                table[link + at.VALVE_CHARACTERISTIC],
                parameters[p + at.RANGEABILITY],
                parameters[p + at.LOG_RANGEABILITY],
                parameters[p + at.KV],
                parameters[p + at.LINE_KV],
                parameters[p + at.FLOW_PER_KV],
            )
            state[ramps + valve] = position
            state[travels + valve] = travel
            state[held_flows + valve] = flow
        work[course + valve] = start
        work[course + stride + valve] = middle
        work[course + 2 * stride + valve] = end


@kernel
def restore_valves(table: Table, state: Floats, work: Floats) -> None:
    """Take back the last ``move_valves``.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    state : ndarray of float64
        State of the rig; the valves' part is changed in place.
    work : ndarray of float64
        Scratch.
    """
    before = table[at.AT_VALVES_BEFORE]
    for valve in range(table[at.N_VALVES]):
        state[table[at.AT_RAMP] + valve] = work[before + 3 * valve]
        state[table[at.AT_TRAVEL] + valve] = work[before + 3 * valve + 1]
        state[table[at.AT_FLOW] + valve] = work[before + 3 * valve + 2]
