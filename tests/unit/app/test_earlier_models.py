"""Models taken from an earlier run: the trial goes by them, and says whose they are."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from harness.app.check import check
from harness.cli import main

CONFIGS = Path(__file__).parents[3] / "configs"
RIG, TRIAL = CONFIGS / "rigs" / "bench_skid.toml", CONFIGS / "trials" / "bench.toml"
IDENTIFICATION = """
format = 1
[trial]
name = "identification"
law = "PI"
closed_loop_time = "6 s"
models = "identified"
settings = "computed"
"""
for _name, _kind in (("output up", "output_step"), ("load up", "load_step")):
    IDENTIFICATION += f"""
[[phase]]
name = "{_name}"
loop = "LIC-102"
kind = "{_kind}"
mode = "manual"
change = "5 %"
time_limit = "180 s"
"""


def run(capfdbinary, *arguments):
    """Run a trial in virtual time; return exit code and verdict."""
    capfdbinary.readouterr()
    code = main(["trial", *map(str, arguments), "--json"])
    out = capfdbinary.readouterr().out
    return code, json.loads(out) if out else None


def folder_of(out):
    (folder,) = out.iterdir()
    return folder


@pytest.fixture
def identified(tmp_path, capfdbinary):
    """Identify alone, which judges nothing and passes; return folder and verdict."""
    trial = tmp_path / "identification.toml"
    trial.write_text(IDENTIFICATION, encoding="utf-8")
    code, verdict = run(capfdbinary, RIG, trial, "--out", tmp_path / "first")
    assert code == 0
    assert verdict["verdict"] == "shown"
    assert verdict["loops"]["LIC-102"]["models"]["output"]["source"] == "identified"
    return folder_of(tmp_path / "first"), verdict


def gains(verdict):
    models = verdict["loops"]["LIC-102"]["models"]
    return {path: model["gain"] for path, model in models.items()}


@pytest.mark.timeout(120)
def test_an_acceptance_trial_goes_by_the_models_of_an_identification(
    identified, tmp_path, capfdbinary
):
    folder, first = identified
    # named in the trial file, from there
    trial = tmp_path / "trial.toml"
    text = TRIAL.read_text(encoding="utf-8")
    named = f'{{ run = "first/{folder.name}" }}'
    trial.write_text(
        text.replace('models = "linearised"', f"models = {named}"), encoding="utf-8"
    )
    phases = ("--phases", "settle,setpoint up")
    code, verdict = run(capfdbinary, RIG, trial, "--out", tmp_path / "second", *phases)
    assert code == 0
    assert gains(verdict) == gains(first)
    assert verdict["loops"]["LIC-102"]["models"]["load"]["source"] == "run"
    assert check(RIG, trial, 1.0)["phases"]  # found from the trial's folder as well

    # named on the command line, over what the file says
    code, verdict = run(
        capfdbinary, RIG, TRIAL, "--out", tmp_path / "third", *phases, "--models-from", folder
    )
    assert code == 0
    assert gains(verdict) == gains(first)
    # A stored run is scored without the earlier one.
    for file in folder.iterdir():
        file.unlink()
    assert main(["score", str(folder_of(tmp_path / "third"))]) == 0


def test_models_of_a_loop_with_another_range_do_not_fit(identified, tmp_path, capfdbinary):
    folder, _ = identified
    rig, trials = CONFIGS / "rigs" / "make_up_skid.toml", CONFIGS / "trials"
    capfdbinary.readouterr()
    code = main(
        ["trial", str(rig), str(trials / "short.toml"), "--models-from", str(folder),
         "--out", str(tmp_path / "x")]
    )  # fmt: skip
    assert code == 2
    assert b"LIC-102 had another process variable, range" in capfdbinary.readouterr().err


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (
            ["--resume", "run", "--pace", "2"],
            "--pace with --resume: a run is taken up as it was",
        ),
        (["--resume", "run", "--phases", "settle"], "--phases with --resume"),
        ([], "it wants a rig file and a trial file, or --resume and a run"),
        (["rig.toml", "--resume", "run"], "with a rig or trial file"),
        (["--resume", "no-such-run"], "no-such-run is not a run folder"),
    ],
)
def test_options_that_do_not_go_with_a_run_that_is_taken_up(arguments, said, capsys):
    assert main(["trial", *arguments]) == 2
    assert said in capsys.readouterr().err
