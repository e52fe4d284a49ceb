"""The main job: a controller in another process closes the loop, and is judged."""

from __future__ import annotations

import json
import sys

import pytest

from harness.cli import main

pytestmark = [pytest.mark.wire, pytest.mark.slow, pytest.mark.timeout(200)]

FILES = {"report.html", "junit.xml", "verdict.json", "trace.csv", "trace.sqlite", "rig.toml"}


def run(bench, cases, *options):
    """Run trials side by side, each with its soft PLC; return their programs by name."""
    trials = {}
    for name, (link, *faults) in cases.items():
        port = bench.free_port()
        bench.start_soft_plc(f"{name}-plc", port, *faults, link=link)
        trials[name] = bench.start_external(name, port, "--json", *options, link=link)
    for trial in trials.values():
        trial.ended()
    return trials


def test_a_good_controller_passes_over_either_link(bench, capfdbinary):
    trials = run(bench, {"modbus": ("modbus",), "opcua": ("opcua",)})
    for name, trial in trials.items():
        assert trial.process.returncode == 0, trial.complained
        folder = bench.run_folder(name)
        assert {file.name for file in folder.iterdir()} >= FILES
        assert trial.out.read_bytes() == (folder / "verdict.json").read_bytes()
        verdict = json.loads(trial.said)
        assert verdict["verdict"] == "pass"
        phase = verdict["phases"][0]
        # its own scans and nobody else's closed the loop
        overshoot = phase["metrics"]["overshoot"]
        assert overshoot["measured"] == pytest.approx(
            overshoot["predicted_nonlinear"], abs=0.02
        )
        assert "Traceback" not in trial.complained
        assert "leaked" not in trial.complained
    for program in bench.programs[::2]:
        code = program.stop()
        if sys.platform != "win32":  # a process cannot be asked to end there
            assert code == 0, program.said
            assert "stopped after" in program.said

    capfdbinary.readouterr()
    assert main(["score", str(bench.run_folder("modbus")), "--json"]) == 0
    assert capfdbinary.readouterr().out == trials["modbus"].out.read_bytes()


def test_a_wrong_controller_fails_and_is_told_what_is_wrong(bench):
    trials = run(
        bench,
        {
            "gain": ("modbus", "--fault-gain", 2),
            "reversed": ("modbus", "--fault-reversed"),
        },
        "--no-preflight",  # which finds a wrong direction before the score can
    )
    findings = {}
    for name, trial in trials.items():
        assert trial.process.returncode == 1, trial.said + trial.complained
        verdict = json.loads(trial.said)
        assert verdict["verdict"] == "fail"
        findings[name] = " ".join(verdict["phases"][0]["findings"])
    assert "gain" in findings["gain"]
    assert "wrong way" in findings["reversed"]
