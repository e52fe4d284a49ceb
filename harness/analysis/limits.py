"""Where each metric must lie, why, and whether it does."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from harness.domain.verdict import Limit, Metric, Outcome

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from harness.domain.trial import Tolerances

SETTLING = ("settling_time_2", "settling_time_5")
_TIMES = (*SETTLING, "rise_time")
_SQUARED = ("ise", "itae")  # quadratic in the error, or in time: twice the relative tolerance
_SHOWN = ("peak_time", "decay_ratio")  # for information


def limit_of(name: str, predicted: float, tolerances: Tolerances, scan: float) -> Limit | None:
    """Return where a metric must lie.

    Parameters
    ----------
    name : str
        Name of the metric.
    predicted : float
        Nonlinear prediction, in the metric's unit.
    tolerances : Tolerances
        Allowed distances.
    scan : float
        Scan period of the controller: no time is told finer [s].

    Returns
    -------
    Limit or None
        None for a metric that is shown only.
    """
    if name in _SHOWN:
        return None
    relative = tolerances.relative
    if name == "overshoot":
        allowed, basis = (
            tolerances.overshoot,
            f"prediction ± {100 * tolerances.overshoot:g} % of the step",
        )
    elif name == "offset":
        allowed, basis = (
            tolerances.offset,
            f"prediction ± {100 * tolerances.offset:g} % of span",
        )
    elif name in _TIMES:
        allowed = max(relative * abs(predicted), 2.0 * scan)
        basis = f"prediction ± {100 * relative:g} %, at least two scans"
    elif name in _SQUARED:
        allowed = 2.0 * relative * abs(predicted)
        basis = f"prediction ± {200 * relative:g} %"
    else:
        allowed = relative * abs(predicted)
        basis = f"prediction ± {100 * relative:g} %"
    low, high = predicted - allowed, predicted + allowed
    if name == "overshoot":
        low = max(low, 0.0)
    return Limit(low=low, high=high, basis=basis)


def judge(
    measured: Mapping[str, float | None],
    linear: Mapping[str, float | None],
    nonlinear: Mapping[str, float | None],
    units: Mapping[str, str],
    tolerances: Tolerances,
    scan: float,
    undecidable: frozenset[str],
) -> dict[str, Metric]:
    """Judge the metrics of a phase against its nonlinear prediction.

    Parameters
    ----------
    measured, linear, nonlinear : mapping of str to float or None
        Metrics by name [unit of the metric].
    units : mapping of str to str
        Unit by name.
    tolerances : Tolerances
        Allowed distances.
    scan : float
        Scan period [s].
    undecidable : frozenset of str
        Metrics that the noise decides.

    Returns
    -------
    dict of str to Metric
        Those that are defined for this phase, by name.
    """
    judged = {}
    for name, unit in units.items():
        values = (measured.get(name), linear.get(name), nonlinear.get(name))
        if all(value is None for value in values):
            continue
        predicted = values[2]
        limit = None if predicted is None else limit_of(name, predicted, tolerances, scan)
        judged[name] = Metric(
            unit=unit,
            measured=_finite(values[0]),
            predicted_linear=_finite(values[1]),
            predicted_nonlinear=_finite(values[2]),
            limit=limit,
            verdict=_verdict(name, values[0], predicted, limit, undecidable),
        )
    return judged


def _verdict(
    name: str,
    measured: float | None,
    predicted: float | None,
    limit: Limit | None,
    undecidable: frozenset[str],
) -> Outcome:
    if name in _SHOWN:
        return Outcome.SHOWN
    if name in undecidable and measured is not None:
        # One that never settled failed, wherever the prediction's lobe lies.
        return Outcome.NOT_DECIDABLE
    if limit is None:
        # Predicted to be never reached: reaching it is no fault, not reaching it neither.
        return Outcome.SHOWN
    if measured is None:
        return Outcome.FAIL
    inside = (limit.low is None or measured >= limit.low) and (
        limit.high is None or measured <= limit.high
    )
    return Outcome.PASS if inside and predicted is not None else Outcome.FAIL


def _finite(value: float | None) -> float | None:
    return value if value is not None and math.isfinite(value) else None


def worst(outcomes: Sequence[Outcome]) -> Outcome:
    """Return the verdict of a whole from those of its parts.

    Parameters
    ----------
    outcomes : sequence of Outcome
        Verdicts of the parts.

    Returns
    -------
    Outcome
        Invalid before fail before pass; parts shown or not decidable do not count.
    """
    for outcome in (Outcome.INVALID, Outcome.FAIL, Outcome.PASS):
        if outcome in outcomes:
            return outcome
    return Outcome.SHOWN
