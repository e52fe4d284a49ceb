"""What the soft PLC computes in a scan: from readings to writes."""

from __future__ import annotations

import dataclasses
import math

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from harness.domain.points import points_of
from harness.domain.rig import Action
from harness.domain.signals import Quality
from harness.errors import UsageError
from harness.links.client import Reading
from harness.runtime.plc_block import (
    SoftPlcFaults,
    hold,
    is_silent,
    program_of,
    scan_once,
    take_over,
    writes_of,
)

SPAN = 1.5  # of LT-2 [m]
MANUAL, AUTOMATIC = 0.0, 1.0


@pytest.fixture
def program(two_tanks):
    rig = two_tanks()
    return program_of(rig.loops[0], points_of(rig, external=True))


def with_faults(program, **faults):
    return dataclasses.replace(program, faults=SoftPlcFaults(**faults))


def readings(level=0.5, setpoint=0.5, mode=AUTOMATIC, **changes):
    """Readings by point, the level and the setpoint as fractions of span."""
    values = {
        "LT-2": level * SPAN,
        "LIC-2.SP": setpoint * SPAN,
        "LIC-2.MODE": mode,
        "LIC-2.MO": 40.0,
        "LIC-2.KC": 2.0,
        "LIC-2.TI": 10.0,
        "FV-1": 55.0,
        "TICK": 7.0,
    } | changes
    return {
        name: value
        if isinstance(value, Reading)
        else Reading(value=value, quality=Quality.GOOD)
        for name, value in values.items()
    }


BAD = Reading(value=math.nan, quality=Quality.BAD)


def run(program, state, *scans):
    """Return the outputs of a row of scans."""
    outputs = []
    for each in scans:
        state = scan_once(program, state, each)
        outputs.append(state.output)
    return outputs


def test_it_takes_over_the_command_that_stands(program):
    state = take_over(program, readings())
    assert state.output == 0.55
    # in automatic: only the integral moves it from there, Kc * T / Ti * e
    (output,) = run(program, state, readings(level=0.4))
    assert output == pytest.approx(0.55 + 2.0 * 1.0 / 10.0 * 0.1, abs=1e-12)


@pytest.mark.parametrize("unreadable", ["FV-1", "LIC-2.SP", "LIC-2.KC"])
def test_it_does_not_begin_before_command_and_orders_can_be_read(program, unreadable):
    assert take_over(program, readings(**{unreadable: BAD})) is None


def test_its_outputs_are_those_of_the_velocity_form(program):
    """Increment Kc (e - e' + T/Ti e): the form in common practice, equal between the limits."""
    errors = [0.0, 0.1, 0.1, 0.02, -0.05, -0.01, 0.0]
    state = take_over(program, readings())
    expected, before, output = [], 0.0, 0.55
    for error in errors:
        output += 2.0 * (error - before + 1.0 / 10.0 * error)
        before = error
        expected.append(output)
    scans = [readings(level=0.5 - error) for error in errors]
    assert run(program, state, *scans) == pytest.approx(expected, abs=1e-12)


def test_manual_follows_the_order_and_automatic_begins_without_a_bump(program):
    state = take_over(program, readings(mode=MANUAL))
    state = scan_once(program, state, readings(level=0.3, mode=MANUAL))
    assert state.output == pytest.approx(0.40, abs=1e-15)
    (output,) = run(program, state, readings(level=0.3, **{"LIC-2.TI": 0.0}))
    assert output == pytest.approx(0.40, abs=1e-12)


def test_an_integral_time_of_zero_is_none(program):
    state = take_over(program, readings())
    scans = [readings(level=0.4, **{"LIC-2.TI": 0.0})] * 50
    assert run(program, state, *scans) == pytest.approx([0.55] * 50, abs=1e-12)


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture])  # it never changes
@given(
    error=st.floats(-0.2, 0.2), gain=st.floats(0.0, 20.0), integral_time=st.floats(100.0, 1e4)
)
def test_settings_that_change_in_automatic_do_not_bump(program, error, gain, integral_time):
    state = take_over(program, readings())
    state = scan_once(program, state, readings(level=0.5 - error))
    before = state.output
    settings = {"LIC-2.KC": gain, "LIC-2.TI": integral_time}
    (output,) = run(program, state, readings(level=0.5 - error, **settings))
    step = gain / integral_time * error  # one scan's share of the integral is no bump
    assert output == pytest.approx(min(max(before + step, 0.0), 1.0), abs=1e-9)


def test_a_bad_input_holds_the_output_and_it_goes_on_from_there(program):
    state = take_over(program, readings())
    state = scan_once(program, state, readings(level=0.45))
    held = state.output
    for _ in range(20):
        state = scan_once(program, state, readings(**{"LT-2": BAD}))
        assert state.output == held
    (output,) = run(program, state, readings(level=0.2))
    assert output == pytest.approx(held + 2.0 / 10.0 * 0.3, abs=1e-12)


def test_a_number_of_bad_quality_is_not_believed(program):
    state = take_over(program, readings())
    stuck = Reading(value=0.0, quality=Quality.BAD)
    assert run(program, state, readings(**{"LT-2": stuck})) == [0.55]


def test_orders_that_cannot_be_read_stay_as_they_were(program):
    state = take_over(program, readings(mode=MANUAL))
    state = scan_once(program, state, readings(mode=MANUAL))
    scans = [readings(mode=MANUAL, **{"LIC-2.MO": 90.0, "LIC-2.TI": BAD})] * 2
    assert run(program, state, *scans) == pytest.approx([0.40, 0.40], abs=1e-15)


def test_after_missed_scans_it_goes_on_from_its_output(program):
    state = take_over(program, readings())
    state = hold(scan_once(program, state, readings()))
    (output,) = run(program, state, readings(level=0.1))
    assert output == pytest.approx(0.55 + 2.0 / 10.0 * 0.4, abs=1e-12)


def test_a_direct_loop_opens_the_valve_when_the_level_is_too_high(two_tanks):
    rig = two_tanks()
    loop = dataclasses.replace(rig.loops[0], action=Action.DIRECT)
    direct = program_of(loop, points_of(rig, external=True))
    state = take_over(direct, readings())
    low, high = run(direct, state, readings(), readings(level=0.6))
    assert (low, high) == pytest.approx((0.55, 0.55 + 2.0 * 0.1 * 1.1), abs=1e-12)


def test_what_it_writes_is_in_the_points_units_and_the_heartbeat_goes_round(program):
    state = take_over(program, readings())
    assert writes_of(program, dataclasses.replace(state, scans=65_535), readings()) == {
        "FV-1": pytest.approx(55.0),
        "LIC-2.HB": 65_535.0,
    }
    assert (
        writes_of(program, dataclasses.replace(state, scans=65_536), readings())["LIC-2.HB"]
        == 0.0
    )


def test_it_asks_for_everything_it_uses(program):
    assert set(readings()) == set(program.reads)


def test_the_output_stays_within_its_limits_and_does_not_wind_up(two_tanks):
    rig = two_tanks()
    loop = dataclasses.replace(rig.loops[0], output_low=0.1, output_high=0.8)
    limited = program_of(loop, points_of(rig, external=True))
    state = take_over(limited, readings())
    for _ in range(500):
        state = scan_once(limited, state, readings(level=0.45))
    assert 0.79 < state.output <= 0.8  # within one scan's increment of the limit
    (output,) = run(limited, state, readings(level=0.6))
    # 500 scans of 0.01 above the limit would take 250 scans to unwind
    assert output == pytest.approx(state.output - 2.0 * 0.15 - 0.02, abs=0.01)


def test_a_scan_of_nothing_and_a_loop_without_its_point_are_refused(two_tanks):
    rig = two_tanks()
    points = points_of(rig, external=True)
    with pytest.raises(UsageError, match="must be positive"):
        program_of(rig.loops[0], points, scan=0.0)
    with pytest.raises(UsageError, match="LT-2 is not among"):
        program_of(rig.loops[0], points[-1:])


class TestReadBacks:
    """It tells what it has, where its link has a place for it."""

    SHOWN = ("LT-1", "LT-2", "LT-2.RB", "LT-1.RB", "LIC-2.SP.RB", "LIC-2.MODE.RB")

    @pytest.fixture
    def telling(self, two_tanks):
        rig = two_tanks()
        return program_of(rig.loops[0], points_of(rig, external=True), shown=self.SHOWN)

    def test_a_link_without_places_is_told_nothing(self, program):
        assert program.echoes == ()

    def test_it_reads_what_it_tells(self, telling):
        assert set(telling.echoes) == {"LT-1", "LT-2", "LIC-2.SP", "LIC-2.MODE"}
        assert telling.reads.count("LT-2") == 1
        assert "LT-1" in telling.reads

    def test_values_as_read_and_orders_as_in_effect(self, telling):
        seen = readings(level=0.3, setpoint=0.4, **{"LT-1": 0.9})
        state = scan_once(telling, take_over(telling, seen), seen)
        backs = {
            name: value
            for name, value in writes_of(telling, state, seen).items()
            if name.endswith(".RB")
        }
        assert backs == pytest.approx(
            {"LT-2.RB": 0.45, "LT-1.RB": 0.9, "LIC-2.SP.RB": 0.6, "LIC-2.MODE.RB": 1.0}
        )

    def test_a_broken_wire_has_no_number_to_tell(self, telling):
        broken = Reading(value=math.nan, quality=Quality.BAD)
        seen = readings(**{"LT-1": 0.9})
        state = scan_once(telling, take_over(telling, seen), seen)
        seen = readings(**{"LT-1": broken})
        assert "LT-1.RB" not in writes_of(telling, state, seen)


class TestMistakesOnPurpose:
    """Each mistake does what it says, for the checker to find."""

    def test_gain_and_integral_time(self, program):
        wrong = with_faults(program, gain_factor=2.0, integral_time_factor=4.0)
        state = take_over(wrong, readings())
        scans = [readings(), readings(level=0.4)]
        right = [0.55, 0.55 + 2.0 * 0.1 * (1 + 1 / 10)]
        assert run(program, state, *scans)[0] == right[0]
        assert run(wrong, state, *scans) == pytest.approx(
            [0.55, 0.55 + 4.0 * 0.1 * (1 + 1 / 40)], abs=1e-12
        )

    def test_reversed_action(self, program):
        wrong = with_faults(program, reversed_action=True)
        state = take_over(wrong, readings())
        assert run(wrong, state, readings(), readings(level=0.4))[1] == pytest.approx(
            0.55 - 2.0 * 0.1 * 1.1, abs=1e-12
        )

    def test_bias_of_the_output_on_its_way_out_only(self, program):
        wrong = with_faults(program, output_bias=0.1)
        state = take_over(wrong, readings())
        assert writes_of(wrong, state, readings())["FV-1"] == pytest.approx(65.0)
        top = dataclasses.replace(state, output=0.95)
        assert writes_of(wrong, top, readings())["FV-1"] == 100.0

    def test_freeze_with_the_heartbeat_alive(self, program):
        wrong = with_faults(program, freeze_after=3.0)
        state = take_over(wrong, readings())
        outputs, beats = [], []
        for _ in range(6):
            state = scan_once(wrong, state, readings(level=0.4))
            outputs.append(state.output)
            beats.append(writes_of(wrong, state, readings())["LIC-2.HB"])
        assert outputs[0] < outputs[1] < outputs[2]
        assert outputs[2:] == [outputs[2]] * 4
        assert beats == [1, 2, 3, 4, 5, 6]

    def test_silence(self, program):
        wrong = with_faults(program, silent_after=2.0)
        state = take_over(wrong, readings())
        assert not is_silent(wrong, state)
        state = scan_once(wrong, scan_once(wrong, state, readings()), readings())
        assert is_silent(wrong, state)
        assert not is_silent(program, state)
