"""A tick against an independent solver, by order of accuracy, and by the mass balance."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from harness.domain.rig import DRAIN, Overflow, VerticalCylinder, Vessel
from harness.engine.engine import Engine
from plants import layout as at

TOLERANCE = 1e-8  # of a level, as promised [m]


def _quiet(rig, *, lag=None, levels=(None, None)):
    """Return a rig without noise, with this lag and these initial levels."""
    return dataclasses.replace(
        rig,
        valves=tuple(
            dataclasses.replace(v, lag=v.lag if lag is None else lag) for v in rig.valves
        ),
        vessels=tuple(
            dataclasses.replace(v, initial_level=level)
            for v, level in zip(rig.vessels, levels, strict=True)
        ),
        transmitters=tuple(dataclasses.replace(t, noise=0.0) for t in rig.transmitters),
    )


def _compare(engine, plant, orders, tick):
    """Give both the same outputs tick by tick; return the largest difference of a level."""
    worst = 0.0
    for order in orders:
        for valve, output in order.items():
            engine.set_output(valve, output)
            plant.commands[valve] = output
        engine.advance(1)
        plant.run(tick)
        worst = max(worst, float(np.max(np.abs(engine.levels() - plant.levels))))
    return worst


def _pair(rig, independent_plant):
    engine = Engine(rig, built_in=False)
    commands = {valve.tag: valve.initial_output for valve in rig.valves}
    return engine, independent_plant(rig, commands, engine.levels())


@pytest.mark.parametrize("tick", [0.1, 0.5, 1.0])
@pytest.mark.parametrize("lag", [0.0, 0.05, 0.7, 3.0])
def test_moving_valves_agree_with_an_independent_solver(
    two_tanks, independent_plant, tick, lag
):
    rig = _quiet(two_tanks(tick=tick), lag=lag)
    engine, plant = _pair(rig, independent_plant)
    # 0.03 of travel takes 0.24 s of 8: the corner is inside a tick, or inside its neighbour
    orders = [
        {"FV-1": 0.58},
        {},
        {"FV-1": 0.9, "FV-2": 0.37},
        *[{}] * 4,
        {"FV-1": 0.85},
        {"FV-1": 0.86},
    ]
    assert _compare(engine, plant, orders, tick) < TOLERANCE
    np.testing.assert_allclose(
        engine.state[engine.table[at.AT_TRAVEL] :][:2], plant.travels, rtol=0, atol=1e-10
    )


@pytest.mark.parametrize("tick", [0.1, 0.5])
@pytest.mark.parametrize("corner", [0.01, 0.25, 0.5, 0.75, 0.99])
def test_a_corner_anywhere_inside_a_tick(two_tanks, independent_plant, tick, corner):
    rig = _quiet(two_tanks(tick=tick))
    engine, plant = _pair(rig, independent_plant)
    orders = [{"FV-1": 0.55 + corner * tick / 8.0}, {}, {"FV-1": 0.55}, {}]
    assert _compare(engine, plant, orders, tick) < TOLERANCE


@pytest.mark.parametrize("lag", [0.0, 0.7])
def test_a_valve_that_closes_onto_its_seat_and_opens_again(two_tanks, independent_plant, lag):
    rig = _quiet(two_tanks(tick=0.5), lag=lag)
    rig = dataclasses.replace(
        rig, valves=(dataclasses.replace(rig.valves[0], initial_output=0.1), rig.valves[1])
    )
    engine, plant = _pair(rig, independent_plant)
    orders = [{"FV-1": 0.0}, *[{}] * 5, {"FV-1": 0.1}, *[{}] * 3]
    assert _compare(engine, plant, orders, 0.5) < TOLERANCE


@pytest.mark.parametrize(
    "levels", [(1e-3, 0.5), (0.5, 1e-4), (1e-6, 1e-6), (0.0, 0.0), (0.3, 0.0)]
)
def test_near_empty_vessels(two_tanks, independent_plant, levels):
    rig = _quiet(two_tanks(tick=0.5), levels=levels)
    engine, plant = _pair(rig, independent_plant)
    assert _compare(engine, plant, [{}] * 8, 0.5) < TOLERANCE


@pytest.mark.parametrize("levels", [(1.3995, 1.38), (1.3999, 1.3999), (1.41, 1.4)])
def test_across_the_crest_of_a_weir(two_tanks, independent_plant, levels):
    rig = _quiet(two_tanks(tick=0.5), levels=levels)
    engine, plant = _pair(rig, independent_plant)
    orders = [{"FV-1": 1.0, "FV-2": 1.0}, *[{}] * 20, {"FV-1": 0.0, "FV-2": 0.0}, *[{}] * 20]
    assert _compare(engine, plant, orders, 0.5) < TOLERANCE
    spilled = engine.state[engine.table[at.AT_TOTALS] + at.TOTAL_SPILLED]
    assert plant.totals[2] > 1e-4
    assert spilled == pytest.approx(plant.totals[2], rel=1e-6)


def test_two_outlets_of_one_vessel_share_what_leaves_it(two_tanks, independent_plant):
    rig = _quiet(two_tanks(tick=0.5), levels=(0.8, 0.4))
    second = dataclasses.replace(rig.orifices[0], tag="RO-3", destination=DRAIN, diameter=0.011)
    rig = dataclasses.replace(rig, orifices=(rig.orifices[1], rig.orifices[0], second))
    engine, plant = _pair(rig, independent_plant)
    assert _compare(engine, plant, [{"FV-1": 0.6}, *[{}] * 9], 0.5) < TOLERANCE
    totals = engine.state[engine.table[at.AT_TOTALS] :][: at.N_TOTALS]
    np.testing.assert_allclose(totals, plant.totals, rtol=1e-7, atol=1e-13)


def test_vessels_in_any_order_of_the_file(two_tanks):
    rig = _quiet(two_tanks())
    turned = dataclasses.replace(rig, vessels=rig.vessels[::-1])
    one, other = Engine(rig), Engine(turned)
    for engine in (one, other):
        engine.set_output("FV-1", 0.8)
        engine.advance(200)
    np.testing.assert_allclose(one.levels(), other.levels()[::-1], rtol=1e-13)


def test_the_step_is_of_fourth_order(two_tanks):
    """Classical Runge-Kutta: the error falls with the fourth power of the step.

    A steady inflow into vessels away from their steady levels; the reference is the same
    engine at a step so small that its own error is a thousandth of the smallest judged.
    """

    def levels_at(tick, seconds=16.0):
        rig = _quiet(two_tanks(tick=tick), levels=(1.2, 0.2))
        engine = Engine(rig, built_in=False)
        engine.advance(round(seconds / tick))
        return engine.levels()

    reference = levels_at(0.125)
    steps = np.array([1.0, 2.0, 4.0])
    for vessel in (0, 1):
        errors = [abs(levels_at(step)[vessel] - reference[vessel]) for step in steps]
        slope = np.polyfit(np.log(steps), np.log(errors), 1)[0]
        assert 3.7 < slope < 4.6, (vessel, errors)


LEVELS = st.floats(min_value=0.0, max_value=1.6)
OUTPUTS = st.floats(min_value=0.0, max_value=1.0)


@settings(
    max_examples=60,
    deadline=None,
    # the fixture is a pure function
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(
    upper=LEVELS,
    lower=LEVELS,
    outputs=st.lists(st.tuples(OUTPUTS, OUTPUTS), min_size=1, max_size=5),
    tick=st.sampled_from([0.05, 0.5, 2.0, 10.0]),
    lag=st.sampled_from([0.0, 0.3, 5.0]),
    fraction=st.sampled_from([0.0, 0.3, 1.0]),
)
def test_what_came_in_went_out_or_is_there(
    two_tanks, upper, lower, outputs, tick, lag, fraction
):
    """Mass balance to 1e-9 of what went through, whatever happens, overflow included."""
    rig = _quiet(two_tanks(tick=tick), lag=lag, levels=(upper, lower))
    rig = dataclasses.replace(
        rig,
        overflows=tuple(dataclasses.replace(o, fraction=fraction) for o in rig.overflows),
    )
    engine = Engine(rig, built_in=False)
    totals = int(engine.table[at.AT_TOTALS])
    before = float(np.sum(engine.state[:2]))
    for one, other in outputs:
        engine.set_output("FV-1", one)
        engine.set_output("FV-2", other)
        engine.advance(30)
    into, out, spilled = engine.state[totals : totals + at.N_TOTALS]
    after = float(np.sum(engine.state[:2]))
    through = into + out + spilled + before
    assert abs(before + into - out - spilled - after) <= 1e-9 * through
    assert np.all(engine.levels() >= 0.0)
    assert spilled >= 0.0


def test_adapted_and_plain_steps_are_the_same_tableau(two_tanks):
    """Where both may be taken, the vessel-by-vessel step and the adapted one agree."""
    rig = _quiet(two_tanks(tick=0.5), levels=(0.9, 0.6))
    low = dataclasses.replace(
        rig,
        overflows=(
            dataclasses.replace(rig.overflows[0], crest=0.2, width=1e-12),
            rig.overflows[1],
        ),
    )  # a weir too narrow to let anything over, which forces the adapted steps
    plain, adapted = Engine(rig, built_in=False), Engine(low, built_in=False)
    for engine in (plain, adapted):
        engine.set_output("FV-1", 0.7)
        engine.advance(40)
    np.testing.assert_allclose(plain.levels(), adapted.levels(), rtol=0, atol=2e-9)


def test_a_closed_vessel_without_outlet_just_fills(two_tanks):
    rig = _quiet(two_tanks(tick=0.5), levels=(0.5, 0.0))
    rig = dataclasses.replace(rig, orifices=rig.orifices[:1])
    engine = Engine(rig, built_in=False)
    engine.advance(50)
    into = engine.state[engine.table[at.AT_TOTALS] + at.TOTAL_IN]
    area = VerticalCylinder(diameter=0.4, height=1.0).area
    np.testing.assert_allclose(np.sum(engine.state[:2]), 0.5 * area + into, rtol=1e-12)


def test_an_overflow_may_lead_back_up(two_tanks, independent_plant):
    """Overflows may lead anywhere, also into a vessel that stands upstream of the outlets."""
    rig = _quiet(two_tanks(tick=0.5), levels=(0.5, 1.45))
    back = Overflow(
        tag="OF-9", origin="TK-2", destination="TK-1", crest=1.4, width=0.2,
        discharge_coefficient=0.6, fraction=0.8,
    )  # fmt: skip
    rig = dataclasses.replace(rig, overflows=(back,))
    engine, plant = _pair(rig, independent_plant)
    assert _compare(engine, plant, [{}] * 20, 0.5) < TOLERANCE


def test_three_vessels_and_one_fed_from_two(two_tanks, independent_plant):
    rig = _quiet(two_tanks(tick=0.5), levels=(0.9, 0.6))
    third = Vessel(
        tag="TK-0", shape=VerticalCylinder(diameter=0.3, height=1.5), initial_level=0.7
    )
    feed = dataclasses.replace(rig.orifices[0], tag="RO-0", origin="TK-0", diameter=0.012)
    rig = dataclasses.replace(
        rig, vessels=(*rig.vessels, third), orifices=(*rig.orifices, feed)
    )
    engine, plant = _pair(rig, independent_plant)
    assert _compare(engine, plant, [{"FV-2": 0.7}, *[{}] * 19], 0.5) < TOLERANCE
