"""How long a trial will take, and the settings it will come to, before it is run."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import pytest

from harness.app.forecast import forecast
from harness.app.loading import read_rig, read_trial
from harness.domain.models import ControllerSettings
from harness.domain.rig import Action
from harness.domain.trial import Mode, SettingsSource

CONFIGS = Path(__file__).parents[3] / "configs"


@pytest.fixture(scope="module")
def rig():
    return read_rig(CONFIGS / "rigs" / "bench_skid.toml")[0]


@pytest.fixture(scope="module")
def trial(rig):
    return read_trial(CONFIGS / "trials" / "bench.toml", rig)[0]


def test_the_whole_is_the_phases_and_the_transfer(rig, trial):
    expected = forecast(rig, trial)
    assert list(expected.phases) == [phase.name for phase in trial.phases]
    total = sum(plan.duration for plan in expected.phases.values())
    assert expected.duration == pytest.approx(total + trial.closed_loop_time)
    for phase in trial.phases:
        assert 0.0 < expected.phases[phase.name].duration < phase.time_limit


def test_settings_come_from_direct_synthesis_on_the_linearised_rig(rig, trial):
    expected = forecast(rig, trial)
    model = expected.models["LIC-102"].output
    # constants of an upright vessel above an orifice, 2 A h / q, as the rig file says
    assert model.time_constants == pytest.approx((10.8, 6.5), rel=0.02)
    settings = expected.settings["LIC-102"]
    # half rule (Skogestad 2003): tau = tau1 + tau2/2, theta = theta + tau2/2, to which the
    # approximate synthesis Kc = tau / (K (lambda + theta)) holds
    lag = model.time_constants[0] + model.time_constants[1] / 2.0
    delay = model.dead_time + model.time_constants[1] / 2.0
    assert settings.integral_time == pytest.approx(lag)
    assert settings.gain == pytest.approx(lag / (model.gain * (trial.closed_loop_time + delay)))


def test_settings_as_found_are_taken_as_they_are(rig, trial):
    found = ControllerSettings(gain=0.8, integral_time=20.0, action=Action.REVERSE)
    as_found = dataclasses.replace(trial, settings=SettingsSource.AS_FOUND, as_found=found)
    assert forecast(rig, as_found).settings == {"LIC-102": found}


def test_a_trial_in_manual_needs_no_settings_and_no_transfer(rig, trial):
    phases = tuple(
        dataclasses.replace(phase, mode=Mode.MANUAL)
        for phase in trial.phases
        if phase.name in {"settle", "load up"}
    )
    expected = forecast(rig, dataclasses.replace(trial, phases=phases))
    assert (expected.settings, expected.transfer) == ({}, 0.0)
