"""Ctrl-C and worse: the record says how the run ended, and nothing is left running."""

from __future__ import annotations

import os
import re
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

RUNNING = "phase setpoint up: running"


def test_ctrl_c_closes_the_record_and_leaves_nobody(bench):
    whole = bench.start_paced("group")  # as a terminal does it
    alone = bench.start_paced("alone")
    ended = bench.start_paced("term")
    for trial in (whole, alone, ended):
        trial.wait_for(RUNNING)
    os.killpg(whole.process.pid, signal.SIGINT)
    alone.process.send_signal(signal.SIGINT)
    ended.process.send_signal(signal.SIGTERM)
    for name, trial in (("group", whole), ("alone", alone), ("term", ended)):
        assert trial.ended() == 130
        folder = bench.run_folder(name)
        assert f"interrupted; what was recorded is kept in {folder}" in trial.complained
        assert "Traceback" not in trial.complained + trial.said
        assert "leaked" not in trial.complained
        assert trial.left_nobody()
        run = RunFolder.open(folder)
        run.verify()
        assert run.closing.end is RunEnd.INTERRUPTED
        assert run.closing.rows > 20


def test_ctrl_c_before_the_first_tick_leaves_no_folder(bench):
    trial = bench.start_external("early", bench.free_port())
    trial.wait_for("listening on")
    os.killpg(trial.process.pid, signal.SIGINT)
    assert trial.ended() == 130
    assert "Traceback" not in trial.complained + trial.said
    assert trial.left_nobody()


def test_killing_the_trial_costs_the_last_second_and_leaves_nobody(bench, capsys):
    trial = bench.start_paced("killed")
    trial.wait_for(RUNNING)
    trial.process.kill()
    trial.process.wait()
    assert trial.left_nobody()
    folder = bench.run_folder("killed")
    assert RunFolder.open(folder).closing is None
    assert main(["score", str(folder)]) == 3
    said = " ".join(capsys.readouterr().out.split())
    assert "INVALID" in said
    assert "no closing document: the run was cut off" in said


def test_a_terminal_is_left_as_it_was(bench):
    pty = pytest.importorskip("pty")
    ours, theirs = pty.openpty()
    serve = bench.start(
        "serve", "serve", bench.rig, "--modbus-port", 0, "--link", "modbus", stdout=theirs
    )
    os.close(theirs)
    shown = b""
    while b"LT-102" not in shown:
        shown += os.read(ours, 65536)
    os.killpg(serve.process.pid, signal.SIGINT)
    try:
        while part := os.read(ours, 65536):
            shown += part
    except OSError:  # Linux tells the end of the other side so
        pass
    os.close(ours)
    assert serve.ended() == 0  # without a set time this is how it ends
    hidden, back = re.escape(b"\x1b[?25l"), b"\x1b[?25h"
    assert back in re.split(hidden, shown)[-1]
    assert serve.left_nobody()
