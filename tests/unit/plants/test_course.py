"""The course of a valve against plain quadrature of its exact movement."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad

from plants.course import power_near, valve_course
from plants.valve import (
    EQUAL_PERCENTAGE,
    LINEAR,
    SEAT_TRAVEL,
    inherent_characteristic,
    installed_flow,
    lagged_travel,
)

STROKE, R, KV, LINE, PER_KV = 8.0, 50.0, 9.0, 12.0, 4.4e-4


def _flow(travel, kind):
    return installed_flow(travel, kind, R, math.log(R), KV, LINE, PER_KV)


def _course(travel, position, command, interval, lag, kind):
    half_decay = math.exp(-interval / 2 / lag) if lag > 0 else 0.0
    return valve_course(
        travel, position, command, _flow(travel, kind), interval, STROKE, lag, half_decay,
        kind, R, math.log(R), KV, LINE, PER_KV,
    )  # fmt: skip


def _travel(travel, position, command, elapsed, lag):
    """Movement in two ramps at most, by the textbook answer of a lag to a ramp."""
    corner = min(abs(command - position) * STROKE, elapsed)
    rate = math.copysign(1 / STROKE, command - position)
    if lag == 0.0:
        return position + rate * corner
    at_corner = position + rate * corner
    y = at_corner - rate * lag + (travel - position + rate * lag) * math.exp(-corner / lag)
    return at_corner + (y - at_corner) * math.exp(-(elapsed - corner) / lag)


CASES = [
    # travel, position, command
    (0.55, 0.55, 0.95),  # a ramp all through
    (0.55, 0.55, 0.5562),  # a corner at half a tick of 0.1 s
    (0.55, 0.55, 0.553),
    (0.60, 0.58, 0.57),  # behind its position, which turns
    (0.50, 0.60, 0.60),  # a tail
    (0.03, 0.03, 0.0),  # onto the seat
    (0.0, 0.0, 0.03),  # off the seat
]


@pytest.mark.parametrize("kind", [LINEAR, EQUAL_PERCENTAGE])
@pytest.mark.parametrize("lag", [0.0, 0.04, 0.7])
@pytest.mark.parametrize("interval", [0.1, 0.5])
@pytest.mark.parametrize("case", CASES)
def test_the_parabola_has_the_moments_of_the_flow(case, interval, lag, kind):
    travel, position, command = case
    if lag == 0.0:
        travel = position  # without a lag they never part
    case = (travel, position, command)
    start, middle, end, after, _, last = _course(travel, position, command, interval, lag, kind)
    assert after == pytest.approx(_travel(*case, interval, lag), abs=1e-13)
    assert last == pytest.approx(_flow(after, kind), rel=1e-12)

    corner = abs(command - position) * STROKE / interval
    for power in range(3):

        def weighted(s, power=power):
            return _flow(_travel(*case, s * interval, lag), kind) * s**power

        breaks = [p for p in (corner, 0.1, 0.3, 0.6) if 0 < p < 1]
        expected = quad(weighted, 0, 1, points=breaks, epsabs=1e-13, epsrel=1e-11, limit=400)[0]
        nodes, weights = np.polynomial.legendre.leggauss(4)
        s = (nodes + 1) / 2
        bend = start - 2 * middle + end
        curve = start + s * (4 * middle - 3 * start - end) + 2 * bend * s**2
        found = float(np.sum(weights / 2 * curve * s**power))
        # 1e-6 of full flow over one tick moves no vessel of this house by 1e-8 m
        assert found == pytest.approx(expected, abs=1e-6 * _flow(1.0, kind))


def test_a_valve_at_rest_stays():
    flow = _flow(0.4, LINEAR)
    assert _course(0.4, 0.4, 0.4, 0.1, 0.7, LINEAR) == (flow, flow, flow, 0.4, 0.4, flow)


def test_a_stem_reaches_its_command_exactly():
    for lag in (0.0, 0.7):
        assert _course(0.55, 0.55, 0.556, 0.1, lag, EQUAL_PERCENTAGE)[4] == 0.556
    assert _course(0.55, 0.55, 0.556, 0.1, 0.0, EQUAL_PERCENTAGE)[3] == 0.556


def test_the_short_series_is_as_near_as_it_says():
    for exponent in np.linspace(-0.2, 0.2, 401):
        assert power_near(0.7, exponent) == pytest.approx(0.7 * math.exp(exponent), rel=1e-12)


def test_a_lag_behind_a_ramp_trails_by_rate_times_lag():
    rate, lag, elapsed = 0.125, 0.7, 60.0
    travel = lagged_travel(0.2, 0.2, rate, elapsed, lag, math.exp(-elapsed / lag))
    assert 0.2 + rate * elapsed - travel == pytest.approx(rate * lag, rel=1e-12)


def test_the_characteristic_meets_its_ends_and_closes_tight():
    for kind in (LINEAR, EQUAL_PERCENTAGE):
        assert inherent_characteristic(1.0, kind, R, math.log(R)) == pytest.approx(1.0)
        assert inherent_characteristic(0.0, kind, R, math.log(R)) == 0.0
        below = inherent_characteristic(SEAT_TRAVEL - 1e-12, kind, R, math.log(R))
        above = inherent_characteristic(SEAT_TRAVEL, kind, R, math.log(R))
        assert below == pytest.approx(above, rel=1e-9)
        travels = np.linspace(0, 1, 500)
        values = [inherent_characteristic(x, kind, R, math.log(R)) for x in travels]
        assert np.all(np.diff(values) > 0)
