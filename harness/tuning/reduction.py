"""The half rule: a model of many lags as one of first or second order plus dead time.

Source: S. Skogestad, Simple analytic rules for model reduction and PID controller tuning,
J. Process Control 13:291-309, 2003.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.domain.models import LagModel
from harness.errors import ModelError
from harness.tuning.response import check_model

if TYPE_CHECKING:
    from collections.abc import Sequence

HALF_RULE = "half rule (S. Skogestad, J. Process Control 13:291-309, 2003)"


@dataclass(frozen=True, slots=True, kw_only=True)
class Reduced:
    """Lags that are kept and the dead time that stands for the rest.

    Parameters
    ----------
    time_constants : tuple of float
        Lags kept, the larger first [s].
    dead_time : float
        Effective dead time [s].
    """

    time_constants: tuple[float, ...]
    dead_time: float


def half_rule(
    lags: Sequence[float],
    *,
    order: int = 1,
    dead_time: float = 0.0,
    inverse_responses: Sequence[float] = (),
    leads: Sequence[float] = (),
    sample_period: float = 0.0,
) -> Reduced:
    """Reduce a cascade of lags by the half rule.

    Half of the largest neglected lag goes to the smallest one kept, the other half to the dead
    time; so do the smaller lags, the inverse-response times and half the sample period.

    A lead (T s + 1) is first cancelled against the smallest lag that is larger,
    (T s + 1)/(tau s + 1) -> 1/((tau - T) s + 1), which is the paper's rule T3.

    Parameters
    ----------
    lags : sequence of float
        Time constants in any order [s].
    order : int
        Lags to keep, 1 or 2 [-].
    dead_time : float
        Dead time of the cascade [s].
    inverse_responses : sequence of float
        T of each factor (-T s + 1) in the numerator, positive [s].
    leads : sequence of float
        T of each factor (T s + 1) in the numerator, positive [s].
    sample_period : float
        Period of the controller, half of which is dead time; 0 for a continuous one [s].

    Returns
    -------
    Reduced
        Lags kept and effective dead time.

    Raises
    ------
    ModelError
        If a time is negative, the order is not 1 or 2, or a lead is larger than every lag.
    """
    if order not in {1, 2}:
        raise ModelError(f"half rule: order {order} is not offered; it keeps 1 or 2 lags")
    times = (*lags, *inverse_responses, *leads, dead_time, sample_period)
    if min(times) < 0.0:
        raise ModelError(f"half rule: a time is {min(times):g} s; all must be 0 or more")
    remaining = sorted(_cancel(list(lags), leads), reverse=True)
    if not remaining or remaining[0] <= 0.0:
        raise ModelError("half rule: there is no lag above 0 s to keep")
    kept, neglected = remaining[:order], remaining[order:]
    delay = dead_time + sum(inverse_responses) + 0.5 * sample_period + sum(neglected)
    if neglected:
        kept[-1] += 0.5 * neglected[0]
        delay -= 0.5 * neglected[0]
    return Reduced(time_constants=tuple(sorted(kept, reverse=True)), dead_time=delay)


def reduce_to_first_order(model: LagModel, sample_period: float = 0.0) -> LagModel:
    """Return the first-order model that the half rule makes of a model of one or two lags.

    Parameters
    ----------
    model : LagModel
        Model.
    sample_period : float
        Period of the controller, half of which is dead time; 0 leaves it out [s].

    Returns
    -------
    LagModel
        First-order model with the same gain and the same total lag (plus half the period).

    Raises
    ------
    ModelError
        If the model is not usable.
    """
    check_model(model)
    reduced = half_rule(
        model.time_constants, dead_time=model.dead_time, sample_period=sample_period
    )
    return LagModel(
        gain=model.gain, time_constants=reduced.time_constants, dead_time=reduced.dead_time
    )


def _cancel(lags: list[float], leads: Sequence[float]) -> list[float]:
    """Cancel each lead against the smallest lag that is larger."""
    for lead in sorted(leads, reverse=True):
        larger = [lag for lag in lags if lag >= lead]
        if not larger:
            raise ModelError(
                f"half rule: a lead of {lead:g} s is larger than every lag left "
                f"({', '.join(f'{lag:g}' for lag in lags) or 'none'}); the rule does not cover it"
            )
        lags.remove(min(larger))
        lags.append(min(larger) - lead)
    return lags
