"""The response at any spacing, against the sampled recursion and an independent integrator."""

import numpy as np
import pytest
from scipy.signal import lsim

from harness.domain.models import LagModel
from harness.tuning.response import simulate
from harness.tuning.trace import Kind, Trace, trace_of, unit_gain_response

RNG = np.random.default_rng(7)


@pytest.mark.parametrize("lags", [(40.0,), (40.0, 25.0), (30.0, 30.0), (40.0, 0.0)])
@pytest.mark.parametrize("dead_time", [0.0, 7.0, 7.3])
def test_on_a_regular_grid_it_is_the_sampled_recursion(lags, dead_time):
    inputs = RNG.normal(size=200)  # an input that moves at every row
    time = 2.0 * np.arange(200)
    model = LagModel(gain=1.0, time_constants=lags, dead_time=dead_time)
    kind = Kind.FIRST_ORDER if len(lags) == 1 else Kind.SECOND_ORDER
    shape = (*(*lags, 0.0)[:2], dead_time)
    for entry in (inputs, np.where(time < 100.0, 0.2, 0.5)):  # and one that moves once
        found = unit_gain_response(kind, shape, trace_of(time, entry, np.zeros(200)))
        np.testing.assert_allclose(found, simulate(model, entry, 2.0), atol=1e-12)


@pytest.mark.parametrize(
    ("kind", "shape", "numerator", "denominator"),
    [
        (Kind.INTEGRATING, (0.0, 0.0, 10.0), [1.0], [1.0, 0.0]),
        (Kind.INVERSE_RESPONSE, (30.0, 20.0, 10.0, 25.0), [-25.0, 1.0], [600.0, 50.0, 1.0]),
        (Kind.SECOND_ORDER, (30.0, 20.0, 10.0), [1.0], [600.0, 50.0, 1.0]),
    ],
)
def test_at_irregular_times_it_is_the_transfer_function(kind, shape, numerator, denominator):
    # Steps at 20 s and 110 s, dead time 10 s: the independent integrator sees them at 30 and 120.
    fine = np.linspace(0.0, 300.0, 30_001)
    inputs = np.where(fine < 30.0, 0.0, np.where(fine < 120.0, 1.0, -0.5))
    _, exact, _ = lsim((numerator, denominator), inputs, fine, interp=False)
    time = np.sort(RNG.uniform(0.0, 300.0, 80))
    time[0] = 0.0
    trace = Trace(
        time=time, output=np.zeros(80), event_time=np.array([20.0, 110.0]),
        event_size=np.array([1.0, -1.5]),
    )  # fmt: skip
    # The same two steps in thirty: the other way of reckoning gives the same.
    many = Trace(
        time=time, output=np.zeros(80), event_time=np.repeat([20.0, 110.0], 15),
        event_size=np.repeat([1.0 / 15, -0.1], 15),
    )  # fmt: skip
    scale = np.abs(exact).max()
    for one in (trace, many):
        found = unit_gain_response(kind, shape, one)
        np.testing.assert_allclose(found, np.interp(time, fine, exact), atol=1e-5 * scale)


def test_long_traces_are_averaged_in_blocks():
    time = np.arange(12_001.0)
    trace = trace_of(time, (time > 100.0).astype(float), time)
    short = trace.averaged()
    assert short.time.size == 4000
    np.testing.assert_allclose(short.time, short.output)
    np.testing.assert_array_equal(short.event_time, [101.0])
