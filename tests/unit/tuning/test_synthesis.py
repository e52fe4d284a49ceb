import numpy as np
import pytest

from harness.domain.models import ControlLaw, ControllerSettings, LagModel
from harness.domain.rig import Action
from harness.errors import ModelError
from harness.tuning.reduction import half_rule, reduce_to_first_order
from harness.tuning.synthesis import (
    chen_seborg_pi,
    direct_synthesis,
    direct_synthesis_p,
    direct_synthesis_pi,
    proportional_offset,
    simc_pi,
)

MODEL = LagModel(gain=0.8, time_constants=(120.0,), dead_time=10.0)
TWO_LAGS = LagModel(gain=-0.5, time_constants=(118.0, 90.0), dead_time=2.0)


def test_pi_on_a_first_order_model():
    result = direct_synthesis_pi(MODEL, 50.0)
    assert result.settings == ControllerSettings(
        gain=pytest.approx(120.0 / (0.8 * 60.0)), integral_time=120.0, action=Action.REVERSE
    )
    assert result.reduced == MODEL
    assert "half rule" not in result.rule


def test_pi_on_two_lags_says_that_the_half_rule_came_first():
    result = direct_synthesis_pi(TWO_LAGS, 60.0)
    assert result.reduced == LagModel(gain=-0.5, time_constants=(163.0,), dead_time=47.0)
    assert result.settings.gain == pytest.approx(163.0 / (0.5 * 107.0))
    assert result.settings.integral_time == 163.0
    assert result.rule.startswith("half rule")


def test_sign_of_the_gain_gives_the_action():
    assert direct_synthesis_pi(MODEL, 50.0).settings.action is Action.REVERSE
    assert direct_synthesis_pi(TWO_LAGS, 50.0).settings.action is Action.DIRECT
    assert direct_synthesis_p(TWO_LAGS, 50.0).settings.action is Action.DIRECT


def test_p_places_the_pole_and_leaves_the_offset_it_says():
    model = LagModel(gain=0.8, time_constants=(120.0,), dead_time=0.0)
    settings = direct_synthesis_p(model, 30.0).settings
    assert settings.law is ControlLaw.P
    tick, level, setpoint, record = 0.01, 0.0, 0.1, []
    pole = np.exp(-tick / 120.0)
    for _ in range(60_000):
        level = pole * level + (1 - pole) * 0.8 * settings.gain * (setpoint - level)
        record.append(level)
    error = proportional_offset(model, settings, setpoint)
    assert setpoint - record[-1] == pytest.approx(error, rel=1e-6)
    reached = 1 + int(np.argmax(np.array(record) >= (1 - np.exp(-1)) * record[-1]))
    assert reached * tick == pytest.approx(30.0, abs=0.05)


def test_no_offset_with_integral_action():
    assert proportional_offset(MODEL, direct_synthesis_pi(MODEL, 20.0).settings, 0.1) == 0.0


def test_law_chooses_the_rule():
    assert direct_synthesis(MODEL, ControlLaw.P, 50.0) == direct_synthesis_p(MODEL, 50.0)
    assert direct_synthesis(MODEL, ControlLaw.PI, 50.0) == direct_synthesis_pi(MODEL, 50.0)


@pytest.mark.parametrize(
    "rule", [direct_synthesis_p, direct_synthesis_pi, simc_pi, chen_seborg_pi]
)
def test_impossible_wishes_are_refused(rule):
    with pytest.raises(ModelError, match="closed-loop time is 0 s"):
        rule(MODEL, 0.0)
    with pytest.raises(ModelError, match="closed-loop time is nan"):
        rule(MODEL, float("nan"))
    with pytest.raises(ModelError, match="gain is 0"):
        rule(LagModel(gain=0.0, time_constants=(5.0,), dead_time=0.0), 2.0)


def test_p_cannot_make_a_loop_slower():
    with pytest.raises(ModelError, match=r"120 s is not below the model's lag of 120 s"):
        direct_synthesis_p(MODEL, 120.0)


def test_load_synthesis_says_how_far_it_goes():
    with pytest.raises(ModelError, match=r"must be below 244\.9 s"):
        chen_seborg_pi(MODEL, 244.91)
    assert chen_seborg_pi(MODEL, 244.89).settings.gain > 0.0


def test_half_rule_keeps_the_total_lag():
    reduced = reduce_to_first_order(TWO_LAGS)
    assert reduced.total_lag == pytest.approx(TWO_LAGS.total_lag)
    sampled = reduce_to_first_order(TWO_LAGS, sample_period=4.0)
    assert sampled.dead_time == pytest.approx(reduced.dead_time + 2.0)
    assert reduce_to_first_order(MODEL) == MODEL


def test_half_rule_refuses_what_it_does_not_cover():
    with pytest.raises(ModelError, match="order 3"):
        half_rule([1.0], order=3)
    with pytest.raises(ModelError, match="-2 s"):
        half_rule([1.0], inverse_responses=[-2.0])
    with pytest.raises(ModelError, match="larger than every lag"):
        half_rule([1.0, 0.5], leads=[2.0])
    with pytest.raises(ModelError, match="no lag above 0"):
        half_rule([0.0])
