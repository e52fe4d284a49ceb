"""Measures of a response's shape: band crossing, rise, integrals, travel, decay.

Everywhere the record is read as the polyline through its samples, and the quadratures are
exact for that polyline. Time starts at metric zero. Not reached is None, never NaN.
"""

from __future__ import annotations

import itertools
import math

import numpy as np
from numpy.typing import NDArray

from harness.errors import UsageError


def checked_series(
    time: NDArray[np.float64], values: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return times and values as arrays, once they are a polyline.

    Parameters
    ----------
    time, values : ndarray, shape (n,)
        Time [s] and values [-].

    Returns
    -------
    tuple of ndarray, shape (n,)
        Both [s], [-].

    Raises
    ------
    UsageError
        When they do not match, are fewer than two, are not finite, or the time does not rise.
    """
    time = np.asarray(time, dtype=np.float64)
    values = np.asarray(values, dtype=np.float64)
    if time.shape != values.shape or time.ndim != 1 or len(time) < 2:  # noqa: PLR2004  a polyline has two points
        raise UsageError(
            f"metrics: times of shape {time.shape} and values of shape {values.shape}; "
            "two equal series of at least two samples are needed"
        )
    if not (np.isfinite(values).all() and (np.diff(time) > 0.0).all()):
        raise UsageError(
            "metrics: values that are not finite, or times that do not rise; "
            "cut the record to its good, ordered rows"
        )
    return time, values


def settling_time(
    time: NDArray[np.float64], error: NDArray[np.float64], band: float
) -> float | None:
    """Return when the error enters the band for the last time and stays to the record's end.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Time from metric zero [s].
    error : ndarray, shape (n,)
        Deviation from the final value [-].
    band : float
        Half width of the band, in the unit of the error, positive [-].

    Returns
    -------
    float or None
        Time of the last entry, interpolated between samples; 0 when the error never was
        outside; None when it ends outside [s].

    Raises
    ------
    UsageError
        When the series do not match or the band is not positive.
    """
    time, error = checked_series(time, error)
    if not band > 0.0:
        raise UsageError(f"metrics: a settling band of {band}; it must be positive")
    outside = np.flatnonzero(np.abs(error) > band)
    if len(outside) == 0:
        return 0.0
    last = int(outside[-1])
    if last == len(error) - 1:
        return None
    edge = math.copysign(band, error[last])
    part = (error[last] - edge) / (error[last] - error[last + 1])
    return float(time[last] + part * (time[last + 1] - time[last]))


def _first_reach(
    time: NDArray[np.float64], progress: NDArray[np.float64], level: float
) -> float | None:
    """Return the interpolated time at which progress first reaches a level."""
    reached = np.flatnonzero(progress >= level)
    if len(reached) == 0:
        return None
    index = int(reached[0])
    if index == 0:
        return float(time[0])
    before, after = progress[index - 1], progress[index]
    part = (level - before) / (after - before)
    return float(time[index - 1] + part * (time[index] - time[index - 1]))


def rise_time(
    time: NDArray[np.float64],
    progress: NDArray[np.float64],
    low: float = 0.1,
    high: float = 0.9,
) -> float | None:
    """Return the time from first reaching the low to first reaching the high level.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Time from metric zero [s].
    progress : ndarray, shape (n,)
        Response as fraction of its step: 0 before, 1 settled [-].
    low, high : float
        Levels [-].

    Returns
    -------
    float or None
        Rise time; None when the high level is not reached [s].

    Raises
    ------
    UsageError
        When the series do not match.
    """
    time, progress = checked_series(time, progress)
    start, end = (_first_reach(time, progress, level) for level in (low, high))
    return None if start is None or end is None else end - start


def _split_at_zeros(
    time: NDArray[np.float64], error: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Insert the zero crossings of a polyline as samples of their own."""
    crossing = np.flatnonzero(error[:-1] * error[1:] < 0.0)
    part = error[crossing] / (error[crossing] - error[crossing + 1])
    zeros = time[crossing] + part * (time[crossing + 1] - time[crossing])
    return np.insert(time, crossing + 1, zeros), np.insert(error, crossing + 1, 0.0)


def integral_absolute_error(time: NDArray[np.float64], error: NDArray[np.float64]) -> float:
    """Return the integral of the absolute error, exact for the polyline, sign changes included.

    Parameters
    ----------
    time, error : ndarray, shape (n,)
        Time from metric zero [s] and error [-].

    Returns
    -------
    float
        IAE [s].

    Raises
    ------
    UsageError
        When the series do not match.
    """
    time, error = _split_at_zeros(*checked_series(time, error))
    size = np.abs(error)
    return float(np.sum(np.diff(time) * (size[:-1] + size[1:])) / 2.0)


def integral_squared_error(time: NDArray[np.float64], error: NDArray[np.float64]) -> float:
    """Return the integral of the squared error, exact for the polyline.

    Parameters
    ----------
    time, error : ndarray, shape (n,)
        Time from metric zero [s] and error [-].

    Returns
    -------
    float
        ISE [s].

    Raises
    ------
    UsageError
        When the series do not match.
    """
    time, error = checked_series(time, error)
    left, right = error[:-1], error[1:]
    return float(np.sum(np.diff(time) * (left**2 + left * right + right**2)) / 3.0)


def integral_time_absolute_error(
    time: NDArray[np.float64], error: NDArray[np.float64]
) -> float:
    """Return the integral of time times absolute error, exact for the polyline.

    Parameters
    ----------
    time, error : ndarray, shape (n,)
        Time from metric zero [s] and error [-].

    Returns
    -------
    float
        ITAE [s^2].

    Raises
    ------
    UsageError
        When the series do not match.
    """
    time, error = _split_at_zeros(*checked_series(time, error))
    size = np.abs(error)
    step = np.diff(time)
    level = time[:-1] * (size[:-1] + size[1:]) / 2.0
    return float(np.sum(step * (level + step * (size[:-1] + 2.0 * size[1:]) / 6.0)))


def output_travel(output: NDArray[np.float64], initial: float | None = None) -> float:
    """Return the sum of the absolute moves of the controller output.

    Parameters
    ----------
    output : ndarray, shape (n,)
        Output at each tick or scan [-].
    initial : float or None
        Output before the first sample, so that its jump counts; None leaves it out [-].

    Returns
    -------
    float
        Travel [-].
    """
    moves = float(np.sum(np.abs(np.diff(output))))
    if initial is not None and len(output):
        moves += abs(float(output[0]) - initial)
    return moves


def decay_ratio(progress: NDArray[np.float64], noise: float = 0.0) -> float | None:
    """Return the second overshoot peak over the first.

    Parameters
    ----------
    progress : ndarray, shape (n,)
        Response as fraction of its step: 0 before, 1 settled [-].
    noise : float
        A lobe counts only when it leaves the final value by more than this [-].

    Returns
    -------
    float or None
        Decay ratio; None when there are not two whole lobes above the final value [-].
    """
    error = np.asarray(progress, dtype=np.float64) - 1.0
    side = np.where(error > noise, 1, np.where(error < -noise, -1, 0))
    clear = np.flatnonzero(side)
    if len(clear) == 0:
        return None
    starts = np.flatnonzero(np.diff(side[clear], prepend=-side[clear[0]]))
    peaks = [
        float(error[clear[start:stop]].max())
        for start, stop in itertools.pairwise(starts)  # the last lobe is not whole
        if side[clear[start]] > 0
    ]
    return peaks[1] / peaks[0] if len(peaks) > 1 else None


def tail_mean(time: NDArray[np.float64], values: NDArray[np.float64], tail: float) -> float:
    """Return the mean of the last part of a record.

    Parameters
    ----------
    time, values : ndarray, shape (n,)
        Time [s] and values [-].
    tail : float
        Length of the part; at least the last sample counts [s].

    Returns
    -------
    float
        Mean, in the unit of the values [-].

    Raises
    ------
    UsageError
        When the series do not match.
    """
    time, values = checked_series(time, values)
    chosen = time >= time[-1] - tail
    return float(values[chosen].mean())
