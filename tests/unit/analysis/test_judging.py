"""Limits, verdicts, and how verdicts add up."""

from __future__ import annotations

import pytest

from harness.analysis.limits import judge, limit_of, worst
from harness.analysis.metrics import METRIC_UNITS
from harness.domain.trial import Tolerances
from harness.domain.verdict import Outcome

TOLERANCES = Tolerances(relative=0.10, overshoot=0.02, offset=0.005)
SCAN = 1.0


@pytest.mark.parametrize(
    ("name", "predicted", "low", "high"),
    [
        ("settling_time_2", 100.0, 90.0, 110.0),
        ("settling_time_5", 5.0, 3.0, 7.0),  # no time is told finer than two scans
        ("rise_time", 50.0, 45.0, 55.0),
        ("overshoot", 0.10, 0.08, 0.12),
        ("overshoot", 0.01, 0.0, 0.03),
        ("offset", -0.02, -0.025, -0.015),
        ("iae", 4.0, 3.6, 4.4),
        ("ise", 1.0, 0.8, 1.2),  # quadratic in the error
        ("itae", 100.0, 80.0, 120.0),  # quadratic in time
        ("peak_deviation", -0.02, -0.022, -0.018),
        ("output_travel", 0.5, 0.45, 0.55),
    ],
)
def test_limits_are_about_the_nonlinear_prediction(name, predicted, low, high):
    limit = limit_of(name, predicted, TOLERANCES, SCAN)
    assert (limit.low, limit.high) == pytest.approx((low, high))
    assert "prediction" in limit.basis


@pytest.mark.parametrize("name", ["peak_time", "decay_ratio"])
def test_what_is_shown_only_has_no_limit(name):
    assert limit_of(name, 1.0, TOLERANCES, SCAN) is None


def verdict(measured, predicted, name="iae", undecidable=frozenset()):
    judged = judge(
        {name: measured}, {}, {name: predicted}, METRIC_UNITS, TOLERANCES, SCAN, undecidable
    )
    return judged[name].verdict


@pytest.mark.parametrize(
    ("measured", "outcome"),
    [
        (1.0, Outcome.PASS),
        (1.0999, Outcome.PASS),
        (1.1001, Outcome.FAIL),
        (0.8999, Outcome.FAIL),
    ],
)
def test_inside_passes_and_outside_fails(measured, outcome):
    assert verdict(measured, 1.0) is outcome


def test_not_reached_where_it_was_predicted_fails():
    undecidable = frozenset({"settling_time_2"})
    assert verdict(None, 100.0, "settling_time_2") is Outcome.FAIL
    # Also where a lobe leaves the time open: that it settles at all was not open.
    assert verdict(None, 100.0, "settling_time_2", undecidable) is Outcome.FAIL


def test_a_time_that_noise_decides_is_not_judged():
    undecidable = frozenset({"settling_time_2"})
    assert verdict(500.0, 100.0, "settling_time_2", undecidable) is Outcome.NOT_DECIDABLE


def test_what_is_predicted_never_to_be_reached_is_shown():
    assert verdict(100.0, None, "settling_time_2") is Outcome.SHOWN


def test_no_number_is_passed_on_that_is_none():
    judged = judge(
        {"iae": float("nan")}, {"iae": float("inf")}, {"iae": 1.0}, METRIC_UNITS, TOLERANCES,
        SCAN, frozenset(),
    )  # fmt: skip
    assert judged["iae"].measured is None
    assert judged["iae"].predicted_linear is None
    assert judged["iae"].verdict is Outcome.FAIL


def test_metrics_that_nobody_has_are_left_out():
    assert judge(
        {"iae": 1.0}, {}, {"iae": 1.0}, METRIC_UNITS, TOLERANCES, SCAN, frozenset()
    ).keys() == {"iae"}


@pytest.mark.parametrize(
    ("parts", "whole"),
    [
        (["pass", "pass"], "pass"),
        (["pass", "fail", "not decidable"], "fail"),
        (["fail", "invalid", "pass"], "invalid"),
        (["shown", "not decidable", "pass"], "pass"),
        (["shown", "not decidable"], "shown"),
        ([], "shown"),
    ],
)
def test_the_worst_part_decides(parts, whole):
    assert worst([Outcome(part) for part in parts]) is Outcome(whole)
