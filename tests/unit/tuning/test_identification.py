import math

import numpy as np
import pytest
from scipy.optimize import least_squares

from harness.domain.models import LagModel
from harness.errors import DataError
from harness.tuning.identification import fit, fit_best
from harness.tuning.response import simulate

TICK = 4.0
TWO_LAGS = LagModel(gain=0.8, time_constants=(118.0, 90.0), dead_time=6.3)


def _steps(rows, up=20, down=None):
    inputs = np.full(rows, 0.5)
    inputs[up:] = 0.6
    inputs[down or rows // 2 :] = 0.5
    return inputs


def _record(model, rows=500, tick=TICK, noise=0.0, seed=1):
    inputs = _steps(rows)
    generator = np.random.default_rng(seed)
    return inputs, 0.3 + simulate(model, inputs, tick) + noise * generator.normal(size=rows)


@pytest.mark.parametrize(
    "model",
    [
        TWO_LAGS,
        LagModel(gain=-2.0, time_constants=(118.0, 90.0), dead_time=0.0),
        LagModel(gain=0.8, time_constants=(150.0, 20.0), dead_time=61.7),
        LagModel(gain=0.8, time_constants=(100.0, 100.0), dead_time=9.0),
    ],
)
def test_a_clean_second_order_record_gives_its_model_back(model):
    found = fit(*_record(model), TICK, 2)
    assert found.model.gain == pytest.approx(model.gain, rel=1e-6)
    assert found.model.total_lag == pytest.approx(model.total_lag, rel=1e-6)
    assert found.model.dead_time == pytest.approx(model.dead_time, abs=1e-3)
    # lags as good as equal are told apart by the root of the precision only
    assert found.model.time_constants == pytest.approx(model.time_constants, abs=0.05)
    assert found.residual_rms < 1e-8


@pytest.mark.parametrize("dead_time", [0.0, 30.9])
def test_a_clean_first_order_record_gives_its_model_back(dead_time):
    model = LagModel(gain=0.8, time_constants=(150.0,), dead_time=dead_time)
    found = fit(*_record(model), TICK, 1)
    assert found.model.gain == pytest.approx(0.8, rel=1e-6)
    assert found.model.time_constants == pytest.approx((150.0,), rel=1e-5)
    assert found.model.dead_time == pytest.approx(dead_time, abs=1e-3)
    assert set(found.limits) == {"gain", "total_lag", "dead_time", "time_constant_1"}


def test_limits_enclose_the_fit_and_the_sum_is_known_best():
    found = fit(*_record(TWO_LAGS, noise=0.002), TICK, 2)
    model, limits = found.model, found.limits
    values = {
        "gain": model.gain,
        "total_lag": model.total_lag,
        "dead_time": model.dead_time,
        "time_constant_1": model.time_constants[0],
        "time_constant_2": model.time_constants[1],
    }
    assert set(limits) == set(values)
    for name, value in values.items():
        assert limits[name].low <= value <= limits[name].high
        assert limits[name].level == 0.95
    width = {name: limit.high - limit.low for name, limit in limits.items()}
    assert width["total_lag"] < 0.3 * width["time_constant_1"]
    assert width["total_lag"] < 0.3 * width["time_constant_2"]
    assert model.time_constants[0] >= model.time_constants[1]
    assert found.residual_rms == pytest.approx(0.002, rel=0.1)


def test_more_confidence_is_wider():
    record = _record(TWO_LAGS, noise=0.002)
    narrow, wide = (fit(*record, TICK, 2, confidence=level) for level in (0.68, 0.99))
    for name, limit in narrow.limits.items():
        assert wide.limits[name].low < limit.low or limit.low == 0.0
        assert wide.limits[name].high > limit.high


def test_a_dead_time_on_its_bound_has_a_one_sided_interval():
    model = LagModel(gain=0.8, time_constants=(118.0, 90.0), dead_time=0.0)
    found = next(
        result
        for result in (fit(*_record(model, noise=0.002, seed=s), TICK, 2) for s in range(20))
        if result.model.dead_time == 0.0
    )
    assert found.limits["dead_time"].low == 0.0
    assert 0.0 < found.limits["dead_time"].high < 20.0


def test_best_order_is_the_one_the_record_was_made_with():
    single = LagModel(gain=0.8, time_constants=(150.0,), dead_time=20.0)
    for model, order in ((TWO_LAGS, 2), (single, 1)):
        choice = fit_best(*_record(model, noise=0.001), TICK)
        assert choice.best is choice.fits[order]
        assert choice.criterion[order] == min(choice.criterion.values())
        assert len(choice.fits[1].model.time_constants) == 1
        assert len(choice.fits[2].model.time_constants) == 2
        assert choice.effective_samples == pytest.approx(500, rel=0.2)
    assert "BIC" in choice.rule


def test_fit_agrees_with_plain_least_squares_of_scipy():
    inputs, outputs = _record(TWO_LAGS, noise=0.003, seed=3)

    def residuals(x):
        model = LagModel(gain=x[0], time_constants=(x[1], x[2]), dead_time=x[3])
        return x[4] + simulate(model, inputs, TICK) - outputs

    low, high = [0.0, 1.0, 1.0, 0.0, 0.0], [5.0, 500.0, 500.0, 100.0, 1.0]
    plain = least_squares(
        residuals,
        [1.0, 150.0, 60.0, 10.0, 0.3],
        bounds=(low, high),
        x_scale=[1, 100, 100, 10, 1],
    )
    found = fit(inputs, outputs, TICK, 2)
    assert 500 * found.residual_rms**2 == pytest.approx(2 * plain.cost, rel=1e-6)
    assert found.model.total_lag == pytest.approx(sum(plain.x[1:4]), rel=1e-4)
    assert found.model.gain == pytest.approx(plain.x[0], rel=1e-4)


def test_drift_is_taken_away_where_it_is_asked_for():
    inputs, outputs = _record(TWO_LAGS, noise=0.0005)
    outputs = outputs + np.linspace(0.0, 0.02, outputs.size)
    plain, corrected = fit(inputs, outputs, TICK, 2), fit(inputs, outputs, TICK, 2, drift=True)
    assert corrected.model.gain == pytest.approx(0.8, rel=0.01)
    assert corrected.model.total_lag == pytest.approx(TWO_LAGS.total_lag, rel=0.02)
    assert abs(plain.model.total_lag - TWO_LAGS.total_lag) > 3.0


def test_a_long_record_is_averaged_without_a_shift_in_time():
    model = LagModel(gain=0.8, time_constants=(118.0, 90.0), dead_time=6.3)
    inputs = _steps(20_000, up=713, down=10_211)
    outputs = 0.3 + simulate(model, inputs, 0.1)
    found = fit(inputs, outputs, 0.1, 2)
    assert found.samples == 5000
    assert found.model.total_lag == pytest.approx(model.total_lag, abs=1e-3)
    assert found.model.dead_time == pytest.approx(6.3, abs=5e-3)
    assert found.model.time_constants == pytest.approx((118.0, 90.0), rel=1e-3)


def test_a_record_that_starts_anywhere_and_steps_often():
    generator = np.random.default_rng(8)
    inputs = 0.4 + 0.1 * np.repeat(generator.integers(0, 2, size=50), 10)
    outputs = 0.6 + simulate(TWO_LAGS, inputs, TICK) + 1e-4 * generator.normal(size=500)
    assert fit(inputs, outputs, TICK, 2).model.total_lag == pytest.approx(214.3, abs=1.0)


def _two_tanks(inputs, tick):
    """Level of the lower of two free-draining tanks [fraction of 1.5 m], by small RK4 steps."""
    upper, lower, parts = 0.126, 0.196, 5
    drain_upper, drain_lower = 5e-4 / math.sqrt(0.5), 5e-4 / math.sqrt(0.6)

    def slope(levels, inflow):
        between = drain_upper * math.sqrt(levels[0])
        return np.array(
            [(inflow - between) / upper, (between - drain_lower * math.sqrt(levels[1])) / lower]
        )

    levels, record, h = np.array([0.5, 0.6]), [], tick / parts
    for value in inputs:
        record.append(levels[1] / 1.5)
        for _ in range(parts):
            a = slope(levels, 1e-3 * value)
            b = slope(levels + h / 2 * a, 1e-3 * value)
            c = slope(levels + h / 2 * b, 1e-3 * value)
            d = slope(levels + h * c, 1e-3 * value)
            levels = levels + h / 6 * (a + 2 * b + 2 * c + d)
    return np.array(record)


def test_on_a_curved_plant_the_misfit_widens_the_limits():
    # Linearised at the middle of the step (closed form): tau = 2 A h/q, gain = 2 h/q per span.
    inputs = np.full(600, 0.5)
    inputs[20:300] = 0.55
    outputs = _two_tanks(inputs, 10.0) + 1e-5 * np.random.default_rng(2).normal(size=600)
    ratio = 0.525 / 0.5  # flow at the middle of the step over that at its foot
    gain = 2 * 0.6 * ratio / 5e-4 * 1e-3 / 1.5
    total = 2 * (0.126 * 0.5 + 0.196 * 0.6) / 5e-4 * ratio
    choice = fit_best(inputs, outputs, 10.0)
    assert choice.best is choice.fits[2]
    assert choice.best.model.gain == pytest.approx(gain, rel=0.01)
    assert choice.best.model.total_lag == pytest.approx(total, rel=0.02)
    limits = choice.best.limits
    assert limits["total_lag"].low < total < limits["total_lag"].high
    assert limits["gain"].low < gain < limits["gain"].high
    assert choice.effective_samples < 60  # of 600: the misfit is no noise


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda u, y: (u, y[:-1]), "same length"),
        (lambda u, y: (u[:10], y[:10]), "10 rows; it needs 20"),
        (lambda u, y: (u, np.where(np.arange(y.size) > 77, np.nan, y)), "at row 78"),
        (lambda u, y: (np.full_like(u, 0.5), y), "input stands at 0.5 throughout"),
        (lambda u, y: (u, np.full_like(y, 0.25)), "output stands at 0.25 throughout"),
        (
            lambda u, y: (u, 0.3 + 0.01 * np.random.default_rng(4).normal(size=y.size)),
            "does not follow the input",
        ),
        (lambda u, y: (u[:60], y[:60]), "response is not finished"),
        (lambda u, _: (u, 0.3 + np.cumsum(u - 0.5)), "response is not finished"),
    ],
)
def test_records_that_support_no_fit_are_refused_with_the_reason(change, words):
    with pytest.raises(DataError, match=words):
        fit(*change(*_record(TWO_LAGS)), TICK, 2)


def test_wrong_calls_are_refused():
    record = _record(TWO_LAGS)
    with pytest.raises(DataError, match="order 3"):
        fit(*record, TICK, 3)
    with pytest.raises(DataError, match="tick is 0"):
        fit(*record, 0.0, 2)
