import math

import control
import numpy as np
import pytest

from harness.domain.models import ControllerSettings, LagModel
from harness.domain.rig import Action
from harness.errors import ModelError
from harness.tuning.margins import continuous_margins, sampled_margins
from harness.tuning.response import held_step
from harness.tuning.synthesis import direct_synthesis_p, direct_synthesis_pi

TWO_LAGS = LagModel(gain=0.7, time_constants=(118.0, 90.0), dead_time=0.0)


def _settings(gain, integral_time, action=Action.REVERSE):
    return ControllerSettings(gain=gain, integral_time=integral_time, action=action)


def _control_loop(model, settings):
    s = control.tf("s")
    loop = model.gain * settings.gain * (1 + 1 / (settings.integral_time * s))
    for lag in model.time_constants:
        loop = loop / (lag * s + 1)
    return loop


def test_without_dead_time_as_the_control_package():
    settings = _settings(6.0, 40.0)
    ours = continuous_margins(TWO_LAGS, settings)
    gain, phase, _, at_phase, at_gain, _ = control.stability_margins(
        _control_loop(TWO_LAGS, settings)
    )
    assert ours.gain_margin == pytest.approx(gain, rel=1e-6)
    assert ours.phase_margin == pytest.approx(math.radians(phase), rel=1e-6)
    assert ours.phase_crossover == pytest.approx(at_phase, rel=1e-6)
    assert ours.gain_crossover == pytest.approx(at_gain, rel=1e-6)


def test_past_the_limit_the_margins_say_so():
    # k (Ti (t1 + t2) - t1 t2) + Ti (t1 + t2) = 0 is the limit (Routh): Ti = 40 gives k = 3.62
    limit = 40.0 * 208.0 / (118.0 * 90.0 - 40.0 * 208.0) / 0.7
    above, below = (
        continuous_margins(TWO_LAGS, _settings(limit * f, 40.0)) for f in (1.01, 0.99)
    )
    assert above.gain_margin == pytest.approx(1 / 1.01, rel=1e-6)
    assert above.phase_margin < 0.0
    assert above.delay_margin < 0.0
    assert not above.stable
    assert below.stable


def test_no_limit_is_none():
    model = LagModel(gain=1.0, time_constants=(20.0,), dead_time=0.0)
    fast = continuous_margins(model, direct_synthesis_p(model, 2.0).settings)
    assert fast.gain_margin is None
    assert fast.phase_crossover is None
    assert fast.phase_margin == pytest.approx(math.pi - math.atan(math.sqrt(80.0)), rel=1e-9)
    assert fast.maximum_sensitivity == 1.0
    weak = continuous_margins(model, _settings(0.5, None))
    assert weak.gain_crossover is None
    assert weak.delay_margin is None
    assert weak.stable


def _spectral_radius(model, settings, scan, extra):
    """Largest closed-loop pole of the sampled loop, from its state equations."""
    step = held_step(
        LagModel(
            gain=1.0, time_constants=model.time_constants, dead_time=model.dead_time + extra
        ),
        scan,
    )
    memory = step.whole + 1  # outputs still under way
    size = 3 + memory
    matrix = np.zeros((size, size))
    # state: x1, x2, integral, u[k-1] ... u[k-memory]; u[k] = Kc e + I + (Kc T/Ti) e, e = -K x2
    share = settings.gain * scan / (settings.integral_time or math.inf)
    output = np.zeros(size)
    output[1] = -(settings.gain + share) * model.gain
    output[2] = 1.0 if share > 0.0 else 0.0

    def past(ticks):
        row = np.zeros(size)
        if ticks == 0:
            return output
        row[2 + ticks] = 1.0
        return row

    newest, before = past(step.whole), past(step.whole + 1)
    matrix[0] = step.b1[0] * newest + step.b1[1] * before
    matrix[0, 0] += step.a1
    matrix[1] = step.b2[0] * newest + step.b2[1] * before
    matrix[1, 0] += step.c
    matrix[1, 1] += step.a2
    matrix[2, 2], matrix[2, 1] = output[2], -share * model.gain
    matrix[3] = output
    for k in range(4, size):
        matrix[k, k - 1] = 1.0
    return max(abs(np.linalg.eigvals(matrix)))


@pytest.mark.parametrize("scan", [1.0, 7.0, 20.0])
@pytest.mark.parametrize("integral_time", [None, 160.0])
def test_sampled_margins_are_where_a_closed_loop_pole_meets_the_circle(scan, integral_time):
    model = LagModel(gain=0.7, time_constants=(118.0, 90.0), dead_time=4.5)
    settings = _settings(4.0, integral_time)
    margins = sampled_margins(model, settings, scan)
    assert margins.delay_margin > 5.0
    for extra in (margins.delay_margin - 0.01, margins.delay_margin + 0.01):
        stable = _spectral_radius(model, settings, scan, extra) < 1.0
        assert stable == (extra < margins.delay_margin)
    for factor in (0.999, 1.001):
        gained = _settings(4.0 * margins.gain_margin * factor, integral_time)
        assert (_spectral_radius(model, gained, scan, 0.0) < 1.0) == (factor < 1.0)


def test_sampled_tends_to_continuous_at_first_order():
    model = LagModel(gain=2.0, time_constants=(7.0,), dead_time=1.0)
    settings = direct_synthesis_pi(model, 1.0).settings
    exact = continuous_margins(model, settings)
    for name in ("gain_margin", "phase_margin", "delay_margin", "maximum_sensitivity"):
        errors = [
            abs(getattr(sampled_margins(model, settings, scan), name) - getattr(exact, name))
            for scan in (0.02, 0.01)
        ]
        assert errors[0] / errors[1] == pytest.approx(2.0, abs=0.1)


def test_output_delay_takes_from_the_delay_margin():
    model = LagModel(gain=2.0, time_constants=(7.0,), dead_time=1.0)
    settings = direct_synthesis_pi(model, 1.0).settings
    free = sampled_margins(model, settings, 0.1).delay_margin
    assert sampled_margins(model, settings, 0.1, 0.25).delay_margin == pytest.approx(
        free - 0.25, abs=1e-9
    )


def test_no_loop_is_refused():
    model = LagModel(gain=2.0, time_constants=(7.0,), dead_time=1.0)
    with pytest.raises(ModelError, match="positive feedback"):
        continuous_margins(model, _settings(1.0, 7.0, Action.DIRECT))
    with pytest.raises(ModelError, match="integral time 0 s"):
        continuous_margins(model, _settings(1.0, 0.0))
    with pytest.raises(ModelError, match="controller gain 0"):
        sampled_margins(model, _settings(0.0, 7.0), 0.1)
    with pytest.raises(ModelError, match="scan 0 s"):
        sampled_margins(model, _settings(1.0, 7.0), 0.0)
