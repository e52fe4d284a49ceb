"""Ctrl-C and worse: the record says how the run ended, and nothing is left running."""

from __future__ import annotations

import os
import signal
import sys

import pytest

from harness.cli import main
from harness.domain.run import RunEnd
from harness.recording.reader import RunFolder

pytestmark = [
    pytest.mark.wire,
    pytest.mark.slow,
    pytest.mark.timeout(200),
    pytest.mark.skipif(sys.platform == "win32", reason="sends signals"),
]


def test_ctrl_c_closes_the_record_and_leaves_nobody(bench):
    trials = {name: bench.start_paced(name) for name in ("group", "alone", "hung up")}
    folders = {name: bench.wait_for_phase(name) for name in trials}
    os.killpg(trials["group"].process.pid, signal.SIGINT)  # as a terminal does it
    trials["alone"].process.send_signal(signal.SIGINT)
    os.killpg(trials["hung up"].process.pid, signal.SIGHUP)  # as a terminal that closes does it
    for name, trial in trials.items():
        assert trial.ended() == 130
        assert f"interrupted; what was recorded is kept in {folders[name]}" in trial.complained
        assert "Traceback" not in trial.complained + trial.said
        assert "leaked" not in trial.complained
        assert trial.left_nobody()
        run = RunFolder.open(folders[name])
        run.verify()
        assert run.closing.end is RunEnd.INTERRUPTED
        assert run.closing.rows > 20


def test_ctrl_c_while_it_starts_leaves_nobody(bench):
    trial = bench.start_external("early", bench.free_port())
    trial.wait_for("listening on")
    os.killpg(trial.process.pid, signal.SIGINT)
    assert trial.ended() == 130
    assert "Traceback" not in trial.complained + trial.said
    assert trial.left_nobody()


def test_killing_the_trial_costs_the_last_second_and_leaves_nobody(bench, capsys):
    trial = bench.start_paced("killed")
    folder = bench.wait_for_phase("killed")
    trial.kill()
    assert trial.left_nobody()
    assert RunFolder.open(folder).closing is None
    assert main(["score", str(folder)]) == 3
    said = " ".join(capsys.readouterr().out.split())
    assert "INVALID" in said
    assert "no closing document: the run was cut off" in said
