"""What a view gathers of a trial: times, progress, events and a trend, from a run in virtual time."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from harness.app.forecast import forecast
from harness.app.loading import read_rig, read_trial
from harness.app.trial_view import TrialView
from harness.engine.engine import Engine
from harness.reporting.view_state import PhaseState
from harness.runtime.session import Session
from harness.runtime.trial_script import trial_script

CONFIGS = Path(__file__).parents[3] / "configs"


class Shown:
    """A port that keeps what it is shown."""

    def __init__(self):
        self.states = []

    def show(self, state):
        self.states.append(state)


@pytest.fixture(scope="module")
def states():
    rig, _ = read_rig(CONFIGS / "rigs" / "make_up_skid.toml")
    trial, _ = read_trial(CONFIGS / "trials" / "short.toml", rig, ("settle", "setpoint up"))
    port = Shown()
    view = TrialView(port, rig.name, trial, forecast(rig, trial))
    session = Session(Engine(rig), None, None, on_event=view.take_event, on_look=view.look)
    session.run(trial_script(session, trial))
    view.look(session)
    return port.states


def test_what_is_expected_ends_at_what_it_took(states):
    first, last = states[0], states[-1]
    assert first.elapsed < first.expected
    assert last.expected == last.elapsed
    assert all(state.expected >= state.elapsed for state in states)
    # a forecast that misses by a third would be none
    assert first.expected == pytest.approx(last.elapsed, rel=0.33)


def test_the_phases_follow_one_another_and_their_times_add_up(states):
    assert [phase.state for phase in states[-1].phases] == [PhaseState.DONE] * 2
    for state in states:
        running = [phase for phase in state.phases if phase.state is PhaseState.RUNNING]
        assert len(running) <= 1
    settle, step = states[-1].phases
    started = [
        event for event in states[-1].events if event.text.startswith("setpoint up: setp")
    ]
    assert started[0].of_phase
    assert started[0].time + step.elapsed == pytest.approx(states[-1].elapsed)
    assert settle.elapsed < started[0].time


def test_each_event_is_told_once_and_orders_not_at_all(states):
    texts = [event.text for event in states[-1].events]
    assert len(texts) == len(set(texts))
    assert [event.of_phase for event in states[-1].events] == [False] * 2 + [True] * 4
    assert texts[0].startswith("LIC-102, models: linearised: gain")
    assert not any("order" in text for text in texts)


def test_the_trend_keeps_its_scale_of_time_from_the_first_frame_on(states):
    first, last = states[0].loops[0], states[-1].loops[0]
    assert len(first.recent_setpoint) == len(last.recent_setpoint) == 240
    assert first.recent_span == last.recent_span > 0.0
    assert math.isnan(first.recent_process_variable[0])
    assert last.recent_process_variable[-1] == last.process_variable
    # the step of 5 % of 1.5 m stands as long as its phase lasted
    spacing = last.recent_span / 240
    high = sum(1 for value in last.recent_setpoint if value == last.setpoint)
    assert high * spacing == pytest.approx(states[-1].phases[1].elapsed, abs=2.5 * spacing)
