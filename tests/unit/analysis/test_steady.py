"""The steady-state test: it must not fire early, and it must fire."""

from __future__ import annotations

import math

import numpy as np
import pytest

from harness.analysis.steady import SteadyDetector, tail_time_constant
from harness.domain.trial import SteadyRule
from harness.errors import DataError, UsageError

TICK = 0.5
TAU = 118.0
TIME = TICK * np.arange(1, int(20 * TAU / TICK))
RUNS = 40


def _two_lags() -> np.ndarray:
    return 1.0 - (118.0 * np.exp(-TIME / 118.0) - 90.0 * np.exp(-TIME / 90.0)) / 28.0


def _ringing(damping: float = 0.4) -> np.ndarray:
    ratio = math.sqrt(1.0 - damping**2) / damping
    phase = ratio * TIME / TAU
    return 1.0 - np.exp(-TIME / TAU) * (np.cos(phase) + np.sin(phase) / ratio)


def _equal_lags() -> np.ndarray:
    return 1.0 - (1.0 + TIME / TAU) * np.exp(-TIME / TAU)


def _slower_than_predicted(factor: float = 1.3) -> np.ndarray:
    return 1.0 - np.exp(-TIME / (factor * TAU))


def _load() -> np.ndarray:
    return math.e * TIME / TAU * np.exp(-TIME / TAU)


SHAPES = {
    "two lags": _two_lags(),
    "ringing": _ringing(),
    "equal lags": _equal_lags(),
    "tail slower than predicted": _slower_than_predicted(),
    "load": _load(),
}


def _detector(effect: float = 1.0, noise: float | None = None, tick: float = TICK):
    return SteadyDetector(SteadyRule(), tick, TAU, effect, noise)


def _detect(values: np.ndarray, **others) -> SteadyDetector:
    detector = _detector(**others)
    for start in range(0, len(values), 400):
        detector.feed(values[start : start + 400])
        if detector.steady:
            break
    return detector


def _still_to_come(response: np.ndarray) -> np.ndarray:
    """Return the largest deviation from the end that is yet to be seen, lobes included."""
    return np.maximum.accumulate(np.abs(response - response[-1])[::-1])[::-1]


# Noise and resolution as fractions of the step; 0.4 is 2 % of span on a step of 5 % of span.
@pytest.mark.parametrize(
    ("noise", "resolution"),
    [(0.0, 0.0), (0.0, 0.01), (0.0, 0.2), (0.005, 0.0), (0.02, 0.0), (0.02, 0.05), (0.4, 0.01)],
)
@pytest.mark.parametrize("shape", SHAPES)
def test_it_does_not_fire_early_and_does_fire(shape, noise, resolution):
    response = SHAPES[shape]
    left = _still_to_come(response)
    generator = np.random.default_rng(7)
    early, loose, ticks = 0, 0, []
    runs = RUNS if noise else 1
    for _ in range(runs):
        values = response + noise * generator.standard_normal(len(response))
        if resolution:
            values = resolution * np.round(values / resolution)
        detector = _detect(values)
        assert detector.steady, detector.reason
        assert detector.remaining is not None
        ticks.append(detector.steady_tick)
        true_rest = left[detector.steady_tick - 1]
        early += true_rest > 0.01
        loose += true_rest > detector.remaining and not resolution
    assert early <= 0.05 * runs
    assert loose <= 0.05 * runs
    last_beyond = TIME[left > 0.01][-1]  # the earliest time at which it could rightly fire
    assert np.median(ticks) * TICK <= max(5.0 * TAU, last_beyond) + 1.6 * TAU


def test_a_tail_slower_by_four_tenths_is_still_waited_for():
    response = _slower_than_predicted(1.4)
    detector = _detect(response)
    assert _still_to_come(response)[detector.steady_tick - 1] <= 0.01


def test_the_usual_test_at_tick_rate_fires_early():
    """Cao & Rhinehart's ratio at tick rate, filters 0.2, 0.1, 0.1, critical value 2 (from memory).

    Between ticks the transient moves less than the noise; thinning is there for that reason.
    """
    response = _two_lags()
    left = _still_to_come(response)
    generator = np.random.default_rng(3)
    rest = []
    for _ in range(40):
        values = response + 0.02 * generator.standard_normal(len(response))
        filtered, squared, differences, before = 0.0, 0.0, 0.0, 0.0
        for index, value in enumerate(values.tolist()):
            squared = 0.1 * (value - filtered) ** 2 + 0.9 * squared
            filtered = 0.2 * value + 0.8 * filtered
            differences = 0.1 * (value - before) ** 2 + 0.9 * differences
            before = value
            if index > 30 and 1.8 * squared / differences < 2.0:  # 30 ticks of start-up
                rest.append(left[index])
                break
    assert len(rest) == 40
    assert np.median(rest) > 0.5


@pytest.mark.parametrize("value", [0.0, 0.37])
def test_a_constant_is_steady_after_dwell_and_persistence(value):
    detector = _detect(np.full(len(TIME), value))
    assert detector.steady
    assert detector.steady_tick * TICK / TAU == pytest.approx(5.5, abs=0.1)
    assert detector.remaining == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize("chunk", [1, 7, 64, 5000])
def test_chunks_change_nothing(chunk):
    values = _two_lags() + 0.02 * np.random.default_rng(1).standard_normal(len(TIME))
    whole = _detector()
    whole.feed(values)
    parts = _detector()
    for start in range(0, len(values), chunk):
        parts.feed(values[start : start + chunk])
    assert parts.steady_tick == whole.steady_tick
    assert parts.reason == whole.reason


def test_scale_and_sign_change_nothing():
    values = _two_lags() + 0.02 * np.random.default_rng(1).standard_normal(len(TIME))
    plain = _detect(values)
    scaled = _detect(5.0 - 0.05 * values, effect=-0.05)
    assert scaled.steady_tick == plain.steady_tick


def test_noise_beyond_resolving_never_is_steady():
    values = _two_lags() + 3.0 * np.random.default_rng(1).standard_normal(len(TIME))
    detector = _detect(values)
    assert not detector.steady
    assert "noise" in detector.reason


@pytest.mark.parametrize("periods", [0.3, 1.0, 2.0, 4.0])
@pytest.mark.parametrize("noise", [0.0, 0.005])
def test_a_lasting_swing_is_not_steady(periods, noise):
    swing = 1.0 + 0.03 * np.sin(2.0 * math.pi * TIME / (periods * TAU))
    swing += noise * np.random.default_rng(2).standard_normal(len(TIME))
    detector = _detect(swing)
    assert not detector.steady
    assert "swing" in detector.reason or "still to come" in detector.reason


def test_known_noise_keeps_a_fast_swing_from_passing_as_noise():
    period = 0.08 * TAU  # two thinned samples: to successive differences it looks like noise
    swing = 1.0 + 0.3 * np.sin(2.0 * math.pi * TIME / period + 0.7)
    assert _detect(swing).steady
    assert not _detect(swing, noise=0.001).steady


def test_known_noise_costs_little_where_it_is_right():
    generator = np.random.default_rng(11)
    with_noise, without = [], []
    for _ in range(30):
        values = _two_lags() + 0.02 * generator.standard_normal(len(TIME))
        with_noise.append(_detect(values, noise=0.02).steady_tick)
        without.append(_detect(values).steady_tick)
    assert np.median(with_noise) <= np.median(without) + 0.5 * TAU / TICK


def test_it_says_how_far_the_dwell_is():
    detector = _detector()
    assert detector.reason == "no values yet"
    detector.feed(np.zeros(100))
    assert "of at least 5 dominant time constants" in detector.reason
    assert not detector.steady
    assert detector.remaining is None


@pytest.mark.parametrize(
    ("tick", "tau", "effect", "named"),
    [
        (0.0, 100.0, 1.0, "tick"),
        (0.5, 0.0, 1.0, "dominant time"),
        (0.5, 100.0, 0.0, "step effect"),
        (0.5, math.inf, 1.0, "dominant time"),
        (20.0, 100.0, 1.0, "samples"),
    ],
)
def test_bad_settings_are_refused(tick, tau, effect, named):
    with pytest.raises(UsageError, match=named):
        SteadyDetector(SteadyRule(), tick, tau, effect)


def test_values_that_are_not_finite_are_refused():
    with pytest.raises(DataError, match="not finite"):
        _detector().feed(np.array([1.0, math.nan]))


def test_tail_of_an_exponential_is_its_time_constant():
    assert tail_time_constant(TIME, -0.05 * np.exp(-TIME / TAU)) == pytest.approx(TAU, rel=1e-3)


def test_tail_of_two_equal_lags_is_a_fifth_longer():
    assert tail_time_constant(TIME, _equal_lags() - 1.0) == pytest.approx(1.2 * TAU, rel=0.01)


@pytest.mark.parametrize("damping", [0.1, 0.2, 0.4])
def test_tail_of_a_swing_is_that_of_its_envelope(damping):
    assert tail_time_constant(TIME, _ringing(damping) - 1.0) == pytest.approx(TAU, rel=0.3)


def test_a_tail_that_is_not_there_is_refused():
    with pytest.raises(DataError, match="does not move"):
        tail_time_constant(TIME, np.zeros(len(TIME)))
    with pytest.raises(DataError, match="predict on"):
        tail_time_constant(TIME[:400], np.exp(-TIME[:400] / TAU))
