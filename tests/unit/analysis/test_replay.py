"""The nonlinear prediction: a run replayed from its record, and the static balance of a P block."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from harness.analysis.nonlinear import IdealBlock, replay, settings_of, static_balance
from harness.analysis.schedule import scan_log
from harness.controllers.block import AUTOMATIC, MANUAL
from harness.domain.models import ControllerSettings
from harness.domain.rig import Action
from harness.engine.engine import Engine


def replayed(data):
    loop = data.rig.loops[0]
    return replay(data, loop, scan_log(data, loop), settings_of(data, loop))


@pytest.mark.parametrize("trial", ["acceptance_pi", "acceptance_p", "short"])
def test_a_built_in_run_is_reproduced_to_the_last_bit(runs, trial):
    data = runs.builtin(trial)
    again = replayed(data)
    for name, column in again.trace.items():
        assert np.array_equal(column, data.trace[name]), name


def test_so_is_one_with_a_phase_shift_and_a_delay(runs):
    rig = runs.rig()
    loop = dataclasses.replace(rig.loops[0], scan=1.5, scan_phase=1, output_delay=4)
    data = runs.run(dataclasses.replace(rig, loops=(loop,)), runs.trial("short"))
    again = replayed(data)
    for name, column in again.trace.items():
        assert np.array_equal(column, data.trace[name]), name


@pytest.mark.parametrize(
    ("period", "delay", "phase"), [(2, 1, 0), (3, 0, 2), (7, 5, 1), (1, 3, 0)]
)
def test_a_controller_outside_is_reproduced_at_its_own_period_and_delay(
    runs, period, delay, phase
):
    """Written in percent and read back: equal to the rounding of that, not to the last bit."""
    kind = type("Own", (runs.Right,), {"period": period, "delay": delay, "phase": phase})
    data = runs.run(runs.rig(), runs.trial("short"), kind)
    again = replayed(data)
    for name, column in again.trace.items():
        scale = np.max(np.abs(data.trace[name])) or 1.0
        assert np.max(np.abs(column - data.trace[name])) < 1e-9 * scale, name


def test_an_irregular_controller_is_reproduced_where_it_counts_the_time_passed(runs):
    """Scans at 1, 2 and 4 ticks in turn: the integral is over what has passed since the last."""

    class Irregular(runs.Right):
        delay = 1
        last = -2

        def is_due(self, tick):
            return tick % 7 in {0, 1, 3}

        def scan(self, seen):
            self.seconds = (seen.tick - self.last) * 0.5
            self.last = seen.tick
            return super().scan(seen)

    data = runs.run(runs.rig(), runs.trial("short"), Irregular)
    level = "LT-102.true"
    assert np.max(np.abs(replayed(data).trace[level] - data.trace[level])) < 1e-9


def test_other_settings_than_those_ordered_part_from_the_run(runs):
    """What makes the comparison worth something: the replay follows its settings, not the trace."""
    data = runs.builtin("short")
    loop = data.rig.loops[0]
    settings = {
        tick: dataclasses.replace(each, gain=1.3 * each.gain)
        for tick, each in settings_of(data, loop).items()
    }
    other = replay(data, loop, scan_log(data, loop), settings)
    assert np.max(np.abs(other.trace["LT-102.true"] - data.trace["LT-102.true"])) > 1e-3


def test_settings_are_read_with_their_tick(runs):
    data = runs.builtin("acceptance_p")
    found = settings_of(data, data.rig.loops[0])
    assert len(found) == 1
    (tick, settings), *_ = found.items()
    assert data.trace["LIC-102.mode"][tick - 1] == MANUAL
    assert data.trace["LIC-102.mode"][tick + 10] == AUTOMATIC
    assert settings.integral_time is None
    assert settings.action is Action.REVERSE


def test_the_ideal_block_starts_without_a_bump(runs):
    block = IdealBlock(runs.rig().loops[0], 0.58)
    block.order(ControllerSettings(gain=2.0, integral_time=None, action=Action.REVERSE))
    assert block.scan(0.4, 0.5, AUTOMATIC, 0.3, 1.0, bad=False) == pytest.approx(0.58)
    assert block.scan(0.4, 0.55, AUTOMATIC, 0.3, 1.0, bad=False) == pytest.approx(0.68)


# Static balance.


def balance(data, gain, bias, setpoint, load=0.58):
    settings = ControllerSettings(gain=gain, integral_time=None, action=Action.REVERSE)
    return static_balance(
        data, data.rig.loops[0], settings, bias=bias, setpoint=setpoint, loads={"FV-102": load}
    )


def rest_of(rig, gain, bias, setpoint, load=0.58):
    """Return level and output after two hours under a P block, without noise."""
    quiet = dataclasses.replace(
        rig,
        transmitters=tuple(
            dataclasses.replace(t, noise=0.0, resolution=0.0) for t in rig.transmitters
        ),
    )
    engine = Engine(quiet, built_in=False)
    loop = rig.loops[0]
    engine.set_output(loop.load, load)
    for _ in range(7200):
        level, _ = engine.transmitted(loop.process_variable)
        wanted = bias + gain * (setpoint - level)
        engine.set_output(loop.output, min(loop.output_high, max(loop.output_low, wanted)))
        engine.advance(2)
    return engine.transmitted(loop.process_variable)[0], engine.output(loop.output)


@pytest.mark.parametrize(
    ("gain", "setpoint", "load"),
    [(1.1, 0.55, 0.58), (1.1, 0.45, 0.7), (3.0, 0.6, 0.3), (0.4, 0.5, 0.9)],
)
def test_a_p_block_comes_to_rest_where_the_balance_says(runs, gain, setpoint, load):
    data = runs.builtin("short")
    level, output = balance(data, gain, 0.58, setpoint, load)
    assert output == pytest.approx(0.58 + gain * (setpoint - level), abs=1e-9)
    assert (level, output) == pytest.approx(
        rest_of(runs.rig(), gain, 0.58, setpoint, load), abs=1e-6
    )


@pytest.mark.parametrize(("setpoint", "limit"), [(0.95, 0.9), (0.05, 0.1)])
def test_a_p_block_that_wants_beyond_a_limit_rests_at_it(runs, setpoint, limit):
    rig = runs.rig()
    loop = dataclasses.replace(rig.loops[0], output_low=0.1, output_high=0.9)
    rig = dataclasses.replace(rig, loops=(loop,))
    data = dataclasses.replace(runs.builtin("short"), rig=rig)
    load = 0.1 if limit > 0.5 else 1.0
    level, output = balance(data, 8.0, 0.58, setpoint, load)
    assert output == limit
    wanted = 0.58 + 8.0 * (setpoint - level)
    assert wanted > 0.9 if limit > 0.5 else wanted < 0.1
    assert (level, output) == pytest.approx(rest_of(rig, 8.0, 0.58, setpoint, load), abs=1e-6)
