"""Coverage of the confidence limits: counted, not assumed."""

from __future__ import annotations

import numpy as np
import pytest

from harness.domain.models import LagModel
from harness.tuning.identification import fit
from harness.tuning.limits import effective_samples
from harness.tuning.response import simulate

FITS = 200
# Binomial(200, 0.95): 0.12 % of counts lie below 180 and 0.04 % above 198. Limits that cover 84 %
# (the naive ones of two near lags) reach 180 in one case of a hundred.
FEWEST, MOST = 180, 198
ROWS, TICK = 125, 16.0


def _covered(model, noise, seed):
    """Count, by parameter, in how many fits the limits hold the true value."""
    inputs = np.full(ROWS, 0.5)
    inputs[4:62] = 0.6
    clean = 0.3 + simulate(model, inputs, TICK)
    truth = {
        "gain": model.gain,
        "total_lag": model.total_lag,
        "dead_time": model.dead_time,
        "time_constant_1": model.time_constants[0],
        "time_constant_2": model.time_constants[1],
    }
    counts = dict.fromkeys(truth, 0)
    generator = np.random.default_rng(seed)
    for _ in range(FITS):
        found = fit(inputs, clean + noise * generator.normal(size=ROWS), TICK, 2)
        for name, limit in found.limits.items():
            counts[name] += limit.low <= truth[name] <= limit.high
    return counts


@pytest.mark.slow
@pytest.mark.timeout(120)
@pytest.mark.parametrize(("dead_time", "noise"), [(6.0, 0.001), (0.0, 0.005)])
def test_limits_of_two_near_lags_cover_what_they_say(dead_time, noise):
    model = LagModel(gain=0.8, time_constants=(118.0, 90.0), dead_time=dead_time)
    counts = _covered(model, noise, seed=2024)
    assert all(count >= FEWEST for count in counts.values()), counts
    # The limits of a parameter next to a bound may cover more, those of these two may not.
    assert counts["total_lag"] <= MOST, counts
    assert counts["gain"] <= MOST, counts


def test_white_residuals_count_in_full():
    generator = np.random.default_rng(1)
    worth = [effective_samples(generator.normal(size=2000), 200, 5) for _ in range(50)]
    assert np.median(worth) == 2000
    assert np.mean(worth) > 1900


def test_correlated_residuals_count_by_their_long_run_variance():
    # first-order autoregression: n (1 - rho)/(1 + rho), a closed form
    generator = np.random.default_rng(2)
    rho, rows = 0.8, 4000
    worth = []
    for _ in range(20):
        series = generator.normal(size=rows)
        for k in range(1, rows):
            series[k] += rho * series[k - 1]
        worth.append(effective_samples(series, 400, 5))
    assert np.mean(worth) == pytest.approx(rows * (1 - rho) / (1 + rho), rel=0.25)


def test_slow_misfit_counts_little_more_than_once_per_longest_batch():
    slow = np.sin(2 * np.pi * np.arange(2000) / 400)
    assert effective_samples(slow, 200, 5) < 40
