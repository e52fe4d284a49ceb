"""The tuning sheet and the drawings of fits and tunings: whole, self-contained, repeatable."""

import re

import numpy as np
import pytest

from harness.errors import RecordError, UsageError
from harness.reporting.figure_files import check_figure_path, write_figure
from harness.reporting.fit_plot import SIZE, FitDrawing, draw_fit
from harness.reporting.tuning_plot import MOST, TuningCurves, draw_tunings, shown_first
from harness.reporting.tuning_sheet import render_sheet

RULE = {
    "title": "SIMC, PI",
    "law": "PI",
    "aim": "setpoint and load",
    "source": "somewhere",
    "closed_loop_time": 5.0,
    "reduced": {"kind": "first_order", "gain": 1.2, "time_constants": [60.0], "dead_time": 5.5},
    "form": "series",
    "gain": 4.5,
    "integral_time": 44.0,
    "derivative_time": 0.0,
    "settings": {
        "gains": {"proportional_band": 22.2},
        "integral": {"s": 44.0, "min": 0.733, "repeats/min": 1.36, "1/s": 0.0227},
        "ideal": {"gain": 4.5, "integral_time": 44.0, "derivative_time": 0.0},
        "series": None,
        "series_refused": "no <series> form",
        "parallel": {"gain": 4.5, "integral": 0.102, "derivative": 0.0},
    },
    "stable": True,
    "margins": {"gain_margin": None, "phase_margin_degrees": 58.0, "maximum_sensitivity": 1.61},
    "metrics": {"setpoint": {"overshoot": 0.11}, "load": {"iae": 9.8}},
    "robustness": {"worst_maximum_sensitivity": None},
    "findings": ["setpoint step of 5 %: <too> much"],
    "entered": {
        "form": "ideal", "values": {"gain": 4.5, "integral": 0.7},
        "units": {"gain": "%/%", "integral": "min"},
        "effect": {"gain": 0.0, "stable": False, "maximum_sensitivity": [1.61, 1.7]},
    },
}  # fmt: skip
DOCUMENT = {
    "source": "loop <LIC-102>",
    "process": {"kind": "first_order", "gain": 1.2, "time_constants": [60.0], "dead_time": 5.0},
    "gain_unit": "fraction",
    "conditions": {"scan": 1.0, "prediction": "sampled", "spread": 0.2},
    "action": "reverse",
    "action_reason": "because it rises",
    "closed_loop_times": [5.0],
    "rules": {"simc-pi": RULE},
    "refused": {"simc-pid": "it has no second lag"},
    "findings": [],
}


def test_the_sheet_is_one_page_that_escapes_what_it_is_given():
    page = render_sheet(DOCUMENT, "<svg></svg>")
    assert page == render_sheet(DOCUMENT, "<svg></svg>")
    assert "loop &lt;LIC-102&gt;" in page
    assert "&lt;too&gt; much" in page
    assert "<LIC-102>" not in page
    assert "unstable" in page  # the worst plant
    assert "makes the loop UNSTABLE" in page
    assert "it has no second lag" in page
    assert not re.search(r'(src|href)="', page)


def curve(name):
    time = np.linspace(0.0, 100.0, 50)
    values = (time, 1.0 - np.exp(-time / 10.0), time)
    return TuningCurves(name=name, setpoint=values, load=values)


def test_the_same_curves_give_the_same_bytes(tmp_path):
    curves = (curve("simc-pi"), curve("ds-pi"))
    for name in ("a.svg", "b.svg", "a.png", "b.png"):
        write_figure(
            tmp_path / name, lambda figure: draw_tunings(figure, curves, 80.0), (4.0, 3.0)
        )
    assert (tmp_path / "a.svg").read_bytes() == (tmp_path / "b.svg").read_bytes()
    assert (tmp_path / "a.png").read_bytes() == (tmp_path / "b.png").read_bytes()


def test_a_fit_is_drawn_with_its_models_named(tmp_path):
    time = np.linspace(0.0, 100.0, 30)
    drawing = FitDrawing(
        time=time, output=time, fitted_time=time, fitted={"second order": time}, residuals=time,
        input_time=time, input=time, output_title="LT-102 [m]", input_title="FV-101 [%]",
    )  # fmt: skip
    write_figure(tmp_path / "fit.svg", lambda figure: draw_fit(figure, drawing), SIZE)
    text = (tmp_path / "fit.svg").read_text(encoding="utf-8")
    for words in ("second order", "LT-102 [m]", "FV-101 [%]"):
        assert words in text


def test_a_drawing_that_cannot_be_written_leaves_nothing(tmp_path):
    with pytest.raises(RecordError, match="could not be written"):
        write_figure(tmp_path / "none" / "a.svg", lambda figure: figure.clear(), (1.0, 1.0))
    with pytest.raises(UsageError, match=r"written as \.svg or \.png"):
        check_figure_path(tmp_path / "a.pdf")
    assert list(tmp_path.iterdir()) == []


def test_no_more_curves_than_an_eye_can_follow():
    few = ("zn-p", "cc-p")
    assert shown_first(few) == few
    many = (
        "ds-p",
        "ds-pi",
        "ds-pid",
        "load-pi",
        "load-pid",
        "simc-pi",
        "simc-pid",
        "imc-pid",
        "zn-pi",
    )
    shown = shown_first(many)
    assert len(shown) == MOST
    assert {"ds-pi", "load-pi", "simc-pi", "zn-pi"} <= set(shown)
    assert list(shown) == sorted(shown, key=many.index)
