"""A controller that is not there, or goes in the middle of a phase: invalid, and all is kept."""

from __future__ import annotations

import json

import numpy as np
import pytest

from harness.domain.run import EventKind, RunEnd
from harness.recording.reader import RunFolder

pytestmark = [pytest.mark.wire, pytest.mark.slow, pytest.mark.timeout(200)]


def test_one_that_is_never_there_is_waited_for_and_told(bench):
    port = bench.free_port()
    trial = bench.start_external("never", port, "--wait", "0.5")
    assert trial.ended() == 3
    assert "waiting up to 0.5 s for a controller to write FV-101" in trial.said
    reason = RunFolder.open(bench.run_folder("never")).closing.reason
    assert reason.startswith(
        "loop LIC-102: no controller wrote FV-101 over modbus within 0.5 s"
    )
    assert "nobody is connected" in reason
    assert "--wait" in reason
    assert "Traceback" not in trial.complained
    assert trial.left_nobody()


def test_one_that_goes_in_a_phase_leaves_the_valve_where_the_rig_says(bench):
    """One is killed and closes its connection so; the other keeps it open and is mute."""
    trials, controllers = {}, {}
    for name, fault in (("gone", ()), ("mute", ("--fault-silent-after", 30))):
        port = bench.free_port()
        controllers[name] = bench.start_soft_plc(f"{name}-plc", port, *fault)
        trials[name] = bench.start_external(name, port)
    bench.wait_for_phase("gone")
    controllers["gone"].kill()
    for name, trial in trials.items():
        assert trial.ended() == 3, trial.said + trial.complained
        assert "Traceback" not in trial.complained
        assert trial.left_nobody()
        run = RunFolder.open(bench.run_folder(name))
        check_record(run)
        verdict = json.loads((bench.run_folder(name) / "verdict.json").read_text("utf-8"))
        assert verdict["verdict"] == "invalid"
        went = [event.kind is EventKind.PEER_GONE for event in run.events()]
        assert any(went) == (name == "gone")


def check_record(run):
    run.verify()
    assert run.closing.end is RunEnd.INVALID
    assert "the watchdog of LIC-102 allows 20 s; FV-101 goes to 0 %" in run.closing.reason
    events = {event.kind: event for event in run.events()}
    silent = events[EventKind.CONTROLLER_SILENT]
    assert silent.subject == "LIC-102"
    trace = run.trace()
    command = trace["FV-101.command"]
    before = int(np.searchsorted(trace["tick"], silent.tick)) - 1
    assert command[before] > 0.1
    assert np.all(command[before + 1 :] == 0.0)
    assert len(command) > before + 1
