"""Whole runs in virtual time, kept in memory: under the built-in block, or stepped by hand."""

from __future__ import annotations

import dataclasses
import functools
from pathlib import Path

import numpy as np
import pytest

from harness.analysis.run_data import RunData
from harness.config.load import load_rig, load_trial
from harness.controllers.block import AUTOMATIC, MANUAL, block_scan
from harness.domain.rig import Action
from harness.domain.run import Closing, RunEnd, RunHeader
from harness.domain.signals import Exchange
from harness.engine import places as place
from harness.engine.engine import Engine
from harness.errors import DryrigError
from harness.runtime.session import Session
from harness.runtime.trial_script import trial_script

CONFIGS = Path(__file__).parents[3] / "configs"


@functools.cache
def rig_of(name="make_up_skid"):
    return load_rig(CONFIGS / "rigs" / f"{name}.toml")[0]


@functools.cache
def trial_of(name="acceptance_pi", rig="make_up_skid"):
    return load_trial(CONFIGS / "trials" / f"{name}.toml", rig_of(rig))[0]


def only(trial, *names, **changes):
    """Return a trial with some of its phases, and other fields changed."""
    kept = tuple(phase for phase in trial.phases if not names or phase.name in names)
    return dataclasses.replace(trial, phases=kept, **changes)


class MemoryRecorder:
    """A RecordWriter that keeps what it is given."""

    def __init__(self):
        self.blocks, self.lateness, self.events, self.written = [], [], [], []

    def rows(self, segment, first_tick, block, lateness):
        assert segment == 0
        assert first_tick == sum(len(b) for b in self.blocks)
        self.blocks.append(np.array(block))
        self.lateness.append(np.full(len(block), np.nan) if lateness is None else lateness)

    def event(self, event):
        self.events.append(event)

    def exchanges(self, exchanges):
        self.written.extend(exchanges)

    def flush(self):
        pass

    def close(self, closing):
        pass

    def abandon(self):
        pass


@dataclasses.dataclass
class Seen:
    """What a controller reads in a scan; process variable and setpoint as fractions of span."""

    tick: int
    process_variable: float
    setpoint: float
    mode: int
    manual_output: float
    gain: float
    integral_time: float


class RightController:
    """A controller outside that does what it is told; mistakes are made by overriding."""

    period = 2  # ticks
    delay = 1  # ticks
    phase = 0

    def __init__(self, rig):
        self.loop = rig.loops[0]
        self.seconds = self.period * rig.tick  # what it reckons a scan to last
        self.sign = 1.0 if self.loop.action is Action.REVERSE else -1.0
        self.limits = (self.loop.output_low, self.loop.output_high)
        self.output = rig.valve(self.loop.output).initial_output
        self.integral = self.output
        self.held = 1

    def is_due(self, tick):
        return (tick - self.phase) % self.period == 0

    def gain(self, seen):
        return seen.gain

    def integral_time(self, seen):
        return seen.integral_time

    def process_variable(self, seen):
        return seen.process_variable

    def answer(self, output, seen):
        return output

    def scan(self, seen):
        self.output, self.integral, self.held = block_scan(
            self.process_variable(seen),
            seen.setpoint,
            False,
            seen.mode,
            seen.manual_output,
            self.gain(seen),
            self.integral_time(seen),
            self.sign,
            *self.limits,
            self.seconds,
            self.integral,
            self.output,
            self.held,
        )
        return self.answer(self.output, seen)


class SteppedSession(Session):
    """A session in which a controller outside is stepped by hand, tick by tick."""

    def __init__(self, engine, recorder, controller):
        super().__init__(engine, recorder, None, external=True)
        self.controller = controller
        self.due = {}

    @property
    def pace(self):
        return 1.0

    def advance(self, ticks):
        rows = np.empty((ticks, len(self.engine.columns)))
        for i in range(ticks):
            self._step()
            rows[i] = self.engine.record(1)[0]
        self._recorder.rows(0, self.tick - ticks, rows, None)
        self.rows_taken += ticks
        return rows

    def _step(self):
        tick = self.tick
        if self.controller.is_due(tick):
            output = self.controller.scan(self._seen(tick))
            if output is not None:
                self.due.setdefault(tick + self.controller.delay, []).append((tick, output))
        for read, output in self.due.pop(tick, []):
            exchange = Exchange(
                link="test",
                arrival_ns=0,
                peer="stepped",
                connection=1,
                function="FC16",
                address="40",
                point=self.controller.loop.output,
                value=100.0 * output,
                raw="",
                image_tick=read,
            )
            self._recorder.exchanges([(tick, exchange)])
            self._latch(exchange)

    def _seen(self, tick):
        loop, engine = self.controller.loop, self.engine
        at = engine.place_of_loop(loop.tag)
        orders = engine.state[at : at + place.INTEGRAL].tolist()
        return Seen(
            tick=tick,
            process_variable=engine.transmitted(loop.process_variable)[0],
            setpoint=orders[place.SETPOINT],
            mode=AUTOMATIC if orders[place.MODE] > 0 else MANUAL,
            manual_output=orders[place.MANUAL_OUTPUT],
            gain=orders[place.GAIN],
            integral_time=orders[place.INTEGRAL_TIME],
        )


def run(rig, trial, controller=None, engine=None, after=None):
    """Run a trial to its end and return its data.

    ``controller`` makes a controller outside from the rig; without one the block of the engine
    closes the loop. ``after`` is called with the session once the script has ended.
    """
    external = controller is not None
    engine = engine or Engine(rig, built_in=not external)
    recorder = MemoryRecorder()
    session = (
        SteppedSession(engine, recorder, controller(rig))
        if external
        else Session(engine, recorder, None)
    )
    end, reason = RunEnd.COMPLETE, ""
    try:
        session.run(trial_script(session, trial))
    except DryrigError as error:
        end, reason = RunEnd.INVALID, str(error)
    if after is not None:
        after(session)
    header = RunHeader(
        run="test",
        started_utc="2030-01-01T00:00:00Z",
        rig_name=rig.name,
        trial_name=trial.name,
        rig_text="",
        trial_text="",
        versions={},
        seed=rig.seed,
        tick=rig.tick,
        clock="paced" if external else "virtual",
        pace=1.0 if external else 0.0,
        controller="external over test" if external else "builtin",
        columns=engine.columns,
    )
    rows = np.concatenate(recorder.blocks)
    trace = {column.name: rows[:, i].copy() for i, column in enumerate(engine.columns)}
    trace["tick"] = np.arange(len(rows), dtype=np.float64)
    trace["lateness"] = np.concatenate(recorder.lateness)
    return RunData(
        rig=rig,
        trial=trial,
        header=header,
        trace=trace,
        events=tuple(recorder.events),
        exchanges=tuple(recorder.written),
        closing=Closing(end=end, reason=reason, last_tick=len(rows) - 1, rows=len(rows)),
    )


class Runs:
    """What tests need of this file, as a fixture can give it."""

    Recorder = MemoryRecorder
    Right = RightController
    Stepped = SteppedSession
    configs = CONFIGS
    rig = staticmethod(rig_of)
    trial = staticmethod(trial_of)
    only = staticmethod(only)
    run = staticmethod(run)

    @staticmethod
    @functools.cache
    def builtin(trial="acceptance_pi", rig="make_up_skid"):
        """Return the run of a trial file under the built-in block, made once."""
        return run(rig_of(rig), trial_of(trial, rig))

    @staticmethod
    @functools.cache
    def external(trial="short", rig="make_up_skid"):
        """Return the run of a trial file under a right controller outside, made once."""
        return run(rig_of(rig), trial_of(trial, rig), RightController)


@pytest.fixture(scope="session")
def runs():
    """Return the maker of runs."""
    return Runs
