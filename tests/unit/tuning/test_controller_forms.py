import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from harness.errors import ModelError
from harness.tuning.forms import (
    IdealForm,
    ParallelForm,
    SeriesForm,
    gain_engineering,
    gain_from_engineering,
    gain_from_proportional_band,
    ideal_to_parallel,
    ideal_to_series,
    integral_time_from_repeats,
    parallel_to_ideal,
    proportional_band,
    repeats_per_minute,
    repeats_per_second,
    series_to_ideal,
)

POSITIVE = st.floats(1e-3, 1e3)


def test_series_to_ideal_exactly():
    # F = 1 + Td'/Ti' = 1.2 (exact conversion)
    ideal = series_to_ideal(SeriesForm(gain=2.0, integral_time=10.0, derivative_time=2.0))
    assert (ideal.gain, ideal.integral_time) == pytest.approx((2.4, 12.0), rel=1e-14)
    assert ideal.derivative_time == pytest.approx(2.0 / 1.2, rel=1e-14)


@given(gain=POSITIVE, integral=POSITIVE, share=st.floats(0.0, 1.0))
def test_there_and_back(gain, integral, share):
    series = SeriesForm(gain=gain, integral_time=integral, derivative_time=share * integral)
    back = ideal_to_series(series_to_ideal(series)) if share < 0.999 else series
    assert back.gain == pytest.approx(gain, rel=1e-6)
    assert back.integral_time == pytest.approx(integral, rel=1e-6)
    assert back.derivative_time == pytest.approx(share * integral, rel=1e-6)


@given(gain=POSITIVE, integral=POSITIVE, derivative=st.floats(0.0, 1e3), frequency=POSITIVE)
def test_forms_have_the_same_frequency_response(gain, integral, derivative, frequency):
    s = 1j * frequency
    series = SeriesForm(gain=gain, integral_time=integral, derivative_time=derivative)
    ideal = series_to_ideal(series)
    parallel = ideal_to_parallel(ideal)
    value = gain * (1 + 1 / (integral * s)) * (1 + derivative * s)
    assert ideal.gain * (
        1 + 1 / (ideal.integral_time * s) + ideal.derivative_time * s
    ) == pytest.approx(value, rel=1e-9)
    assert parallel.proportional + parallel.integral / s + parallel.derivative * s == (
        pytest.approx(value, rel=1e-9)
    )
    again = parallel_to_ideal(parallel)
    assert again.integral_time == pytest.approx(ideal.integral_time, rel=1e-12)


def test_series_form_does_not_always_exist():
    assert ideal_to_series(IdealForm(gain=1.0, integral_time=8.0, derivative_time=2.0)) == (
        SeriesForm(gain=0.5, integral_time=4.0, derivative_time=4.0)
    )
    with pytest.raises(ModelError, match="less than 4 Td = 8"):
        ideal_to_series(IdealForm(gain=1.0, integral_time=7.99, derivative_time=2.0))


def test_parallel_without_gain_has_no_ideal_form():
    with pytest.raises(ModelError, match="Kp is 0"):
        parallel_to_ideal(ParallelForm(proportional=0.0, integral=1.0))
    assert (
        parallel_to_ideal(ParallelForm(proportional=2.0, integral=0.0)).integral_time
        == math.inf
    )


def test_units_of_settings():
    # common practice: PB = 100/Kc, repeats per minute = 60/Ti, gain times the ratio of spans
    assert proportional_band(2.5) == 40.0
    assert gain_from_proportional_band(40.0) == 2.5
    assert repeats_per_minute(120.0) == 0.5
    assert integral_time_from_repeats(0.5) == 120.0
    assert repeats_per_second(120.0) == pytest.approx(1 / 120)
    assert gain_engineering(3.0, pv_span=1.5, output_span=100.0) == 200.0  # % of stroke per m
    assert gain_from_engineering(200.0, pv_span=1.5, output_span=100.0) == 3.0
