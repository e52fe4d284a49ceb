"""Confidence limits by profile likelihood, with room for residuals that are not white."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import stdtrit

from harness.domain.models import Interval
from harness.tuning.least_squares import Record, Solution, deviations, search

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.tuning.families import Family

_ROUNDS = 15
_CLOSE = 0.05  # of the critical value; from there on the root deviance is taken as straight
_PRECISION = 3e-3  # of the variance, to which each cost is found: 8e-4 of a root of two
_SIGNIFICANT = 3.0  # standard deviations above white before residuals count as correlated
_LEAST_FREEDOM = 2.0
_FEWEST_MEANS = 4  # batch means per fitted parameter: fewer say too little of a variance
_SMALLEST_OFFSET = 1e-9  # of the total lag or the gain, where a record is as good as exact


def effective_samples(residuals: NDArray[np.float64], longest: int, fitted: int) -> float:
    """Return how many independent residuals the record is worth.

    Batch means: for white residuals the variance of the mean of b of them is 1/b of their own.
    Over b = 2, 4, 8, ... the largest excess over that, where it is significant, divides the
    number of samples. The fitted parameters are slow, so each takes a degree of freedom from the
    means. Records whose misfit is the plant's curvature rather than noise thus count little more
    than one sample per total lag.

    Parameters
    ----------
    residuals : ndarray, shape (n,)
        Residuals of the fit [fraction of PV span].
    longest : int
        Longest batch: the total lag of the model [rows].
    fitted : int
        Parameters fitted [-].

    Returns
    -------
    float
        Effective number of samples, at most n [-].
    """
    n = residuals.size
    variance = float(residuals @ residuals) / n
    inflation, batch = 1.0, 2
    while variance > 0.0 and batch <= longest and n // batch >= _FEWEST_MEANS * fitted:
        count = n // batch
        means = residuals[: count * batch].reshape(count, batch).mean(axis=1)
        ratio = batch * float(means @ means) / (count - fitted) / variance
        if ratio > 1.0 + _SIGNIFICANT * math.sqrt(2.0 / (count - fitted)):
            inflation = max(inflation, ratio)
        batch *= 2
    return n / inflation


def profile_limits(
    problem: Record, best: Solution, family: Family, confidence: float, samples: float
) -> dict[str, Interval]:
    """Return limits of every parameter by profile likelihood.

    A value belongs to the interval if the best fit with the parameter held there costs no more
    than the overall best by t^2 of the residual variance (t of Student, two-sided). Where the
    cost stays below that down to a bound (no dead time, no second lag), the interval ends at
    the bound: it is one-sided, and covers more than it says where the true value is the bound.

    Parameters
    ----------
    problem : Record
        Record.
    best : Solution
        The fit, in the unit frame.
    family : Family
        Family of the shape.
    confidence : float
        Level, e.g. 0.95 [-].
    samples : float
        Effective number of samples [-].

    Returns
    -------
    dict of str to Interval
        By parameter.
    """
    freedom = max(samples - family.count(problem), _LEAST_FREEDOM)
    critical = float(stdtrit(freedom, 0.5 + 0.5 * confidence))
    sigma = math.sqrt(best.cost / freedom)
    profile = _Profile(problem=problem, best=best, family=family, sigma=sigma)
    scale = family.scale(best)
    spread = deviations(problem, family.unit_frame(2.0 * scale), best) * sigma
    limits: dict[str, Interval] = {}
    for name, value in family.parameters(best).items():
        size = abs(value) if name == "gain" else scale
        guess = max(family.offset(best, name, spread * critical), _SMALLEST_OFFSET * size)
        limits[name] = Interval(
            low=profile.limit(name, value, -guess, critical),
            high=profile.limit(name, value, guess, critical),
            level=confidence,
        )
    return limits


@dataclass(frozen=True, slots=True, kw_only=True)
class _Profile:
    """Cost of the best fit as a function of one parameter."""

    problem: Record
    best: Solution
    family: Family
    sigma: float

    def limit(self, name: str, value: float, offset: float, critical: float) -> float:
        """Return where the root deviance meets the critical value, starting at an offset."""
        bound = self.family.bound(name, value)
        if self.sigma == 0.0 or (offset < 0.0 and value <= bound):
            return value
        home = self.family.profile_frame(self.best.shape, name, value)[1]
        direction = np.zeros(home.size)  # of the other parameters, per unit of this one
        inside, inside_root, outside, outside_root = 0.0, 0.0, math.inf, math.inf
        for _ in range(_ROUNDS):
            tried = max(value + offset, bound)
            distance = abs(tried - value)
            if distance == 0.0:
                return value
            frame, _ = self.family.profile_frame(self.best.shape, name, tried)
            tolerance = _PRECISION * self.sigma**2 / self.best.cost
            found = search(self.problem, frame, home + direction * distance, tolerance)
            direction = (found.coordinates - home) / distance
            root = math.sqrt(max(found.cost - self.best.cost, 0.0)) / self.sigma
            if abs(root - critical) <= _CLOSE * critical or (
                root < critical and tried <= bound
            ):
                return tried
            if root < critical:
                inside, inside_root = distance, root
            else:
                outside, outside_root = distance, root
            step = _next_distance(inside, inside_root, outside, outside_root, critical)
            offset = math.copysign(step, offset)
        return max(value + offset, bound)


def _next_distance(
    inside: float, inside_root: float, outside: float, outside_root: float, target: float
) -> float:
    """Return the next distance to try: the secant within a bracket, growth without one."""
    if math.isinf(outside):
        return inside * min(max(target / max(inside_root, 1e-9), 1.2), 4.0)
    share = (target - inside_root) / (outside_root - inside_root)
    return inside + (outside - inside) * min(max(share, 0.05), 0.95)
