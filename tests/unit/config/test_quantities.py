"""Quantities in text: exact conversions, and refusals that say the rule."""

import math
import re

import pint
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from harness.config import quantities
from harness.config.quantities import (
    ACCELERATION,
    CURRENT,
    DENSITY,
    FLOW,
    KV,
    LENGTH,
    PART,
    PRESSURE,
    TIME,
    parse_quantity,
)

# The inch (25.4 mm), the bar and the hour are exact by definition (SI brochure, value from
# memory); psi follows from the pound 0.45359237 kg, the inch and the standard gravity.
DEFINED = (
    ("250 mm", LENGTH, 0.25),
    ("25 cm", LENGTH, 0.25),
    ("1 in", LENGTH, 0.0254),
    ("1 ft", LENGTH, 0.3048),
    ("0.5m", LENGTH, 0.5),
    ("1e-3 km", LENGTH, 1.0),
    (" .5 m ", LENGTH, 0.5),
    ("3 bar", PRESSURE, 3e5),
    ("300 kPa", PRESSURE, 3e5),
    ("1 psi", PRESSURE, 0.45359237 * 9.80665 / 0.0254**2),
    ("90 s", TIME, 90.0),
    ("1.5 min", TIME, 90.0),
    ("1 h", TIME, 3600.0),
    ("20 ms", TIME, 0.02),
    ("3.6 m3/h", FLOW, 1e-3),
    ("3.6 m^3/h", FLOW, 1e-3),
    ("1 l/s", FLOW, 1e-3),
    ("60 L/min", FLOW, 1e-3),
    ("998.2 kg/m3", DENSITY, 998.2),
    ("0.9982 kg/l", DENSITY, 998.2),
    ("9.80665 m/s2", ACCELERATION, 9.80665),
    ("9.80665 m/s^2", ACCELERATION, 9.80665),
    ("0.05 %", PART, 5e-4),
    ("-4 %", PART, -0.04),
    ("+4 percent", PART, 0.04),
    ("3.6 mA", CURRENT, 3.6),
    ("3600 uA", CURRENT, 3.6),
    ("6.3 m3/h", KV, 6.3),
)


@pytest.mark.parametrize(("text", "quantity", "expected"), DEFINED)
def test_a_quantity_becomes_its_unit(text, quantity, expected):
    assert parse_quantity(text, quantity) == pytest.approx(expected, rel=1e-15)


@pytest.mark.parametrize(
    ("text", "quantity", "expected"),
    [("250 mm", LENGTH, 0.25), ("3.6 mA", CURRENT, 3.6), ("21 mA", CURRENT, 21.0)],
)
def test_usual_quantities_are_exact(text, quantity, expected):
    """A limit such as NE 43's 3.6 mA is compared with what is written."""
    assert parse_quantity(text, quantity) == expected


def test_shortcut_units_agree_with_the_library():
    """The factors kept out of the library are the library's own, by its full table of units."""
    registry = pint.UnitRegistry()
    for (unit, target), factor in quantities._USUAL.items():
        written = unit.replace("m3", "m^3").replace("s2", "s^2")
        wanted = (target or "dimensionless").replace("m3", "m^3").replace("s2", "s^2")
        assert registry.Quantity(1.0, written).to(wanted).magnitude == pytest.approx(
            factor, rel=1e-15
        )


@settings(deadline=None)  # the first unit unknown to the shortcut loads the library
@given(
    number=st.floats(min_value=-1e9, max_value=1e9, allow_nan=False),
    unit=st.sampled_from(["m", "mm", "cm", "km", "in", "ft"]),
)
def test_lengths_agree_with_the_library(number, unit):
    factors = {"m": 1.0, "mm": 1e-3, "cm": 1e-2, "km": 1e3, "in": 0.0254, "ft": 0.3048}
    assert parse_quantity(f"{number!r} {unit}", LENGTH) == pytest.approx(
        number * factors[unit], rel=1e-14
    )


def answer_to(text, quantity):
    try:
        return "finite" if math.isfinite(parse_quantity(text, quantity)) else "not finite"
    except ValueError as error:
        return str(error)


@settings(deadline=None)  # the first unit unknown to the shortcut loads the library
@given(st.text(max_size=20))
def test_any_text_is_a_number_or_a_refusal(text):
    answer = answer_to(text, PRESSURE)
    assert 'e.g. "3 bar"' in answer or answer in {"finite", "is too large to be a number"}


@settings(deadline=None)  # the first unit unknown to the shortcut loads the library
@given(st.text(alphabet="0123456789.eE+-m3/h%^*() []{}'_", max_size=12))
def test_any_likely_text_is_a_number_or_a_refusal(text):
    answer = answer_to(text, FLOW)
    assert 'e.g. "6 m3/h"' in answer or answer in {"finite", "is too large to be a number"}


@pytest.mark.parametrize("bare", [0, 1, 0.25, -3])
def test_a_bare_number_is_refused_with_an_example(bare):
    with pytest.raises(ValueError, match=r'^is a bare number; .*e\.g\. "250 mm"$'):
        parse_quantity(bare, LENGTH)


@pytest.mark.parametrize(
    ("text", "quantity", "words"),
    [
        ("3", LENGTH, "has no unit"),
        ("three m", LENGTH, "does not start with a number"),
        ("3 mn", LENGTH, '"mn" is not a unit known here'),
        ("3 s", LENGTH, '"s" is of another kind'),
        ("3 m m", LENGTH, '"m m" is not a unit'),
        ("3 %%", PART, '"%%" is not a unit'),
        ("nan m", LENGTH, "does not start with a number"),
        ("inf m", LENGTH, "does not start with a number"),
        ("1e999 m", LENGTH, "is too large to be a number"),
        ("1e308 km", LENGTH, "is too large to be a number"),
        (True, LENGTH, "is not a length"),
        (None, LENGTH, "is not a length"),
        (["3 m"], LENGTH, "is not a length"),
        ("2 l/s", KV, "must be in m3/h at 1 bar"),
    ],
)
def test_what_is_no_quantity_is_refused_with_the_reason(text, quantity, words):
    with pytest.raises(ValueError, match=re.escape(words)):
        parse_quantity(text, quantity)
