"""The sampled PID prediction against an independent z-domain recursion, and its limit."""

import numpy as np
import pytest
from scipy.signal import cont2discrete

from harness.analysis.continuous import predict_continuous
from harness.analysis.sampled_pid import predict_sampled_pid
from harness.domain.rig import Action
from harness.errors import UsageError
from harness.tuning.process import PidSettings, ProcessModel

PROCESS = ProcessModel(
    gain=-0.9, time_constants=(12.0, 5.0), dead_time=3.0, numerator_times=(-1.0,)
)
PID = PidSettings(
    gain=1.4,
    integral_time=14.0,
    derivative_time=3.0,
    derivative_filter=0.5,
    action=Action.DIRECT,
)


def test_it_is_the_z_domain_loop():
    # An independent discretisation of the transfer function, dead time a whole number of scans,
    # and the block's difference equation written out.
    scan, steps = 1.0, 120
    numerator = -0.9 * np.array([-1.0, 1.0])
    denominator = np.polymul([12.0, 1.0], [5.0, 1.0])
    b, a, _ = cont2discrete((numerator, denominator), scan, method="zoh")
    b, y, u = b.ravel(), np.zeros(steps), np.zeros(steps)
    integral = derivative = before = 0.0
    for k in range(steps):
        for i in (1, 2):
            if k - i >= 0:
                y[k] -= a[i] * y[k - i]
            late = k - i - 3
            if late >= 0:
                y[k] += b[i] * u[late]
        error = 1.0 - y[k]
        integral -= 1.4 * scan / 14.0 * error
        derivative = (0.5 * derivative - 1.4 * 3.0 * (-y[k] - before)) / (0.5 + scan)
        before = -y[k]
        u[k] = -1.4 * error + integral + derivative
    found = predict_sampled_pid(PROCESS, PID, scan, steps - 1.0, setpoint_step=1.0)
    np.testing.assert_allclose(found.process_variable[:steps], y, atol=1e-9)
    np.testing.assert_allclose(found.output[:steps], u, atol=1e-9)


def test_rows_between_the_samples_change_nothing():
    coarse = predict_sampled_pid(PROCESS, PID, 1.0, 60.0, input_step=1.0, filter_time=0.7)
    fine = predict_sampled_pid(
        PROCESS, PID, 1.0, 60.0, ticks_per_scan=7, input_step=1.0, filter_time=0.7
    )
    np.testing.assert_allclose(fine.process_variable[::7], coarse.process_variable, atol=1e-11)


@pytest.mark.parametrize("on_error", [False, True])
def test_it_goes_to_the_continuous_prediction_as_the_scan_goes_to_zero(on_error):
    settings = PidSettings(
        gain=1.4, integral_time=14.0, derivative_time=3.0, derivative_filter=0.5,
        derivative_on_error=on_error, action=Action.DIRECT,
    )  # fmt: skip
    times = np.arange(0.0, 60.0, 0.5)
    exact = predict_continuous(
        PROCESS, settings, times, setpoint_step=1.0, input_step=0.5, filter_time=0.7
    ).process_variable
    errors = []
    for scan in (0.05, 0.025):
        found = predict_sampled_pid(
            PROCESS, settings, scan, 60.0, setpoint_step=1.0, input_step=0.5, filter_time=0.7
        )
        errors.append(
            np.abs(found.process_variable[:: round(0.5 / scan)][: times.size] - exact).max()
        )
    assert errors[0] < 0.02
    assert errors[0] / errors[1] == pytest.approx(2.0, rel=0.1)  # first order in the scan


def test_a_scan_in_the_wrong_unit_is_named():
    with pytest.raises(UsageError, match="is the scan in seconds"):
        predict_sampled_pid(PROCESS, PID, 1e-4, 3600.0)
