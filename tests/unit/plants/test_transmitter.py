"""Transmitters: damping exact for a parabola, resolution, limits of the current."""

from __future__ import annotations

from decimal import Decimal, getcontext

import numpy as np
import pytest

from plants.transmitter import (
    GOOD,
    UNCERTAIN,
    damping_weights,
    fraction_of_current,
    loop_current,
    quantised,
)


def _exact_weights(ratio):
    """Weights in fifty digits, from the response of y' = (x - y)/T to 1, s and s**2."""
    getcontext().prec = 50
    a = Decimal(ratio)
    decay = (-a).exp()
    ones = 1 - decay
    ramp = 1 - ones / a
    square = 1 - 2 * ramp / a
    # x = x0 (1 - 3s + 2s^2) + xm (4s - 4s^2) + x1 (2s^2 - s)
    return decay, ones - 3 * ramp + 2 * square, 4 * ramp - 4 * square, 2 * square - ramp


@pytest.mark.parametrize("ratio", [1e-6, 1e-3, 0.0299, 0.0301, 0.1, 1.0, 10.0, 300.0])
def test_weights_are_exact_for_a_parabola(ratio):
    found = damping_weights(ratio * 2.5, 2.5)
    expected = [float(weight) for weight in _exact_weights(ratio)]
    np.testing.assert_allclose(found, expected, rtol=1e-10, atol=1e-13)
    assert sum(found) == pytest.approx(1.0, abs=1e-13)


def test_without_damping_the_end_passes():
    assert damping_weights(0.1, 0.0) == (0.0, 0.0, 0.0, 1.0)


def test_resolution_rounds_to_the_nearest_step():
    step = 1e-3
    assert quantised(0.50049, step, 1 / step) == pytest.approx(0.500, abs=1e-15)
    assert quantised(0.50051, step, 1 / step) == pytest.approx(0.501, abs=1e-15)
    assert quantised(-0.00051, step, 1 / step) == pytest.approx(-0.001, abs=1e-15)
    assert quantised(0.123456789, 0.0, 0.0) == 0.123456789


def test_current_stays_inside_the_measuring_range():
    assert loop_current(0.5) == (12.0, GOOD)
    assert loop_current(-0.1) == (3.8, UNCERTAIN)
    assert loop_current(1.1) == (20.5, UNCERTAIN)
    for fraction in np.linspace(-0.01, 1.03, 53):
        current, quality = loop_current(fraction)
        assert quality == GOOD
        assert fraction_of_current(current) == pytest.approx(fraction, abs=1e-15)
