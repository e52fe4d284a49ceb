import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from harness.domain.models import LagModel
from harness.errors import DataError, ModelError
from harness.tuning.response import simulate, unit_step


def _model(*lags, dead_time=0.0, gain=1.0):
    return LagModel(gain=gain, time_constants=lags, dead_time=dead_time)


@settings(max_examples=60, deadline=None)
@given(
    first=st.floats(0.5, 300.0),
    ratio=st.one_of(st.just(1.0), st.floats(1e-4, 1.0), st.floats(0.999999, 1.0)),
    dead_time=st.one_of(st.just(0.0), st.floats(0.0, 40.0)),
    tick=st.floats(0.05, 5.0),
    seed=st.integers(0, 2**20),
)
def test_recursion_equals_superposed_closed_form_steps(first, ratio, dead_time, tick, seed):
    generator = np.random.default_rng(seed)
    rows = 120
    inputs = np.repeat(generator.normal(size=rows // 10), 10)
    model = _model(first, first * ratio, dead_time=dead_time, gain=-1.7)
    time = np.arange(rows) * tick
    exact = np.zeros(rows)
    for k in range(1, rows):
        if inputs[k] != inputs[k - 1]:
            exact += (inputs[k] - inputs[k - 1]) * unit_step(model, time - k * tick)
    assert simulate(model, inputs, tick) == pytest.approx(exact, abs=2e-12)


def test_input_of_a_row_acts_from_that_row_on():
    inputs = np.array([0.0, 0.0, 1.0, 1.0, 1.0])
    response = simulate(_model(10.0), inputs, 1.0)
    assert response[:3] == pytest.approx(0.0, abs=0.0)
    assert response[3:] == pytest.approx(1.0 - np.exp([-0.1, -0.2]), rel=1e-14)


def test_part_of_a_tick_of_dead_time_is_no_rounding():
    inputs = np.array([0.0, 1.0, 1.0, 1.0, 1.0])
    response = simulate(_model(10.0, dead_time=1.25), inputs, 1.0)
    assert response[:3] == pytest.approx(0.0, abs=0.0)
    assert response[3:] == pytest.approx(1.0 - np.exp([-0.075, -0.175]), rel=1e-14)


def test_equal_lags_and_nearly_equal_lags_meet():
    time = np.linspace(0.0, 500.0, 300)
    equal = unit_step(_model(100.0, 100.0), time)
    assert equal == pytest.approx(1.0 - (1.0 + time / 100.0) * np.exp(-time / 100.0), abs=1e-15)
    assert unit_step(_model(100.0, 100.0 * (1 - 1e-9)), time) == pytest.approx(equal, abs=1e-9)


def test_second_lag_of_zero_is_first_order():
    inputs = np.r_[np.zeros(5), np.ones(60)]
    one = simulate(_model(20.0, dead_time=2.3), inputs, 1.0)
    assert simulate(_model(20.0, 0.0, dead_time=2.3), inputs, 1.0) == pytest.approx(
        one, abs=0.0
    )
    assert simulate(_model(0.0, 20.0, dead_time=2.3), inputs, 1.0) == pytest.approx(
        one, abs=0.0
    )


def test_initial_input_is_the_steady_state_it_starts_from():
    inputs = np.full(400, 0.7)
    assert simulate(_model(5.0), inputs, 1.0) == pytest.approx(0.0, abs=0.0)
    response = simulate(_model(5.0, gain=2.0), inputs, 1.0, initial_input=0.5)
    assert response[0] == 0.0
    assert response[-1] == pytest.approx(0.4, rel=1e-14)


def test_dead_time_longer_than_the_record_gives_nothing():
    inputs = np.r_[0.0, np.ones(9)]
    assert simulate(_model(5.0, dead_time=50.0), inputs, 1.0) == pytest.approx(0.0, abs=0.0)


@pytest.mark.parametrize(
    ("lags", "dead_time", "gain", "words"),
    [
        ((), 0.0, 1.0, "0 time constants"),
        ((1.0, 2.0, 3.0), 0.0, 1.0, "3 time constants"),
        ((0.0,), 1.0, 1.0, "pure dead time"),
        ((5.0, -1.0), 0.0, 1.0, "-1 s"),
        ((5.0,), -0.1, 1.0, "dead time is -0.1"),
        ((5.0,), float("nan"), 1.0, "dead time is nan"),
        ((5.0,), 0.0, float("inf"), "gain is inf"),
    ],
)
def test_unusable_models_are_refused(lags, dead_time, gain, words):
    model = LagModel(gain=gain, time_constants=lags, dead_time=dead_time)
    with pytest.raises(ModelError, match=words):
        simulate(model, np.zeros(5), 1.0)


def test_unusable_inputs_are_refused():
    with pytest.raises(DataError, match=r"shape \(2, 2\)"):
        simulate(_model(5.0), np.zeros((2, 2)), 1.0)
    with pytest.raises(DataError, match="tick is 0"):
        simulate(_model(5.0), np.zeros(4), 0.0)
