"""The plant against closed forms, standards and published plants."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest

from harness.domain.rig import (
    DRAIN,
    Characteristic,
    ControlValve,
    Orifice,
    Overflow,
    Rig,
    Source,
    VerticalCylinder,
    Vessel,
)
from harness.engine.engine import Engine
from plants import layout as at
from plants.flow import choked_pressure_drop, liquid_flow
from plants.operating import linearise
from plants.transmitter import BAD, GOOD, UNCERTAIN, fraction_of_current, loop_current
from plants.valve import EQUAL_PERCENTAGE, LINEAR, installed_flow, lagged_travel

pytestmark = pytest.mark.reference

SQUARE_METRE = math.sqrt(4 / math.pi)  # diameter of a cross-section of 1 m2 [m]


def _valve(tag, destination, flow, *, line_kv=None):
    """A valve that passes this flow when fully open, from water at 1 bar [m3/s]."""
    return ControlValve(
        tag=tag, origin="HEADER", destination=destination, kv=flow * 3600,
        characteristic=Characteristic.LINEAR, rangeability=1e6, line_kv=line_kv,
        stroke_time=1.0, lag=0.0, fail_position=0.0, initial_output=1.0,
    )  # fmt: skip


def _orifice(tag, origin, destination, coefficient, area):
    return Orifice(
        tag=tag, origin=origin, destination=destination, discharge_coefficient=coefficient,
        diameter=math.sqrt(4 * area / math.pi),
    )  # fmt: skip


def _plant(vessels, *, orifices=(), valves=(), overflows=(), tick=1.0, gravity=9.80665):
    return Rig(
        name="reference", description="", tick=tick, seed=1, gravity=gravity,
        sources=(Source(tag="HEADER", pressure=1e5, density=999.1),),
        vessels=tuple(
            Vessel(
                tag=tag, shape=VerticalCylinder(diameter=diameter, height=10.0), initial_level=h
            )
            for tag, diameter, h in vessels
        ),
        orifices=orifices, overflows=overflows, valves=valves, transmitters=(), loops=(),
        links=(),
    )  # fmt: skip


def _draining(tick, level=1.0):
    hole = _orifice("RO", "TK", DRAIN, 0.62, math.pi / 4 * 0.025**2)
    return Engine(_plant([("TK", SQUARE_METRE, level)], orifices=(hole,), tick=tick))


# A = 1 m2, hole 25 mm, Cd 0.62, g = 9.80665, h = 1 m. Torricelli, integrated:
# t = (A / (Cd a)) sqrt(2/g) (sqrt h0 - sqrt h1).
TIME_TO_EMPTY = 1483.8605  # [s]
TIME_TO_HALF = 434.6127  # [s]


def test_draining_to_half_the_level_takes_the_closed_form_time():
    engine = _draining(TIME_TO_HALF / 1000)
    engine.advance(1000)
    assert engine.levels()[0] == pytest.approx(0.5, abs=1e-7)  # the time has seven digits


def test_the_level_follows_the_closed_form_all_the_way_to_empty():
    engine = _draining(1.0)
    worst = 0.0
    for second in range(1, 1484):
        engine.advance(1)
        expected = (1 - second / TIME_TO_EMPTY) ** 2
        worst = max(worst, abs(engine.levels()[0] - expected))
    assert worst < 1e-7  # again, the time has seven digits
    assert engine.levels()[0] > 0.0
    engine.advance(1)
    assert engine.levels()[0] == 0.0
    engine.advance(100)
    assert engine.levels()[0] == 0.0
    totals = engine.state[engine.table[at.AT_TOTALS] :][: at.N_TOTALS]
    assert totals[1] == pytest.approx(1.0, rel=1e-12)


def test_the_time_constant_is_the_time_to_empty():
    """tau = 2 A h / q = 1483.8605 s and q = 1.3478356e-3 m3/s: an identity of a free outlet."""
    flow = 1.3478356e-3
    hole = _orifice("RO", "TK", DRAIN, 0.62, math.pi / 4 * 0.025**2)
    rig = _plant(
        [("TK", SQUARE_METRE, None)], orifices=(hole,), valves=(_valve("FV", "TK", flow),)
    )
    engine = Engine(rig)
    assert engine.levels()[0] == pytest.approx(1.0, rel=1e-7)
    model = linearise(engine.table, engine.parameters, engine.state[:1].copy(), np.ones(1))
    gain, times = model.path(0, 0)
    assert times == pytest.approx((TIME_TO_EMPTY,), rel=1e-7)
    # dh/dq = 2 h / q; the valve is linear, so dq/dl is its full flow
    assert gain / flow == pytest.approx(2 / flow, rel=1e-5)


# Filling from empty at q = 0.15 m3/s with outflow 0.1 sqrt h from A = 1 m2:
# t = -(2 A / k) (sqrt h + (q/k) ln(1 - k sqrt h / q)); levels worked out from it.
FILLING = {10: 0.8402477, 20: 1.2991142, 50: 1.9256282, 100: 2.1905505, 200: 2.2478927}


@pytest.mark.parametrize("tick", [0.1, 1.0])
def test_filling_from_empty_against_an_outflow(tick):
    hole = _orifice("RO", "TK", DRAIN, 0.62, 0.1 / (0.62 * math.sqrt(2 * 9.80665)))
    rig = _plant(
        [("TK", SQUARE_METRE, 0.0)],
        orifices=(hole,), valves=(_valve("FV", "TK", 0.15),), tick=tick,
    )  # fmt: skip
    engine = Engine(rig)
    done = 0
    for second, level in FILLING.items():
        engine.advance(round((second - done) / tick))
        done = second
        assert engine.levels()[0] == pytest.approx(level, abs=1e-7)
        root = math.sqrt(engine.levels()[0])
        time = -20 * (root + 1.5 * math.log(1 - root / 1.5))
        assert time == pytest.approx(second, abs=2e-4)


def test_head_over_a_weir_at_steady_flow():
    """Poleni: q = 2/3 Cd b sqrt(2 g) head^1.5, so head = (q / c)^(2/3)."""
    weir = Overflow(
        tag="OF", origin="TK", destination=DRAIN, crest=1.4, width=0.2,
        discharge_coefficient=0.6, fraction=0.0,
    )  # fmt: skip
    rig = _plant(
        [("TK", SQUARE_METRE, 1.39)], overflows=(weir,), valves=(_valve("FV", "TK", 2e-3),)
    )
    engine = Engine(rig)
    engine.advance(1500)
    head = (2e-3 / (2 / 3 * 0.6 * 0.2 * math.sqrt(2 * 9.80665))) ** (2 / 3)
    assert engine.levels()[0] == pytest.approx(1.4 + head, abs=1e-9)


# K. H. Johansson, The quadruple-tank process, IEEE Trans. Control Syst. Technol. 8(3):456-465,
# 2000, minimum-phase point, in cm and s. Steady levels of the model itself (recomputed from its
# equations), time constants as published, gains as published (value from memory).
_AREAS = (28.0, 32.0, 28.0, 32.0)
_HOLES = (0.071, 0.057, 0.071, 0.057)
_PUMPS = (3.33 * 3.00, 3.35 * 3.00)  # [cm3/s]
_SPLITS = (0.70, 0.60)


def _quadruple_tank():
    one, two = _PUMPS
    into = (_SPLITS[0] * one, _SPLITS[1] * two, (1 - _SPLITS[1]) * two, (1 - _SPLITS[0]) * one)
    vessels = [
        (f"TK-{i}", math.sqrt(4 * a * 1e-4 / math.pi), None) for i, a in enumerate(_AREAS, 1)
    ]
    leads_to = (DRAIN, DRAIN, "TK-1", "TK-2")
    return _plant(
        vessels,
        orifices=tuple(
            _orifice(f"RO-{i}", f"TK-{i}", end, 1.0, hole * 1e-4)
            for i, (end, hole) in enumerate(zip(leads_to, _HOLES, strict=True), 1)
        ),
        valves=tuple(
            _valve(f"FV-{i}", f"TK-{i}", flow * 1e-6) for i, flow in enumerate(into, 1)
        ),
        gravity=9.81,
    )


def test_quadruple_tank_stands_at_its_published_point():
    engine = Engine(_quadruple_tank())
    steady = [12.263, 12.783, 1.634, 1.409]
    np.testing.assert_allclose(engine.levels() * 100, steady, atol=1e-3)
    engine.advance(500)
    np.testing.assert_allclose(engine.levels() * 100, steady, atol=1e-3)
    model = linearise(engine.table, engine.parameters, engine.state[:4].copy(), np.ones(4))
    times = -1 / np.diag(model.state)
    np.testing.assert_allclose(times, [62, 90, 23, 30], atol=1.0)
    # 0.50 V/cm; a pump's volt gives 3.33 or 3.35 cm3/s, split over two tanks
    flows = engine.valve_flows({}) * 1e6

    def gain(valve, vessel, share, constant):
        return 0.5 * model.path(valve, vessel)[0] * 100 / flows[valve] * share * constant

    gains = [
        gain(0, 0, 0.7, 3.33), gain(2, 0, 0.4, 3.35), gain(3, 1, 0.3, 3.33),
        gain(1, 1, 0.6, 3.35),
    ]  # fmt: skip
    np.testing.assert_allclose(gains, [2.6, 1.5, 1.4, 2.8], atol=0.06)


def test_valve_sizing_example_of_the_standard():
    """IEC 60534-2-1, Annex, example 1: water, 0.1 m3/s takes Kv 164.995, and does not choke."""
    flow = liquid_flow(164.995, 680e3 - 220e3, 965.4)
    assert flow == pytest.approx(0.1, rel=1e-5)
    limit = choked_pressure_drop(0.9, 680e3, 70.1e3, 22.12e6)
    assert limit == pytest.approx(497e3, abs=500)
    assert limit > 680e3 - 220e3


# Installed characteristic q/q_max = 1 / sqrt((1 - N) + N / phi^2), N the valve's share of the
# pressure drop at full flow: closed form.
_TRAVELS = (0.1, 0.25, 0.5, 0.75, 0.9)


@pytest.mark.parametrize(
    ("kind", "rangeability", "share", "expected"),
    [
        (EQUAL_PERCENTAGE, 50.0, 0.3, (0.0539, 0.0968, 0.2524, 0.5954, 0.8588)),
        # phi = l is the limit of 1/R + (1 - 1/R) l for a large R
        (LINEAR, 1e12, 0.1, (0.3029, 0.6325, 0.8771, 0.9632, 0.9885)),
    ],
)
def test_installed_characteristics(kind, rangeability, share, expected):
    kv = 10.0
    line = kv * math.sqrt(share / (1 - share))

    def flow(travel):
        logarithm = math.log(rangeability)
        return installed_flow(travel, kind, rangeability, logarithm, kv, line, 1e-4)

    found = [flow(travel) / flow(1.0) for travel in _TRAVELS]
    np.testing.assert_allclose(found, expected, atol=5e-5)


def test_times_to_86_and_98_percent_of_a_lag():
    """T86 = 1.966 tau and T98 = 3.912 tau (terms of IEC 61514; value from memory)."""
    for ratio, reached in ((1.966, 0.86), (3.912, 0.98)):
        lag = 0.7
        decay = math.exp(-ratio)
        assert lagged_travel(0.0, 1.0, 0.0, ratio * lag, lag, decay) == pytest.approx(
            reached, abs=5e-5
        )


@pytest.mark.parametrize(
    ("current", "percent"),
    [(3.6, -2.5), (3.8, -1.25), (4.0, 0.0), (12.0, 50.0), (20.5, 103.125), (21.0, 106.25)],
)
def test_percent_of_a_current(current, percent):
    """Percent = (I - 4)/16, the definition of a 4-20 mA signal (IEC 60381-1)."""
    assert 100 * fraction_of_current(current) == pytest.approx(percent, abs=1e-12)


def test_current_bands_of_ne_43():
    """NAMUR NE 43: measurement 3.8 to 20.5 mA, failure at most 3.6 or at least 21.0 mA."""
    assert loop_current(-0.0125)[0] == pytest.approx(3.8, abs=1e-12)
    assert loop_current(1.03125) == (20.5, GOOD)
    assert loop_current(-0.5) == (3.8, UNCERTAIN)
    assert loop_current(7.0) == (20.5, UNCERTAIN)


def test_a_failure_current_is_bad(two_tanks):
    engine = Engine(two_tanks())
    for current in (3.5, 21.5):
        engine.force_current("LT-2", current)
        engine.advance(1)
        transmitter = [t.tag for t in engine.rig.transmitters].index("LT-2")
        assert engine.state[engine.table[at.AT_CURRENT] + transmitter] == current
        assert engine.state[engine.table[at.AT_QUALITY] + transmitter] == BAD
    engine.force_current("LT-2", 0.0)
    engine.advance(1)
    assert engine.state[engine.table[at.AT_QUALITY] + transmitter] == GOOD


def test_a_forced_current_has_the_quality_of_its_band(two_tanks):
    """NAMUR NE 43: measurement 3.8 to 20.5 mA, failure at most 3.6 or at least 21.0 mA."""
    engine = Engine(two_tanks())
    told = {3.6: BAD, 3.7: UNCERTAIN, 3.8: GOOD, 12.0: GOOD, 20.5: GOOD, 20.7: UNCERTAIN}
    for current, quality in (told | {21.0: BAD}).items():
        engine.force_current("LT-2", current)
        engine.advance(1)
        transmitter = [t.tag for t in engine.rig.transmitters].index("LT-2")
        assert engine.state[engine.table[at.AT_QUALITY] + transmitter] == quality


def test_filling_is_the_same_at_two_ticks():
    """The filling vessel is the same at two ticks, to the promised 1e-8 m."""
    hole = _orifice("RO", "TK", DRAIN, 0.62, 0.1 / (0.62 * math.sqrt(2 * 9.80665)))
    rig = _plant(
        [("TK", SQUARE_METRE, 0.0)],
        orifices=(hole,), valves=(_valve("FV", "TK", 0.15),), tick=0.1,
    )  # fmt: skip
    fine, coarse = Engine(rig), Engine(dataclasses.replace(rig, tick=0.5))
    fine.advance(100)
    coarse.advance(20)
    assert coarse.levels()[0] == pytest.approx(fine.levels()[0], abs=1e-8)
