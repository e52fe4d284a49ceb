"""Output-error least squares over the shape of a lag model; gain, level and drift drop out.

What enters the output linearly is solved for at every trial of the shape (variable projection:
G. H. Golub and V. Pereyra, SIAM J. Numer. Anal. 10:413, 1973; the Jacobian is L. Kaufman's
simplification, BIT 15:49, 1975).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Protocol

import numpy as np

from harness.domain.models import LagModel
from harness.tuning.response import held_step, unit_response

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.tuning.frames import Frame, Shape

    Array = NDArray[np.float64]

_DIFFERENCE = 1e-6  # relative step of a forward difference; the response is exact to 1e-14
_ITERATIONS = 60
_LARGEST_DAMPING = 1e10


class Record(Protocol):
    """A record to fit a shape to."""

    @property
    def output(self) -> Array:
        """Return the output, nuisance terms projected out, shape (n,) [fraction of PV span]."""
        ...

    @property
    def nuisance(self) -> Array:
        """Return orthonormal rows, level and drift, shape (m, n) [-]."""
        ...

    def response(self, shape: Shape) -> Array:
        """Return the unit-gain response of a shape, nuisance terms projected out."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class Problem:
    """A record to fit.

    Parameters
    ----------
    change : ndarray, shape (n + 1,)
        Input as deviation from its first value, the last one repeated [fraction of output].
    output : ndarray, shape (n,)
        Output, nuisance terms projected out [fraction of PV span].
    nuisance : ndarray, shape (m, n)
        Orthonormal rows: constant level, and drift where it is fitted [-].
    tick : float
        Spacing of the rows [s].
    advance : float
        Extra delay by which the model is computed and then read one row later, so that an
        average over a block is matched at the middle of the block; 0 for single samples [s].
    """

    change: Array
    output: Array
    nuisance: Array
    tick: float
    advance: float

    def response(self, shape: Shape) -> Array:
        """Return the unit-gain response of a shape, nuisance terms projected out."""
        model = LagModel(gain=1.0, time_constants=shape[:2], dead_time=shape[2] + self.advance)
        raw = unit_response(held_step(model, self.tick), self.change)
        raw = raw[1:] if self.advance > 0.0 else raw[:-1]
        return raw - (self.nuisance @ raw) @ self.nuisance


@dataclass(frozen=True, slots=True, kw_only=True)
class Solution:
    """Where a search ended.

    Parameters
    ----------
    coordinates : ndarray, shape (k,)
        Coordinates in the frame [s, or a share].
    shape : tuple of float
        First lag, second lag, dead time, and what a family adds [s].
    gain : float
        Gain [fraction of PV span per fraction of output].
    residuals : ndarray, shape (n,)
        Measured minus model [fraction of PV span].
    cost : float
        Sum of the squares of the residuals [square of a fraction of PV span].
    """

    coordinates: Array
    shape: Shape
    gain: float
    residuals: Array
    cost: float


def search(problem: Record, frame: Frame, start: Array, tolerance: float) -> Solution:
    """Minimise the squared residuals by damped Gauss-Newton steps within bounds.

    Parameters
    ----------
    problem : Record
        Record.
    frame : Frame
        Coordinates and bounds.
    start : ndarray, shape (k,)
        Start; moved inside the bounds if it is not [s, or a share].
    tolerance : float
        A step that can win less than this share of the cost is the last [-].

    Returns
    -------
    Solution
        The minimum found.
    """
    x = np.clip(np.asarray(start, dtype=np.float64), frame.low, frame.high)
    gain, residuals, unit = _evaluate(problem, frame, x)
    cost, damping = float(residuals @ residuals), 1e-3
    for _ in range(_ITERATIONS):
        jacobian = _jacobian(problem, frame, x, gain, unit)
        gradient, normal = jacobian @ residuals, jacobian @ jacobian.T
        free = _free(frame, x, gradient)
        if not free.any() or cost == 0.0:
            break
        trial_cost, promised = cost, 0.0
        while damping < _LARGEST_DAMPING:
            moved = _step(normal, gradient, free, damping, (frame.low - x, frame.high - x))
            promised = float(2.0 * gradient @ moved - moved @ normal @ moved)
            if 0.0 <= promised <= 0.1 * tolerance * cost:
                break
            trial = np.clip(x + moved, frame.low, frame.high)
            trial_gain, trial_residuals, trial_unit = _evaluate(problem, frame, trial)
            trial_cost = float(trial_residuals @ trial_residuals)
            if trial_cost < cost:
                x, gain, residuals, unit = trial, trial_gain, trial_residuals, trial_unit
                damping = max(0.1 * damping, 1e-12)
                break
            damping *= 10.0
        won, cost_before, cost = cost - trial_cost, cost, min(cost, trial_cost)
        # What a step wins beside its promise is of the size of what is still to be won.
        if won <= tolerance * cost_before or abs(promised - won) <= tolerance * cost_before:
            break
    return Solution(
        coordinates=x,
        shape=_plain(frame.shape(x)),
        gain=gain,
        residuals=residuals,
        cost=cost,
    )


def deviations(problem: Record, frame: Frame, solution: Solution) -> Array:
    """Return what the Jacobian says of the spread of each coordinate, and of the gain.

    Good enough to start a search for limits, and no more: it knows neither bounds nor curvature.

    Parameters
    ----------
    problem : Record
        Record.
    frame : Frame
        Frame of the solution, the gain free.
    solution : Solution
        The fit.

    Returns
    -------
    ndarray, shape (k + 1,)
        Standard deviations at unit noise, in the coordinates' own units, the gain's last.
    """
    x = solution.coordinates
    unit = problem.response(solution.shape)
    held = replace(frame, gain=solution.gain)
    rows = np.vstack([_jacobian(problem, held, x, solution.gain, unit), unit])
    covariance = np.linalg.pinv(rows @ rows.T, rcond=1e-14, hermitian=True)
    return np.sqrt(np.maximum(np.diag(covariance), 0.0))


def _evaluate(problem: Record, frame: Frame, x: Array) -> tuple[float, Array, Array]:
    """Return gain, residuals and projected unit response at one point."""
    unit = problem.response(frame.shape(x))
    energy = float(unit @ unit)
    gain = frame.gain
    if gain is None:
        gain = float(unit @ problem.output) / energy if energy > 0.0 else 0.0
    return gain, problem.output - gain * unit, unit


def _jacobian(problem: Record, frame: Frame, x: Array, gain: float, unit: Array) -> Array:
    """Return the derivative of the model by each coordinate, the gain's part projected out."""
    rows = np.zeros((x.size, unit.size))
    energy = float(unit @ unit)
    for i in range(x.size):
        width = frame.high[i] - frame.low[i]
        if width <= 0.0:
            continue
        size = _DIFFERENCE * min(max(abs(x[i]), 1e-3 * width), width)
        size = size if x[i] + size <= frame.high[i] else -size
        moved = x.copy()
        moved[i] += size
        rows[i] = gain * (problem.response(frame.shape(moved)) - unit) / (moved[i] - x[i])
    if frame.gain is None and energy > 0.0:
        rows -= np.outer(rows @ unit / energy, unit)
    return rows


def _plain(shape: Shape) -> Shape:
    """Return a shape of Python floats."""
    return tuple(float(value) for value in shape)


def _free(frame: Frame, x: Array, gradient: Array) -> NDArray[np.bool_]:
    """Return which coordinates may move: not fixed, and not pressed against a bound."""
    pressed = ((x <= frame.low) & (gradient < 0.0)) | ((x >= frame.high) & (gradient > 0.0))
    return (frame.high > frame.low) & ~pressed


def _step(
    normal: Array,
    gradient: Array,
    free: NDArray[np.bool_],
    damping: float,
    room: tuple[Array, Array],
) -> Array:
    """Return the damped step; a coordinate that meets its bound stays there, the rest follow."""
    step, free = np.zeros(gradient.size), free.copy()
    damped = normal + damping * np.diag(np.diag(normal) + 1e-300)
    while free.any():
        some = np.flatnonzero(free)
        wanted = gradient[some] - damped[some] @ np.where(free, 0.0, step)
        step[some] = np.linalg.solve(damped[np.ix_(some, some)], wanted)
        beyond = np.maximum(room[0] - step, step - room[1])
        beyond[~free] = 0.0
        worst = int(np.argmax(beyond))
        if beyond[worst] <= 0.0:
            break
        step[worst] = min(max(step[worst], room[0][worst]), room[1][worst])
        free[worst] = False
    return step
