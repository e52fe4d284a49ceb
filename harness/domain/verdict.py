"""Metrics, limits and verdicts, and the curves that a report draws."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray


class Outcome(StrEnum):
    """Verdict of a metric, a phase or a trial."""

    PASS = "pass"  # noqa: S105  a verdict, not a password
    FAIL = "fail"
    INVALID = "invalid"
    NOT_DECIDABLE = "not decidable"
    SHOWN = "shown"  # a figure given for information, never judged


@dataclass(frozen=True, slots=True, kw_only=True)
class Limit:
    """Where a metric must lie.

    Parameters
    ----------
    low, high : float or None
        Limits in the metric's unit; None is open.
    basis : str
        Why these limits.
    """

    low: float | None
    high: float | None
    basis: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Metric:
    """One figure of a phase; None stands for not reached or not defined.

    Parameters
    ----------
    unit : str
        ``"s"``, ``"1"`` (fraction), ``"s^2"``, ... [-].
    measured, predicted_linear, predicted_nonlinear : float or None
        Figures, in the unit.
    limit : Limit or None
        None where the metric is shown only.
    verdict : Outcome
        Verdict.
    """

    unit: str
    measured: float | None
    predicted_linear: float | None
    predicted_nonlinear: float | None
    limit: Limit | None
    verdict: Outcome


@dataclass(frozen=True, slots=True, kw_only=True)
class PhaseVerdict:
    """Score of one phase.

    Parameters
    ----------
    name, loop, kind : str
        Identity of the phase.
    start_tick, zero_tick, end_tick : int
        First tick, metric time zero, and last tick [ticks].
    metrics : dict of str to Metric
        By name; empty for phases that are not scored.
    outcome : Outcome
        Verdict.
    findings : tuple of str
        Sentences for people: what is wrong, or what is worth knowing.
    """

    name: str
    loop: str
    kind: str
    start_tick: int
    zero_tick: int
    end_tick: int
    metrics: dict[str, Metric]
    outcome: Outcome
    findings: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class PhaseCurves:
    """Curves of one phase, all on the same time base, for drawing.

    Parameters
    ----------
    name : str
        Name of the phase.
    time : ndarray, shape (n,)
        Time since metric time zero; negative before [s].
    setpoint, measured, transmitted, predicted_linear, predicted_nonlinear : ndarray, shape (n,)
        Process variable and setpoint, in the unit of the process variable.
    design_target : ndarray, shape (n,), or None
        The transfer function asked for, in the unit of the process variable; shown, never
        scored.
    output, output_predicted : ndarray, shape (n,)
        Controller output, measured and of the nonlinear prediction [-].
    load : ndarray, shape (n,)
        Output of the load valve [-].
    band : float
        Half width of the settling band drawn, in the unit of the process variable.
    unit : str
        Unit of the process variable.
    band_centre : float or None
        Value that the settling band stands around, in the unit of the process variable; None
        for the last setpoint.
    """

    name: str
    time: NDArray[np.float64]
    setpoint: NDArray[np.float64]
    measured: NDArray[np.float64]
    transmitted: NDArray[np.float64]
    predicted_linear: NDArray[np.float64]
    predicted_nonlinear: NDArray[np.float64]
    design_target: NDArray[np.float64] | None
    output: NDArray[np.float64]
    output_predicted: NDArray[np.float64]
    load: NDArray[np.float64]
    band: float
    unit: str
    band_centre: float | None = None
