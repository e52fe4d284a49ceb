"""Confidence limits by profile likelihood, with room for residuals that are not white."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import stdtrit

from harness.domain.models import Interval
from harness.tuning.least_squares import Frame, Problem, Solution, evenness_of, search, split

if TYPE_CHECKING:
    from numpy.typing import NDArray

_ROUNDS = 12
_CLOSE = 0.01  # of the critical value: 0.1 % of coverage at 95 %
_SIGNIFICANT = 3.0  # standard deviations above white before residuals count as correlated
_LEAST_FREEDOM = 2.0


def effective_samples(residuals: NDArray[np.float64], longest: int) -> float:
    """Return how many independent residuals the record is worth.

    Batch means: for white residuals the variance of the mean of b of them is 1/b of their own.
    Over b = 2, 4, 8, ... the largest excess over that, where it is significant, divides the
    number of samples. Records whose misfit is the plant's curvature rather than noise thus
    count little more than one sample per total lag.

    Parameters
    ----------
    residuals : ndarray, shape (n,)
        Residuals of the fit.
    longest : int
        Longest batch: the total lag of the model [rows].

    Returns
    -------
    float
        Effective number of samples, at most n [-].
    """
    n = residuals.size
    variance = float(residuals @ residuals) / n
    inflation, batch = 1.0, 2
    while variance > 0.0 and batch <= longest and n // batch >= 4:  # noqa: PLR2004  a variance of fewer means is no variance
        count = n // batch
        means = residuals[: count * batch].reshape(count, batch).mean(axis=1)
        ratio = batch * float(means @ means) / count / variance
        if ratio > 1.0 + _SIGNIFICANT * math.sqrt(2.0 / count):
            inflation = max(inflation, ratio)
        batch *= 2
    return n / inflation


def parameters_of(solution: Solution, order: int) -> dict[str, float]:
    """Return the parameters that get limits, by name.

    Parameters
    ----------
    solution : Solution
        The fit.
    order : int
        Lags [-].

    Returns
    -------
    dict of str to float
        Values, ``total_lag`` first.
    """
    first, second, dead = solution.shape
    values = {
        "total_lag": first + second + dead,
        "gain": solution.gain,
        "dead_time": dead,
        "time_constant_1": first,
    }
    if order > 1:
        values["time_constant_2"] = second
    return values


def profile_limits(
    problem: Problem,
    best: Solution,
    order: int,
    confidence: float,
    samples: float,
) -> dict[str, Interval]:
    """Return limits of every parameter by profile likelihood.

    A value belongs to the interval if the best fit with the parameter held there costs no more
    than the overall best by t^2 of the residual variance (t of Student, two-sided). Where the
    cost stays below that down to a bound (no dead time, no second lag), the interval ends at
    the bound: it is one-sided.

    Parameters
    ----------
    problem : Problem
        Record.
    best : Solution
        The fit, in the unit frame.
    order : int
        Lags [-].
    confidence : float
        Level, e.g. 0.95 [-].
    samples : float
        Effective number of samples [-].

    Returns
    -------
    dict of str to Interval
        By parameter.
    """
    count = order + 2 + problem.nuisance.shape[0]
    freedom = max(samples - count, _LEAST_FREEDOM)
    critical = float(stdtrit(freedom, 0.5 + 0.5 * confidence))
    variance = best.cost / freedom
    limits = {}
    for name, value in parameters_of(best, order).items():
        ends = [
            _limit(problem, best, order, name, value, side * critical, variance)
            for side in (-1.0, 1.0)
        ]
        limits[name] = Interval(low=ends[0], high=ends[1], level=confidence)
    return limits


def _limit(
    problem: Problem,
    best: Solution,
    order: int,
    name: str,
    value: float,
    critical: float,
    variance: float,
) -> float:
    """Return the value at which the signed root of the profile deviance meets the critical one."""
    target = abs(critical)
    bound = -math.inf if name == "gain" else 0.0
    if name == "total_lag":
        bound = 1e-6 * value
    if variance <= 0.0 or (critical < 0.0 and value <= bound):
        return value
    sigma = math.sqrt(variance)
    offset = math.copysign(_first_offset(best, name, value) * sigma * target, critical)
    start: NDArray[np.float64] | None = None
    inside, inside_root, outside, outside_root = 0.0, 0.0, math.inf, math.inf
    for _ in range(_ROUNDS):
        tried = max(value + offset, bound)
        frame, first = profile_frame(best, order, name, tried)
        found = search(
            problem, frame, first if start is None else start, 1e-3 * variance / best.cost
        )
        start = found.coordinates
        root = math.sqrt(max(found.cost - best.cost, 0.0) / variance)
        distance = abs(tried - value)
        if abs(root - target) <= _CLOSE * target:
            return tried
        if root < target:
            if tried <= bound:
                return bound
            inside, inside_root = distance, root
        else:
            outside, outside_root = distance, root
        distance = _next_distance(inside, inside_root, outside, outside_root, target)
        offset = math.copysign(distance, critical)
    return max(value + offset, bound)


def _next_distance(
    inside: float, inside_root: float, outside: float, outside_root: float, target: float
) -> float:
    """Return the next distance to try: the secant within a bracket, growth without one."""
    if math.isinf(outside):
        return inside * min(max(target / max(inside_root, 1e-9), 1.2), 4.0)
    share = (target - inside_root) / (outside_root - inside_root)
    return inside + (outside - inside) * min(max(share, 0.05), 0.95)


def _first_offset(best: Solution, name: str, value: float) -> float:
    """Return a first guess of a parameter's standard deviation at unit noise."""
    total = sum(best.shape)
    if name == "gain":
        energy = float(np.ptp(best.residuals)) or 1.0
        return 1e-2 * abs(value) / energy
    spread = float(best.deviations[0])
    if name == "total_lag":
        return spread
    return max(float(best.deviations[1]) * total, spread)


def profile_frame(
    best: Solution, order: int, name: str, value: float
) -> tuple[Frame, NDArray[np.float64]]:
    """Return the frame that holds one parameter, and where to start in it.

    Parameters
    ----------
    best : Solution
        The fit.
    order : int
        Lags [-].
    name : str
        Parameter held.
    value : float
        Its value, in its own unit.

    Returns
    -------
    frame : Frame
        Coordinates of what is left free.
    start : ndarray, shape (k,)
        Start.
    """
    first, second, dead = best.shape
    total, even = first + second + dead, evenness_of(best.shape)
    most, top = 1.0 if order > 1 else 0.0, 50.0 * total
    match name:
        case "gain":
            frame = Frame(
                shape=lambda x: split(x[0] * (1.0 - x[1]), x[2], x[0] * x[1]),
                low=np.array([1e-6 * total, 0.0, 0.0]),
                high=np.array([top, 0.999, most]),
                gain=value,
            )
            return frame, np.array([total, dead / total, even])
        case "total_lag":
            frame = Frame(
                shape=lambda x: split(value * (1.0 - x[0]), x[1], value * x[0]),
                low=np.zeros(2),
                high=np.array([0.999, most]),
            )
            return frame, np.array([dead / total, even])
        case "dead_time":
            frame = Frame(
                shape=lambda x: split(x[0], x[1], value),
                low=np.array([1e-6 * total, 0.0]),
                high=np.array([top, most]),
            )
            return frame, np.array([max(total - value, 1e-3 * total), even])
        case "time_constant_1":
            frame = Frame(
                shape=lambda x: (value, x[0], x[1]),
                low=np.zeros(2),
                high=np.array([value * most, top]),
            )
            return frame, np.array([min(second, value), dead])
        case _:
            frame = Frame(
                shape=lambda x: (x[0], value, x[1]),
                low=np.array([max(value, 1e-6 * total), 0.0]),
                high=np.array([top, top]),
            )
            return frame, np.array([max(first, value), dead])
