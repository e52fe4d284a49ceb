"""Clocks: the one object that a loop asks for the time and for waiting.

Everything else in the house is told the time. A clock counts nanoseconds from a zero of its
own; the times of the ticks on it are worked out from an integer tick (`TickSchedule`), so that
no rounding error piles up.
"""

from __future__ import annotations

import ctypes
import sys
import threading
import time
from collections import deque
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Protocol

from harness.errors import UsageError

NS_PER_S = 1_000_000_000

_SLICE_NS = 50_000_000  # longest sleep without a look at the stop request [ns]
_PR_SET_TIMERSLACK = 29  # prctl(2), linux/prctl.h
_LARGEST_DENOMINATOR = 1_000_000  # of periods and paces: whole microseconds are exact [-]


class Clock(Protocol):
    """What a loop needs of time."""

    def now_ns(self) -> int:
        """Return the time on this clock [ns]."""
        ...

    def wait_until(self, deadline_ns: int) -> int:
        """Wait for a time on this clock.

        Parameters
        ----------
        deadline_ns : int
            Time to wait for [ns].

        Returns
        -------
        int
            Lateness at return; negative when a stop request cut the wait short [ns].
        """
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class TickSchedule:
    """Times of the ticks on a clock: tick k is due at ``start + k * period / pace``.

    Parameters
    ----------
    start_ns : int
        Time of tick 0 on the clock [ns].
    period : float
        Plant time from tick to tick [s].
    pace : float
        Plant seconds per second of the clock [-].
    first_tick : int
        Tick that is due at ``start_ns`` [ticks].

    Raises
    ------
    UsageError
        When the period or the pace is not positive.
    """

    start_ns: int
    period: float
    pace: float = 1.0
    first_tick: int = 0
    _interval: tuple[int, int] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        if not (self.period > 0.0 and self.pace > 0.0):
            raise UsageError(
                f"schedule: period {self.period} s and pace {self.pace} must both be positive; "
                "virtual time is a clock of its own, not a pace"
            )
        interval = _exact(self.period) * NS_PER_S / _exact(self.pace)
        object.__setattr__(self, "_interval", interval.as_integer_ratio())

    def deadline_ns(self, tick: int) -> int:
        """Return when a tick is due [ns].

        Parameters
        ----------
        tick : int
            Tick [ticks].
        """
        numerator, denominator = self._interval
        return self.start_ns + (tick - self.first_tick) * numerator // denominator

    def tick_at(self, now_ns: int) -> int:
        """Return the latest tick that is due at a time [ticks].

        Parameters
        ----------
        now_ns : int
            Time on the clock [ns].
        """
        numerator, denominator = self._interval
        # The exact inverse of a deadline's rounding down to whole nanoseconds.
        return self.first_tick + ((now_ns - self.start_ns + 1) * denominator - 1) // numerator


def _exact(number: float) -> Fraction:
    """Return the fraction that was meant: 0.1 is a tenth, not the float nearest to it."""
    return Fraction(number).limit_denominator(_LARGEST_DENOMINATOR) or Fraction(number)


class VirtualClock:
    """A clock that never waits: its time is the latest that was asked for.

    Parameters
    ----------
    start_ns : int
        Time at the start [ns].
    """

    def __init__(self, start_ns: int = 0) -> None:
        self._now_ns = start_ns

    def now_ns(self) -> int:
        """Return the time on this clock [ns]."""
        return self._now_ns

    def wait_until(self, deadline_ns: int) -> int:
        """Take the time to be the deadline; see `Clock.wait_until`."""
        self._now_ns = max(self._now_ns, deadline_ns)
        return 0


class PacedClock:
    """The computer's own clock, ``perf_counter_ns``.

    Sleeps are to an absolute deadline. Make the object in the thread that waits on it: the
    grain of sleeping is set for that thread. A stop request, from a signal handler or from
    another thread, ends a wait within 50 ms.

    Parameters
    ----------
    spin_ns : int
        Last part of a wait that is spent looking at the clock in place of sleeping. It costs
        a processor that share of the time; 200,000 brings the lateness from some 20 to below
        1 microsecond at the median [ns].
    """

    def __init__(self, spin_ns: int = 0) -> None:
        self._spin_ns = spin_ns
        self._stop = threading.Event()
        sharpen_sleep()

    @property
    def stopped(self) -> bool:
        """Return whether a stop was asked for."""
        return self._stop.is_set()

    def stop(self) -> None:
        """Ask that the present wait and all later ones return at once."""
        self._stop.set()

    def now_ns(self) -> int:
        """Return the time on this clock [ns]."""
        return time.perf_counter_ns()

    def wait_until(self, deadline_ns: int) -> int:
        """Sleep until the deadline; see `Clock.wait_until`."""
        while not self._stop.is_set():
            left = deadline_ns - self._spin_ns - time.perf_counter_ns()
            if left <= 0:
                break
            time.sleep(min(left, _SLICE_NS) / NS_PER_S)
        else:
            return time.perf_counter_ns() - deadline_ns
        while (now_ns := time.perf_counter_ns()) < deadline_ns:
            pass
        return now_ns - deadline_ns


class HandClock:
    """A clock that a test drives; it does not wait.

    A wait moves the time to its deadline, plus the lateness that the test has put up for it.

    Parameters
    ----------
    start_ns : int
        Time at the start [ns].

    Attributes
    ----------
    deadlines : list of int
        Every deadline that was waited for, in order [ns].
    """

    def __init__(self, start_ns: int = 0) -> None:
        self._now_ns = start_ns
        self._late: deque[int] = deque()
        self.deadlines: list[int] = []

    def advance(self, by_ns: int) -> None:
        """Let time pass, as if work had taken it.

        Parameters
        ----------
        by_ns : int
            Time to pass [ns].
        """
        self._now_ns += by_ns

    def late_by(self, *lateness_ns: int) -> None:
        """Make the coming waits late, one after the other.

        Parameters
        ----------
        *lateness_ns : int
            Lateness of each coming wait [ns].
        """
        self._late.extend(lateness_ns)

    def now_ns(self) -> int:
        """Return the time on this clock [ns]."""
        return self._now_ns

    def wait_until(self, deadline_ns: int) -> int:
        """Move to the deadline and the lateness put up for it; see `Clock.wait_until`."""
        self.deadlines.append(deadline_ns)
        late_ns = self._late.popleft() if self._late else 0
        self._now_ns = max(self._now_ns, deadline_ns + late_ns)
        return self._now_ns - deadline_ns


def sharpen_sleep() -> bool:
    """Ask the system for the finest grain of sleeping for this thread.

    Linux lets a sleep end up to 50 microseconds late to save wake-ups (timer slack, prctl(2));
    this asks for 1 ns and needs no privilege. Elsewhere there is nothing to ask for: Python's
    sleep already takes the high-resolution timer on Windows.

    Returns
    -------
    bool
        Whether the system took it.
    """
    if not sys.platform.startswith("linux"):
        return False
    try:
        library = ctypes.CDLL(None, use_errno=True)
        return bool(library.prctl(_PR_SET_TIMERSLACK, ctypes.c_ulong(1), 0, 0, 0) == 0)
    except (OSError, AttributeError):  # a libc without prctl: sleeping is only coarser
        return False
