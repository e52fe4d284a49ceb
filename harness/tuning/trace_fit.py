"""Every kind of model fitted to one trace, with limits and residual tests, the best first."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.errors import DataError
from harness.tuning.families import Family, IntegratingFamily, InverseFamily, LagFamily
from harness.tuning.identification import best_of_grid
from harness.tuning.limits import effective_samples, profile_limits
from harness.tuning.process import ProcessModel
from harness.tuning.residual_tests import (
    InputCorrelation,
    Whiteness,
    input_correlation,
    whiteness,
)
from harness.tuning.trace import Kind, Trace, TraceProblem, trace_problem, unit_gain_response

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.domain.models import Interval
    from harness.tuning.least_squares import Solution

    Array = NDArray[np.float64]

_FEWEST_ROWS = 20
_FINISHED = 3.0  # total lags after the first step; two equal lags are then at 98 %
_DISTINCT = 25.0  # gain in fit over noise, in variances: five standard deviations
_LONGEST_DEAD = 0.2  # of the record, of an integrator: beyond it a fit follows something else
_REMEMBERED = 3.0  # standard deviations above white before a row counts as remembering the last
_SMALL_ZERO = 0.02  # of the lags: an inverse response below it is no other model than two lags
CRITERION = (
    "Schwarz's criterion (BIC) with the effective number of samples of the best fit's residuals"
)


@dataclass(frozen=True, slots=True, kw_only=True)
class TraceModel:
    """A model fitted to a trace.

    Parameters
    ----------
    kind : Kind
        Kind of model.
    process : ProcessModel
        The fit [gain as the trace has it].
    limits : dict of str to Interval
        By figure: ``gain``, ``total_lag``, ``dead_time``, ``time_constant_1``,
        ``time_constant_2``, ``inverse_response``.
    residuals : ndarray, shape (n,)
        Measured minus model [fraction of PV span].
    fitted : ndarray, shape (n,)
        The model's output, level and drift included [fraction of PV span].
    residual_rms : float
        Root mean square of the residuals [fraction of PV span].
    explained : float
        Share of the output's variance that the model explains [-].
    drift : float or None
        Drift fitted beside it; None without [fraction of PV span per second].
    whiteness : Whiteness
        Test of the residuals against themselves.
    input_correlation : InputCorrelation
        Test of the residuals against the input.
    samples, parameters : int
        Rows fitted, and parameters [-].
    effective_samples : float
        Independent samples the record is worth for this model [-].
    criterion : float
        Information criterion; lower is better [-].
    """

    kind: Kind
    process: ProcessModel
    limits: dict[str, Interval]
    residuals: Array
    fitted: Array
    residual_rms: float
    explained: float
    drift: float | None
    whiteness: Whiteness
    input_correlation: InputCorrelation
    samples: int
    parameters: int
    effective_samples: float
    criterion: float


@dataclass(frozen=True, slots=True, kw_only=True)
class TraceFits:
    """All kinds fitted to one trace.

    Parameters
    ----------
    models : tuple of TraceModel
        Best first.
    refused : dict of Kind to str
        Kinds that the trace does not support, and why.
    trace : Trace
        The trace as fitted: averaged where it was long.
    """

    models: tuple[TraceModel, ...]
    refused: dict[Kind, str]
    trace: Trace


def fit_trace(
    trace: Trace,
    kinds: tuple[Kind, ...] = tuple(Kind),
    confidence: float = 0.95,
    *,
    drift: bool = False,
    unfinished: bool = False,
) -> TraceFits:
    """Fit kinds of models to a trace that starts steady, and put the best first.

    Parameters
    ----------
    trace : Trace
        The trace.
    kinds : tuple of Kind
        Kinds to fit.
    confidence : float
        Level of the limits [-].
    drift : bool
        Whether a slow linear drift is fitted and taken away.
    unfinished : bool
        Whether a self-regulating model may reach beyond its record.

    Returns
    -------
    TraceFits
        Models, and what was refused.

    Raises
    ------
    DataError
        If the trace supports none of them; with every reason.
    """
    if trace.time.size < _FEWEST_ROWS:
        raise DataError(f"fit: the record has {trace.time.size} rows; it needs {_FEWEST_ROWS}")
    if trace.event_time.size == 0:
        raise DataError("fit: the input never changes; step it in manual")
    short = trace.averaged()
    found: dict[Kind, tuple[TraceProblem, Family, Solution]] = {}
    refused: dict[Kind, str] = {}
    for kind in kinds:
        problem, family = trace_problem(kind, short, drift=drift), _family(kind, short)
        solution = best_of_grid(problem, family, short.spacing, short.duration)
        try:
            _check(problem, family, solution, unfinished=unfinished)
        except DataError as error:
            refused[kind] = str(error)
            continue
        found[kind] = problem, family, solution
    if not found:
        reasons = "\n".join(f"  {kind}: {reason}" for kind, reason in refused.items())
        raise DataError(f"fit: the record supports no model\n{reasons}")
    worth = _by_means(*min(found.values(), key=lambda item: item[2].cost))
    models = [
        _model(kind, *item, confidence=confidence, worth=worth) for kind, item in found.items()
    ]
    return TraceFits(
        models=tuple(sorted(models, key=lambda model: model.criterion)),
        refused=refused,
        trace=short,
    )


def _family(kind: Kind, trace: Trace) -> Family:
    match kind:
        case Kind.FIRST_ORDER:
            return LagFamily(order=1)
        case Kind.SECOND_ORDER:
            return LagFamily(order=2)
        case Kind.INTEGRATING:
            return IntegratingFamily(longest=0.5 * trace.duration)
        case Kind.INVERSE_RESPONSE:
            return InverseFamily()


def _worth(problem: TraceProblem, family: Family, solution: Solution) -> float:
    """Return the effective number of samples of a fit, by the stricter of two counts."""
    return min(_by_means(problem, family, solution), _independent_rows(solution.residuals))


def _by_means(problem: TraceProblem, family: Family, solution: Solution) -> float:
    """Return the effective number of samples by the means of blocks up to the total lag."""
    trace = problem.trace
    slow = family.scale(solution)
    if problem.kind is Kind.INTEGRATING:
        slow = max(slow, 0.05 * trace.duration)  # it has no lag that says how slow a misfit is
    rows = int(slow / trace.spacing)
    return effective_samples(solution.residuals, rows, family.count(problem))


def _independent_rows(residuals: Array) -> float:
    """Return what n rows are worth if each remembers the one before: n (1 - r)/(1 + r).

    G. V. Bayley and J. M. Hammersley, J. R. Stat. Soc. Suppl. 8:184, 1946 (value from memory).
    Means over blocks no longer than the lag see only part of a memory that is nearly as long.
    """
    n, energy = residuals.size, float(residuals @ residuals)
    memory = float(residuals[1:] @ residuals[:-1]) / energy if energy > 0.0 else 0.0
    if memory <= _REMEMBERED / math.sqrt(n):
        return float(n)
    return n * (1.0 - memory) / (1.0 + memory)


def _check(
    problem: TraceProblem, family: Family, solution: Solution, *, unfinished: bool
) -> None:
    """Refuse a fit that says nothing, or that reaches beyond its record."""
    trace = problem.trace
    variance = solution.cost / _by_means(problem, family, solution)
    won = float(problem.output @ problem.output) - solution.cost
    if won <= _DISTINCT * variance:
        noise = math.sqrt(solution.cost / solution.residuals.size)
        raise DataError(
            f"the output does not follow the input: what follows it explains "
            f"{math.sqrt(max(won, 0.0) / solution.residuals.size):.2g} against residuals of "
            f"{noise:.2g} (root mean square); make larger steps, and move one path at a time"
        )
    if problem.kind is Kind.INTEGRATING:
        if solution.shape[2] > _LONGEST_DEAD * trace.duration:
            raise DataError(
                f"the process does not integrate: the dead time comes out as {solution.shape[2]:.4g} s "
                f"of a record of {trace.duration:.4g} s"
            )
        return
    total = family.scale(solution)
    after = trace.duration - float(trace.event_time[0])
    if after < _FINISHED * total and not unfinished:
        raise DataError(
            f"the response is not finished: the record goes on for {after:.4g} s after the first "
            f"step, and the fitted lags and dead time come to {total:.4g} s; it must be "
            f"{_FINISHED:g} times as long, or the process integrates"
        )
    if problem.kind is Kind.INVERSE_RESPONSE:
        lags = solution.shape[0] + solution.shape[1]
        if solution.shape[3] < _SMALL_ZERO * lags:
            raise DataError(
                "there is no inverse response in the record: the zero's time comes out as "
                f"{solution.shape[3]:.3g} s beside lags of {lags:.4g} s"
            )


def _model(
    kind: Kind,
    problem: TraceProblem,
    family: Family,
    solution: Solution,
    *,
    confidence: float,
    worth: float,
) -> TraceModel:
    rows, fitted = solution.residuals.size, family.count(problem)
    mean_square = max(solution.cost / rows, np.finfo(float).tiny)
    own = _worth(problem, family, solution)
    rest = problem.trace.output - solution.residuals
    spread = problem.trace.output - problem.trace.output.mean()
    return TraceModel(
        kind=kind,
        process=_process(kind, solution),
        limits=profile_limits(problem, solution, family, confidence, own),
        residuals=solution.residuals,
        fitted=rest,
        residual_rms=math.sqrt(solution.cost / rows),
        explained=1.0 - solution.cost / float(spread @ spread),
        drift=_drift(problem, solution),
        whiteness=whiteness(solution.residuals, fitted),
        input_correlation=input_correlation(solution.residuals, problem.trace),
        samples=rows,
        parameters=fitted,
        effective_samples=own,
        criterion=worth * math.log(mean_square) + fitted * math.log(worth),
    )


def _process(kind: Kind, solution: Solution) -> ProcessModel:
    first, second, dead = solution.shape[:3]
    lags: tuple[float, ...] = (first, second)
    if kind is Kind.FIRST_ORDER:
        lags = (first,)
    elif kind is Kind.INTEGRATING:
        lags = ()
    return ProcessModel(
        gain=solution.gain,
        time_constants=lags,
        dead_time=dead,
        integrating=kind is Kind.INTEGRATING,
        numerator_times=(-solution.shape[3],) if kind is Kind.INVERSE_RESPONSE else (),
    )


def _drift(problem: TraceProblem, solution: Solution) -> float | None:
    """Return the slope that was fitted beside the model."""
    if problem.nuisance.shape[0] < 2:  # noqa: PLR2004  level and drift
        return None
    trace, row = problem.trace, problem.nuisance[1]
    unit = unit_gain_response(problem.kind, solution.shape, trace)
    amount = float(row @ (trace.output - solution.gain * unit))
    return amount * float(row[-1] - row[0]) / (float(trace.time[-1] - trace.time[0]) or 1.0)
