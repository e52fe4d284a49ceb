"""The command line: what it takes, what it refuses, and what its exit codes stand for."""

from __future__ import annotations

import argparse
import json
import shutil
from pathlib import Path

import pytest

import harness.cli
from harness.cli import build_parser, main
from harness.domain.run import Column, RunHeader
from harness.errors import (
    ConfigurationError,
    InvalidRunError,
    LinkError,
    RecordError,
    UsageError,
)
from harness.recording.writer import Recorder

CONFIGS = Path(__file__).parents[2] / "configs"
RIG = str(CONFIGS / "rigs" / "bench_skid.toml")
TRIAL = str(CONFIGS / "trials" / "bench.toml")


def outcome(arguments):
    """Return the exit code, whether the parser or the command gives it."""
    try:
        return main([str(argument) for argument in arguments])
    except SystemExit as end:
        return end.code


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        ([], "required: COMMAND"),
        (["nonsense"], "invalid choice: 'nonsense'"),
        (["trial", RIG], "it wants a rig file and a trial file"),
        (["control", RIG], "required: --link"),
        (["trial", RIG, TRIAL, "--pace", "0"], '--pace: "0" is not a finite number above 0'),
        (["trial", RIG, TRIAL, "--pace", "inf"], '"inf" is not a finite number'),
        (["trial", RIG, TRIAL, "--pace", "nan"], '"nan" is not a finite number'),
        (["trial", RIG, TRIAL, "--wait", "-1"], '--wait: "-1" is not'),
        (["trial", RIG, TRIAL, "--phases", " , "], "names no phase; leave the option out"),
        (["check", RIG, TRIAL, "--pace", "fast"], '"fast" is not a finite number'),
        (["serve", RIG, "--for", "-3"], '--for: "-3" is not'),
        (["serve", RIG, "--modbus-port", "65536"], '"65536" is not a TCP port'),
        (["serve", RIG, "--opcua-port", "-1"], '"-1" is not a TCP port'),
        (["serve", RIG, "--opcua-port", "http"], '"http" is not a TCP port'),
        (["control", RIG, "--link", "modbus", "--port", "0"], "which nobody can reach"),
        (["control", RIG, "--link", "modbus", "--scan", "0"], '--scan: "0" is not'),
    ],
)
def test_the_parser_refuses_what_cannot_be_meant(arguments, said, capsys):
    assert outcome(arguments) == 2
    printed = capsys.readouterr()
    assert said in printed.err
    assert printed.out == ""


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (
            ["--clock", "virtual", "--controller", "external"],
            "virtual time does not wait for a",
        ),
        (["--clock", "virtual", "--pace", "5"], "leave --pace out, or take --clock paced"),
        (["--controller", "external", "--pace", "10"], "a pace of 10 with a controller whose"),
        (
            ["--controller", "external", "--controller-pace", "10"],
            "a pace of 1 with a controller",
        ),
        (["--controller", "external", "--link", "fieldbus"], 'no link "fieldbus" in this rig'),
        (["--link", "modbus"], "--link modbus with --controller builtin"),
        (["--modbus-port", "0"], "--modbus-port 0 with --controller builtin"),
        (["--wait", "5"], "--wait 5.0 with --controller builtin"),
        (["--phases", "settle,nope"], 'has no phase "nope"; it has "settle"'),
    ],
)
def test_a_trial_refuses_what_does_not_go_together(arguments, said, capsys, tmp_path):
    assert outcome(["trial", RIG, TRIAL, "--out", tmp_path, *arguments]) == 2
    printed = capsys.readouterr()
    assert said in printed.err
    assert printed.out == ""
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (
            ["control", RIG, "--link", "fieldbus"],
            "it has modbus, opcua. Give one of these names",
        ),
        (["control", RIG, "--link", "modbus", "--loop", "LIC-9"], '"LIC-9" is not one of rig'),
        (["serve", RIG, "--link", "fieldbus"], 'no link "fieldbus" in this rig'),
        (["check", "nowhere.toml"], "nowhere.toml: there is no such rig file"),
        (["check", RIG, "nowhere.toml"], "nowhere.toml: there is no such trial file"),
        (["score", "nowhere"], "nowhere is not a run folder: it holds no trace.sqlite"),
        (["check", TRIAL], "rig.name: is missing"),
    ],
)
def test_the_others_say_what_there_is_instead(arguments, said, capsys):
    assert outcome(arguments) == 2
    printed = capsys.readouterr()
    assert said in printed.err
    assert printed.out == ""


def test_every_problem_of_a_rig_comes_at_once_with_its_line(tmp_path, capsys):
    text = Path(RIG).read_text(encoding="utf-8")
    wrong = {
        'tick = "0.05 s"': 'tick = "0.05 m"',
        'output = "FV-101"': 'output = "FV-999"',
        'range = ["0 m3/h", "1.2 m3/h"]': 'range = ["1.2 m3/h", "0 m3/h"]',
    }
    for good, bad in wrong.items():
        assert good in text
        text = text.replace(good, bad, 1)
    path = tmp_path / "rig.toml"
    path.write_text(text, encoding="utf-8")
    assert outcome(["check", path]) == 2
    lines = capsys.readouterr().err.splitlines()
    places = {
        text[: text.index(bad)].count("\n") + 1: bad.partition(" ")[0] for bad in wrong.values()
    }
    told = {int(line.removeprefix(f"{path}:").partition(":")[0]): line for line in lines}
    assert set(places) <= set(told)
    for number, key in places.items():
        assert key in told[number]


def test_an_unwritable_place_for_the_run_is_wrong_use(tmp_path, capsys):
    (tmp_path / "file").write_text("", encoding="utf-8")
    assert outcome(["trial", RIG, TRIAL, "--out", tmp_path / "file"]) == 2
    assert "Choose another place with --out" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("error", "code", "said"),
    [
        (UsageError("wrong use"), 2, "wrong use"),
        (ConfigurationError(("a:1: b", "a:2: c")), 2, "a:1: b\na:2: c"),
        (LinkError("port taken"), 2, "port taken"),
        (InvalidRunError("never steady"), 3, "never steady"),
        (RecordError("disk full"), 3, "disk full"),
        (KeyboardInterrupt(), 130, ""),
        (RuntimeError("cannot cache function 'f': no locator"), 2, "set NUMBA_CACHE_DIR"),
        # not 1: that stands for a controller that failed
        (ZeroDivisionError("division"), 3, "this is a defect of the program"),
        (OSError("no memory"), 3, "this is a defect of the program"),
    ],
)
def test_what_is_raised_becomes_its_exit_code(error, code, said, monkeypatch, capsys):
    def run(_options):
        raise error

    parser = argparse.ArgumentParser()
    parser.set_defaults(run=run)
    monkeypatch.setattr(harness.cli, "build_parser", lambda: parser)
    assert main([]) == code
    assert said in capsys.readouterr().err


def test_a_pace_asks_for_paced_time(monkeypatch):
    taken = []

    class EnoughError(Exception):
        """Ends the command where the trial would begin."""

    def run_trial(options):
        taken.append(options)
        raise EnoughError

    monkeypatch.setattr("harness.app.trial.run_trial", run_trial)
    for arguments in ([], ["--pace", "30"], ["--clock", "paced"], ["--controller", "external"]):
        options = build_parser().parse_args(["trial", RIG, TRIAL, *arguments])
        with pytest.raises(EnoughError):
            options.run(options)
    assert [(options.clock, options.pace) for options in taken] == [
        ("virtual", 1.0),
        ("paced", 30.0),
        ("paced", 1.0),
        ("paced", 1.0),
    ]
    assert {options.wait for options in taken} == {30.0}


def test_a_check_says_how_long_it_will_take(capsys):
    assert outcome(["check", RIG, TRIAL, "--pace", "20", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert [phase["name"] for phase in document["phases"]][:2] == ["settle", "setpoint up"]
    assert document["expected"] >= sum(phase["expected"] for phase in document["phases"])
    assert document["expected_wall"] == pytest.approx(document["expected"] / 20.0)
    assert outcome(["check", RIG, TRIAL, "--pace", "20"]) == 0
    assert "at pace 20" in capsys.readouterr().out


def test_a_model_is_the_same_in_both_forms(capsys):
    assert outcome(["model", RIG, "--json"]) == 0
    loop = json.loads(capsys.readouterr().out)["loops"]["LIC-102"]
    assert outcome(["model", RIG]) == 0
    printed = capsys.readouterr().out
    for path in ("output", "load"):
        assert f"{loop['models'][path]['gain']:.4g}" in printed


@pytest.mark.slow
def test_a_trial_a_score_and_the_file_are_the_same_bytes(tmp_path, capfdbinary):
    out = tmp_path / "runs"
    one = ["--phases", "setpoint up"]
    assert outcome(["trial", RIG, TRIAL, "--out", out, "--json", *one]) == 0
    trial = capfdbinary.readouterr().out
    (folder,) = out.iterdir()
    assert trial == (folder / "verdict.json").read_bytes()
    assert outcome(["score", folder, "--json"]) == 0
    assert capfdbinary.readouterr().out == trial

    moved = tmp_path / "elsewhere"
    shutil.move(folder, moved)
    assert outcome(["score", moved, "--json"]) == 0
    again = json.loads(capfdbinary.readouterr().out)
    first = json.loads(trial)
    assert first.pop("folder") == str(folder)
    assert again.pop("folder") == str(moved)
    assert again == first


def test_a_live_session_has_nothing_to_score(tmp_path, capsys):
    header = RunHeader(
        run="live",
        started_utc="",
        rig_name="skid",
        trial_name="",
        rig_text="",
        trial_text="",
        versions={},
        seed=1,
        tick=0.1,
        clock="paced",
        pace=1.0,
        controller="builtin",
        columns=(Column(name="LT-102.true", unit="m"),),
    )
    Recorder.create(tmp_path, header, lambda: 0).abandon()
    assert outcome(["score", tmp_path]) == 2
    assert "a live session of `dryrig serve`" in capsys.readouterr().err
