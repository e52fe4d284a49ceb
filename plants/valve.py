"""Control valves: inherent characteristic, and the exact movement of an actuator."""

from __future__ import annotations

import math

from plants.compile import kernel
from plants.flow import series_coefficient

LINEAR = 0
EQUAL_PERCENTAGE = 1

# Below this travel the plug lands on its seat and the flow goes to zero; the inherent
# characteristic of IEC 60534-2-4 is not defined there. The figure is common practice.
SEAT_TRAVEL = 0.02


# A lag's transient is cut into pieces of at most this many lags; Simpson's rule is then within
# 0.5**4 / 2880 = 2e-5 of the change over a piece.
_PIECE = 0.5
_MOST_PIECES = 200
# A lag this close to its input has settled, as far as the flow's integral goes [-].
_SETTLED = 1e-9


@kernel
def inherent_characteristic(
    travel: float, kind: int, rangeability: float, log_rangeability: float
) -> float:
    """Return the relative flow coefficient at a travel.

    IEC 60534-2-4 (value from memory): linear 1/R + (1 - 1/R) l, equal percentage R**(l - 1);
    below two per cent of travel it is led smoothly to zero, as the plug lands on its seat.

    Parameters
    ----------
    travel : float
        Relative travel, 0 closed to 1 open [-].
    kind : int
        LINEAR or EQUAL_PERCENTAGE [-].
    rangeability : float
        Inherent rangeability R, above 1 [-].
    log_rangeability : float
        Natural logarithm of R [-].

    Returns
    -------
    float
        Kv at this travel over rated Kv [-].
    """
    if travel <= 0.0:
        return 0.0
    if kind == LINEAR:
        relative = 1.0 / rangeability + (1.0 - 1.0 / rangeability) * travel
    else:
        relative = math.exp((travel - 1.0) * log_rangeability)
    if travel < SEAT_TRAVEL:
        s = travel / SEAT_TRAVEL
        relative *= s * s * (3.0 - 2.0 * s)
    return relative


@kernel
def installed_flow(
    travel: float,
    kind: int,
    rangeability: float,
    log_rangeability: float,
    kv: float,
    line_kv: float,
    flow_per_kv: float,
) -> float:
    """Return the flow through a valve and its line at a travel.

    Parameters
    ----------
    travel : float
        Travel [-].
    kind : int
        LINEAR or EQUAL_PERCENTAGE [-].
    rangeability, log_rangeability : float
        R and its natural logarithm [-].
    kv, line_kv : float
        Rated Kv of the valve, and Kv of the line or 0 [m3/h at 1 bar].
    flow_per_kv : float
        Flow of a Kv of 1 under the pressure drop at hand [m3/s].

    Returns
    -------
    float
        Flow [m3/s].
    """
    relative = inherent_characteristic(travel, kind, rangeability, log_rangeability)
    return flow_per_kv * series_coefficient(kv * relative, line_kv)


@kernel
def lagged_travel(
    travel: float, position: float, rate: float, elapsed: float, lag: float, decay: float
) -> float:
    """Return the travel behind a first-order lag whose input is a ramp; exact.

    Parameters
    ----------
    travel : float
        Travel at the start [-].
    position : float
        Rate-limited position at the start [-].
    rate : float
        Slope of the position over the interval [1/s].
    elapsed : float
        Time since the start [s].
    lag : float
        Time constant; 0 for none [s].
    decay : float
        exp(-elapsed / lag), or 0 without a lag [-].

    Returns
    -------
    float
        Travel after ``elapsed`` [-].
    """
    if lag <= 0.0:
        return position + rate * elapsed
    settled = position + rate * (elapsed - lag)
    return settled + (travel - position + rate * lag) * decay


@kernel
def valve_course(
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
    reaches its command inside the interval, or the lag is short against it, the parabola has
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
    rate = math.copysign(1.0 / stroke_time, command - position) if corner > 0.0 else 0.0
    if corner <= 0.0:
        position = command
    smooth = corner <= 0.0 or corner >= interval
    if smooth and (
        lag <= 0.0 or interval <= _PIECE * lag or abs(travel - position + rate * lag) < _SETTLED
    ):
        half = lagged_travel(travel, position, rate, interval / 2, lag, half_decay)
        end = lagged_travel(travel, position, rate, interval, lag, half_decay * half_decay)
        middle = installed_flow(
            half, kind, rangeability, log_rangeability, kv, line_kv, flow_per_kv
        )
        last = installed_flow(
            end, kind, rangeability, log_rangeability, kv, line_kv, flow_per_kv
        )
        return flow, middle, last, end, position + rate * interval, last

    mean = first = second = 0.0
    done = 0.0
    while done < interval:
        until = corner if done < corner < interval else interval
        pieces = 1
        if lag > 0.0:
            pieces = min(_MOST_PIECES, math.ceil((until - done) / (_PIECE * lag)))
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
            # Moments of the parabola over the piece, in parts of the interval.
            w = width / interval
            z = (done + (piece + 0.5) * width) / interval
            bend = flow - 2.0 * middle + last
            p0 = middle + bend / 6.0
            p1 = (last - flow) / 12.0
            p2 = middle / 12.0 + bend / 40.0
            mean += w * p0
            first += w * (z * p0 + w * p1)
            second += w * (z * z * p0 + 2.0 * z * w * p1 + w * w * p2)
            flow = last
        done = until
        if until == corner:
            position = command
            rate = 0.0
    slope = 12.0 * (first - mean / 2.0)
    curvature = 180.0 * (second - first + mean / 6.0)
    start = mean - slope / 2.0 + curvature / 6.0
    middle = mean - curvature / 12.0
    end = mean + slope / 2.0 + curvature / 6.0
    return start, middle, end, travel, position, flow
