"""Linear prediction against closed forms, published loops and independent solvers."""

from __future__ import annotations

import math

import control
import numpy as np
import pytest
from scipy.integrate import simpson
from scipy.optimize import brentq
from scipy.signal import lfilter

from harness.analysis.linear import (
    IntegratorModel,
    ScanSchedule,
    predict_continuous,
    predict_sampled,
)
from harness.analysis.measures import integral_absolute_error
from harness.analysis.metrics import integral_identity, setpoint_metrics
from harness.controllers.block import AUTOMATIC
from harness.domain.models import ControllerSettings, LagModel, LoopModels
from harness.domain.rig import Action

pytestmark = pytest.mark.reference


def _pi(gain: float, integral_time: float | None) -> ControllerSettings:
    return ControllerSettings(gain=gain, integral_time=integral_time, action=Action.REVERSE)


def _direct_synthesis(ratio: float, gain: float = 2.0, lag: float = 5.0):
    """Return the model with unit dead time and its PI for closed-loop time ``ratio``."""
    model = LagModel(gain=gain, time_constants=(lag,), dead_time=1.0)
    return model, _pi(lag / (gain * (ratio + 1.0)), lag)


def _series(times, ratio: float) -> np.ndarray:
    """Return the exact setpoint response of L(s) = exp(-s) / ((ratio + 1) s).

    Derived by the method of steps from y' = (1 - y(t - 1)) / (ratio + 1), interval by interval.
    Beyond 12 dead times its terms cancel badly.
    """
    return np.array(
        [
            sum(
                (-1) ** (k + 1) * ((t - k) / (ratio + 1.0)) ** k / math.factorial(k)
                for k in range(1, math.floor(t + 1e-12) + 1)
            )
            for t in np.atleast_1d(times)
        ]
    )


@pytest.mark.parametrize("ratio", [0.5, 1.0, 2.0, 5.0])
def test_continuous_mode_is_the_exact_series(ratio):
    model, settings = _direct_synthesis(ratio)
    times = np.linspace(0.0, 12.0, 2401)
    response = predict_continuous(model, settings, times, setpoint_step=1.0)
    np.testing.assert_allclose(
        response.process_variable, _series(times, ratio), rtol=0.0, atol=1e-12
    )


def test_continuous_mode_at_whole_dead_times():
    model, settings = _direct_synthesis(1.0)
    response = predict_continuous(
        model, settings, np.array([2.0, 3.0, 4.0, 5.0]), setpoint_step=1.0
    )
    # 1/2, 7/8, 1 + 1/48, 1 + 5/128: the series above
    np.testing.assert_allclose(
        response.process_variable, [0.5, 0.875, 1 + 1 / 48, 1 + 5 / 128], rtol=0.0, atol=1e-13
    )


# Recomputed from the closed form; IAE without overshoot is closed-loop time + theta. The row
# for 1 agrees with overshoot 4 %, IAE 2.17 theta of S. Skogestad, J. Process Control 13:291-309, 2003.
# The times were read off a grid of 0.01, at the first point inside: they are late by up to 0.01.
@pytest.mark.parametrize(
    ("ratio", "overshoot", "times_on_grid", "iae", "ise"),
    [
        (0.5, 17.53, (7.41, 5.04, 1.26), 2.132, 1.545),
        (1.0, 4.052, (6.06, 3.37, 1.91), 2.169, 1.686),
        (2.0, 0.0, (7.88, 6.40, 3.97), 3.000, 2.107),
        (5.0, 0.0, (20.26, 15.77, 10.78), 6.000, 3.547),
    ],
)
def test_direct_synthesis_table(ratio, overshoot, times_on_grid, iae, ise):
    metrics = _direct_synthesis_metrics(ratio)
    assert 100 * metrics["overshoot"] == pytest.approx(overshoot, abs=0.0051)
    names = ("settling_time_2", "settling_time_5", "rise_time")
    for name, printed in zip(names, times_on_grid, strict=True):
        assert 0.0 <= printed - metrics[name] <= 0.0101, name
    assert metrics["iae"] == pytest.approx(iae, abs=0.00051)
    assert metrics["ise"] == pytest.approx(ise, abs=0.00056)


def _direct_synthesis_metrics(ratio: float) -> dict[str, float | None]:
    model, settings = _direct_synthesis(ratio)
    times = np.linspace(0.0, 100.0, 200001)
    response = predict_continuous(model, settings, times, setpoint_step=1.0)
    return setpoint_metrics(
        times, response.process_variable, response.output, setpoint=1.0, initial=0.0
    )


# Roots of the exact series, bracketed by hand; three times as many digits as the table above.
@pytest.mark.parametrize(
    ("ratio", "name", "level", "bracket"),
    [
        (0.5, "settling_time_2", 0.98, (7.0, 7.9)),
        (0.5, "settling_time_5", 1.05, (4.5, 5.5)),
        (1.0, "settling_time_2", 1.02, (5.5, 6.5)),
        (1.0, "settling_time_5", 0.95, (3.0, 3.9)),
        (2.0, "settling_time_2", 0.98, (7.0, 9.0)),
        (2.0, "settling_time_5", 0.95, (6.0, 7.0)),
    ],
)
def test_settling_times_are_roots_of_the_series(ratio, name, level, bracket):
    root = brentq(lambda t: float(_series(t, ratio)[0]) - level, *bracket, xtol=1e-10)
    assert _direct_synthesis_metrics(ratio)[name] == pytest.approx(root, abs=1e-6)


@pytest.mark.parametrize("ratio", [0.5, 1.0])
def test_integrals_of_the_series(ratio):
    grid = np.unique(np.concatenate([np.linspace(k, k + 1, 401) for k in range(12)]))
    error = 1.0 - _series(grid, ratio)
    # what is left after 12 dead times is below 1e-4 and 1e-8
    metrics = _direct_synthesis_metrics(ratio)
    assert simpson(error**2, x=grid) == pytest.approx(metrics["ise"], abs=1e-5)


@pytest.mark.parametrize(("factor", "overshoots"), [(0.95, True), (1.0, False)])
def test_overshoot_ends_at_e_minus_one_dead_times(factor, overshoots):
    """No overshoot exactly when the closed-loop time is (e - 1) theta or more: double pole of L."""
    model, settings = _direct_synthesis(factor * (math.e - 1.0))
    response = predict_continuous(
        model, settings, np.linspace(0.0, 80.0, 8001), setpoint_step=1.0
    )
    assert bool(response.process_variable.max() > 1.0 + 1e-12) == overshoots


# PI on K/s with zeta = 1: Ti = 2 tc, Kc = 2 / (K tc); y = 1 - exp(-x)(1 - x), x = t / tc, overshoot
# exp(-2) at x = 2, IAE (2/e) tc; load: peak K tc / e at tc, IAE K tc^2. Closed forms.
def test_pi_on_an_integrator():
    rate, speed = 0.05, 8.0
    model = IntegratorModel(gain=rate, dead_time=0.0)
    settings = _pi(2.0 / (rate * speed), 2.0 * speed)
    times = np.linspace(0.0, 40 * speed, 64001)
    response = predict_continuous(model, settings, times, setpoint_step=1.0).process_variable
    x = times / speed
    np.testing.assert_allclose(response, 1 - np.exp(-x) * (1 - x), rtol=0.0, atol=1e-12)
    assert response.max() - 1.0 == pytest.approx(math.exp(-2), rel=1e-6)
    assert times[response.argmax()] == pytest.approx(2 * speed, abs=0.01)
    assert integral_absolute_error(times, 1.0 - response) == pytest.approx(
        2 / math.e * speed, rel=1e-6
    )
    load = predict_continuous(model, settings, times, input_step=1.0).process_variable
    assert load.max() == pytest.approx(rate * speed / math.e, rel=1e-6)
    assert times[load.argmax()] == pytest.approx(speed, abs=0.01)
    assert integral_absolute_error(times, load) == pytest.approx(rate * speed**2, rel=1e-6)


# What a scan does to K = 1, tau = 5, theta = 1, Kc = 2.5, Ti = 5 (backward Euler, zero-order hold):
# recomputed from the model by an independent script.
@pytest.mark.parametrize(
    ("scan", "overshoot", "iae", "iae_of_samples"),
    [
        (0.05, 4.91, 2.176, None),
        (0.1, 5.83, 2.187, None),
        (0.25, 8.97, 2.238, 2.242),
        (0.5, 15.05, 2.376, 2.393),
        (1.0, 31.3, 2.937, 3.073),
    ],
)
def test_effect_of_the_scan(scan, overshoot, iae, iae_of_samples):
    model = LagModel(gain=1.0, time_constants=(5.0,), dead_time=1.0)
    ticks = 200
    response, _ = _sampled(model, model, _pi(2.5, 5.0), scan / ticks, ticks, 40.0)
    assert 100 * (response.max() - 1.0) == pytest.approx(
        overshoot, abs=0.051 if scan == 1.0 else 0.0051
    )
    times = scan / ticks * np.arange(len(response))
    assert integral_absolute_error(times, 1.0 - response) == pytest.approx(iae, abs=0.00051)
    if iae_of_samples is not None:
        trapezoid = np.trapezoid(np.abs(1.0 - response[::ticks]), dx=scan)
        assert trapezoid == pytest.approx(iae_of_samples, abs=0.00051)


def _sampled(output, load, settings, tick, scan_ticks, horizon, **others):
    """Run the sampled mode on a setpoint step at row 0, or as the keywords say."""
    rows = round(horizon / tick) + 1
    fill = {"setpoint": 1.0, "load_step": 0.0, "delay": 0} | others
    return predict_sampled(
        LoopModels(output=output, load=load),
        settings,
        ScanSchedule(scan_ticks=scan_ticks, delay_ticks=fill["delay"]),
        tick,
        np.full(rows, fill["setpoint"]),
        np.full(rows, fill["load_step"]),
        np.full(rows, AUTOMATIC, dtype=np.int64),
        np.zeros(rows),
        0.0,
        0.0,
        -1e9,
        1e9,
        initial_load=0.0,
    )


def _pulse_transfer(model: LagModel, scan: float, extra_delay: float):
    """Return numerator and denominator in powers of 1/z of the held model.

    From the sampled step response, one partial fraction at a time: exp(-(kT - theta) / tau) from
    the first sample after theta on is g z^-n / (1 - p / z).
    """
    delay = model.dead_time + extra_delay
    first = math.ceil(delay / scan - 1e-12)
    late = first * scan - delay
    lags = model.time_constants
    shares = (
        [1.0]
        if len(lags) == 1
        else [lags[0] / (lags[0] - lags[1]), -lags[1] / (lags[0] - lags[1])]
    )
    poles = [math.exp(-scan / lag) for lag in lags]
    denominator = np.array([1.0])
    for pole in poles:
        denominator = np.convolve(denominator, [1.0, -pole])
    numerator = denominator.copy()
    for index, (share, lag) in enumerate(zip(shares, lags, strict=True)):
        others = np.array([1.0, -1.0])
        for other, pole in enumerate(poles):
            if other != index:
                others = np.convolve(others, [1.0, -pole])
        numerator = numerator - share * math.exp(-late / lag) * others
    return np.concatenate([np.zeros(first), model.gain * numerator]), denominator


def _added(first: np.ndarray, second: np.ndarray) -> np.ndarray:
    total = np.zeros(max(len(first), len(second)))
    total[: len(first)] += first
    total[: len(second)] += second
    return total


@pytest.mark.parametrize("lags", [(5.0,), (118.0, 90.0)])
@pytest.mark.parametrize("dead_time", [0.0, 1.0, 1.37])
@pytest.mark.parametrize(("scan_ticks", "delay"), [(1, 0), (4, 0), (4, 3), (5, 11)])
@pytest.mark.parametrize("law", ["P", "PI"])
def test_sampled_mode_is_the_pulse_transfer_function(lags, dead_time, scan_ticks, delay, law):
    tick = 0.1
    scan = scan_ticks * tick
    output = LagModel(gain=1.3, time_constants=lags, dead_time=dead_time)
    load = LagModel(gain=-0.7, time_constants=(3.0,), dead_time=0.45)
    settings = _pi(1.1, None if law == "P" else 6.0)
    forward, plant_poles = _pulse_transfer(output, scan, delay * tick)
    if law == "P":
        block, block_poles = np.array([1.1]), np.array([1.0])
    else:
        block, block_poles = np.array([1.1 + 1.1 * scan / 6.0, -1.1]), np.array([1.0, -1.0])
    loop = np.convolve(forward, block)
    open_poles = np.convolve(plant_poles, block_poles)
    closed_poles = _added(open_poles, loop)
    steps = np.ones(301)

    tracked, _ = _sampled(output, load, settings, tick, scan_ticks, 300 * scan, delay=delay)
    np.testing.assert_allclose(
        tracked[::scan_ticks], lfilter(loop, closed_poles, steps), rtol=0.0, atol=1e-9
    )

    disturbed, _ = _sampled(
        output,
        load,
        settings,
        tick,
        scan_ticks,
        300 * scan,
        delay=delay,
        setpoint=0.0,
        load_step=1.0,
    )
    path, path_poles = _pulse_transfer(load, scan, 0.0)
    expected = lfilter(open_poles, closed_poles, lfilter(path, path_poles, steps))
    np.testing.assert_allclose(disturbed[::scan_ticks], expected, rtol=0.0, atol=1e-9)


def test_sampled_mode_tends_to_the_continuous_one_at_first_order():
    """Distance 1.1e-2 at a scan of theta / 20 and 2.2e-4 at theta / 1000 (recomputed)."""
    model, settings = _direct_synthesis(1.0)
    scans = np.array([0.05, 0.025, 0.005, 0.001])
    gaps = []
    for scan in scans:
        sampled, _ = _sampled(model, model, settings, scan, 1, 20.0)
        times = scan * np.arange(len(sampled))
        exact = predict_continuous(model, settings, times, setpoint_step=1.0).process_variable
        gaps.append(np.abs(sampled - exact).max())
    assert gaps[0] == pytest.approx(1.1e-2, abs=0.05e-2)
    assert gaps[-1] == pytest.approx(2.2e-4, abs=0.05e-4)
    slopes = np.diff(np.log(gaps)) / np.diff(np.log(scans))
    np.testing.assert_allclose(slopes, 1.0, atol=0.02)


@pytest.mark.parametrize("integral_time", [None, 150.0])
@pytest.mark.parametrize("lags", [(118.0, 90.0), (60.0, 60.0), (100.0,)])
def test_continuous_mode_without_dead_time_agrees_with_an_independent_library(
    lags, integral_time
):
    times = np.linspace(0.0, 1500.0, 1501)
    output = LagModel(gain=1.6, time_constants=lags, dead_time=0.0)
    load = LagModel(gain=0.8, time_constants=(90.0,), dead_time=25.0)
    settings = _pi(2.2, integral_time)
    s = control.tf("s")
    plant = 1.6 / math.prod(lag * s + 1 for lag in lags)
    block = (
        control.tf([2.2], [1]) if integral_time is None else 2.2 * (1 + 1 / (integral_time * s))
    )

    def step(system):
        return control.step_response(control.ss(system), times).outputs

    tracked = predict_continuous(output, settings, times, setpoint_step=1.0)
    reference = control.feedback(plant * block, 1)
    np.testing.assert_allclose(tracked.process_variable, step(reference), rtol=0, atol=1e-8)
    disturbed = predict_continuous(output, settings, times, input_step=1.0)
    np.testing.assert_allclose(
        disturbed.process_variable, step(control.feedback(plant, block)), rtol=0, atol=1e-8
    )
    through_path = predict_continuous(output, settings, times, load=load, load_step=1.0)
    path = step(0.8 / (90.0 * s + 1) * control.feedback(control.tf([1], [1]), plant * block))
    shifted = np.concatenate([np.zeros(25), path[:-25]])
    np.testing.assert_allclose(through_path.process_variable, shifted, rtol=0, atol=1e-8)


# D. Chen & D. E. Seborg, Ind. Eng. Chem. Res. 41:4807, 2002: 100 exp(-s) / (100 s + 1), closed-loop time 2,
# load at the plant input (formulas and figures from memory). The overshoot given, 42.1 %, is that of a
# coarse simulation: an independent Euler loop at steps of 4, 2, 1 ms gives 42.02, 41.96, 41.92, and its
# limit is the 41.89 that we find.
def test_published_lag_dominant_loop():
    model = LagModel(gain=100.0, time_constants=(100.0,), dead_time=1.0)
    square = 100.0**2 + 100.0 * 1.0 - (2.0 - 100.0) ** 2
    settings = _pi(square / (100.0 * 3.0**2), square / 101.0)
    assert settings.gain == pytest.approx(0.551, abs=0.0006)
    assert settings.integral_time == pytest.approx(4.91, abs=0.006)
    times = np.linspace(0.0, 200.0, 100001)
    tracked = predict_continuous(model, settings, times, setpoint_step=1.0).process_variable
    assert 100 * (tracked.max() - 1.0) == pytest.approx(41.889, abs=0.001)
    load = predict_continuous(model, settings, times, input_step=1.0).process_variable
    assert load.max() == pytest.approx(1.81, abs=0.006)
    assert integral_absolute_error(times, load) == pytest.approx(8.91, abs=0.006)


# S. Skogestad, J. Process Control 13:291-309, 2003: settings by the half rule, full process
# (figures from memory). The 0.358 given for the first is again a simulation's: an independent Euler
# loop at 2 and 1 ms gives 0.3598 and 0.3584, whose limit is 0.35695.
@pytest.mark.parametrize(
    ("lags", "dead_time", "gain", "integral_time", "setpoint_iae", "load_iae"),
    [
        ((1.0, 0.2), 0.0, 5.5, 0.8, 0.35695, 0.14545),
        ((20.0, 2.0), 1.0, 5.25, 16.0, 6.34, 3.05),
    ],
)
def test_published_half_rule_loops(
    lags, dead_time, gain, integral_time, setpoint_iae, load_iae
):
    model = LagModel(gain=1.0, time_constants=lags, dead_time=dead_time)
    times = np.linspace(0.0, 20.0 * integral_time, 100001)
    tracked = predict_continuous(model, _pi(gain, integral_time), times, setpoint_step=1.0)
    load = predict_continuous(model, _pi(gain, integral_time), times, input_step=1.0)
    assert integral_absolute_error(times, 1.0 - tracked.process_variable) == pytest.approx(
        setpoint_iae, rel=0.001
    )
    assert integral_absolute_error(times, load.process_variable) == pytest.approx(
        load_iae, rel=0.001
    )


# Any stable PI loop: load du at the plant input leaves the integral of e dt = -(Ti / Kc) du; setpoint
# step r on a self-regulating plant r Ti / (K Kc). Exact, from the final value of the integral part.
def test_integral_of_the_error_is_integral_time_over_gain_times_output_change():
    model = LagModel(gain=1.6, time_constants=(118.0, 90.0), dead_time=12.0)
    settings = _pi(1.4, 160.0)
    times = np.linspace(0.0, 6000.0, 60001)
    load = predict_continuous(model, settings, times, input_step=0.1)
    assert np.trapezoid(-load.process_variable, times) == pytest.approx(
        -160.0 / 1.4 * 0.1, rel=1e-6
    )
    tracked = predict_continuous(model, settings, times, setpoint_step=0.05)
    error = 0.05 - tracked.process_variable
    assert np.trapezoid(error, times) == pytest.approx(0.05 * 160.0 / (1.6 * 1.4), rel=1e-6)
    cut = slice(0, 4000)  # in the midst of the transient the identity holds just as well
    identity = integral_identity(
        times[cut], error[cut], tracked.output[cut], gain=1.4, integral_time=160.0
    )
    assert identity.error_integral == pytest.approx(identity.expected, rel=1e-6)


def test_the_identity_is_exact_for_the_block_on_its_own_scans():
    model = LagModel(gain=1.6, time_constants=(118.0, 90.0), dead_time=12.3)
    response, output = _sampled(model, model, _pi(1.4, 160.0), 0.5, 4, 700.0)
    times = 0.5 * np.arange(len(response))
    identity = integral_identity(
        times[::4],
        1.0 - response[::4],
        output[::4],
        gain=1.4,
        integral_time=160.0,
        right_rectangles=True,
    )
    assert identity.error_integral == pytest.approx(identity.expected, rel=1e-12)


# P on one lag with its pole at 1 / 40 s: Kc = (tau / 40 - 1) / K leaves r / (1 + K Kc). Closed form.
def test_p_leaves_its_offset():
    model = LagModel(gain=1.6, time_constants=(100.0,), dead_time=0.0)
    gain = (100.0 / 40.0 - 1.0) / 1.6
    times = np.linspace(0.0, 1000.0, 1001)
    response = predict_continuous(model, _pi(gain, None), times, setpoint_step=1.0)
    final = 1.0 - 1.0 / (1.0 + 1.6 * gain)
    np.testing.assert_allclose(
        response.process_variable, -final * np.expm1(-times / 40.0), rtol=0, atol=1e-12
    )
