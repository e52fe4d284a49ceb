"""Two classical rules, for comparison: Ziegler-Nichols reaction curve, and Cohen-Coon.

Both date from analogue controllers and aim at a load response that decays by a quarter from
peak to peak: quick, and closer to the limit than most people want today. The closed-loop time
constant plays no part in them. All figures are values from memory.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.errors import ModelError
from harness.tuning.rule_settings import RuleSettings

if TYPE_CHECKING:
    from harness.tuning.process import ProcessModel


def reaction_curve_p(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    """Return Kc = 1/(R theta), with R the slope of the reaction curve for a unit step.

    Parameters
    ----------
    model : ProcessModel
        One mode and dead time.
    closed_loop_time : float
        Not used [s].
    """
    del closed_loop_time
    return RuleSettings(gain=1.0 / _rise(model), integral_time=None)


def reaction_curve_pi(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    """Return Kc = 0.9/(R theta), Ti = 3.33 theta.

    Parameters
    ----------
    model : ProcessModel
        One mode and dead time.
    closed_loop_time : float
        Not used [s].
    """
    del closed_loop_time
    return RuleSettings(gain=0.9 / _rise(model), integral_time=3.33 * model.dead_time)


def reaction_curve_pid(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    """Return Kc = 1.2/(R theta), Ti = 2 theta, Td = theta/2.

    Parameters
    ----------
    model : ProcessModel
        One mode and dead time.
    closed_loop_time : float
        Not used [s].
    """
    del closed_loop_time
    return RuleSettings(
        gain=1.2 / _rise(model),
        integral_time=2.0 * model.dead_time,
        derivative_time=0.5 * model.dead_time,
    )


def cohen_coon_p(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    """Return Kc = (tau/(K theta)) (1 + theta/(3 tau)).

    Parameters
    ----------
    model : ProcessModel
        One lag and dead time.
    closed_loop_time : float
        Not used [s].
    """
    del closed_loop_time
    ratio = _ratio(model)
    return RuleSettings(
        gain=(1.0 + ratio / 3.0) / (abs(model.gain) * ratio), integral_time=None
    )


def cohen_coon_pi(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    """Return Kc = (tau/(K theta)) (0.9 + r/12), Ti = theta (30 + 3 r)/(9 + 20 r), r = theta/tau.

    Parameters
    ----------
    model : ProcessModel
        One lag and dead time.
    closed_loop_time : float
        Not used [s].
    """
    del closed_loop_time
    ratio = _ratio(model)
    return RuleSettings(
        gain=(0.9 + ratio / 12.0) / (abs(model.gain) * ratio),
        integral_time=model.dead_time * (30.0 + 3.0 * ratio) / (9.0 + 20.0 * ratio),
    )


def cohen_coon_pid(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    """Return Kc = (tau/(K theta)) (4/3 + r/4), Ti = theta (32 + 6 r)/(13 + 8 r), Td = 4 theta/(11 + 2 r).

    Parameters
    ----------
    model : ProcessModel
        One lag and dead time; r is dead time over lag.
    closed_loop_time : float
        Not used [s].
    """
    del closed_loop_time
    ratio = _ratio(model)
    return RuleSettings(
        gain=(4.0 / 3.0 + ratio / 4.0) / (abs(model.gain) * ratio),
        integral_time=model.dead_time * (32.0 + 6.0 * ratio) / (13.0 + 8.0 * ratio),
        derivative_time=4.0 * model.dead_time / (11.0 + 2.0 * ratio),
    )


def _rise(model: ProcessModel) -> float:
    """Return R theta: what the tangent of the reaction curve gains over the dead time."""
    _check_dead_time(model)
    slope = abs(model.gain) if model.integrating else abs(model.gain) / model.time_constants[0]
    return slope * model.dead_time


def _ratio(model: ProcessModel) -> float:
    """Return theta/tau."""
    if model.integrating:
        raise ModelError(
            "Cohen-Coon is made for a self-regulating process, and this one integrates; take "
            "zn-pi or simc-pi"
        )
    _check_dead_time(model)
    return model.dead_time / model.time_constants[0]


def _check_dead_time(model: ProcessModel) -> None:
    if model.dead_time <= 0.0:
        raise ModelError(
            "the classical rules divide by the dead time, and this process has none; take "
            "another rule, or count the scan in (--scan)"
        )
