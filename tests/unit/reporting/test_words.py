"""Figures and limits in words."""

from __future__ import annotations

import math

import pytest

from harness.analysis.metrics import METRIC_UNITS
from harness.domain.verdict import Outcome
from harness.reporting.words import (
    METRICS,
    SIGNS,
    duration,
    figure,
    limit_words,
    metric_title,
    outcome_of,
    quantity,
)


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (0.0, "0"),
        (1.0, "1.000"),
        (9.9996, "10.00"),
        (0.099996, "0.1000"),
        (506.0, "506.0"),
        (12345.6, "12350"),
        (-0.0234567, "-0.02346"),
        (1.5e-7, "1.500e-07"),
        (2.5e9, "2.500e+09"),
        (None, "not reached"),
        (math.nan, "not reached"),
        (math.inf, "not reached"),
    ],
)
def test_four_significant_digits(value, words):
    assert figure(value) == words


@pytest.mark.parametrize(
    ("value", "unit", "words"),
    [
        (0.0405, "1", "4.050 %"),
        (0.00012, "1", "0.0120 %"),
        (-2.1e-6, "1", "-0.0002 %"),
        (-2.1e-9, "1", "0.0000 %"),
        (0.0, "1", "0 %"),
        (1486.0, "s^2", "1486 s²"),
        (None, "s", "not reached"),
        (2.0, "", "2.000"),
    ],
)
def test_fractions_become_per_cent_and_are_not_too_fine(value, unit, words):
    assert quantity(value, unit) == words


def test_limits_open_on_either_side():
    assert limit_words({"low": 0.01, "high": 0.05}, "1") == "1.000 to 5.000"
    assert limit_words({"low": None, "high": 5.0}, "s") == "at most 5.000"
    assert limit_words({"low": 5.0, "high": None}, "s") == "at least 5.000"
    assert limit_words({}, "s") == "none"


def test_every_metric_of_the_analysis_and_every_outcome_has_words():
    assert set(METRIC_UNITS) <= set(METRICS)
    assert set(SIGNS) == set(Outcome)
    assert len(set(SIGNS.values())) == len(SIGNS)
    assert metric_title("settling_time_2") == "Settling time, 2 % band"
    assert metric_title("new_metric") == "New metric"


def test_an_unknown_outcome_is_never_a_pass():
    assert outcome_of("passed") is Outcome.INVALID
    assert outcome_of("pass") is Outcome.PASS


@pytest.mark.parametrize(
    ("seconds", "words"), [(0, "0:00"), (59.6, "1:00"), (3599, "59:59"), (5600, "1:33:20")]
)
def test_durations(seconds, words):
    assert duration(seconds) == words
