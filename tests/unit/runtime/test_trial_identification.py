"""What a trial makes of its steps in manual: models, settings, and words about both."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from harness.config.load import load_rig, load_trial
from harness.domain.models import ControllerSettings
from harness.domain.run import EventKind
from harness.domain.trial import SettingsSource
from harness.engine.engine import Engine
from harness.errors import InvalidRunError
from harness.runtime.session import Session
from harness.runtime.trial_script import trial_script

CONFIGS = Path(__file__).parents[3] / "configs"


class Recorder:
    """Keeps what it is given."""

    def __init__(self):
        self.blocks, self.events = [], []

    def rows(self, segment, first_tick, block, lateness):
        self.blocks.append(block)

    def event(self, event):
        self.events.append(event)

    def exchanges(self, exchanges):
        raise AssertionError("nobody writes in virtual time")

    def of(self, kind):
        return [event for event in self.events if event.kind is kind]


@pytest.fixture(scope="module")
def rig():
    """Return the demo rig."""
    return load_rig(CONFIGS / "rigs" / "make_up_skid.toml")[0]


@pytest.fixture(scope="module")
def trial(rig):
    """Return the demo trial."""
    return load_trial(CONFIGS / "trials" / "acceptance_pi.toml", rig)[0]


def carried_out(rig, trial, *names, **changes):
    """Run phases of a trial in a given order; return what was recorded."""
    by_name = {phase.name: phase for phase in trial.phases}
    phases = tuple(by_name[name] for name in names)
    recorder = Recorder()
    session = Session(Engine(rig), recorder, None)
    session.run(trial_script(session, dataclasses.replace(trial, phases=phases, **changes)))
    return recorder


def models_of(recorder):
    (event,) = recorder.of(EventKind.MODELS)
    return event


def close(model, linearised, share):
    assert model["gain"] == pytest.approx(linearised["gain"], rel=share)
    assert model["total_lag"] == pytest.approx(linearised["total_lag"], rel=share)


def test_identified_models_are_near_the_linearised_ones(rig, trial):
    """Steps of 4 and 6 % through the working point: gain and total lag within 5 %."""
    names = [phase.name for phase in trial.phases if phase.mode.value == "manual"]
    told = models_of(carried_out(rig, trial, *names))
    for path in ("output", "load"):
        assert told.data[path]["source"] == "identified"
        close(told.data[path], told.data[path]["linearised"], 0.05)


def test_steps_of_the_two_paths_may_alternate(rig, trial):
    """Each path's record goes on where it stopped, whatever the other has moved meanwhile."""
    told = models_of(
        carried_out(
            rig,
            trial,
            *("settle", "output up", "load up, manual", "output down", "load down, manual"),
            "output back",
        )
    )
    for path in ("output", "load"):
        assert told.data[path]["source"] == "identified"
        # 10 %: the steps are no longer all about one working point.
        close(told.data[path], told.data[path]["linearised"], 0.10)


def test_a_trial_may_begin_with_a_step(rig, trial):
    """A moment before it is recorded, so that the fit sees where it starts from."""
    recorder = carried_out(rig, trial, "output up", "load up, manual")
    assert recorder.of(EventKind.PHASE_STARTED)[0].tick == 30
    told = models_of(recorder)
    for path in ("output", "load"):
        assert told.data[path]["source"] == "identified"
        close(told.data[path], told.data[path]["linearised"], 0.20)  # one step, one way


def test_without_manual_steps_the_models_are_called_linearised(rig, trial):
    told = models_of(carried_out(rig, trial, "settle", "setpoint up"))
    assert told.data["source"] == "linearised"
    assert told.text.startswith("linearised")
    for path in ("output", "load"):
        assert told.data[path]["source"] == "linearised"
        assert told.data[path]["total_lag"] == told.data[path]["linearised"]["total_lag"]


def test_with_steps_of_one_path_the_other_is_called_linearised(rig, trial):
    told = models_of(carried_out(rig, trial, "settle", "output up", "setpoint up"))
    assert told.data["output"]["source"] == "identified"
    assert told.data["load"]["source"] == "linearised"
    assert told.text.startswith("identified in part")


def test_settings_follow_from_the_reduced_model(rig, trial):
    """Direct synthesis: Kc = tau / (K (tau_c + theta)), Ti = tau of the half-rule model."""
    recorder = carried_out(rig, trial, "settle", "output up", "setpoint up")
    (event,) = recorder.of(EventKind.SETTINGS)
    reduced = event.data["reduced"]
    (tau,) = reduced["time_constants"]
    wanted = tau / (reduced["gain"] * (trial.closed_loop_time + reduced["dead_time"]))
    assert event.data["gain"] == pytest.approx(wanted, rel=1e-12)
    assert event.data["integral_time"] == pytest.approx(tau, rel=1e-12)


def test_settings_as_found_are_ordered_as_they_are(rig, trial):
    found = ControllerSettings(gain=0.7, integral_time=150.0, action=rig.loops[0].action)
    recorder = carried_out(
        rig, trial, "setpoint up", settings=SettingsSource.AS_FOUND, as_found=found
    )
    (event,) = recorder.of(EventKind.SETTINGS)
    assert (event.data["gain"], event.data["integral_time"]) == (0.7, 150.0)
    assert event.data["rule"] == "as found"


def test_the_transfer_to_automatic_is_bumpless(rig, trial):
    recorder = carried_out(rig, trial, "settle", "setpoint up")
    (settings,) = recorder.of(EventKind.SETTINGS)
    names = [column.name for column in Engine(rig).columns]
    rows = np.concatenate(recorder.blocks)
    output = rows[:, names.index("FV-101.command")]
    # What remains is the answer to the transmitter's noise: 0.05 % of span, three sigma, two draws.
    moved = np.abs(output[settings.tick : settings.tick + 10] - output[settings.tick - 1])
    assert np.max(moved) < 6.0 * 0.0005 * settings.data["gain"]


def test_a_phase_that_never_becomes_steady_ends_the_run_as_invalid(rig, trial):
    short = dataclasses.replace(
        trial,
        phases=tuple(dataclasses.replace(phase, time_limit=100.0) for phase in trial.phases),
    )
    with pytest.raises(InvalidRunError, match=r"'settle': not steady within .* 100 s"):
        carried_out(rig, short, "settle")
