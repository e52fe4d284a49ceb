"""What a record cannot support is said; what it can is let through."""

import numpy as np
import pytest

from harness.errors import DataError
from harness.tuning.trace import Kind, trace_of, unit_gain_response
from harness.tuning.trace_checks import Concern, examine, find_steps, levels_between

TIME = np.arange(0.0, 1500.0, 2.0)
INPUT = np.where(TIME < 150.0, 0.4, 0.5)
CLEAN = 0.3 + unit_gain_response(
    Kind.SECOND_ORDER, (100.0, 50.0, 5.0), trace_of(TIME, INPUT, TIME)
)


def noise(size=0.001, seed=1):
    return size * np.random.default_rng(seed).normal(size=TIME.size)


def concerns(time, inputs, output, **ranges):
    found = examine(time, inputs, output, find_steps(time, inputs), **ranges)
    return {finding.concern: finding.grave for finding in found}


@pytest.mark.parametrize("resolution", [0.0, 1e-4, 1e-3, 5e-3])
@pytest.mark.parametrize("amplitude", [0.0, 0.001])
def test_a_good_record_raises_no_concern(resolution, amplitude):
    output = CLEAN + noise(amplitude)
    if resolution:
        output = np.round(output / resolution) * resolution
    assert concerns(TIME, INPUT, output) == {}


def test_a_reversed_and_a_pulsed_record_raise_none_either():
    pulse = np.where((TIME > 150.0) & (TIME < 700.0), 0.5, 0.4)
    output = 0.6 - unit_gain_response(
        Kind.FIRST_ORDER, (60.0, 0.0, 5.0), trace_of(TIME, pulse, TIME)
    )
    assert concerns(TIME, pulse, output + noise()) == {}


def test_a_curve_cut_off_is_saturated():
    assert concerns(TIME, INPUT, np.minimum(CLEAN + noise(), 0.36)) == {
        Concern.SATURATION: True
    }


def test_an_end_of_the_range_is_saturation():
    output = np.minimum(CLEAN + noise(), 0.36)
    found = concerns(TIME, INPUT, output, output_range=(0.0, 0.36))
    assert found == {Concern.SATURATION: True}


def test_a_closed_loop_is_told_from_an_open_one():
    rows, generator = 1000, np.random.default_rng(2)
    output, inputs, state, integral = np.zeros(rows), np.zeros(rows), 0.0, 0.5
    for k in range(rows):
        output[k] = 0.6 + state + 0.001 * generator.normal()
        error = (0.6 if k < 200 else 0.65) - output[k]
        integral += 0.04 * error
        inputs[k] = 2.0 * error + integral
        state += (1.2 * (inputs[max(k - 5, 0)] - 0.5) - state) / 60.0
    assert concerns(np.arange(1000.0), inputs, output)[Concern.CLOSED_LOOP] is True
    slow = np.repeat(inputs[::4], 4)  # a scan of four rows
    held = np.repeat(output[::4], 4)
    assert concerns(np.arange(1000.0), slow, held)[Concern.CLOSED_LOOP] is True
    busy = np.repeat(generator.choice([0.4, 0.6], 250), 4) + 0.002 * generator.normal(size=rows)
    stamps = np.arange(1000.0)
    answer = unit_gain_response(
        Kind.FIRST_ORDER, (60.0, 0.0, 5.0), trace_of(stamps, busy, stamps)
    )
    assert Concern.CLOSED_LOOP not in concerns(stamps, busy, answer)


def test_a_gap_matters_when_the_input_moved_in_it():
    for start, end, grave in ((140.0, 220.0, True), (600.0, 700.0, False)):
        keep = ~((start <= TIME) & (end >= TIME))
        assert concerns(TIME[keep], INPUT[keep], CLEAN[keep]) == {Concern.GAP: grave}


def test_a_drift_before_the_step_is_told():
    assert concerns(TIME, INPUT, CLEAN + noise() + 1e-4 * TIME) == {Concern.DRIFT: True}


def test_a_record_that_begins_with_its_step_says_little_of_the_rest_before():
    assert concerns(TIME[74:], INPUT[74:], CLEAN[74:]) == {Concern.NO_LEAD: False}


def test_a_dead_instrument_is_no_record():
    with pytest.raises(DataError, match="instrument alive"):
        concerns(TIME, INPUT, np.full(TIME.size, 0.3))
    with pytest.raises(DataError, match="step it in manual"):
        find_steps(TIME, np.full(TIME.size, 0.4))


def test_steps_are_found_in_a_noisy_input():
    inputs = np.where(TIME < 150.0, 0.4, np.where(TIME < 800.0, 0.5, 0.43)) + noise(0.005)
    steps = find_steps(TIME, inputs)
    np.testing.assert_allclose(steps.time, [150.0, 800.0], atol=2.0)
    np.testing.assert_allclose(steps.level, [0.4, 0.5, 0.43], atol=0.002)
    with pytest.raises(DataError, match="no step stands out"):
        find_steps(TIME, 0.4 + noise(0.005))


def test_given_steps_take_the_means_between_them():
    steps = levels_between(TIME, INPUT + noise(0.005), np.array([150.0]))
    np.testing.assert_allclose(steps.level, [0.4, 0.5], atol=0.002)
    with pytest.raises(DataError, match="outside the record"):
        levels_between(TIME, INPUT, np.array([5000.0]))
