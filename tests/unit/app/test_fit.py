"""Fits from files: figures that come back, what the document says, what is refused."""

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from harness.app.fit import FitOptions, fit
from harness.cli import main
from harness.errors import DataError, ExitCode
from harness.tuning.trace import Kind, trace_of, unit_gain_response

ROOT = Path(__file__).resolve().parents[3]
TIME = np.arange(0.0, 1800.0, 3.0)
INPUT = np.where(TIME < 120.0, 40.0, np.where(TIME < 999.0, 50.0, 45.0))


def outputs(kind=Kind.SECOND_ORDER, shape=(100.0, 60.0, 9.0), gain=0.012, noise=0.001):
    clean = unit_gain_response(kind, shape, trace_of(TIME, INPUT, TIME))
    return 0.6 + gain * clean + noise * np.random.default_rng(11).normal(size=TIME.size)


def write(path, output, time=TIME, inputs=INPUT, head="time [s],FV-101 [%],LT-102 [m]"):
    rows = "".join(
        f"{t:g},{u:.10g},{y:.6g}\n" for t, u, y in zip(time, inputs, output, strict=True)
    )
    path.write_text(head + "\n" + rows, encoding="utf-8")
    return path


def asked(path, **options):
    return FitOptions(path=path, time="time", input="FV-101", output="LT-102", **options)


def test_the_document_says_what_was_found(tmp_path):
    path = write(tmp_path / "step.csv", outputs())
    document = fit(asked(path, input_range=(0.0, 100.0), output_range=(0.0, 1.5))).document
    best = document["models"][0]
    assert best["kind"] == "second_order"
    assert best["gain"] == pytest.approx(0.012 * 100.0 / 1.5, rel=0.02)
    assert best["gain_engineering"] == pytest.approx(0.012, rel=0.02)
    assert sum(best["time_constants"]) + best["dead_time"] == pytest.approx(169.0, rel=0.03)
    for name, value in {"gain": best["gain"], "dead_time": best["dead_time"]}.items():
        limit = best["limits"][name]
        assert limit["low"] <= value <= limit["high"]
        assert limit["level"] == 0.95
    assert best["residual"]["rms_engineering"] == pytest.approx(0.001, rel=0.1)
    assert best["residual"]["whiteness"]["white"]
    assert best["residual"]["input_correlation"]["independent"]
    criteria = [model["criterion"] for model in document["models"]]
    assert criteria == sorted(criteria)
    assert document["steps"] == [
        {"time": 120.0, "from": 40.0, "to": 50.0}, {"time": 999.0, "from": 50.0, "to": 45.0},
    ]  # fmt: skip
    assert document["gain_unit"] == "fraction of PV range per fraction of output range"
    assert document["regular"] is True
    # The area method has the sum of lags and delay, whatever their number.
    areas = document["direct"][-1]
    assert areas["time_constants"][0] + areas["dead_time"] == pytest.approx(169.0, rel=0.05)


def test_without_ranges_the_gain_is_in_the_datas_units_and_said_so(tmp_path):
    document = fit(asked(write(tmp_path / "step.csv", outputs()))).document
    assert document["models"][0]["gain"] == pytest.approx(0.012, rel=0.02)
    assert document["gain_unit"] == "m of LT-102 per % of FV-101"
    assert any("no ranges were given" in finding for finding in document["findings"])


def test_ranges_change_the_gain_and_nothing_else(tmp_path):
    path = write(tmp_path / "step.csv", outputs())
    plain = fit(asked(path)).document["models"][0]
    ranged = fit(asked(path, input_range=(0.0, 100.0), output_range=(0.2, 1.7))).document[
        "models"
    ][0]
    assert ranged["time_constants"] == pytest.approx(plain["time_constants"], rel=1e-4)
    assert ranged["gain_engineering"] == pytest.approx(plain["gain"], rel=1e-6)


def test_irregular_rows_with_stamps_and_decimal_commas(tmp_path):
    keep = np.random.default_rng(5).random(TIME.size) < 0.6
    keep[0] = True
    output = outputs()
    rows = "".join(
        f"2026-03-01T{int(t // 3600):02d}:{int(t % 3600 // 60):02d}:{t % 60:04.1f};{u:g};{y:.6g}\n"
        for t, u, y in zip(TIME[keep], INPUT[keep], output[keep], strict=True)
    ).replace(".", ",")
    path = tmp_path / "step.csv"
    path.write_text("time;FV-101;LT-102\n" + rows, encoding="utf-8-sig")
    document = fit(asked(path)).document
    assert document["regular"] is False
    best = document["models"][0]
    assert best["kind"] == "second_order"
    assert best["gain"] == pytest.approx(0.012, rel=0.02)


def test_given_steps_are_taken(tmp_path):
    noisy = INPUT + 0.3 * np.random.default_rng(8).normal(size=TIME.size)
    path = write(tmp_path / "step.csv", outputs(), inputs=noisy)
    document = fit(asked(path, step_times=("120", "999"))).document
    assert [step["time"] for step in document["steps"]] == [120.0, 999.0]
    assert document["models"][0]["gain"] == pytest.approx(0.012, rel=0.02)
    with pytest.raises(DataError, match="outside the record"):
        fit(asked(path, step_times=("9000",)))


def test_a_level_that_integrates_and_drifts(tmp_path):
    output = outputs(Kind.INTEGRATING, (0.0, 0.0, 30.0), 2e-5) + 2e-5 * TIME
    document = fit(asked(write(tmp_path / "step.csv", output))).document
    best = document["models"][0]
    assert best["kind"] == "integrating"
    assert best["gain"] == pytest.approx(2e-5, rel=0.05)
    assert best["dead_time"] == pytest.approx(30.0, abs=10.0)
    assert best["gain_unit"].endswith("per s")
    assert document["direct"][0]["method"] == "two slopes"
    assert document["direct"][0]["gain"] == pytest.approx(2e-5, rel=0.1)


def test_an_inverse_response(tmp_path):
    output = outputs(Kind.INVERSE_RESPONSE, (80.0, 40.0, 6.0, 50.0))
    best = fit(asked(write(tmp_path / "step.csv", output))).document["models"][0]
    assert best["kind"] == "inverse_response"
    assert best["inverse_response"] == pytest.approx(50.0, rel=0.1)
    assert best["numerator_times"] == [-best["inverse_response"]]


REFUSED = {
    "cut off": (np.minimum(outputs(), 0.66), INPUT, "looks cut off"),
    "nothing moves": (np.full(TIME.size, 0.6), INPUT, "instrument alive"),
    "no step": (outputs(), np.full(TIME.size, 40.0), "step it in manual"),
    "noise alone": (outputs(gain=0.0), INPUT, "does not follow the input"),
    "drift": (outputs() + 3e-4 * TIME, INPUT, "drifts before the first step"),
}


@pytest.mark.parametrize(("output", "inputs", "words"), REFUSED.values(), ids=REFUSED.keys())
def test_what_the_data_cannot_support(tmp_path, output, inputs, words, capsys):
    path = write(tmp_path / "step.csv", output, inputs=inputs)
    code = main(
        ["fit", str(path), "--time", "time", "--input", "FV-101", "--output", "LT-102",
         "--kind", "first_order", "--kind", "second_order", "--json"]
    )  # fmt: skip
    told = capsys.readouterr()
    assert code == ExitCode.INVALID
    assert words in told.err
    assert str(path) in told.err
    assert told.out == ""


def test_what_is_asked_for_all_the_same_is_done(tmp_path):
    path = write(tmp_path / "step.csv", np.minimum(outputs(), 0.66))
    document = fit(asked(path, force=True)).document
    assert document["models"]
    assert any("looks cut off" in finding for finding in document["findings"])


def test_nothing_is_written_when_nothing_was_found(tmp_path, capsys):
    path, plot = write(tmp_path / "step.csv", outputs(gain=0.0)), tmp_path / "fit.svg"
    arguments = ["fit", str(path), "--time", "time", "--input", "FV-101", "--output", "LT-102"]
    assert main([*arguments, "--plot", str(plot)]) == ExitCode.INVALID
    assert not plot.exists()
    assert main([*arguments, "--plot", str(tmp_path / "fit.doc")]) == ExitCode.USAGE
    assert main([*arguments, "--input-range", "0", "100"]) == ExitCode.USAGE
    assert main([*arguments, "--kind", "third_order"]) == ExitCode.USAGE
    assert capsys.readouterr().out == ""


def test_the_command_serves_scripts(tmp_path):
    path, plot = write(tmp_path / "step.csv", outputs()), tmp_path / "fit.png"
    command = [sys.executable, "-m", "harness.cli"]
    result = subprocess.run(
        [*command, "fit", str(path), "--time", "time", "--input", "FV-101", "--output", "LT-102",
         "--input-range", "0", "100", "--output-range", "0", "1.5", "--json", "--plot", str(plot)],
        capture_output=True, text=True, check=True, cwd=ROOT, encoding="utf-8",
    )  # fmt: skip
    assert json.loads(result.stdout)["models"][0]["kind"] == "second_order"
    assert plot.read_bytes().startswith(b"\x89PNG")
    # What it prints is what the tuning reads.
    (tmp_path / "fit.json").write_text(result.stdout, encoding="utf-8")
    assert (
        main(["tune", str(tmp_path / "fit.json"), "--rule", "simc", "--json"]) == ExitCode.PASS
    )


def test_the_terminal_shows_the_models(tmp_path, capsys, monkeypatch):
    monkeypatch.setenv("COLUMNS", "160")
    path = write(tmp_path / "step.csv", outputs())
    arguments = ["fit", str(path), "--time", "time", "--input", "FV-101", "--output", "LT-102"]
    assert main(arguments) == ExitCode.PASS
    shown = capsys.readouterr().out
    for words in ("Second order", "First order", "lags and delays", "areas", "limits at 95 %"):
        assert words in shown
