"""Tuning from typed-in figures, a fit and a rig; settings in every form; what a test would meet."""

import json
import subprocess
import sys
from pathlib import Path

import pytest

from harness.app.tune import TuneOptions, tune
from harness.app.tune_source import TypedModel, fit_source, rig_source, typed_source
from harness.cli import main
from harness.domain.signals import Range
from harness.errors import ExitCode, ModelError, UsageError
from harness.tuning.entered import (
    BlockFormat,
    DerivativeUnit,
    GainUnit,
    IntegralUnit,
    Spans,
)
from harness.tuning.forms import Form

ROOT = Path(__file__).resolve().parents[3]
SPANS = Spans(
    pv=Range(lower=0.0, upper=2.0, unit="m"),
    output=Range(lower=0.0, upper=100.0, unit="%"),
    pv_counts=32000.0,
    output_counts=4000.0,
)


def typed(gain=2.0, lags=(10.0, 5.0), dead=1.0, spans=SPANS, **options):
    return typed_source(
        TypedModel(gain=gain, time_constants=lags, dead_time=dead, **options), spans
    )


def rule(name, source=None, **options):
    found = tune(source or typed(), TuneOptions(rules=(name,), **options))
    return found.document["rules"][name]


def test_settings_in_every_form_and_unit():
    # series (2, 10, 2) is ideal (2.4, 12, 1.6667): exact. SIMC gives that series block on
    # K = 1, tau 10 and 2, tau_c + theta = 5.
    found = rule("simc-pid", typed(1.0, (10.0, 2.0), 1.0), closed_loop_times=(4.0,))
    assert found["form"] == "series"
    assert (found["gain"], found["integral_time"], found["derivative_time"]) == pytest.approx(
        (2.0, 10.0, 2.0)
    )
    settings = found["settings"]
    ideal, parallel = settings["ideal"], settings["parallel"]
    assert (ideal["gain"], ideal["integral_time"]) == pytest.approx((2.4, 12.0))
    assert ideal["derivative_time"] == pytest.approx(5.0 / 3.0)
    assert (parallel["integral"], parallel["derivative"]) == pytest.approx((0.2, 4.0))
    assert settings["gains"]["proportional_band"] == pytest.approx(100 / 2.4)
    # %/% times output span over PV span
    assert settings["gains"]["engineering"]["value"] == pytest.approx(2.4 * 100 / 2)
    assert settings["gains"]["engineering"]["unit"] == "% per m"
    assert settings["gains"]["counts"]["value"] == pytest.approx(2.4 * 4000 / 32000)
    assert settings["integral"] == pytest.approx(
        {"s": 12.0, "min": 0.2, "repeats/min": 5.0, "1/s": 1 / 12}
    )


@pytest.mark.parametrize(
    ("block", "values"),
    [
        (BlockFormat(form=Form.IDEAL), {"gain": 2.4, "integral": 12.0, "derivative": 5 / 3}),
        (
            BlockFormat(form=Form.SERIES, gain_unit=GainUnit.BAND,
                        integral_unit=IntegralUnit.REPEATS_PER_MINUTE),
            {"gain": 50.0, "integral": 6.0, "derivative": 2.0},
        ),
        (
            BlockFormat(form=Form.PARALLEL, integral_unit=IntegralUnit.MINUTES,
                        derivative_unit=DerivativeUnit.MINUTES),
            {"proportional": 2.4, "integral": 12.0, "derivative": 4.0 / 60.0},
        ),
        (
            BlockFormat(gain_unit=GainUnit.COUNTS, integral_unit=IntegralUnit.PER_SECOND,
                        gain_step=0.05, time_step=0.02),
            {"gain": 0.3, "integral": 0.08, "derivative": 1.66},
        ),
    ],
)  # fmt: skip
def test_what_is_typed_in(block, values):
    found = rule(
        "simc-pid", typed(1.0, (10.0, 2.0), 1.0), closed_loop_times=(4.0,), block=block
    )
    assert found["entered"]["values"] == pytest.approx(values)
    if not block.gain_step:  # unrounded it comes to the same block
        assert found["entered"]["comes_to"] == pytest.approx(found["settings"]["ideal"])
        assert found["entered"]["effect"]["gain"] == pytest.approx(0.0, abs=1e-12)


def test_a_coarse_block_shows_what_its_steps_do():
    block = BlockFormat(gain_step=1.0, time_step=5.0)
    found = rule("simc-pi", closed_loop_times=(1.0,), block=block)
    effect = found["entered"]["effect"]
    assert found["gain"] == pytest.approx(12.5 / 9.0)
    assert found["entered"]["values"] == {"gain": 1.0, "integral": 10.0}
    assert effect["gain"] == pytest.approx(9.0 / 12.5 - 1.0)
    before, after = effect["maximum_sensitivity"]
    assert before == found["margins"]["maximum_sensitivity"]
    assert after < before
    with pytest.raises(ModelError, match="would round to 0"):
        rule("simc-pi", closed_loop_times=(1.0,), block=BlockFormat(gain_step=5.0))


def test_scan_and_filter_count_as_dead_time():
    found = rule(
        "simc-pi", typed(1.0, (50.0,), 4.0), closed_loop_times=(6.0,), scan=2.0, filter_time=3.0
    )
    # theta = 4 + 2/2 + 3 = 8: Kc = 50/(6 + 8), Ti = min(50, 4 x 14)
    assert found["reduced"]["dead_time"] == pytest.approx(8.0)
    assert found["gain"] == pytest.approx(50.0 / 14.0)
    assert found["integral_time"] == pytest.approx(50.0)


def test_a_process_that_falls_is_controlled_by_direct_action():
    document = tune(typed(-2.0), TuneOptions(rules=("ds-pi",))).document
    assert document["action"] == "direct"
    assert "fall" in document["action_reason"]
    result = document["rules"]["ds-pi"]
    assert result["gain"] > 0.0
    assert result["stable"]
    # A load that lowers the process variable, and an output that answers.
    assert result["metrics"]["load"]["peak_deviation"] < 0.0


def test_a_proportional_block_keeps_its_offset():
    # closed form: r/(1 + K Kc) after a setpoint step, K/(1 + K Kc) after a load
    found = rule("ds-p", typed(2.0, (10.0,), 1.0), closed_loop_times=(5.0,))
    loop_gain = 2.0 * found["gain"]
    assert found["metrics"]["setpoint"]["offset"] == pytest.approx(1 / (1 + loop_gain))
    assert found["metrics"]["load"]["offset"] == pytest.approx(2 / (1 + loop_gain))


@pytest.mark.parametrize("name", ["ds-pi", "load-pi", "simc-pid"])
def test_the_integral_of_the_error_after_a_load_is_ti_over_kc(name):
    # closed form; the size of the error does not change its sign in these loops
    found = rule(name, typed(2.0, (30.0, 5.0), 1.0), closed_loop_times=(10.0,))
    ideal = found["settings"]["ideal"]
    expected = ideal["integral_time"] / ideal["gain"]
    assert found["metrics"]["load"]["iae"] == pytest.approx(expected, rel=2e-3)


def test_robustness_finds_the_worst_corner():
    # For the delayed integrator GM = (pi/2)(tau_c + theta)/theta = 2.36 at tau_c = theta/2; more
    # gain, more dead time and a shorter lag are worst.
    source = typed(1.0, (50.0,), 5.0)
    found = rule("ds-pi", source, closed_loop_times=(2.5,), spread=0.2)["robustness"]
    assert found["worst_plant"] == {"gain": 1.2, "lags": 0.8, "dead_time": 1.2}
    assert found["unstable"] == 0
    wide = rule("ds-pi", source, closed_loop_times=(2.5,), spread=0.5)["robustness"]
    assert wide["unstable"] > 0
    assert wide["worst_maximum_sensitivity"] is None
    none = rule("ds-pi", source, closed_loop_times=(2.5,), spread=0.0)["robustness"]
    assert none["plants"] == 1


def test_an_unstable_tuning_is_said_and_has_no_figures():
    # The classical rules on a process that is all dead time go past the limit with a slow scan.
    found = rule("zn-pid", typed(1.0, (20.0,), 2.0), scan=0.0, filter_time=6.0)
    if not found["stable"]:
        assert found["metrics"] == {"setpoint": {}, "load": {}}
    slow = tune(
        typed(1.0, (20.0,), 2.0),
        TuneOptions(rules=("ds-pi",), closed_loop_times=(0.05,), spread=0.5),
    ).document["rules"]["ds-pi"]
    assert any("unstable on" in finding for finding in slow["findings"])


def test_what_the_test_would_meet_is_said_before():
    source = typed(1.0, (60.0,), 5.0)
    quick = {"closed_loop_times": (5.0,), "setpoint_step": 0.1}
    assert rule("ds-pi", source, **quick)["findings"] == []  # where it stands is not known
    found = rule("ds-pi", source, output=0.5, **quick)["findings"]
    # Closed form: until the dead time is over the output is Kc (1 + t/Ti) of the step, here
    # 6 (1 + 5/60) = 6.5 times 10 % at its highest, on top of 50 %; 50/6.5 = 7.69 % just fits.
    assert len(found) == 1
    assert "up or down" in found[0]
    assert "115 %" in found[0]
    assert "at most 7.6 %" in found[0]
    found = rule("ds-pi", source, output=0.95, **quick)["findings"]
    assert any("cannot be held there" in words for words in found)
    found = rule("ds-pi", source, output=0.5, stroke_time=30.0, closed_loop_times=(20.0,))
    assert any("faster than the valve" in words for words in found["findings"])


def test_from_a_rig():
    source = rig_source(ROOT / "configs" / "rigs" / "make_up_skid.toml", None, Spans())
    assert source.output is not None
    assert source.scan > 0.0
    found = tune(source, TuneOptions(rules=("simc-pi",)))
    assert found.document["conditions"]["prediction"] == "sampled"
    assert found.document["rules"]["simc-pi"]["stable"]
    with pytest.raises(UsageError, match='no loop "LIC-999"'):
        rig_source(ROOT / "configs" / "rigs" / "make_up_skid.toml", "LIC-999", Spans())


def fitted(tmp_path, **changes):
    document = {
        "gain_unit": "m of LT-102 per % of FV-101",
        "models": [
            {"kind": "first_order", "gain": 0.02, "time_constants": [50.0], "dead_time": 4.0},
            {"kind": "integrating", "gain": 1e-4, "time_constants": [], "dead_time": 2.0},
        ],
    } | changes
    path = tmp_path / "fit.json"
    path.write_text(json.dumps(document), encoding="utf-8")
    return path


def test_from_a_fit_in_the_datas_units(tmp_path):
    path = fitted(tmp_path)
    bare = fit_source(path, None, Spans())
    assert bare.gain_unit == "m of LT-102 per % of FV-101"
    assert bare.process.gain == 0.02
    scaled = fit_source(path, None, SPANS)  # 0.02 m per % on 0-2 m and 0-100 %: 1
    assert scaled.process.gain == pytest.approx(1.0)
    other = fit_source(path, "integrating", SPANS)
    assert other.process.integrating
    with pytest.raises(UsageError, match="it has first_order, integrating"):
        fit_source(path, "third_order", SPANS)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "no JSON document"),
        ("[1]", "which is an object"),
        ('{"models": []}', 'no "models"'),
        ('{"models": [{"kind": "first_order"}]}', "not complete"),
    ],
)
def test_a_document_that_is_none_is_refused(tmp_path, text, words):
    path = tmp_path / "fit.json"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(UsageError, match=words):
        fit_source(path, None, Spans())


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ([], "no process"),
        (["--gain", "1"], "pure dead time"),
        (["--gain", "0", "--time-constant", "5"], "gain is 0"),
        (["--gain", "1", "--time-constant", "5", "--rule", "best"], 'no tuning rule "best"'),
        (["--gain", "1", "--time-constant", "-5"], "must be 0 or more"),
        (["--gain", "1", "--time-constant", "5", "--closed-loop", "0"], "must be above 0"),
        (["--gain", "1", "--time-constant", "5", "--rule", "zn"], "none of the rules"),
        (["--gain", "1", "--time-constant", "5", "--engineering"], "ranges are not known"),
        (
            ["--gain", "1", "--time-constant", "5", "--output-range", "2", "1"],
            "below the second",
        ),
        (["--gain", "1", "--time-constant", "5", "--plot", "x.pdf"], "written as"),
        (["--gain", "nan", "--time-constant", "5"], "finite number"),
        (["--gain", "1", "--time-constant", "5", "--spread", "100"], "below 1"),
        (["none.json"], "cannot be read"),
    ],
)
def test_bad_use_gets_one_message(arguments, words, capsys):
    assert main(["tune", *arguments]) == ExitCode.USAGE
    told = capsys.readouterr()
    assert words in told.err
    assert told.out == ""


def test_the_command_serves_scripts(tmp_path):
    plot, sheet = tmp_path / "tuning.svg", tmp_path / "sheet.html"
    result = subprocess.run(
        [
            sys.executable, "-m", "harness.cli", "tune", "--gain", "2", "--time-constant", "10",
            "--time-constant", "5", "--dead-time", "1", "--closed-loop", "3",
            "--rule", "ds-pid,simc", "--json", "--plot", str(plot), "--sheet", str(sheet),
        ],
        capture_output=True, text=True, check=True, cwd=ROOT, encoding="utf-8",
    )  # fmt: skip
    document = json.loads(result.stdout)
    assert list(document["rules"]) == ["ds-pid", "simc-pi", "simc-pid"]
    found = document["rules"]["ds-pid"]
    assert found["gain"] == pytest.approx(1.875)
    assert found["integral_time"] == pytest.approx(15.0)
    assert found["derivative_time"] == pytest.approx(10.0 / 3.0)
    assert plot.read_text(encoding="utf-8").lstrip().startswith("<?xml")
    page = sheet.read_text(encoding="utf-8")
    assert "simc-pid" in page
    assert "http" not in page.replace("http://www.w3.org", "")  # it needs nothing else
    assert not list(tmp_path.glob("*.part"))


def test_the_terminal_shows_every_rule(capsys, monkeypatch):
    monkeypatch.setenv("COLUMNS", "160")
    arguments = (
        "tune --gain 2 --time-constant 10 --dead-time 1 --scan 0.5 --at 50 --resolution 0.1 1"
    )
    assert main(arguments.split()) == ExitCode.PASS
    shown = capsys.readouterr().out
    for name in ("ds-p", "ds-pi", "load-pi", "simc-pi", "imc-pid", "zn-pid", "cc-pi"):
        assert name in shown
    assert "type in" in shown
    assert "simc-pid: not given" in shown
