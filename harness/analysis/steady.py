"""When a phase is over: a variance-ratio test turned into a bound on the change still to come.

The series is thinned to means over about a twenty-fifth of the dominant time constant: at tick
rate a transient barely moves between samples, so that the usual test takes it for noise and
fires early. On the thinned series the excess of the sample variance over half the mean square
successive difference is signal, whatever the noise (J. von Neumann, *Distribution of the ratio
of the mean square successive difference to the variance*, Ann. Math. Stat. 12:367-395, 1941; as
test of steady state S. Cao & R. R. Rhinehart, J. Process Control 5(6):363-374, 1995; both from
memory). A transient that dies with the dominant time constant, somewhat stretched, has a known
excess per unit of what remains; the upper confidence limit of the excess so bounds the rest.
It bounds no drift that the prediction does not know of, nor a tail more than 1.3 times slower
than predicted. A lasting swing of more than the bound is refused where it stands out of the noise.
"""

from __future__ import annotations

import math
from statistics import NormalDist

import numpy as np
from numpy.typing import NDArray

from harness.domain.trial import SteadyRule
from harness.errors import DataError, UsageError

_WINDOWS = (
    3.0,
    4.0,
    5.0,
    6.0,
)  # dominant time constants; the shortest that resolves the bound serves
_STRETCH = (
    1.3  # the tail may be this much slower than predicted; two equal lags are 1.2 at 5 tau
)
_SWING_WINDOW = 1.5  # dominant time constants in which a lasting swing is looked for
_NOISE_SHARE = 0.5  # a window resolves the bound when its noise takes at most this part of it
_PERSISTENCE = (
    0.5  # time over which the bound must hold without a break [dominant time constants]
)
_FEWEST = 20  # thinned samples in the shortest window; below, its variances say too little
_TAIL_START = 0.1  # the tail of a prediction begins where this part of its peak is left
_TAIL_END = 0.01  # and a prediction is long enough when it ends below this part


class _Window:
    """A window of thinned samples and what a transient leaves in it."""

    def __init__(self, length: float, spacing: float) -> None:
        self.count = max(3, round(length / spacing))
        before_end = spacing * np.arange(self.count)
        shape = np.exp(before_end / _STRETCH)
        self.excess_per_square = float(np.sum((shape - shape.mean()) ** 2))

    def excess(
        self, series: NDArray[np.float64], cap: float | None, quantile: float
    ) -> tuple[float, float, float]:
        """Return the excess sum of squares, its doubt, and the part of it that noise alone makes."""
        count = self.count
        window = series[-count:]
        variance = float(np.sum(np.diff(window) ** 2)) / (2.0 * (count - 1))
        if cap is not None:
            # The estimate from differences scatters by sqrt(3 / n) of itself.
            variance = min(variance, cap * (1.0 + quantile * math.sqrt(3.0 / count)))
        total = float(np.sum((window - window.mean()) ** 2))
        excess = max(0.0, total - (count - 1) * variance)
        # The variance ratio scatters by 1 / sqrt(n); signal times noise adds the second part.
        from_noise = quantile * math.sqrt(count) * variance
        doubt = from_noise + quantile * 2.0 * math.sqrt(variance * excess)
        return excess, doubt, from_noise


class SteadyDetector:
    """Watches one phase and says when it is steady.

    Once steady it stays so; what it says does not depend on how the values are cut into calls.

    Parameters
    ----------
    rule : SteadyRule
        Dwell, bound, confidence and thinning.
    tick : float
        Time between values [s].
    dominant_time : float
        Predicted dominant time constant of the phase's response; ``tail_time_constant`` of a
        prediction serves [s].
    step_effect : float
        Size of the phase's effect on the values, of which the remaining change must be a small
        part: change of the setpoint, or predicted change or peak deviation [unit of the values].
    noise : float or None
        Standard deviation of the values' white noise at tick rate, if known: more than that is
        then not taken for noise. None takes whatever the successive differences show
        [unit of the values].

    Raises
    ------
    UsageError
        When a time or the effect is not positive, or the tick is too coarse for the test.
    """

    def __init__(
        self,
        rule: SteadyRule,
        tick: float,
        dominant_time: float,
        step_effect: float,
        noise: float | None = None,
    ) -> None:
        for name, value in (
            ("tick", tick),
            ("dominant time", dominant_time),
            ("step effect", abs(step_effect)),
        ):
            if not (math.isfinite(value) and value > 0.0):
                raise UsageError(f"steady state: a {name} of {value}; it must be positive")
        self._per_sample = max(1, round(rule.thinning * dominant_time / tick))
        spacing = self._per_sample * tick / dominant_time
        self._windows = tuple(_Window(length, spacing) for length in _WINDOWS)
        if self._windows[0].count < _FEWEST:
            raise UsageError(
                f"steady state: {self._windows[0].count} samples in {_WINDOWS[0]:g} dominant "
                f"time constants of {dominant_time:g} s; at least {_FEWEST} are needed: take a "
                "finer tick or thinning"
            )
        self._swing_window = _Window(_SWING_WINDOW, spacing)
        self._rule = rule
        self._spacing = spacing
        self._limit = rule.remaining * abs(step_effect)
        self._effect = abs(step_effect)
        self._cap = None if noise is None else noise**2 / self._per_sample
        self._quantile = NormalDist().inv_cdf(rule.confidence)
        self._needed = max(1, round(_PERSISTENCE / spacing))
        self._partial: list[float] = []
        self._series: list[float] = []
        self._passes = 0
        self._steady_tick: int | None = None
        self._remaining: float | None = None
        self._reason = "no values yet"

    def feed(self, values: NDArray[np.float64]) -> None:
        """Take the next values, one per tick.

        Parameters
        ----------
        values : ndarray, shape (n,)
            The process variable [unit of the step effect].

        Raises
        ------
        DataError
            When a value is not finite.
        """
        fresh = np.asarray(values, dtype=np.float64)
        if not np.isfinite(fresh).all():
            raise DataError("steady state: a value that is not finite; feed good values only")
        for value in fresh.tolist():
            if self._steady_tick is not None:
                return
            self._partial.append(value)
            if len(self._partial) == self._per_sample:
                self._series.append(math.fsum(self._partial) / self._per_sample)
                self._partial.clear()
                self._look()

    def _look(self) -> None:
        """Judge the thinned series as it now stands."""
        elapsed = len(self._series) * self._spacing
        if elapsed < self._rule.dwell:
            self._reason = (
                f"{elapsed:.2f} of at least {self._rule.dwell:g} dominant time constants"
            )
            return
        recent = np.array(self._series[-self._windows[-1].count :])
        remaining = self._bound(recent)
        self._remaining = None if remaining is None else remaining / self._effect
        against = self._objection(recent)
        if against is not None:
            self._passes = 0
            self._reason = against
            return
        self._passes += 1
        self._reason = (
            f"at most {self._remaining:.2%} of the step is still to come "
            f"({self._rule.confidence:.0%} confidence), at {elapsed:.2f} dominant time constants"
        )
        if self._passes >= self._needed:
            self._steady_tick = len(self._series) * self._per_sample

    def _objection(self, recent: NDArray[np.float64]) -> str | None:
        """Return what speaks against a steady state at this look, or None."""
        bound = f"{self._rule.remaining:.2%} of the step"
        if self._remaining is None:
            return f"noise hides a change of {bound}"
        if self._remaining > self._rule.remaining:
            return f"up to {self._remaining:.2%} may be still to come, more than {bound}"
        excess, doubt, _ = self._swing_window.excess(recent, self._cap, self._quantile)
        if excess - doubt > self._swing_window.count / 2.0 * self._limit**2:
            swing = math.sqrt(2.0 * excess / self._swing_window.count) / self._effect
            return f"a swing of about {swing:.2%} lasts, more than {bound}"
        return None

    def _bound(self, recent: NDArray[np.float64]) -> float | None:
        """Return the bound from the shortest window that resolves the limit, if one does."""
        for window in self._windows:
            if len(recent) < window.count:
                return None
            excess, doubt, from_noise = window.excess(recent, self._cap, self._quantile)
            if from_noise <= _NOISE_SHARE * self._limit**2 * window.excess_per_square:
                return math.sqrt((excess + doubt) / window.excess_per_square)
        return None

    @property
    def steady(self) -> bool:
        """Return whether the phase has become steady."""
        return self._steady_tick is not None

    @property
    def steady_tick(self) -> int | None:
        """Return how many values had been taken when it became steady; None before [ticks]."""
        return self._steady_tick

    @property
    def remaining(self) -> float | None:
        """Return the latest bound on the change still to come; None without one [fraction of the step]."""
        return self._remaining

    @property
    def reason(self) -> str:
        """Return one line on why it is steady, or why it is not yet."""
        return self._reason


def tail_time_constant(time: NDArray[np.float64], error: NDArray[np.float64]) -> float:
    """Return the dominant time constant of a predicted response's tail.

    The upper envelope of the error, from where a tenth of its peak is left, integrated and
    divided by that tenth: the time constant itself for an exponential, 1.2 for two equal lags.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Time [s].
    error : ndarray, shape (n,)
        Deviation from the final value, without noise [-].

    Returns
    -------
    float
        Time constant [s].

    Raises
    ------
    DataError
        When the error is zero throughout, or has not died to a hundredth of its peak.
    """
    envelope = np.maximum.accumulate(np.abs(np.asarray(error, dtype=np.float64))[::-1])[::-1]
    if len(envelope) == 0 or not envelope[0] > 0.0:
        raise DataError("prediction: the response does not move; it has no time constant")
    if envelope[-1] > _TAIL_END * envelope[0]:
        raise DataError(
            f"prediction: {envelope[-1] / envelope[0]:.1%} of the peak is left at its end; "
            f"predict on until less than {_TAIL_END:.0%} is"
        )
    tail = envelope <= _TAIL_START * envelope[0]
    return float(np.trapezoid(envelope[tail], time[tail]) / envelope[tail][0])
