"""Clocks and the times of ticks; no test here waits."""

from __future__ import annotations

from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from harness.errors import UsageError
from harness.runtime.clock import HandClock, PacedClock, TickSchedule, VirtualClock


def test_tick_times_come_from_the_integer_so_that_no_error_piles_up() -> None:
    schedule = TickSchedule(start_ns=7, period=0.1)
    assert schedule.deadline_ns(864_000 * 365) == 7 + 86_400 * 365 * 1_000_000_000


def test_pace_divides_the_wall_time_between_ticks() -> None:
    # 0.5 s of plant at 60 plant seconds a second: 8.333... ms, rounded down, never adding up
    schedule = TickSchedule(start_ns=0, period=0.5, pace=60.0)
    assert [schedule.deadline_ns(k) for k in range(4)] == [
        0,
        8_333_333,
        16_666_666,
        25_000_000,
    ]
    assert schedule.deadline_ns(7_200) == 60 * 1_000_000_000


def test_a_schedule_may_begin_at_a_later_tick() -> None:
    schedule = TickSchedule(start_ns=1_000, period=1e-6, first_tick=50)
    assert schedule.deadline_ns(50) == 1_000
    assert schedule.deadline_ns(52) == 3_000


@given(
    tick=st.integers(0, 10**9),
    period_ms=st.integers(1, 60_000),
    pace=st.sampled_from([0.05, 0.1, 1.0, 3.0, 7.5, 60.0, 1000.0]),
    start_ns=st.integers(0, 10**15),
)
def test_tick_at_is_the_inverse_of_the_deadline(
    tick: int, period_ms: int, pace: float, start_ns: int
) -> None:
    schedule = TickSchedule(start_ns=start_ns, period=period_ms / 1000, pace=pace)
    due = schedule.deadline_ns(tick)
    assert schedule.tick_at(due) == tick
    assert schedule.tick_at(due - 1) == tick - 1
    exact = start_ns + tick * Fraction(period_ms, 1000) * 10**9 / Fraction(str(pace))
    assert 0 <= exact - due < 1


@pytest.mark.parametrize(
    ("period", "pace"), [(0.0, 1.0), (-1.0, 1.0), (0.5, 0.0), (0.5, float("nan"))]
)
def test_a_schedule_that_never_moves_is_refused(period: float, pace: float) -> None:
    with pytest.raises(UsageError, match="must both be positive"):
        TickSchedule(start_ns=0, period=period, pace=pace)


def test_the_virtual_clock_is_where_it_was_asked_to_be_and_never_late() -> None:
    clock = VirtualClock(start_ns=5)
    assert clock.wait_until(3_600 * 10**9) == 0
    assert clock.now_ns() == 3_600 * 10**9
    assert clock.wait_until(10) == 0
    assert clock.now_ns() == 3_600 * 10**9


def test_the_hand_clock_is_late_when_work_took_longer_or_the_test_says_so() -> None:
    clock = HandClock()
    assert clock.wait_until(100) == 0
    clock.advance(250)
    assert clock.wait_until(200) == 150
    clock.late_by(7, 0)
    assert clock.wait_until(400) == 7
    assert clock.wait_until(500) == 0
    assert clock.deadlines == [100, 200, 400, 500]


def test_a_paced_wait_for_the_past_returns_at_once_and_says_how_late_it_is() -> None:
    clock = PacedClock()
    now_ns = clock.now_ns()
    assert clock.wait_until(now_ns - 10**9) >= 10**9


def test_a_stopped_clock_does_not_wait_and_says_that_it_came_early() -> None:
    clock = PacedClock()
    clock.stop()
    assert clock.stopped
    assert clock.wait_until(clock.now_ns() + 3_600 * 10**9) < -3_599 * 10**9
