"""Published and closed-form values of PI and PID tuning, on processes of any order."""

import math

import numpy as np
import pytest

from harness.analysis.continuous import predict_continuous
from harness.analysis.measures import integral_absolute_error
from harness.analysis.metrics import load_metrics, setpoint_metrics
from harness.analysis.sampled_pid import predict_sampled_pid
from harness.domain.rig import Action
from harness.tuning.loop_margins import loop_margins
from harness.tuning.process import PidSettings, ProcessModel, action_for, reduce_process
from harness.tuning.rule_settings import ideal_settings
from harness.tuning.rules import RULES

pytestmark = pytest.mark.reference


def settled(process, rule_name, closed_loop_time, **options):
    rule = RULES[rule_name]
    found = rule.settle(reduce_process(process, rule.order), closed_loop_time)
    return found, ideal_settings(found, action_for(process), **options)


# D. E. Seborg, T. F. Edgar, D. A. Mellichamp, Process Dynamics and Control, ch. 12: PID by
# direct synthesis for 2 exp(-s)/((10 s + 1)(5 s + 1)) (value from memory, reproduced).
@pytest.mark.parametrize(
    ("closed_loop_time", "gain"), [(1.0, 3.75), (3.0, 1.88), (10.0, 0.682)]
)
def test_direct_synthesis_pid(closed_loop_time, gain):
    process = ProcessModel(gain=2.0, time_constants=(10.0, 5.0), dead_time=1.0)
    found, _ = settled(process, "ds-pid", closed_loop_time)
    assert found.gain == pytest.approx(gain, abs=5.1e-3)
    assert found.integral_time == pytest.approx(15.0, abs=1e-12)
    assert found.derivative_time == pytest.approx(3.33, abs=5e-3)


# D. Chen, D. E. Seborg, Ind. Eng. Chem. Res. 41:4807, 2002: 100 exp(-s)/(100 s + 1), tau_c = 2
# (value from memory, reproduced).
def test_load_synthesis_of_a_slow_lag():
    process = ProcessModel(gain=100.0, time_constants=(100.0,), dead_time=1.0)
    found, settings = settled(process, "load-pi", 2.0)
    assert found.gain == pytest.approx(0.551, abs=5.1e-4)
    assert found.integral_time == pytest.approx(4.91, abs=5.1e-3)
    times = np.linspace(0.0, 120.0, 60_001)
    setpoint = predict_continuous(process, settings, times, setpoint_step=1.0)
    load = predict_continuous(process, settings, times, input_step=1.0)
    assert setpoint.process_variable.max() - 1.0 == pytest.approx(0.421, abs=2.5e-3)
    assert load.process_variable.max() == pytest.approx(1.81, abs=6e-3)
    assert integral_absolute_error(times, load.process_variable) == pytest.approx(
        8.91, abs=5.1e-3
    )
    margins = loop_margins(process, settings)
    assert margins.maximum_sensitivity == pytest.approx(1.93, abs=5.1e-3)


@pytest.mark.parametrize(("lags", "integrating"), [((40.0, 15.0), False), ((15.0,), True)])
def test_load_synthesis_pid_without_dead_time_is_exact(lags, integrating):
    # Closed form: without dead time the load response is exactly
    # (Ti/Kc) s/(tau_c s + 1)^3, whose step response is (Ti/Kc) t^2/(2 tau_c^3) exp(-t/tau_c).
    # What is left is the filter on the derivative, in proportion to its time.
    process = ProcessModel(gain=0.8, time_constants=lags, integrating=integrating)
    tau_c, errors = 6.0, []
    times = np.linspace(0.0, 60.0, 601)
    for lag in (0.04, 0.02):
        found, settings = settled(process, "load-pid", tau_c, derivative_filter=lag)
        response = predict_continuous(process, settings, times, input_step=1.0)
        exact = (
            found.integral_time / found.gain * times**2 / (2.0 * tau_c**3)
            * np.exp(-times / tau_c)
        )  # fmt: skip
        errors.append(float(np.abs(response.process_variable - exact).max() / exact.max()))
    assert errors[1] < 0.01
    assert errors[0] / errors[1] == pytest.approx(2.0, rel=0.05)


# S. Skogestad, J. Process Control 13:291-309, 2003, at tau_c = theta: Ms, setpoint and load IAE
SKOGESTAD = [
    (ProcessModel(gain=1.0, time_constants=(1.0, 0.2)), 0.1, 1.56, 0.358, 0.145),
    (
        ProcessModel(
            gain=1.0,
            time_constants=(2.0, 1.0, 0.4, 0.2, 0.05, 0.05, 0.05),
            numerator_times=(-0.3, 0.08),
        ),
        1.47, 1.66, 3.57, 2.97,
    ),
    (ProcessModel(gain=1.0, time_constants=(1.0,) * 4), 2.5, 1.46, 5.59, 5.40),
    (
        ProcessModel(gain=1.0, time_constants=(20.0, 2.0), dead_time=1.0),
        2.0, 1.72, 6.34, 3.05,
    ),
]  # fmt: skip


@pytest.mark.parametrize(("process", "dead", "sensitivity", "setpoint", "load"), SKOGESTAD)
def test_simc_on_the_whole_process(process, dead, sensitivity, setpoint, load):
    assert reduce_process(process, 1).dead_time == pytest.approx(dead, abs=1e-12)
    _, settings = settled(process, "simc-pi", dead)
    margins = loop_margins(process, settings)
    assert margins.maximum_sensitivity == pytest.approx(sensitivity, abs=5.1e-3)
    times = np.linspace(0.0, 60.0 * dead, 6001)
    after = predict_continuous(process, settings, times, setpoint_step=1.0)
    figures = setpoint_metrics(
        times, after.process_variable, after.output, setpoint=1.0, initial=0.0
    )
    assert figures["iae"] == pytest.approx(setpoint, rel=4e-3)
    after = predict_continuous(process, settings, times, input_step=1.0)
    figures = load_metrics(times, after.process_variable, after.output, setpoint=0.0)
    assert figures["iae"] == pytest.approx(load, rel=4e-3)


def test_simc_pid_of_the_second_process():
    # same paper: tau1 = 2, tau2 = 1.2, theta = 0.77 after the half rule, series form
    found, _ = settled(SKOGESTAD[1][0], "simc-pid", 0.77)
    assert found.form == "series"
    assert found.gain == pytest.approx(2.0 / 1.54, rel=1e-12)
    assert found.integral_time == pytest.approx(2.0, rel=1e-12)
    assert found.derivative_time == pytest.approx(1.2, rel=1e-12)


def test_simc_on_an_integrator():
    # closed form: Ti = 4 (tau_c + theta), Kc = 1/(K (tau_c + theta)), which is Kc Ti K = 4
    process = ProcessModel(gain=0.02, dead_time=3.0, integrating=True)
    found, _ = settled(process, "simc-pi", 3.0)
    assert found.integral_time == pytest.approx(24.0)
    assert found.gain * found.integral_time * process.gain == pytest.approx(4.0)


def test_pi_on_a_pure_integrator_at_damping_one():
    # closed form: Ti = 2 tau_c, Kc = 2/(K tau_c): y = 1 - exp(-x)(1 - x), x = t/tau_c
    process = ProcessModel(gain=0.05, integrating=True)
    found, settings = settled(process, "load-pi", 4.0)
    assert found.integral_time == pytest.approx(8.0)
    assert found.gain == pytest.approx(10.0)
    times = np.linspace(0.0, 60.0, 301)
    x = times / 4.0
    response = predict_continuous(process, settings, times, setpoint_step=1.0)
    np.testing.assert_allclose(
        response.process_variable, 1.0 - np.exp(-x) * (1.0 - x), atol=1e-12
    )


def test_pid_by_direct_synthesis_leaves_a_delayed_integrator():
    # Closed form of L = exp(-theta s)/((tau_c + theta) s): GM = (pi/2)(tau_c + theta)/theta and
    # the setpoint response by the method of steps, for a PID whose derivative sees the error and
    # has a filter that goes to nothing: the difference must fall with the filter's time.
    process = ProcessModel(gain=2.0, time_constants=(10.0, 5.0), dead_time=1.0)
    times = np.linspace(0.0, 8.0, 81)
    exact = sum(
        np.where(
            times >= k,
            (-1.0) ** (k + 1) * (np.maximum(times - k, 0.0) / 2.0) ** k / math.factorial(k),
            0.0,
        )
        for k in range(1, 9)
    )
    errors = []
    for lag in (0.02, 0.002):
        _, settings = settled(
            process, "ds-pid", 1.0, derivative_filter=lag, derivative_on_error=True
        )
        found = predict_continuous(process, settings, times, setpoint_step=1.0)
        errors.append(float(np.abs(found.process_variable - exact).max()))
        margins = loop_margins(process, settings)
        assert margins.gain_margin == pytest.approx(math.pi, rel=4.0 * lag)
    assert errors[1] <= 0.5 * 0.002  # the curve's steepest slope times the filter's time
    assert errors[0] / errors[1] == pytest.approx(10.0, rel=0.1)


# Recomputed independently: K = 1, tau = 5, theta = 1, Kc = 2.5, Ti = 5, backward-Euler integral
@pytest.mark.parametrize(
    ("scan", "overshoot", "iae"),
    [
        (0.05, 0.0491, 2.176),
        (0.1, 0.0583, 2.187),
        (0.25, 0.0897, 2.238),
        (0.5, 0.1505, 2.376),
        (1.0, 0.313, 2.937),
    ],
)
def test_what_a_scan_does(scan, overshoot, iae):
    process = ProcessModel(gain=1.0, time_constants=(5.0,), dead_time=1.0)
    settings = PidSettings(gain=2.5, integral_time=5.0, action=Action.REVERSE)
    found = predict_sampled_pid(
        process, settings, scan, 60.0, ticks_per_scan=round(scan / 0.01), setpoint_step=1.0
    )
    assert found.process_variable.max() - 1.0 == pytest.approx(overshoot, abs=5.1e-4)
    error = 1.0 - found.process_variable
    assert integral_absolute_error(found.times, error) == pytest.approx(iae, abs=5.1e-4)


def test_classical_rules():
    # Ziegler-Nichols and Cohen-Coon on K = 2, tau = 10, theta = 2 (formulas from memory, worked
    # by hand): R theta = 0.4, theta/tau = 0.2
    process = ProcessModel(gain=2.0, time_constants=(10.0,), dead_time=2.0)
    expected = {
        "zn-p": (2.5, None, 0.0),
        "zn-pi": (2.25, 6.66, 0.0),
        "zn-pid": (3.0, 4.0, 1.0),
        "cc-p": (2.5 * (1 + 0.2 / 3), None, 0.0),
        "cc-pi": (2.5 * (0.9 + 0.2 / 12), 2 * 30.6 / 13.0, 0.0),
        "cc-pid": (2.5 * (4 / 3 + 0.05), 2 * 33.2 / 14.6, 8 / 11.4),
    }
    for name, (gain, integral, derivative) in expected.items():
        found, _ = settled(process, name, 1.0)
        assert found.gain == pytest.approx(gain, rel=1e-12), name
        assert found.integral_time == (
            None if integral is None else pytest.approx(integral, rel=1e-12)
        )
        assert found.derivative_time == pytest.approx(derivative, rel=1e-12), name
