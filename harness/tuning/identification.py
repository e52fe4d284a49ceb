"""Fit first- and second-order-plus-dead-time models to recorded traces of a manual step test."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.domain.models import FittedModel, LagModel
from harness.errors import DataError
from harness.tuning.families import LagFamily
from harness.tuning.least_squares import Problem, Solution, search
from harness.tuning.limits import effective_samples, profile_limits

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.tuning.families import Family
    from harness.tuning.least_squares import Record

    Array = NDArray[np.float64]

_FEWEST_ROWS = 20
_MOST_ROWS = 5000  # longer records are averaged in blocks
_TOLERANCE = 1e-10  # of the cost, for the search of the best fit
_COARSE_TOLERANCE = 1e-3  # of the cost, to tell which start leads to the best fit
_FINISHED = 3.0  # total lags after the first step; two equal lags are then at 98 %
_DISTINCT = 25.0  # gain in fit over noise, in variances: five standard deviations
_CRITERION = "Schwarz's criterion (BIC) with the effective number of samples of the second-order residuals"


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderChoice:
    """Both orders fitted to one record, and the one chosen.

    Parameters
    ----------
    best : FittedModel
        The order with the lower criterion.
    fits : dict of int to FittedModel
        Fits by order, 1 and 2 [-].
    criterion : dict of int to float
        Criterion by order; lower is better [-].
    effective_samples : float
        Independent samples the record is worth [-].
    rule : str
        Name of the criterion.
    """

    best: FittedModel
    fits: dict[int, FittedModel]
    criterion: dict[int, float]
    effective_samples: float
    rule: str


def fit(
    inputs: Array,
    outputs: Array,
    tick: float,
    order: int,
    confidence: float = 0.95,
    *,
    drift: bool = False,
) -> FittedModel:
    """Fit a model of one order to a record that starts steady and has at least one step.

    Parameters
    ----------
    inputs : ndarray, shape (n,)
        Input that holds from each row to the next [fraction of output].
    outputs : ndarray, shape (n,)
        Output sampled at each row [fraction of PV span].
    tick : float
        Time between rows [s].
    order : int
        1 or 2 lags [-].
    confidence : float
        Level of the limits [-].
    drift : bool
        Whether a slow linear drift is fitted and taken away.

    Returns
    -------
    FittedModel
        Model and limits.

    Raises
    ------
    DataError
        If the record does not support the fit; the message says why.
    """
    if order not in {1, 2}:
        raise DataError(f"fit: order {order} is not offered; give 1 or 2")
    problem = _problem(inputs, outputs, tick, drift)
    solution = _solve(problem, order)
    samples = _effective(problem, solution, order)
    _check_solution(problem, solution, samples)
    return _fitted(problem, solution, order, confidence, samples)


def fit_best(
    inputs: Array,
    outputs: Array,
    tick: float,
    confidence: float = 0.95,
    *,
    drift: bool = False,
) -> OrderChoice:
    """Fit both orders and choose one by Schwarz's criterion.

    The residuals of a step test on a curved plant are far from white, and the plain criterion
    would take every one of them for news. The number of samples is therefore the effective one.

    Parameters
    ----------
    inputs, outputs : ndarray, shape (n,)
        As for `fit` [fraction of output, fraction of PV span].
    tick : float
        Time between rows [s].
    confidence : float
        Level of the limits [-].
    drift : bool
        Whether a slow linear drift is fitted and taken away.

    Returns
    -------
    OrderChoice
        Both fits and the choice.

    Raises
    ------
    DataError
        If the record does not support the fit.
    """
    problem = _problem(inputs, outputs, tick, drift)
    solutions = {order: _solve(problem, order) for order in (1, 2)}
    samples = _effective(problem, solutions[2], 2)
    fits, criterion = {}, {}
    for order, solution in solutions.items():
        own = _effective(problem, solution, order)
        _check_solution(problem, solution, own)
        fits[order] = _fitted(problem, solution, order, confidence, own)
        mean_square = max(solution.cost / solution.residuals.size, np.finfo(float).tiny)
        fitted = LagFamily(order=order).count(problem)
        criterion[order] = samples * math.log(mean_square) + fitted * math.log(samples)
    best = fits[min(criterion, key=lambda order: criterion[order])]
    return OrderChoice(
        best=best,
        fits=fits,
        criterion=criterion,
        effective_samples=samples,
        rule=_CRITERION,
    )


def _problem(inputs: Array, outputs: Array, tick: float, drift: bool) -> Problem:
    """Check a record and bring it into the form that is fitted."""
    inputs, outputs = np.asarray(inputs, np.float64), np.asarray(outputs, np.float64)
    _check_record(inputs, outputs, tick)
    change = inputs - inputs[0]
    block = -(-inputs.size // _MOST_ROWS)
    rows = inputs.size // block
    if block > 1:
        change = change[: rows * block].reshape(rows, block).mean(axis=1)
        outputs = outputs[: rows * block].reshape(rows, block).mean(axis=1)
    columns = [np.ones(rows)] + ([np.linspace(-1.0, 1.0, rows)] if drift else [])
    nuisance = np.array([column / math.sqrt(float(column @ column)) for column in columns])
    return Problem(
        change=np.append(change, change[-1]),
        output=outputs - (nuisance @ outputs) @ nuisance,
        nuisance=nuisance,
        tick=tick * block,
        advance=0.5 * (block + 1) * tick if block > 1 else 0.0,
    )


def _check_record(inputs: Array, outputs: Array, tick: float) -> None:
    """Refuse a record that no model can be fitted to."""
    if inputs.ndim != 1 or inputs.shape != outputs.shape:
        raise DataError(
            f"fit: input has shape {inputs.shape} and output {outputs.shape}; "
            "give two rows of the same length"
        )
    if inputs.size < _FEWEST_ROWS:
        raise DataError(f"fit: the record has {inputs.size} rows; it needs {_FEWEST_ROWS}")
    if not (math.isfinite(tick) and tick > 0.0):
        raise DataError(f"fit: the tick is {tick:g} s; it must be above 0")
    for name, column in (("input", inputs), ("output", outputs)):
        bad = int(np.count_nonzero(~np.isfinite(column)))
        if bad:
            first = int(np.flatnonzero(~np.isfinite(column))[0])
            raise DataError(
                f"fit: {bad} of {column.size} values of the {name} are no numbers, the first "
                f"at row {first}; cut the record there, or repair the signal"
            )
        if float(np.ptp(column)) == 0.0:
            raise DataError(
                f"fit: the {name} stands at {column[0]:g} throughout; "
                + ("step it in manual" if name == "input" else "is the instrument alive?")
            )


def _solve(problem: Problem, order: int) -> Solution:
    """Return the best fit from the best points of a coarse grid over shapes."""
    record = problem.output.size * problem.tick
    return best_of_grid(problem, LagFamily(order=order), problem.tick, record)


def best_of_grid(problem: Record, family: Family, tick: float, record: float) -> Solution:
    """Return the best fit from the best points of a coarse grid over shapes.

    Parameters
    ----------
    problem : Record
        Record.
    family : Family
        Family of the shape.
    tick, record : float
        Spacing of the rows, and length of the record [s].

    Returns
    -------
    Solution
        The best fit.
    """
    frame = family.unit_frame(2.0 * record)

    def cost(x: Array) -> float:
        unit = problem.response(frame.shape(x))
        energy = float(unit @ unit)
        return -(float(unit @ problem.output) ** 2) / energy if energy > 0.0 else 0.0

    starts = sorted(family.starts(tick, record), key=cost)[:3]
    found = [search(problem, frame, start, _COARSE_TOLERANCE) for start in starts]
    best = min(found, key=lambda solution: solution.cost)
    return search(problem, frame, best.coordinates, _TOLERANCE)


def _effective(problem: Problem, solution: Solution, order: int) -> float:
    """Return the effective number of samples of a fit."""
    rows_per_lag = int(sum(solution.shape) / problem.tick)
    fitted = LagFamily(order=order).count(problem)
    return effective_samples(solution.residuals, rows_per_lag, fitted)


def _check_solution(problem: Problem, solution: Solution, samples: float) -> None:
    """Refuse a fit that says nothing, or that reaches beyond its record."""
    variance = solution.cost / samples
    won = float(problem.output @ problem.output) - solution.cost
    step = float(np.ptp(problem.change))
    if won < _DISTINCT * variance:
        noise = math.sqrt(solution.cost / solution.residuals.size)
        raise DataError(
            f"fit: the output does not follow the input: a change of {step:.3g} of the output "
            f"explains {abs(solution.gain) * step:.2g} of span against residuals of {noise:.2g}; "
            "make larger steps, and only one path at a time"
        )
    total = sum(solution.shape)
    after = (problem.change.size - 1 - int(np.flatnonzero(problem.change)[0])) * problem.tick
    if after < _FINISHED * total:
        raise DataError(
            f"fit: the response is not finished: the record goes on for {after:.0f} s after the "
            f"first step, the fitted total lag is {total:.0f} s; it must be {_FINISHED:g} times "
            "as long (a level that only integrates never gets there)"
        )


def _fitted(
    problem: Problem, solution: Solution, order: int, confidence: float, samples: float
) -> FittedModel:
    """Return the fit with its limits."""
    first, second, dead = solution.shape
    return FittedModel(
        model=LagModel(
            gain=solution.gain,
            time_constants=(first,) if order == 1 else (first, second),
            dead_time=dead,
        ),
        limits=profile_limits(problem, solution, LagFamily(order=order), confidence, samples),
        residual_rms=math.sqrt(solution.cost / solution.residuals.size),
        samples=solution.residuals.size,
    )
