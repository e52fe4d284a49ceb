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
