"""What a phase is expected to look like before it is run."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest

from harness.analysis.linear import ScanSchedule
from harness.analysis.plan import plan_phase, predict_phase
from harness.domain.models import ControllerSettings, LagModel, LoopModels
from harness.domain.rig import Action
from harness.domain.trial import Mode, Phase, PhaseKind, SteadyRule
from harness.errors import ModelError

TICK = 0.5
RULE = SteadyRule()
# A response that is within a hundredth at ln(100) time constants is given a fifth of that, so
# that the dwell of five ends where a hundredth is left and not later.
SHARE = math.log(100.0) / 5.0
FIRST_ORDER = LoopModels(
    output=LagModel(gain=1.5, time_constants=(60.0,), dead_time=0.0),
    load=LagModel(gain=0.8, time_constants=(40.0,), dead_time=0.0),
)


def phase_of(kind, mode, change=0.05):
    return Phase(
        name="p", loop="LIC-102", kind=kind, mode=mode, change=change, time_limit=1000.0
    )


@pytest.fixture
def plan(runs):
    """Return a maker of plans on the demo loop."""

    def make(phase, models=FIRST_ORDER, settings=None, rule=RULE):
        loop = runs.rig().loops[0]
        return plan_phase(phase, loop, models, settings, ScanSchedule(scan_ticks=1), TICK, rule)

    return make


@pytest.mark.parametrize(
    ("kind", "tau", "gain"),
    [(PhaseKind.OUTPUT_STEP, 60.0, 1.5), (PhaseKind.LOAD_STEP, 40.0, 0.8)],
)
@pytest.mark.parametrize("change", [0.05, -0.2])
def test_a_step_in_manual_has_the_time_constant_and_gain_of_its_path(
    plan, kind, tau, gain, change
):
    planned = plan(phase_of(kind, Mode.MANUAL, change))
    assert planned.dominant_time == pytest.approx(SHARE * tau, abs=TICK)
    assert planned.effect == pytest.approx(gain * abs(change))
    assert planned.duration >= RULE.dwell * planned.dominant_time


def test_two_equal_lags_have_a_longer_tail_than_one(plan):
    twice = dataclasses.replace(
        FIRST_ORDER, output=LagModel(gain=1.0, time_constants=(60.0, 60.0), dead_time=0.0)
    )
    planned = plan(phase_of(PhaseKind.OUTPUT_STEP, Mode.MANUAL), twice)
    assert 60.0 < planned.dominant_time < 1.5 * 60.0
    # 1 % of the step is left at 6.64 lags (of (1 + x) exp(-x)), and the plan looks beyond that.
    assert planned.duration > 6.64 * 60.0


def test_direct_synthesis_gives_the_closed_loop_time_asked_for(plan):
    """Kc = tau / (K tau_c), Ti = tau on one lag without dead time: a first-order response."""
    settings = ControllerSettings(
        gain=60.0 / (1.5 * 20.0), integral_time=60.0, action=Action.REVERSE
    )
    planned = plan(phase_of(PhaseKind.SETPOINT_STEP, Mode.AUTOMATIC), settings=settings)
    assert planned.dominant_time == pytest.approx(SHARE * 20.0, abs=TICK)
    assert planned.effect == 0.05


def test_settling_is_reckoned_from_a_typical_step_and_needs_the_dwell_alone(plan):
    planned = plan(phase_of(PhaseKind.SETTLE, Mode.MANUAL, 0.0))
    assert planned.effect > 0.0
    assert planned.duration == pytest.approx(RULE.dwell * planned.dominant_time)


def test_a_load_step_in_automatic_counts_what_it_would_do_alone(plan):
    settings = ControllerSettings(gain=2.0, integral_time=60.0, action=Action.REVERSE)
    planned = plan(phase_of(PhaseKind.LOAD_STEP, Mode.AUTOMATIC), settings=settings)
    assert planned.effect == pytest.approx(0.8 * 0.05)


def test_an_unstable_loop_is_refused(plan):
    slow = LoopModels(
        output=LagModel(gain=1.5, time_constants=(60.0,), dead_time=30.0),
        load=FIRST_ORDER.load,
    )
    settings = ControllerSettings(gain=20.0, integral_time=10.0, action=Action.REVERSE)
    with pytest.raises(ModelError, match="does not come to rest"):
        plan(phase_of(PhaseKind.SETPOINT_STEP, Mode.AUTOMATIC), slow, settings)


def test_a_predicted_step_in_manual_is_the_lag_s_own(runs):
    """K du (1 - exp(-t / tau)) at the samples, exactly."""
    response, output = predict_phase(
        phase_of(PhaseKind.OUTPUT_STEP, Mode.MANUAL),
        runs.rig().loops[0],
        FIRST_ORDER,
        None,
        ScanSchedule(scan_ticks=1),
        TICK,
        400,
    )
    time = np.arange(400) * TICK
    assert response == pytest.approx(1.5 * 0.05 * -np.expm1(-time / 60.0), abs=1e-12)
    assert output == pytest.approx(np.full(400, 0.05))


def test_every_phase_of_the_demo_ends_within_its_plan_and_limit(runs):
    """The plan is what people are told to wait for: right within a fifth on the nonlinear rig."""
    data = runs.builtin("acceptance_pi")
    started = {e.subject: e for e in data.events if e.kind.value == "phase started"}
    ended = {e.subject: e for e in data.events if e.kind.value == "phase ended"}
    assert len(ended) == len(data.trial.phases) == 10
    for phase in data.trial.phases:
        took = (ended[phase.name].tick - started[phase.name].tick) * data.rig.tick
        expected = float(started[phase.name].data["expected"])
        assert took == pytest.approx(expected, rel=0.2), phase.name
        assert took < phase.time_limit / 2.0
        assert math.isfinite(expected)
