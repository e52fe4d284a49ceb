"""Metrics on polylines whose figures can be worked out by hand."""

from __future__ import annotations

import math

import numpy as np
import pytest

from harness.analysis.measures import (
    decay_ratio,
    integral_absolute_error,
    integral_squared_error,
    integral_time_absolute_error,
    output_travel,
    rise_time,
    settling_time,
    tail_mean,
)
from harness.analysis.metrics import (
    METRIC_UNITS,
    integral_identity,
    load_metrics,
    lobe_near_band,
    setpoint_metrics,
)
from harness.errors import UsageError

TIME = np.array([0.0, 1.0, 2.0, 3.0, 4.0])


def test_settling_interpolates_the_last_entry():
    assert settling_time(TIME, np.array([-1.0, 0.5, -0.3, 0.1, 0.0]), 0.2) == pytest.approx(
        2.25
    )


def test_settling_is_zero_when_never_outside_and_none_when_it_ends_outside():
    assert settling_time(TIME, np.full(5, 0.1), 0.2) == 0.0
    assert settling_time(TIME, np.array([1.0, 0.0, 0.0, 0.0, 0.3]), 0.2) is None


def test_settling_refuses_a_band_of_nothing():
    with pytest.raises(UsageError, match="band"):
        settling_time(TIME, np.zeros(5), 0.0)


def test_rise_interpolates_both_levels():
    assert rise_time(TIME, np.array([0.0, 0.5, 1.0, 1.1, 1.0])) == pytest.approx(1.6)
    assert rise_time(TIME, np.array([0.0, 0.5, 0.6, 0.7, 0.8])) is None


def test_integrals_are_exact_across_a_sign_change():
    time, error = np.array([1.0, 3.0]), np.array([1.0, -3.0])
    # zero at 1.5: areas 0.25 and 2.25; squares 1/6 and 4.5; moments by hand below
    assert integral_absolute_error(time, error) == pytest.approx(2.5)
    assert integral_squared_error(time, error) == pytest.approx(0.5 / 3 + 1.5 * 9 / 3)
    moment = 0.25 * (1.0 + 0.5 / 3) + 2.25 * (1.5 + 2 * 1.5 / 3)
    assert integral_time_absolute_error(time, error) == pytest.approx(moment)


def test_integrals_do_not_depend_on_added_points_of_the_polyline():
    generator = np.random.default_rng(5)
    time = np.cumsum(generator.uniform(0.1, 1.0, 30))
    error = generator.normal(size=30)
    fine = np.union1d(time, np.linspace(time[0], time[-1], 777))
    fine_error = np.interp(fine, time, error)
    for integral in (
        integral_absolute_error,
        integral_squared_error,
        integral_time_absolute_error,
    ):
        assert integral(fine, fine_error) == pytest.approx(integral(time, error), rel=1e-12)


def test_travel_counts_every_move_and_the_first_when_asked():
    assert output_travel(np.array([0.5, 0.7, 0.6])) == pytest.approx(0.3)
    assert output_travel(np.array([0.5, 0.7, 0.6]), initial=0.4) == pytest.approx(0.4)


def test_tail_mean_takes_the_last_stretch():
    assert tail_mean(TIME, np.array([9.0, 9.0, 1.0, 2.0, 3.0]), 2.0) == pytest.approx(2.0)
    assert tail_mean(TIME, np.array([9.0, 9.0, 1.0, 2.0, 3.0]), 0.0) == 3.0


def test_decay_ratio_needs_two_whole_lobes():
    two = np.array([0.0, 1.4, 1.2, 0.9, 1.1, 1.05, 0.99, 1.0])
    assert decay_ratio(two) == pytest.approx(0.25)
    assert decay_ratio(two[:6]) is None  # the second lobe is cut off
    assert decay_ratio(np.array([0.0, 0.5, 0.9, 1.0])) is None


def test_decay_ratio_ignores_crossings_within_noise():
    rough = np.array([0.0, 1.4, 0.995, 1.3, 0.7, 1.2, 0.99, 0.8, 1.0])
    assert decay_ratio(rough, noise=0.02) == pytest.approx(0.5)


@pytest.mark.parametrize(
    ("time", "values"),
    [
        (TIME, np.zeros(4)),
        (np.zeros(1), np.zeros(1)),
        (TIME[::-1], np.zeros(5)),
        (TIME, np.array([0.0, 1.0, math.nan, 1.0, 1.0])),
    ],
)
def test_a_broken_record_is_refused(time, values):
    with pytest.raises(UsageError, match="metrics"):
        integral_absolute_error(time, values)


def test_setpoint_metrics_of_a_step_down_mirror_those_up():
    time = np.linspace(0.0, 20.0, 2001)
    shape = 1.0 - np.exp(-0.4 * time) * np.cos(time)
    up = setpoint_metrics(time, 0.5 + 0.05 * shape, 0.3 + 0 * time, setpoint=0.55, initial=0.5)
    down = setpoint_metrics(
        time, 0.5 - 0.05 * shape, 0.3 + 0 * time, setpoint=0.45, initial=0.5
    )
    assert up.keys() == METRIC_UNITS.keys()
    signed = {"peak_deviation", "offset"}
    for name in METRIC_UNITS:
        expected = -up[name] if name in signed else up[name]
        assert down[name] == pytest.approx(expected, rel=1e-9, abs=1e-12), name
    assert up["overshoot"] == pytest.approx(up["peak_deviation"] / 0.05)


def test_not_reached_is_none():
    metrics = setpoint_metrics(
        TIME, np.linspace(0.0, 0.5, 5), np.zeros(5), setpoint=1.0, initial=0.0
    )
    for name in ("settling_time_2", "settling_time_5", "rise_time", "peak_time", "decay_ratio"):
        assert metrics[name] is None
    assert metrics["overshoot"] == 0.0
    assert metrics["offset"] == pytest.approx(-0.5)


def test_a_p_loop_is_measured_about_the_value_its_balance_leaves():
    time = np.linspace(0.0, 30.0, 3001)
    response = 0.5 + 0.04 * -np.expm1(-time)
    metrics = setpoint_metrics(time, response, 0 * time, setpoint=0.55, initial=0.5, final=0.54)
    assert metrics["settling_time_2"] == pytest.approx(math.log(50), abs=1e-4)
    assert metrics["offset"] == pytest.approx(-0.01)
    assert metrics["iae"] == pytest.approx(0.04, rel=1e-4)


def test_load_settling_uses_the_band_it_is_given():
    time = np.linspace(0.0, 40.0, 40001)
    response = 0.5 - 0.1 * time * np.exp(1.0 - time)  # peak -0.1 at t = 1
    own = load_metrics(time, response, 0 * time, setpoint=0.5)
    assert own["peak_deviation"] == pytest.approx(-0.1, rel=1e-6)
    assert own["peak_time"] == pytest.approx(1.0, abs=1e-3)
    wider = load_metrics(time, response, 0 * time, setpoint=0.5, band_reference=0.2)
    assert wider["settling_time_2"] < own["settling_time_2"]
    assert wider["settling_time_2"] == pytest.approx(
        load_metrics(time, 2 * response - 0.5, 0 * time, setpoint=0.5, band_reference=0.4)[
            "settling_time_2"
        ]
    )
    assert own["overshoot"] is None


def test_a_load_that_moves_nothing_has_settled():
    metrics = load_metrics(TIME, np.full(5, 0.5), np.zeros(5), setpoint=0.5)
    assert metrics["settling_time_2"] == 0.0
    assert metrics["iae"] == 0.0


def test_identity_shows_a_wrong_integral_time():
    time = np.linspace(0.0, 50.0, 50001)
    error = np.exp(-time)
    output = 2.0 * error + 2.0 / 10.0 * -np.expm1(-time)  # Kc 2, Ti 10
    right = integral_identity(time, error, output, gain=2.0, integral_time=10.0)
    assert right.error_integral == pytest.approx(right.expected, rel=1e-6)
    assert right.time_per_gain == pytest.approx(5.0, rel=1e-6)
    wrong = integral_identity(time, error, output, gain=2.0, integral_time=12.0)
    assert wrong.expected == pytest.approx(1.2 * wrong.error_integral, rel=1e-6)


def test_identity_without_a_move_gives_no_ratio():
    flat = integral_identity(TIME, np.zeros(5), np.ones(5), gain=1.0, integral_time=1.0)
    assert flat.time_per_gain is None


def _ringing(peak: float) -> np.ndarray:
    """Return a second-order error: its lobes are exactly peak, peak^2, ... of the step."""
    slope = -math.log(peak) / math.pi  # decay rate per damped radian
    phase = np.linspace(0.0, 8.0 * math.pi, 8001)
    return -np.exp(-slope * phase) * (np.cos(phase) + slope * np.sin(phase))


@pytest.mark.parametrize(
    ("peak", "expected"),
    [(0.05, True), (0.047, True), (0.03, False), (0.06, False), (0.2236, True), (0.15, False)],
)
def test_a_lobe_near_the_band_makes_settling_undecidable(peak, expected):
    # lobes: the peak itself, and its square (0.2236 squared is 0.05)
    assert lobe_near_band(_ringing(peak), 0.05, 0.005) is expected


def test_lobes_before_a_clear_excursion_do_not_matter():
    error = np.array([-1.0, 0.0, 0.05, 0.0, -0.3, 0.0, 0.01, 0.0])
    assert not lobe_near_band(error, 0.05, 0.005)


def test_a_flat_top_is_a_lobe():
    assert lobe_near_band(np.array([-1.0, 0.0, 0.05, 0.05, 0.0, 0.0]), 0.05, 0.005)


def test_a_monotone_approach_has_no_lobe():
    assert not lobe_near_band(-np.exp(-np.linspace(0.0, 8.0, 200)), 0.05, 0.005)
