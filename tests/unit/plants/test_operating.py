"""Operating point: steady state, linearisation against closed forms and the response itself."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest

from harness.engine.engine import Engine
from plants.operating import flows_into, linearise, steady_volumes


def _coefficients(rig):
    return [p.discharge_coefficient * p.area * math.sqrt(2 * rig.gravity) for p in rig.orifices]


def test_steady_levels_are_those_of_the_jets(two_tanks):
    rig = two_tanks()
    engine = Engine(rig)
    upper, lower = engine.valve_flows({})
    one, other = _coefficients(rig)
    np.testing.assert_allclose(
        engine.levels(), [(upper / one) ** 2, ((upper + lower) / other) ** 2], rtol=1e-13
    )


def test_steady_volumes_close_every_balance_with_a_weir_in_use(two_tanks):
    engine = Engine(two_tanks())
    flows = engine.valve_flows({"FV-1": 1.0, "FV-2": 1.0})
    volumes = steady_volumes(engine.table, engine.parameters, flows)
    rates = flows_into(engine.table, engine.parameters, volumes, flows)
    assert volumes[0] / engine.rig.vessels[0].shape.area > 1.4  # over its crest
    np.testing.assert_allclose(rates[:2], 0.0, atol=1e-14 * np.sum(flows))
    assert rates[2] == pytest.approx(rates[3] + rates[4], rel=1e-12)


def test_no_inflow_is_empty_and_no_outlet_is_never_steady(two_tanks):
    rig = two_tanks()
    engine = Engine(rig)
    assert np.all(steady_volumes(engine.table, engine.parameters, np.zeros(2)) == 0.0)
    closed = dataclasses.replace(
        rig,
        orifices=rig.orifices[:1],
        overflows=rig.overflows[:1],
        vessels=tuple(dataclasses.replace(v, initial_level=0.3) for v in rig.vessels),
    )
    engine = Engine(closed)
    assert steady_volumes(engine.table, engine.parameters, np.array([1e-3, 1e-4])) is None


def test_linearisation_has_the_closed_forms_of_two_free_draining_tanks(two_tanks):
    """tau = 2 A h / q and dh/dq = 2 h / q of each tank (linearised Torricelli balance)."""
    rig = two_tanks()
    engine = Engine(rig)
    travels = np.array([valve.initial_output for valve in rig.valves])
    flows = engine.valve_flows({})
    levels = engine.levels()
    model = linearise(engine.table, engine.parameters, engine.state[:2].copy(), travels)
    through = np.array([flows[0], flows.sum()])
    areas = np.array([vessel.shape.area for vessel in rig.vessels])
    taus = 2 * areas * levels / through
    gains = 2 * levels / through

    step = 1e-5
    slopes = [
        (engine.valve_flows({tag: x + step})[i] - engine.valve_flows({tag: x - step})[i])
        / (2 * step)
        for i, (tag, x) in enumerate(zip(("FV-1", "FV-2"), travels, strict=True))
    ]
    gain, times = model.path(0, 1)
    assert gain == pytest.approx(slopes[0] * gains[1], rel=1e-7)
    assert times == pytest.approx(sorted(taus, reverse=True), rel=1e-8)
    gain, times = model.path(1, 1)  # the load meets the lower tank only
    assert gain == pytest.approx(slopes[1] * gains[1], rel=1e-7)
    assert times == pytest.approx([taus[1]], rel=1e-8)


def test_a_small_step_responds_as_the_linearisation_says(two_tanks):
    rig = two_tanks()
    engine = Engine(rig, built_in=False)
    travels = np.array([valve.initial_output for valve in rig.valves])
    model = linearise(engine.table, engine.parameters, engine.state[:2].copy(), travels)
    gain, (slow, fast) = model.path(0, 1)
    before = engine.levels()[1]
    step = 1e-4
    engine.set_output("FV-1", travels[0] + step)
    seconds = 150.0
    engine.advance(round(seconds / rig.tick))
    found = (engine.levels()[1] - before) / step
    valve = rig.valves[0]
    t = seconds - valve.lag - step * valve.stroke_time / 2  # actuator: a delay, to first order
    expected = gain * (
        1 - (slow * math.exp(-t / slow) - fast * math.exp(-t / fast)) / (slow - fast)
    )
    # what is left is the square of the step and of the actuator's lag
    assert found == pytest.approx(expected, rel=5e-4)
