"""The verdict as JSON: its shape, its bytes, and that the run folder alone is enough for it."""

from __future__ import annotations

import itertools
import json
import math
import shutil
from contextlib import redirect_stderr, redirect_stdout
from io import BytesIO, StringIO, TextIOWrapper

import pytest

from harness.analysis.score import score_run
from harness.cli import main

TOP = {
    "schema", "run", "rig", "trial", "verdict", "reasons", "conditions", "loops", "phases",
    "lateness",
}  # fmt: skip
METRIC = {"unit", "measured", "predicted_linear", "predicted_nonlinear", "limit", "verdict"}
OUTCOMES = {"pass", "fail", "invalid", "not decidable", "shown"}


@pytest.fixture(scope="module")
def document(runs):
    return score_run(runs.builtin("acceptance_pi")).document


def numbers_of(value):
    if isinstance(value, dict):
        for each in value.values():
            yield from numbers_of(each)
    elif isinstance(value, list):
        for each in value:
            yield from numbers_of(each)
    elif isinstance(value, float):
        yield value


def test_it_has_the_decided_shape(document):
    assert set(document) >= TOP
    assert document["schema"] == 1
    assert document["verdict"] in OUTCOMES
    for told in document["loops"].values():
        assert set(told["models"]) == {"output", "load"}
        for model in told["models"].values():
            assert {
                "gain",
                "gain_engineering",
                "time_constants",
                "dead_time",
                "total_lag",
            } <= set(model)
            for limit in model["limits"].values():
                assert limit["low"] < limit["high"]
                assert 0.0 < limit["level"] < 1.0
        assert {"law", "gain", "gain_engineering", "integral_time", "margins"} <= set(
            told["tuning"]
        )
    for phase in document["phases"]:
        assert phase["loop"] in document["loops"]
        assert phase["verdict"] in OUTCOMES
        assert phase["scored"] is bool(phase["metrics"])
        for metric in phase["metrics"].values():
            assert set(metric) == METRIC
            assert metric["verdict"] in OUTCOMES
            if metric["limit"] is not None:
                assert set(metric["limit"]) == {"low", "high", "basis"}


def test_it_is_plain_json_without_nan(document):
    text = json.dumps(document, allow_nan=False)
    assert json.loads(text) == document
    assert all(math.isfinite(number) for number in numbers_of(document))


def test_fractions_are_fractions(document):
    """A step of 5 % of span is 0.05, an overshoot of 10 % of it 0.1."""
    phase = next(p for p in document["phases"] if p["name"] == "setpoint up")
    assert phase["change"] == 0.05
    for name in ("overshoot", "offset", "output_travel"):
        metric = phase["metrics"][name]
        assert metric["unit"] == "1"
        assert abs(metric["measured"]) < 1.0
    assert 0.01 < phase["metrics"]["overshoot"]["measured"] < 0.5


def test_gains_agree_in_both_units(document):
    """Level span 1.5 m: one %/% is 0.015 m/% of the process, and 66.7 %/m of the controller."""
    told = document["loops"]["LIC-102"]
    model, tuning = told["models"]["output"], told["tuning"]
    assert model["gain_engineering"] == pytest.approx(0.015 * model["gain"])
    assert model["gain_engineering_unit"] == "m/%"
    assert tuning["gain_engineering"] == pytest.approx(tuning["gain"] / 0.015)
    assert tuning["gain_engineering_unit"] == "%/m"
    assert tuning["proportional_band"] == pytest.approx(1.0 / tuning["gain"])
    assert tuning["repeats_per_minute"] == pytest.approx(60.0 / tuning["integral_time"])


def test_times_of_phases_follow_each_other(document):
    phases = document["phases"]
    assert phases[0]["start"] == 0.0
    for before, after in itertools.pairwise(phases):
        assert before["start"] <= before["zero"] < before["end"] <= after["start"]
    assert phases[-1]["end"] <= document["conditions"]["duration"]


def test_scoring_changes_nothing_that_it_reads(runs):
    data = runs.builtin("acceptance_pi")
    first = json.dumps(score_run(data).document)
    assert json.dumps(score_run(data).document) == first


# On disk.


@pytest.fixture(scope="module")
def run_on_disk(tmp_path_factory, runs):
    """Return what `trial --json` printed, the run folder, and where its rig and trial were."""
    place = tmp_path_factory.mktemp("verdict")
    configs = place / "configs"
    configs.mkdir()
    rig, trial = configs / "rig.toml", configs / "trial.toml"
    shutil.copy(runs.configs / "rigs" / "make_up_skid.toml", rig)
    shutil.copy(runs.configs / "trials" / "short.toml", trial)
    printed, said = TextIOWrapper(BytesIO(), encoding="utf-8"), StringIO()
    with redirect_stdout(printed), redirect_stderr(said):
        code = main(["trial", str(rig), str(trial), "--out", str(place / "runs"), "--json"])
    assert code == 0, said.getvalue()
    (folder,) = (place / "runs").iterdir()
    printed.flush()
    return printed.buffer.getvalue().decode(), folder, configs


def score_json(folder, capsys):
    capsys.readouterr()
    assert main(["score", str(folder), "--json"]) == 0
    return capsys.readouterr().out


def without_folder(text):
    document = json.loads(text)
    del document["folder"]
    return json.dumps(document, ensure_ascii=False)


def test_trial_and_score_print_the_bytes_of_the_verdict_file(run_on_disk, capsys):
    printed, folder, _ = run_on_disk
    assert (folder / "verdict.json").read_text(encoding="utf-8") == printed
    assert score_json(folder, capsys) == printed
    assert (folder / "verdict.json").read_text(encoding="utf-8") == printed


def test_scoring_twice_writes_the_same_bytes(run_on_disk, capsys):
    _, folder, _ = run_on_disk
    names = ("verdict.json", "junit.xml", "report.html", "trace.csv")
    score_json(folder, capsys)
    first = {name: (folder / name).read_bytes() for name in names}
    score_json(folder, capsys)
    assert {name: (folder / name).read_bytes() for name in names} == first


def test_the_run_folder_alone_is_enough(run_on_disk, capsys, tmp_path):
    """Copied elsewhere, with the rig and trial files gone: the same but for ``folder``."""
    printed, folder, configs = run_on_disk
    moved = tmp_path / "archive" / "run 1"
    shutil.copytree(folder, moved)
    hidden = configs.rename(configs.with_name("gone"))
    try:
        for name in ("verdict.json", "junit.xml", "report.html", "trace.csv"):
            (moved / name).unlink()
        again = score_json(moved, capsys)
    finally:
        hidden.rename(configs)
    assert json.loads(again)["folder"] == str(moved)
    assert without_folder(again) == without_folder(printed)
