"""What is typed into a block, and what it then has.

The conversions themselves are common practice: a proportional band is 100 / Kc in percent, repeats
per minute are 60 / Ti, a parallel block has Ki = Kc / Ti.
"""

from __future__ import annotations

import itertools
import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from harness.domain.models import ControllerSettings
from harness.domain.orders import BlockForm, BlockUnits, GainUnit, TimeUnit
from harness.domain.rig import Action
from harness.domain.signals import Range
from harness.errors import ModelError
from harness.tuning.block_units import block_entry, block_settings, rounded

LEVEL = Range(lower=0.0, upper=1.5, unit="m")
PI = ControllerSettings(gain=1.25, integral_time=150.0, action=Action.REVERSE)


def entry(settings=PI, **block):
    return block_entry(settings, BlockUnits(**block), LEVEL)


@pytest.mark.parametrize(
    ("unit", "number", "text"),
    [
        (GainUnit.PERCENT, 1.25, "gain 1.25 %/%"),
        (GainUnit.ENGINEERING, 83.33, "gain 83.33 %/m"),  # 1.25 x 100 % / 1.5 m
        (GainUnit.BAND, 80.0, "proportional band 80 %"),
        (GainUnit.COUNTS, 1.25 * 4000 / 32000, "gain 0.1562 counts/count"),
    ],
)
def test_a_gain_in_each_unit(unit, number, text):
    found = entry(gain_unit=unit, process_variable_counts=32_000, output_counts=4_000)
    assert found.gain == pytest.approx(number, rel=1e-3)
    assert found.words.startswith(text + ",")


@pytest.mark.parametrize(
    ("unit", "text"),
    [
        (TimeUnit.SECONDS, "integral time 150 s"),
        (TimeUnit.MINUTES, "integral time 2.5 min"),
        (TimeUnit.REPEATS, "integral action 0.4 repeats per minute"),
        (TimeUnit.RATE, "integral action 0.006667 1/s"),
    ],
)
def test_an_integral_time_in_each_unit(unit, text):
    assert entry(time_unit=unit).words.endswith(", " + text)


def test_a_parallel_block_has_an_integral_gain_of_its_own():
    found = entry(form=BlockForm.PARALLEL, time_unit=TimeUnit.REPEATS)
    assert found.integral == 0.5  # 1.25 / 150 s x 60 s/min
    assert found.words == "proportional gain 1.25 %/%, integral gain 0.5 %/% per minute"


def test_a_series_block_without_derivative_is_typed_like_an_ideal_one():
    assert entry(form=BlockForm.SERIES).words == entry().words


def test_a_proportional_block_has_its_integral_action_off():
    settings = ControllerSettings(gain=2.0, integral_time=None, action=Action.REVERSE)
    found = entry(settings)
    assert found.words == "gain 2 %/%, integral action off"
    assert found.settings == settings


def test_the_settings_are_those_of_the_rounded_numbers():
    found = entry(
        gain_unit=GainUnit.BAND, gain_resolution=7.0,
        time_unit=TimeUnit.MINUTES, time_resolution=0.25,
    )  # fmt: skip
    assert (found.gain_text, found.integral_text) == ("77", "2.50")
    assert found.settings.gain == pytest.approx(100 / 77, rel=1e-15)
    assert found.settings.integral_time == 150.0


def test_a_parallel_block_rounds_its_two_numbers_apart():
    found = entry(
        form=BlockForm.PARALLEL, time_unit=TimeUnit.RATE,
        gain_resolution=0.1, time_resolution=0.001,
    )  # fmt: skip
    assert (found.gain_text, found.integral_text) == ("1.2", "0.008")
    assert found.settings.integral_time == pytest.approx(1.2 / 0.008, rel=1e-15)


def test_numbers_that_would_be_typed_as_nothing_are_refused():
    with pytest.raises(ModelError, match=r"integral action: 0\.006667 is less than half"):
        entry(time_unit=TimeUnit.RATE, time_resolution=0.02)
    with pytest.raises(ModelError, match=r"gain: 1\.25 is less"):
        entry(gain_resolution=3.0)


@given(
    gain=st.floats(0.01, 100.0),
    integral_time=st.one_of(st.none(), st.floats(0.1, 1e4)),
    kinds=st.sampled_from(list(itertools.product(BlockForm, GainUnit, TimeUnit))),
)
def test_what_is_typed_gives_the_settings_back(gain, integral_time, kinds):
    form, gain_unit, time_unit = kinds
    block = BlockUnits(
        form=form, gain_unit=gain_unit, time_unit=time_unit,
        gain_resolution=1e-9, time_resolution=1e-12,
    )  # fmt: skip
    wanted = ControllerSettings(gain=gain, integral_time=integral_time, action=Action.DIRECT)
    found = block_entry(wanted, block, LEVEL)
    assert found.settings.gain == pytest.approx(gain, rel=1e-5)
    if integral_time is None:
        assert found.settings.integral_time is None
    else:
        assert found.settings.integral_time == pytest.approx(integral_time, rel=1e-5)
    assert found.settings == block_settings(
        found.gain, found.integral, Action.DIRECT, block, LEVEL
    )


@given(value=st.floats(1e-6, 1e6), resolution=st.sampled_from([0.001, 0.05, 0.25, 1.0, 2.0]))
def test_rounding_is_to_the_nearest_step(value, resolution):
    number, text = rounded(value, resolution)
    assert float(text) == number
    assert abs(number - value) <= resolution / 2 * (1 + 1e-9)
    assert math.isclose(number / resolution, round(number / resolution), abs_tol=1e-6)
