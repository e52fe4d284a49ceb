"""A loop closed by a Python controller, called from inside the compiled loop."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest

from harness.analysis.nonlinear import IdealBlock
from harness.controllers.block import AUTOMATIC, MANUAL
from harness.domain.models import ControllerSettings
from harness.domain.rig import Action
from harness.engine.drive import Drive
from harness.engine.engine import Engine
from harness.errors import ModelError

SETTINGS = ControllerSettings(gain=1.5, integral_time=90.0, action=Action.REVERSE)


class Mirror:
    """The reference block, as a Python controller."""

    def __init__(self, rig):
        loop = rig.loops[0]
        self.scan_period = loop.scan
        self.block = IdealBlock(loop, rig.valve(loop.output).initial_output)
        self.block.order(SETTINGS)

    def scan(self, process_variable, setpoint, mode, manual_output, bad):
        return self.block.scan(
            process_variable, setpoint, mode, manual_output, self.scan_period, bad=bad
        )


class Constant:
    def __init__(self, output):
        self.output = output

    def scan(self, process_variable, setpoint, mode, manual_output, bad):
        if isinstance(self.output, Exception):
            raise self.output
        return self.output


def orders(engine):
    engine.set_setpoint("LIC-2", engine.measured("LT-2") + 0.05)
    engine.set_mode("LIC-2", AUTOMATIC)


@pytest.mark.parametrize(("delay", "phase"), [(0, 0), (1, 0), (2, 1)])
def test_a_mirror_of_the_block_gives_the_trace_of_the_block(two_tanks, delay, phase):
    rig = two_tanks()
    loop = dataclasses.replace(rig.loops[0], output_delay=delay, scan_phase=phase)
    rig = two_tanks(loops=(loop,))
    built_in = Engine(rig)
    built_in.set_settings("LIC-2", SETTINGS)
    driven = Engine(rig)
    drive = Drive(driven, "LIC-2", Mirror(rig))
    for engine in (built_in, driven):
        orders(engine)
    expected, got = built_in.record(400), drive.record(400)
    assert np.array_equal(expected, got)
    assert np.ptp(expected[:, driven_column(driven, "FV-1.command")]) > 0.01


def driven_column(engine, name):
    return [column.name for column in engine.columns].index(name)


def test_mode_and_bad_quality_reach_the_controller(two_tanks):
    seen = []

    class Witness:
        def scan(self, process_variable, setpoint, mode, manual_output, bad):
            seen.append((mode, manual_output, bad))
            return manual_output

    engine = Engine(two_tanks())
    drive = Drive(engine, "LIC-2", Witness())
    engine.set_manual_output("LIC-2", 0.25)
    drive.advance(2)
    engine.force_current("LT-2", 21.0)
    engine.set_mode("LIC-2", AUTOMATIC)
    drive.advance(3)
    assert seen[0] == (MANUAL, 0.25, False)
    assert seen[-1] == (AUTOMATIC, 0.25, True)
    assert engine.output("FV-1") == 0.25


def test_outputs_are_held_within_the_limits_of_the_loop(two_tanks):
    engine = Engine(two_tanks())
    Drive(engine, "LIC-2", Constant(7.0)).advance(3)
    assert engine.output("FV-1") == 1.0


def test_what_the_controller_raises_comes_out_and_the_rig_stops_there(two_tanks):
    engine = Engine(two_tanks())
    drive = Drive(engine, "LIC-2", Constant(ZeroDivisionError("in the controller")))
    with pytest.raises(ZeroDivisionError, match="in the controller"):
        drive.advance(10)
    assert engine.tick == 0


def test_an_output_that_is_no_number_is_refused_by_name(two_tanks):
    engine = Engine(two_tanks())
    with pytest.raises(ModelError, match=r"LIC-2.*no number.*tick 0"):
        Drive(engine, "LIC-2", Constant(math.nan)).advance(10)
