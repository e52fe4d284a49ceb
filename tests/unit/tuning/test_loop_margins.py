"""Margins of PID loops, against the older PI margins and an independent library."""

import control
import numpy as np
import pytest

from harness.domain.models import ControllerSettings, LagModel
from harness.domain.rig import Action
from harness.errors import ModelError
from harness.tuning.loop_margins import is_stable, loop_margins, loop_response, poles_at_zero
from harness.tuning.margins import continuous_margins, sampled_margins
from harness.tuning.process import PidSettings, ProcessModel

LAGS = ProcessModel(gain=1.3, time_constants=(40.0, 9.0), dead_time=4.0)
PI = PidSettings(gain=2.1, integral_time=30.0, action=Action.REVERSE)
PID = PidSettings(
    gain=2.6,
    integral_time=35.0,
    derivative_time=6.0,
    derivative_filter=0.6,
    action=Action.REVERSE,
)


@pytest.mark.parametrize("scan", [0.0, 2.0])
def test_a_pi_block_has_the_margins_of_the_lag_model(scan):
    model = LagModel(gain=1.3, time_constants=(40.0, 9.0), dead_time=4.0)
    settings = ControllerSettings(gain=2.1, integral_time=30.0, action=Action.REVERSE)
    older = (
        sampled_margins(model, settings, scan, 0.5)
        if scan
        else continuous_margins(model, settings)
    )
    found = loop_margins(LAGS, PI, scan=scan, output_delay=0.5 if scan else 0.0)
    for name in ("gain_margin", "phase_margin", "delay_margin", "maximum_sensitivity"):
        assert getattr(found, name) == pytest.approx(getattr(older, name), rel=1e-9), name


def test_a_pid_loop_without_dead_time_agrees_with_another_library():
    process = ProcessModel(gain=1.3, time_constants=(40.0, 9.0, 3.0), numerator_times=(-2.0,))
    plant = control.tf([-2.0 * 1.3, 1.3], [1.0])
    for lag in process.time_constants:
        plant = plant / control.tf([lag, 1.0], [1.0])
    block = 2.6 * (1 + control.tf([1.0], [35.0, 0.0]) + control.tf([6.0, 0.0], [0.6, 1.0]))
    gain, phase, _, phase_crossover, gain_crossover, _ = control.stability_margins(
        plant * block
    )[:6]
    found = loop_margins(process, PID)
    assert found.gain_margin == pytest.approx(gain, rel=1e-6)
    assert np.degrees(found.phase_margin) == pytest.approx(phase, rel=1e-6)
    assert found.gain_crossover == pytest.approx(gain_crossover, rel=1e-6)
    assert found.phase_crossover == pytest.approx(phase_crossover, rel=1e-6)


@pytest.mark.parametrize("integrating", [False, True])
@pytest.mark.parametrize("scan", [0.0, 1.5])
def test_stability_turns_at_the_gain_margin(integrating, scan):
    process = ProcessModel(
        gain=0.03 if integrating else 1.3,
        time_constants=(9.0,) if integrating else (40.0, 9.0),
        dead_time=4.0,
        integrating=integrating,
    )
    limit = loop_margins(process, PID, scan=scan).gain_margin
    for factor, stable in ((0.98, True), (1.02, False)):
        settings = PidSettings(
            gain=factor * limit * PID.gain, integral_time=35.0, derivative_time=6.0,
            derivative_filter=0.6, action=Action.REVERSE,
        )  # fmt: skip
        response, grid = loop_response(process, settings, scan=scan)
        assert is_stable(response, grid, poles_at_zero(process, settings)) is stable


def test_integral_action_too_quick_for_an_integrator_is_unstable_at_any_gain():
    # Routh: s^2 (tau s + 1) + K Kc (s + 1/Ti) is stable only if Ti > tau
    process = ProcessModel(gain=0.1, time_constants=(20.0,), integrating=True)
    for integral, stable in ((19.0, False), (21.0, True)):
        settings = PidSettings(gain=0.3, integral_time=integral, action=Action.REVERSE)
        response, grid = loop_response(process, settings)
        assert is_stable(response, grid, poles_at_zero(process, settings)) is stable


@pytest.mark.parametrize(
    ("process", "settings", "words"),
    [
        (ProcessModel(gain=0.0, time_constants=(1.0,)), PI, "gain is 0"),
        (ProcessModel(gain=1.0, dead_time=3.0), PI, "pure dead time"),
        (ProcessModel(gain=-1.0, time_constants=(1.0,)), PI, "positive feedback"),
        (ProcessModel(gain=1.0, time_constants=(-1.0,)), PI, "must be 0 or more"),
        (
            ProcessModel(gain=1.0, time_constants=(5.0,), numerator_times=(-1.0,)),
            PI,
            "fewer",
        ),
        (
            LAGS,
            PidSettings(
                gain=1.0, integral_time=9.0, derivative_time=2.0, action=Action.REVERSE
            ),
            "without a filter",
        ),
    ],
)
def test_what_is_no_loop_is_refused(process, settings, words):
    with pytest.raises(ModelError, match=words):
        loop_margins(process, settings)
