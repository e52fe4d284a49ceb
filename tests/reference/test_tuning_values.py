"""Published and closed-form values of tuning rules, model reduction and margins."""

import math

import control
import numpy as np
import pytest

from harness.domain.models import LagModel
from harness.tuning.direct import area_method, two_point_28_63, two_point_35_85
from harness.tuning.margins import continuous_margins
from harness.tuning.reduction import half_rule
from harness.tuning.response import simulate
from harness.tuning.synthesis import chen_seborg_pi, direct_synthesis_pi, simc_pi

pytestmark = pytest.mark.reference


@pytest.mark.parametrize(
    ("ratio", "sensitivity", "gain", "phase", "delay"),
    [
        (0.5, 1.917, 2.356, 51.80, 1.356),
        (1.0, 1.590, 3.142, 61.35, 2.142),
        (2.0, 1.349, 4.712, 70.90, 3.712),
        (5.0, 1.160, 9.425, 80.45, 8.425),
    ],
)
def test_direct_synthesis_leaves_a_delayed_integrator(ratio, sensitivity, gain, phase, delay):
    # closed form of L = exp(-theta s)/((tau_c + theta) s), recomputed independently
    dead = 3.0
    model = LagModel(gain=0.8, time_constants=(41.0,), dead_time=dead)
    margins = continuous_margins(model, direct_synthesis_pi(model, ratio * dead).settings)
    assert margins.gain_margin == pytest.approx(math.pi / 2 * (ratio + 1), rel=1e-9)
    assert margins.gain_crossover == pytest.approx(1 / ((ratio + 1) * dead), rel=1e-9)
    assert margins.phase_margin == pytest.approx(math.pi / 2 - 1 / (ratio + 1), rel=1e-9)
    assert margins.gain_margin == pytest.approx(gain, abs=5.1e-4)
    assert math.degrees(margins.phase_margin) == pytest.approx(phase, abs=0.0051)
    assert margins.delay_margin / dead == pytest.approx(delay, abs=5.1e-4)
    assert margins.maximum_sensitivity == pytest.approx(sensitivity, abs=1.1e-3)


# S. Skogestad, J. Process Control 13:291-309, 2003: process, theta, tau1, Kc, Ti, Ms
SKOGESTAD = [
    ({"lags": [1.0, 0.2]}, 0.1, 1.1, 5.5, 0.8),
    (
        {
            "lags": [2, 1, 0.4, 0.2, 0.05, 0.05, 0.05],
            "inverse_responses": [0.3],
            "leads": [0.08],
        },
        1.47,
        2.5,
        0.850,
        2.5,
    ),
    ({"lags": [1.0, 1.0, 1.0, 1.0]}, 2.5, 1.5, 0.30, 1.5),
    ({"lags": [20.0, 2.0], "dead_time": 1.0}, 2.0, 21.0, 5.25, 16.0),
]


@pytest.mark.parametrize(("process", "dead", "lag", "gain", "integral"), SKOGESTAD)
def test_half_rule_and_its_settings(process, dead, lag, gain, integral):
    reduced = half_rule(**process)
    assert reduced.dead_time == pytest.approx(dead, abs=1e-12)
    assert reduced.time_constants == pytest.approx((lag,), abs=1e-12)
    model = LagModel(gain=1.0, time_constants=reduced.time_constants, dead_time=dead)
    settings = simc_pi(model, reduced.dead_time).settings
    assert settings.gain == pytest.approx(gain, abs=5.1e-4)
    assert settings.integral_time == pytest.approx(integral, abs=1e-9)


def test_half_rule_to_second_order():
    # same paper, second process of the table
    reduced = half_rule(**SKOGESTAD[1][0], order=2)
    assert reduced.time_constants == pytest.approx((2.0, 1.2), abs=1e-12)
    assert reduced.dead_time == pytest.approx(0.77, abs=1e-12)


@pytest.mark.parametrize(
    ("lags", "dead", "sensitivity"), [((1.0, 0.2), 0.0, 1.56), ((20.0, 2.0), 1.0, 1.72)]
)
def test_sensitivity_of_the_published_settings(lags, dead, sensitivity):
    # same paper; the settings of the reduced process act on the full one
    model = LagModel(gain=1.0, time_constants=lags, dead_time=dead)
    closed = half_rule(lags, dead_time=dead).dead_time
    margins = continuous_margins(model, simc_pi(model, closed).settings)
    assert margins.maximum_sensitivity == pytest.approx(sensitivity, abs=0.0051)


def test_load_synthesis_of_chen_and_seborg():
    # D. Chen, D. E. Seborg, Ind. Eng. Chem. Res. 41:4807, 2002 (value from memory, reproduced)
    model = LagModel(gain=100.0, time_constants=(100.0,), dead_time=1.0)
    settings = chen_seborg_pi(model, 2.0).settings
    assert settings.gain == pytest.approx(0.551, abs=5e-4)
    assert settings.integral_time == pytest.approx(4.91, abs=5e-3)
    assert continuous_margins(model, settings).maximum_sensitivity == pytest.approx(
        1.93, abs=0.005
    )


def _cascade(lags, time):
    """Step response of a cascade of lags from the control package."""
    s = control.tf("s")
    plant = control.tf([1.0], [1.0])
    for lag in lags:
        plant = plant / (lag * s + 1)
    return control.step_response(control.ss(plant), time).outputs


@pytest.mark.parametrize(
    ("lags", "early", "late", "area"),
    [
        ((1.0, 1.0, 1.0, 1.0), (2.497, 1.855), (2.041, 2.148), (2.1243, 1.8757)),
        ((10.0, 5.0), (12.381, 3.465), (11.187, 4.265), (11.454, 3.546)),
    ],
)
def test_first_order_from_a_step_response(lags, early, late, area):
    # C. L. Smith, 1972 (value from memory); K. R. Sundaresan and P. R. Krishnaswamy, 1978;
    # K. J. Astrom and T. Hagglund, 1995 (value from memory); figures recomputed from the rules
    time = np.linspace(0.0, 30.0 * max(lags), 15_001)
    curve = _cascade(lags, time)
    for method, (lag, dead), tolerance in (
        (two_point_28_63, early, 1e-3),
        (two_point_35_85, late, 1e-3),
        (area_method, area, 1e-3),
    ):
        model = method(time, curve, 1.0, 1.0)
        assert model.time_constants[0] == pytest.approx(lag, abs=tolerance)
        assert model.dead_time == pytest.approx(dead, abs=tolerance)


@pytest.mark.parametrize("lags", [(118.0, 90.0), (100.0, 100.0), (60.0,)])
def test_sampled_response_as_the_control_package(lags):
    tick, ticks = 2.0, 5
    generator = np.random.default_rng(5)
    inputs = np.r_[0.0, generator.normal(size=299)]
    s = control.tf("s")
    plant = control.tf([1.3], [1.0])
    for lag in lags:
        plant = plant / (lag * s + 1)
    sampled = control.c2d(control.ss(plant), tick, "zoh")
    delayed = np.r_[np.zeros(ticks), inputs[:-ticks]]
    reference = control.forced_response(sampled, np.arange(300) * tick, delayed).outputs
    model = LagModel(gain=1.3, time_constants=lags, dead_time=ticks * tick)
    assert simulate(model, inputs, tick) == pytest.approx(reference, abs=1e-11)
