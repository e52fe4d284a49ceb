"""The linear prediction engine: order of events, limits, modes, refusals."""

from __future__ import annotations

import math

import numpy as np
import pytest

from harness.analysis.linear import (
    ScanSchedule,
    design_target,
    design_target_load,
    lag_propagator,
    predict_continuous,
    predict_sampled,
)
from harness.controllers.block import AUTOMATIC, MANUAL
from harness.domain.models import ControlLaw, ControllerSettings, LagModel, LoopModels
from harness.domain.rig import Action
from harness.errors import ModelError, UsageError

MODEL = LagModel(gain=1.5, time_constants=(20.0, 12.0), dead_time=3.0)
LOAD = LagModel(gain=0.6, time_constants=(15.0,), dead_time=0.0)
SETTINGS = ControllerSettings(gain=1.2, integral_time=25.0, action=Action.REVERSE)


def _predict(rows=400, *, models=None, settings=SETTINGS, schedule=None, tick=0.5, **others):
    fill = {
        "setpoint": 0.5, "load": 0.4, "mode": AUTOMATIC, "manual": 0.3, "low": 0.0, "high": 1.0,
        "pv": 0.5, "initial_load": None, "initial_setpoint": None,
    } | others  # fmt: skip
    return predict_sampled(
        models or LoopModels(output=MODEL, load=LOAD),
        settings,
        schedule or ScanSchedule(scan_ticks=2),
        tick,
        np.broadcast_to(fill["setpoint"], rows),
        np.broadcast_to(fill["load"], rows),
        np.broadcast_to(fill["mode"], rows),
        np.broadcast_to(fill["manual"], rows),
        0.3,
        fill["pv"],
        fill["low"],
        fill["high"],
        initial_load=fill["initial_load"],
        initial_setpoint=fill["initial_setpoint"],
    )


def test_a_steady_loop_stays_where_it_is():
    response, output = _predict()
    np.testing.assert_allclose(response, 0.5, rtol=0, atol=1e-15)
    np.testing.assert_allclose(output, 0.3, rtol=0, atol=1e-15)


def test_a_p_block_may_stand_off_its_setpoint():
    proportional = ControllerSettings(gain=1.2, integral_time=None, action=Action.REVERSE)
    response, output = _predict(settings=proportional, setpoint=0.55, initial_setpoint=0.55)
    np.testing.assert_allclose(response, 0.5, rtol=0, atol=1e-15)
    np.testing.assert_allclose(output, 0.3, rtol=0, atol=1e-15)


def test_output_moves_at_its_scan_plus_the_delay():
    rows = 40
    setpoint = np.where(np.arange(rows) >= 7, 0.6, 0.5)
    schedule = ScanSchedule(scan_ticks=4, phase_ticks=1, delay_ticks=2)
    _, output = _predict(rows, schedule=schedule, setpoint=setpoint)
    moved = np.flatnonzero(np.diff(output)) + 1
    # scans at 1, 5, 9, 13 ...: the first that sees the new setpoint is 9, its output acts from 11
    assert moved[0] == 11
    assert set((moved - 2) % 4) == {1}


def test_dead_time_is_exact_to_a_fraction_of_a_tick():
    model = LagModel(gain=2.0, time_constants=(10.0,), dead_time=1.3)
    rows = 60
    manual = np.where(np.arange(rows) >= 4, 0.4, 0.3)
    response, _ = _predict(
        rows,
        models=LoopModels(output=model, load=LOAD),
        schedule=ScanSchedule(scan_ticks=1),
        mode=MANUAL,
        manual=manual,
    )
    since = np.maximum(0.5 * np.arange(rows) - 4 * 0.5 - 1.3, 0.0)
    np.testing.assert_allclose(
        response, 0.5 - 0.2 * np.expm1(-since / 10.0), rtol=0, atol=1e-14
    )


def test_load_in_row_zero_needs_the_load_before_it():
    stepped, _ = _predict(load=0.5, initial_load=0.4)
    quiet, _ = _predict(load=0.5)
    assert stepped[1] > 0.5
    np.testing.assert_allclose(quiet, 0.5, rtol=0, atol=1e-15)


def test_direct_action_is_reverse_action_on_a_process_of_negative_gain():
    mirrored = LagModel(gain=-1.5, time_constants=MODEL.time_constants, dead_time=3.0)
    direct = ControllerSettings(gain=1.2, integral_time=25.0, action=Action.DIRECT)
    up, output_up = _predict(setpoint=0.55)
    down, output_down = _predict(
        setpoint=0.55, settings=direct, models=LoopModels(output=mirrored, load=LOAD)
    )
    np.testing.assert_allclose(down, up, rtol=0, atol=1e-14)
    np.testing.assert_allclose(output_down - 0.3, 0.3 - output_up, rtol=0, atol=1e-14)


def test_limits_hold_and_the_block_does_not_wind_up():
    rows = 1200
    setpoint = np.where(np.arange(rows) < 600, 0.9, 0.5)
    response, output = _predict(rows, setpoint=setpoint, low=0.1, high=0.45)
    assert output.max() == pytest.approx(0.45)
    assert output[599] == pytest.approx(0.45)
    assert response[599] == pytest.approx(0.5 + 1.5 * 0.15, abs=1e-4)
    assert output[600] < 0.45  # leaves the limit at the first scan after the setpoint returns


def test_transfer_to_automatic_is_bumpless():
    rows = 300
    mode = np.where(np.arange(rows) < 100, MANUAL, AUTOMATIC)
    response, output = _predict(rows, mode=mode, manual=0.34, setpoint=0.56, tick=0.5)
    at_transfer = abs(output[100] - output[99])
    error = 0.56 - response[100]
    assert at_transfer <= 1.2 * (1.0 / 25.0) * abs(error) + 1.2 * abs(
        response[100] - response[98]
    )


def test_ticks_inside_a_scan_refine_and_do_not_change_the_samples():
    coarse, _ = _predict(201, schedule=ScanSchedule(scan_ticks=1), tick=1.0, setpoint=0.55)
    fine, _ = _predict(2001, schedule=ScanSchedule(scan_ticks=10), tick=0.1, setpoint=0.55)
    np.testing.assert_allclose(fine[::10], coarse, rtol=0, atol=1e-13)


def test_nearly_equal_lags_are_continuous_with_equal_ones():
    equal = lag_propagator((7.0, 7.0), 2.0)
    assert lag_propagator((7.0, 7.0 * (1 + 1e-9)), 2.0) == pytest.approx(equal, rel=1e-8)
    rate = 2.0 / 7.0
    assert equal == pytest.approx(
        (math.exp(-rate), rate * math.exp(-rate), math.exp(-rate)), rel=1e-14
    )


def test_a_tiny_second_lag_does_not_overflow():
    assert lag_propagator((100.0, 1e-4), 60.0) == pytest.approx(
        (math.exp(-0.6), math.exp(-0.6) / (1 - 1e-6), 0.0), rel=1e-9
    )


@pytest.mark.parametrize("lags", [(), (0.0,), (-1.0, 2.0), (3.0, 2.0, 1.0)])
def test_impossible_lags_are_refused(lags):
    with pytest.raises(ModelError, match="time constants"):
        lag_propagator(lags, 1.0)


def test_bad_calls_are_refused():
    with pytest.raises(UsageError, match="scan"):
        ScanSchedule(scan_ticks=0)
    with pytest.raises(UsageError, match="delay"):
        ScanSchedule(scan_ticks=1, delay_ticks=-1)
    with pytest.raises(UsageError, match="tick"):
        _predict(tick=0.0)
    late = LagModel(gain=1.0, time_constants=(1.0,), dead_time=-1.0)
    with pytest.raises(ModelError, match="dead time"):
        _predict(models=LoopModels(output=late, load=LOAD))
    with pytest.raises(UsageError, match="load"):
        predict_sampled(
            LoopModels(output=MODEL, load=LOAD), SETTINGS, ScanSchedule(scan_ticks=1), 1.0,
            np.ones(3), np.ones(4), np.ones(3, dtype=np.int64), np.ones(3), 0.0, 0.0, 0.0, 1.0,
        )  # fmt: skip
    with pytest.raises(UsageError, match="load path"):
        predict_continuous(MODEL, SETTINGS, np.ones(2), load_step=1.0)


def test_continuous_mode_is_at_rest_before_time_zero():
    response = predict_continuous(
        MODEL, SETTINGS, np.array([-5.0, -1e-9, 0.0, 1.0]), setpoint_step=1.0
    )
    np.testing.assert_array_equal(response.process_variable, np.zeros(4))
    np.testing.assert_allclose(response.output, [0.0, 0.0, 1.2, 1.2 + 1.2 / 25.0])


def test_continuous_mode_is_linear():
    times = np.linspace(0.0, 200.0, 401)
    both = predict_continuous(
        MODEL, SETTINGS, times, setpoint_step=0.3, input_step=-0.2, load=LOAD, load_step=0.5
    )
    parts = [
        predict_continuous(MODEL, SETTINGS, times, setpoint_step=0.3),
        predict_continuous(MODEL, SETTINGS, times, input_step=-0.2),
        predict_continuous(MODEL, SETTINGS, times, load=LOAD, load_step=0.5),
    ]
    np.testing.assert_allclose(
        both.process_variable, sum(part.process_variable for part in parts), atol=1e-13
    )
    np.testing.assert_allclose(both.output, sum(part.output for part in parts), atol=1e-13)


def test_design_target_of_pi_is_the_lag_asked_for():
    times = np.array([0.0, 3.0, 13.0])
    np.testing.assert_allclose(
        design_target(MODEL, 10.0, times, step=0.05), [0.0, 0.0, 0.05 * (1 - math.exp(-1))]
    )


def test_design_target_of_p_stops_short_of_the_setpoint():
    lag = LagModel(gain=1.6, time_constants=(100.0,), dead_time=0.0)
    gain = (100.0 / 40.0 - 1.0) / 1.6
    times = np.linspace(0.0, 400.0, 81)
    closed = predict_continuous(
        lag,
        ControllerSettings(gain=gain, integral_time=None, action=Action.REVERSE),
        times,
        setpoint_step=1.0,
    )
    np.testing.assert_allclose(
        design_target(lag, 40.0, times, law=ControlLaw.P), closed.process_variable, atol=1e-12
    )


def test_design_target_of_a_load_comes_back():
    times = np.linspace(0.0, 500.0, 501)
    response = design_target_load(MODEL, LOAD, SETTINGS, times, step=0.1)
    assert response.max() > 0.005
    assert abs(response[-1]) < 1e-4


def test_impossible_design_targets_are_refused():
    with pytest.raises(UsageError, match="closed-loop time"):
        design_target(MODEL, 0.0, np.ones(2))
    with pytest.raises(ModelError, match="one lag"):
        design_target(MODEL, 5.0, np.ones(2), law=ControlLaw.P)
