"""Metrics against the closed forms of first- and second-order step responses."""

from __future__ import annotations

import math

import numpy as np
import pytest

from harness.analysis.metrics import setpoint_metrics

pytestmark = pytest.mark.reference


def _second_order(damping: float) -> dict[str, float | None]:
    """Return the metrics of the unit step response with natural frequency 1."""
    times = np.linspace(0.0, 40.0 / damping, 400001)
    damped = math.sqrt(1.0 - damping**2)
    response = 1.0 - np.exp(-damping * times) * (
        np.cos(damped * times) + damping / damped * np.sin(damped * times)
    )
    return setpoint_metrics(times, response, np.zeros_like(times), setpoint=1.0, initial=0.0)


# Natural frequency 1; recomputed from the closed form.
@pytest.mark.parametrize(
    (
        "damping",
        "overshoot",
        "peak_time",
        "settling",
        "rise",
        "iae",
        "ise",
        "itae",
    ),
    [
        (0.1, 72.925, 3.1574, (38.38, 28.97), 1.104, 6.445, 2.600, 63.88),
        (0.5, 16.303, 3.6276, (8.076, 5.289), 1.638, 1.713, 1.000, 2.942),
        (0.8, 1.516, 5.2360, (3.756, 3.385), 2.468, 1.673, 1.1125, 1.984),
    ],
)
def test_second_order_table(damping, overshoot, peak_time, settling, rise, iae, ise, itae):
    metrics = _second_order(damping)
    assert 100 * metrics["overshoot"] == pytest.approx(overshoot, abs=0.00051)
    assert metrics["peak_time"] == pytest.approx(peak_time, abs=0.001)
    places = 0.0051 if damping == 0.1 else 0.00051
    assert metrics["settling_time_2"] == pytest.approx(settling[0], abs=places)
    assert metrics["settling_time_5"] == pytest.approx(settling[1], abs=places)
    assert metrics["rise_time"] == pytest.approx(rise, abs=0.00051)
    assert metrics["iae"] == pytest.approx(iae, abs=0.00051)
    assert metrics["ise"] == pytest.approx(ise, abs=0.00051)
    assert metrics["itae"] == pytest.approx(itae, abs=places)


@pytest.mark.parametrize("damping", [0.1, 0.25, 0.5])
def test_second_order_closed_forms(damping):
    metrics = _second_order(damping)
    overshoot = math.exp(-math.pi * damping / math.sqrt(1.0 - damping**2))
    assert metrics["overshoot"] == pytest.approx(overshoot, rel=1e-6)
    assert metrics["decay_ratio"] == pytest.approx(overshoot**2, rel=1e-6)
    assert metrics["ise"] == pytest.approx((1 + 4 * damping**2) / (4 * damping), rel=1e-6)


def test_first_order():
    """Settling at ln 50 = 3.912 and ln 20 = 2.996, rise ln 9 = 2.197 time constants."""
    times = np.linspace(0.0, 40.0, 400001)
    metrics = setpoint_metrics(times, -np.expm1(-times), 0 * times, setpoint=1.0, initial=0.0)
    assert metrics["settling_time_2"] == pytest.approx(math.log(50), abs=1e-6)
    assert metrics["settling_time_5"] == pytest.approx(math.log(20), abs=1e-6)
    assert metrics["rise_time"] == pytest.approx(math.log(9), abs=1e-6)
    assert metrics["iae"] == pytest.approx(1.0, rel=1e-6)
    assert metrics["ise"] == pytest.approx(0.5, rel=1e-6)
    assert metrics["itae"] == pytest.approx(1.0, rel=1e-6)
    assert metrics["overshoot"] == 0.0
    assert metrics["peak_time"] is None


@pytest.mark.parametrize("samples", [50, 5000])
def test_quadrature_error_falls_with_the_square_of_the_sampling(samples):
    times = np.linspace(0.0, 30.0, samples + 1)
    finer = np.linspace(0.0, 30.0, 2 * samples + 1)

    def off(grid):
        response = -np.expm1(-grid)
        return setpoint_metrics(grid, response, 0 * grid, setpoint=1.0, initial=0.0)["iae"] - 1

    assert off(times) / off(finer) == pytest.approx(4.0, rel=0.05)
