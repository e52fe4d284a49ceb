"""What people type for what a controller shows."""

import math

import pytest

from harness.runtime.signal_asking import number_of


@pytest.mark.parametrize(
    ("text", "value"),
    [("0.75", 0.75), ("0,75 m", 0.75), (" -1.2e-3 ", -0.0012), ("12 mA", 12.0)],
)
def test_a_number_is_taken_with_comma_or_unit(text, value):
    assert number_of(text) == (True, value)


@pytest.mark.parametrize("text", ["bad", "NaN", "---", "None"])
def test_a_display_without_value_is_not_a_number(text):
    understood, value = number_of(text)
    assert understood
    assert math.isnan(value)


def test_a_tag_can_be_passed_over():
    assert number_of("skip") == (True, None)


@pytest.mark.parametrize("text", ["", "what?", "m 3", "inf"])
def test_what_is_no_number_is_not_understood(text):
    assert number_of(text)[0] is False
