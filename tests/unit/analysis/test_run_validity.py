"""What makes a run invalid rather than passed or failed, and that it says so."""

from __future__ import annotations

import dataclasses
import re

import numpy as np
import pytest

from harness.analysis.run_data import phases_of
from harness.analysis.score import score_run
from harness.domain.run import EventKind, RunEnd
from harness.domain.verdict import Outcome
from harness.errors import RecordError


def scored(data):
    return score_run(data).document


def cut(data, rows):
    """Return a run whose record ends after some rows."""
    return dataclasses.replace(
        data,
        trace={name: column[:rows] for name, column in data.trace.items()},
        events=tuple(event for event in data.events if event.tick < rows),
        exchanges=tuple(each for each in data.exchanges if each[0] < rows),
        closing=None,
    )


def verdicts(document):
    return {phase["name"]: phase["verdict"] for phase in document["phases"]}


@pytest.mark.parametrize("made", ["builtin", "external"])
@pytest.mark.parametrize("rows", [3, 500, 1300, 1400, 2500, 3800])
def test_a_run_that_was_cut_off_is_invalid_wherever_it_was(runs, made, rows):
    data = cut(getattr(runs, made)("short"), rows)
    document = scored(data)
    assert document["verdict"] == "invalid"
    assert "no closing document" in document["reasons"][0]
    assert document["conditions"]["end"] == "cut off"
    started = [phase for phase in document["phases"] if phase["start"] < rows * 0.5]
    assert len(started) == sum(rows > tick for tick in (106, 1276, 2655))
    assert [phase["verdict"] for phase in started[-1:]] in ([], ["invalid"])
    finished = [phase for phase in document["phases"] if phase["end"] < rows * 0.5]
    assert all(phase["verdict"] in {"pass", "shown"} for phase in finished)


def test_what_was_not_run_is_named(runs):
    document = scored(cut(runs.builtin("short"), 1300))
    assert "not run: load up" in document["reasons"][-1]


@pytest.mark.parametrize("end", [RunEnd.INTERRUPTED, RunEnd.INVALID])
def test_a_run_that_was_ended_otherwise_gives_its_reason(runs, end):
    data = runs.builtin("short")
    closing = dataclasses.replace(
        data.closing, end=end, reason="somebody tripped over the cable"
    )
    document = scored(dataclasses.replace(data, closing=closing))
    assert document["verdict"] == "invalid"
    assert document["reasons"] == ["somebody tripped over the cable"]
    assert document["conditions"]["end"] == end.value


@pytest.mark.parametrize(("share", "outcome"), [(0.004, "pass"), (0.006, "invalid")])
def test_more_than_half_a_percent_of_late_ticks_is_invalid(runs, share, outcome):
    """Late is later than half a scan: 1 s at a pace of 10 allows 50 ms."""
    data = runs.builtin("short")
    lateness = np.full(data.rows, 0.049)
    lateness[: round(share * data.rows)] = 0.051
    header = dataclasses.replace(data.header, clock="paced", pace=10.0)
    data = dataclasses.replace(data, header=header, trace=data.trace | {"lateness": lateness})
    document = scored(data)
    assert document["verdict"] == outcome
    assert document["lateness"]["allowed"] == pytest.approx(0.05)
    assert document["lateness"]["late_fraction"] == pytest.approx(share, abs=1e-3)
    if outcome == "invalid":
        assert re.search(r"0\.60 % of the ticks .*\(50 ms\)", document["reasons"][0])


def test_lateness_of_virtual_time_is_none(runs):
    assert scored(runs.builtin("short"))["lateness"] is None


def test_a_phase_that_never_became_steady_is_invalid_and_so_is_the_run(runs):
    trial = runs.trial("short")
    impatient = tuple(
        dataclasses.replace(phase, time_limit=300.0 if phase.name == "load up" else 1500.0)
        for phase in trial.phases
    )
    data = runs.run(runs.rig(), dataclasses.replace(trial, phases=impatient))
    document = scored(data)
    assert document["verdict"] == "invalid"
    assert verdicts(document) == {
        "settle": "shown",
        "setpoint up": "pass",
        "load up": "invalid",
    }
    assert "time limit of 300 s" in document["reasons"][0]
    assert "did not end steady" in document["phases"][-1]["findings"][0]
    assert document["phases"][-1]["metrics"]["iae"]["measured"] > 0.0  # shown as far as it went


def test_a_run_in_manual_alone_is_judged_by_nobody(runs):
    data = runs.run(runs.rig(), runs.only(runs.trial(), "settle", "output up"))
    found = score_run(data)
    assert found.outcome is Outcome.SHOWN
    assert found.document["reasons"] == []
    assert found.curves == ()
    assert found.document["loops"]["LIC-102"]["tuning"] is None


def test_linearised_models_in_place_of_identified_ones_are_found(runs):
    data = runs.run(runs.rig(), runs.only(runs.trial(), "setpoint up", "load up"))
    document = scored(data)
    notes = [
        finding
        for phase in document["phases"]
        for finding in phase["findings"]
        if "not identified" in finding
    ]
    assert len(notes) == 1
    assert "output and the load path" in notes[0]
    assert document["loops"]["LIC-102"]["models"]["output"]["source"] == "linearised"
    assert document["verdict"] == "pass"


def test_a_record_of_another_trial_is_refused(runs):
    data = runs.builtin("short")
    other = dataclasses.replace(data, trial=runs.only(runs.trial("short"), "settle"))
    with pytest.raises(RecordError, match="'setpoint up' that its trial does not have"):
        phases_of(other)


def test_a_record_without_settings_is_refused(runs):
    data = runs.builtin("short")
    bare = tuple(event for event in data.events if event.kind is not EventKind.SETTINGS)
    with pytest.raises(RecordError, match="no settings of LIC-102"):
        score_run(dataclasses.replace(data, events=bare))


def test_a_load_that_is_too_much_for_a_p_block_is_scored_at_its_limit(runs):
    """The balance lies beyond the output's limit: predicted and measured rest there alike."""
    trial = runs.only(runs.trial("acceptance_p"), "load up", "load down")
    rig = runs.rig()
    loop = dataclasses.replace(rig.loops[0], output_low=0.57, output_high=0.59)
    big = tuple(dataclasses.replace(phase, change=4.0 * phase.change) for phase in trial.phases)
    data = runs.run(
        dataclasses.replace(rig, loops=(loop,)),
        dataclasses.replace(trial, phases=big),
        runs.Right,
    )
    document = scored(data)
    assert document["verdict"] == "pass"
    offset = document["phases"][0]["metrics"]["offset"]
    assert offset["predicted_nonlinear"] > 0.1
    assert offset["measured"] == pytest.approx(offset["predicted_nonlinear"], abs=2e-3)


def test_a_large_setpoint_step_that_saturates_the_output_is_no_fault(runs):
    trial = runs.only(runs.trial("short"), "settle", "setpoint up")
    big = tuple(dataclasses.replace(phase, change=8.0 * phase.change) for phase in trial.phases)
    data = runs.run(runs.rig(), dataclasses.replace(trial, phases=big), runs.Right)
    assert np.max(data.trace["FV-101.command"]) == 1.0
    document = scored(data)
    assert document["verdict"] == "pass"
    assert [f for f in document["phases"][-1]["findings"] if "decided" not in f] == []


def test_a_wrong_gain_is_read_from_what_is_left_of_a_saturated_step(runs):
    trial = runs.only(runs.trial("short"), "settle", "setpoint up")
    big = tuple(dataclasses.replace(phase, change=8.0 * phase.change) for phase in trial.phases)

    class Wrong(runs.Right):
        def gain(self, seen):
            return 1.5 * seen.gain

    document = scored(runs.run(runs.rig(), dataclasses.replace(trial, phases=big), Wrong))
    assert document["verdict"] == "fail"
    assert any("1.50 times" in f for f in document["phases"][-1]["findings"])


def test_a_step_lost_in_noise_is_called_that(runs):
    """0.1 % of span with noise of 0.05 %: the gap of the predictions is not the step's size."""
    trial = runs.only(runs.trial("acceptance_p"), "setpoint up", "load up")
    tiny = tuple(
        dataclasses.replace(phase, change=0.02 * phase.change) for phase in trial.phases
    )
    data = runs.run(runs.rig(), dataclasses.replace(trial, phases=tiny), runs.Right)
    document = scored(data)
    assert document["verdict"] == "pass"
    findings = " ".join(f for phase in document["phases"] for f in phase["findings"])
    assert "small beside the transmitter's noise" in findings
    assert "step is large" not in findings


def test_a_big_step_is_called_big(runs):
    trial = runs.only(runs.trial("short"), "settle", "setpoint up")
    big = tuple(
        dataclasses.replace(phase, change=-8.0 * phase.change) for phase in trial.phases
    )
    document = scored(runs.run(runs.rig(), dataclasses.replace(trial, phases=big), runs.Right))
    assert document["verdict"] == "pass"
    assert "the step is large for this plant" in " ".join(document["phases"][-1]["findings"])
