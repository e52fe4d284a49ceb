"""The engine: where it starts, what a tick does in which order, saving, orders, rows."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest

from harness.controllers.block import AUTOMATIC, MANUAL
from harness.domain.models import ControllerSettings
from harness.domain.rig import DRAIN, Action, Measurement
from harness.engine.engine import Engine
from harness.errors import ModelError
from plants import layout as at
from plants.noise import standard_normal, stream_of

PI = ControllerSettings(gain=3.0, integral_time=120.0, action=Action.REVERSE)
P = ControllerSettings(gain=3.0, integral_time=None, action=Action.REVERSE)


def _loop(rig, **changes):
    return dataclasses.replace(rig, loops=(dataclasses.replace(rig.loops[0], **changes),))


def _quiet(rig):
    return dataclasses.replace(
        rig,
        transmitters=tuple(
            dataclasses.replace(t, noise=0.0, resolution=0.0) for t in rig.transmitters
        ),
    )


def _column(engine, rows, name):
    return rows[:, [column.name for column in engine.columns].index(name)]


def _automatic(engine, settings=PI, step=0.05):
    engine.set_settings("LIC-2", settings)
    engine.advance(1)
    engine.set_mode("LIC-2", AUTOMATIC)
    engine.set_setpoint("LIC-2", engine.measured("LT-2") + step)
    return engine


def test_it_starts_at_rest(two_tanks):
    engine = Engine(_quiet(two_tanks()))
    before = engine.levels()
    rows = engine.record(400)
    np.testing.assert_allclose(engine.levels(), before, rtol=0, atol=1e-12)
    for tag in ("LT-1", "LT-2", "FT-1", "FT-2"):
        np.testing.assert_allclose(
            _column(engine, rows, f"{tag}.value"),
            _column(engine, rows, f"{tag}.true"),
            rtol=1e-9,
        )
    assert np.all(_column(engine, rows, "LIC-2.mode") == MANUAL)
    assert _column(engine, rows, "LIC-2.setpoint")[0] == pytest.approx(before[1], rel=1e-12)


def test_given_levels_and_setpoint_are_taken(two_tanks):
    rig = _loop(two_tanks(), initial_setpoint=0.9)
    vessels = (rig.vessels[0], dataclasses.replace(rig.vessels[1], initial_level=0.25))
    engine = Engine(dataclasses.replace(rig, vessels=vessels))
    steady = Engine(two_tanks())
    assert engine.levels() == pytest.approx([steady.levels()[0], 0.25], rel=1e-12)
    assert _column(engine, engine.record(1), "LIC-2.setpoint")[0] == pytest.approx(0.9)


def test_a_rig_without_a_steady_state_says_so(two_tanks):
    rig = two_tanks()
    with pytest.raises(ModelError, match=r"test two tanks.*initial_level"):
        Engine(dataclasses.replace(rig, orifices=rig.orifices[:1], overflows=()))


def test_outlets_in_a_ring_are_refused(two_tanks):
    rig = two_tanks()
    back = dataclasses.replace(rig.orifices[1], destination="TK-1")
    with pytest.raises(ModelError, match="RO-1, RO-2 form a ring"):
        Engine(dataclasses.replace(rig, orifices=(rig.orifices[0], back)))
    straight_back = dataclasses.replace(rig.orifices[0], destination="TK-1")
    with pytest.raises(ModelError, match="RO-1 form a ring"):
        Engine(dataclasses.replace(rig, orifices=(straight_back, rig.orifices[1])))


def test_many_ticks_at_once_or_one_by_one_are_the_same(two_tanks):
    engines = [_automatic(Engine(two_tanks())) for _ in range(3)]
    engines[0].advance(500)
    for _ in range(500):
        engines[1].advance(1)
    rows = engines[2].record(500)
    assert rows.shape == (500, len(engines[2].columns))
    for other in engines[1:]:
        assert np.array_equal(engines[0].state, other.state)
        assert other.tick == 501


@pytest.mark.parametrize("at_tick", [1, 2, 3, 4, 50])
def test_what_is_restored_goes_on_to_the_last_bit(two_tanks, at_tick):
    """Also between the ticks that share a block of noise, and in an engine made anew."""
    engine = _automatic(Engine(_loop(two_tanks(), output_delay=3)))
    engine.advance(at_tick)
    saved = engine.save()
    expected = engine.record(300)
    engine.restore(saved)
    assert np.array_equal(engine.record(300), expected)
    fresh = Engine(engine.rig)
    fresh.restore(saved)
    assert np.array_equal(fresh.record(300), expected)


def test_saving_is_a_copy(two_tanks):
    engine = Engine(two_tanks())
    saved = engine.save()
    state = saved.state.copy()
    engine.set_output("FV-1", 0.9)
    engine.advance(50)
    assert np.array_equal(saved.state, state)
    assert saved.counters[0] == 0


def test_noise_is_a_function_of_seed_tag_and_tick(two_tanks):
    rig = two_tanks()
    no_steps = dataclasses.replace(
        rig,
        transmitters=tuple(dataclasses.replace(t, resolution=0.0) for t in rig.transmitters),
    )
    engine, quiet = Engine(no_steps), Engine(_quiet(rig))
    rows, still = engine.record(50), quiet.record(50)
    for tag in ("LT-1", "FT-2"):
        span = rig.transmitter(tag).range.span
        factor = 1.0 if tag.startswith("LT") else 3600.0
        found = _column(engine, rows, f"{tag}.value") - _column(quiet, still, f"{tag}.value")
        expected = [standard_normal(rig.seed, stream_of(tag), tick) for tick in range(50)]
        np.testing.assert_allclose(
            found / (span * factor), 0.0005 * np.array(expected), rtol=0, atol=1e-14
        )


def test_another_instrument_shifts_nothing(two_tanks):
    rig = two_tanks()
    more = dataclasses.replace(rig.transmitters[0], tag="LT-0", measures=Measurement.LEVEL)
    engine = _automatic(Engine(rig))
    other = _automatic(Engine(dataclasses.replace(rig, transmitters=(more, *rig.transmitters))))
    rows, wider = engine.record(300), other.record(300)
    for column in engine.columns:
        assert np.array_equal(
            _column(engine, rows, column.name), _column(other, wider, column.name)
        ), column.name


def test_another_seed_is_other_noise(two_tanks):
    rows = [Engine(two_tanks(seed=seed)).record(8) for seed in (7, 8)]
    assert not np.any(rows[0][:, 1] == rows[1][:, 1])


@pytest.mark.parametrize("delay", [0, 1, 2, 5])
@pytest.mark.parametrize("phase", [0, 1, 3])
def test_an_output_acts_so_many_ticks_after_its_sample(two_tanks, phase, delay):
    """The controller sees the sample of tick k; its output acts from k + output_delay."""
    rig = _quiet(two_tanks(tick=0.5))
    rig = _loop(rig, scan=2.0, scan_phase=phase, output_delay=delay)  # a scan is four ticks
    engine = _automatic(Engine(rig), P, step=0.0)
    engine.advance(8)  # to tick 9; nothing moves
    level = engine.measured("LT-2")
    engine.set_setpoint("LIC-2", level + 0.15)
    rows = engine.record(20)
    commands = _column(engine, rows, "FV-1.command")
    moved = np.flatnonzero(np.abs(commands - 0.55) > 0.01)[0] + 9
    scan = next(tick for tick in range(9, 20) if (tick - phase) % 4 == 0)
    assert moved == scan + delay
    # gain 3 on 0.15 m of 1.5 m; what a delay does not change is what was computed
    assert commands[moved - 9] == pytest.approx(0.55 + 3.0 * 0.1, abs=1e-4)
    # between scans the output holds
    changes = np.flatnonzero(np.diff(commands)) + 10
    assert set((changes - delay - phase) % 4) == {0}


def test_the_block_sees_the_sample_of_its_own_tick(two_tanks):
    engine = Engine(two_tanks(tick=1.0))
    engine.set_settings("LIC-2", P)
    engine.advance(1)
    engine.set_mode("LIC-2", AUTOMATIC)
    rows = engine.record(30)
    shown = rig_range = engine.rig.transmitter("LT-2").range
    error = [
        rig_range.to_fraction(x) - shown.to_fraction(y)
        for x, y in zip(
            _column(engine, rows, "LIC-2.setpoint"),
            _column(engine, rows, "LT-2.value"),
            strict=True,
        )
    ]
    commands = _column(engine, rows, "FV-1.command")
    np.testing.assert_allclose(np.diff(commands), 3.0 * np.diff(error), rtol=0, atol=1e-12)


def test_a_bad_input_holds_the_output(two_tanks):
    engine = _automatic(Engine(two_tanks()))
    engine.advance(20)
    engine.force_current("LT-2", 3.5)
    engine.advance(1)
    rows = engine.record(30)
    assert np.ptp(_column(engine, rows, "FV-1.command")) == 0.0
    assert np.all(_column(engine, rows, "LT-2.quality") == 2.0)
    engine.force_current("LT-2", 0.0)
    engine.advance(2)
    assert np.ptp(_column(engine, engine.record(30), "FV-1.command")) > 0.0


def test_orders_act_from_the_present_tick(two_tanks):
    engine = Engine(two_tanks())
    engine.set_manual_output("LIC-2", 0.7)
    engine.set_output("FV-2", 0.1)
    rows = engine.record(3)
    assert np.all(_column(engine, rows, "LIC-2.manual_output") == 0.7)
    assert _column(engine, rows, "FV-1.command")[0] == 0.7
    assert np.all(_column(engine, rows, "FV-2.command") == 0.1)
    assert engine.output("FV-1") == 0.7


def test_an_external_controller_moves_the_valve_at_once(two_tanks):
    engine = Engine(_loop(two_tanks(), output_delay=4), built_in=False)
    engine.advance(3)
    engine.set_output("FV-1", 0.8)
    rows = engine.record(10)
    assert np.all(_column(engine, rows, "FV-1.command") == 0.8)


def test_rows_hold_what_their_columns_say(two_tanks):
    engine = _automatic(Engine(two_tanks()))
    rows = engine.record(100)
    names = [column.name for column in engine.columns]
    assert len(set(names)) == len(names) == rows.shape[1]
    units = {column.name: column.unit for column in engine.columns}
    assert units["LT-2.value"] == "m"
    assert units["FV-1.flow"] == units["FT-1.value"] == "m3/h"
    current = _column(engine, rows, "FT-1.current")
    span = engine.rig.transmitter("FT-1").range.span * 3600
    np.testing.assert_allclose(
        _column(engine, rows, "FT-1.value"), (current - 4) / 16 * span, rtol=1e-12
    )
    np.testing.assert_allclose(
        _column(engine, rows, "FT-1.true"), _column(engine, rows, "FV-1.flow"), rtol=1e-12
    )
    into = _column(engine, rows, "total.in")
    flows = _column(engine, rows, "FV-1.flow") + _column(engine, rows, "FV-2.flow")
    mean = (flows[1:] + flows[:-1]) / 2 / 3600
    # the trapezium rule, once the valve has stopped moving fast
    np.testing.assert_allclose(np.diff(into)[20:], mean[20:] * engine.rig.tick, rtol=1e-3)


def test_the_present_row_is_the_one_that_comes_next(two_tanks):
    engine = _automatic(Engine(two_tanks()))
    engine.advance(7)
    row = engine.row()
    recorded = engine.record(1)[0]
    names = [column.name for column in engine.columns]
    same = [i for i, name in enumerate(names) if name != "FV-1.command"]
    assert np.array_equal(row[same], recorded[same])


def test_the_loop_settles_at_its_setpoint(two_tanks):
    slow = ControllerSettings(gain=1.0, integral_time=200.0, action=Action.REVERSE)
    engine = _automatic(Engine(_quiet(two_tanks())), slow)
    engine.advance(100_000)
    wanted = _column(engine, engine.record(1), "LIC-2.setpoint")[0]
    assert engine.levels()[1] == pytest.approx(wanted, abs=1e-9)
    assert math.isfinite(engine.output("FV-1"))


def test_a_flow_meter_on_an_outlet_reads_what_leaves(two_tanks):
    rig = _quiet(two_tanks())
    meter = dataclasses.replace(
        rig.transmitters[2], tag="FT-9", subject="RO-2", damping=0.0,
        range=dataclasses.replace(rig.transmitters[2].range, upper=3e-3),
    )  # fmt: skip
    rig = dataclasses.replace(rig, transmitters=(*rig.transmitters, meter))
    engine = Engine(rig, built_in=False)
    engine.set_output("FV-1", 0.7)
    rows = engine.record(200)
    leaving = np.diff(_column(engine, rows, "total.out")) / rig.tick * 3600
    shown = _column(engine, rows, "FT-9.value")
    np.testing.assert_allclose((shown[1:] + shown[:-1]) / 2, leaving, rtol=1e-4)
    assert rig.orifices[1].destination == DRAIN
    assert engine.table[at.N_TRANSMITTERS] == 5
