"""Controller settings from a model: direct synthesis, and two published rules beside it."""

from __future__ import annotations

import math
from dataclasses import dataclass

from harness.domain.models import ControlLaw, ControllerSettings, LagModel
from harness.domain.rig import Action
from harness.errors import ModelError
from harness.tuning.reduction import HALF_RULE, reduce_to_first_order


@dataclass(frozen=True, slots=True, kw_only=True)
class Synthesis:
    """Settings and how they came about.

    Parameters
    ----------
    settings : ControllerSettings
        Settings of the block.
    reduced : LagModel
        First-order model that the rule was applied to.
    rule : str
        The rule, and the reduction before it where there was one, in words.
    closed_loop_time : float
        Closed-loop time constant asked for [s].
    """

    settings: ControllerSettings
    reduced: LagModel
    rule: str
    closed_loop_time: float


def direct_synthesis(model: LagModel, law: ControlLaw, closed_loop_time: float) -> Synthesis:
    """Return the P or PI settings of direct synthesis.

    Parameters
    ----------
    model : LagModel
        From controller output to process variable.
    law : ControlLaw
        P or PI.
    closed_loop_time : float
        Closed-loop time constant asked for [s].

    Returns
    -------
    Synthesis
        Settings.

    Raises
    ------
    ModelError
        As `direct_synthesis_pi` and `direct_synthesis_p`.
    """
    if law is ControlLaw.P:
        return direct_synthesis_p(model, closed_loop_time)
    return direct_synthesis_pi(model, closed_loop_time)


def direct_synthesis_pi(model: LagModel, closed_loop_time: float) -> Synthesis:
    """Return the PI settings that ask for exp(-theta s)/(tau_c s + 1) from setpoint to process.

    On a first-order model Kc = tau/(K (tau_c + theta)) and Ti = tau (D. E. Seborg, T. F. Edgar,
    D. A. Mellichamp, *Process Dynamics and Control*, ch. 12; value from memory). A second lag is
    reduced by the half rule first.

    Parameters
    ----------
    model : LagModel
        From controller output to process variable.
    closed_loop_time : float
        tau_c; above zero, as a rule at least the effective dead time [s].

    Returns
    -------
    Synthesis
        Settings.

    Raises
    ------
    ModelError
        If the model has no gain, no lag, or tau_c is not above zero.
    """
    reduced, before = _first_order(model, closed_loop_time)
    lag = reduced.time_constants[0]
    gain = lag / (reduced.gain * (closed_loop_time + reduced.dead_time))
    return Synthesis(
        settings=_settings(gain, lag),
        reduced=reduced,
        rule=f"{before}direct synthesis, PI: Kc = tau/(K (tau_c + theta)), Ti = tau",
        closed_loop_time=closed_loop_time,
    )


def direct_synthesis_p(model: LagModel, closed_loop_time: float) -> Synthesis:
    """Return the P setting that places the closed-loop pole of a first-order model.

    With u = Kc e the lag tau becomes tau/(1 + K Kc), so that Kc = (tau/tau_c - 1)/K. A P block
    can only make a loop faster. The dead time is left out of the placement: look at the margins.

    Parameters
    ----------
    model : LagModel
        From controller output to process variable; a second lag is reduced by the half rule.
    closed_loop_time : float
        tau_c; above zero and below the lag [s].

    Returns
    -------
    Synthesis
        Settings.

    Raises
    ------
    ModelError
        If the model has no gain or no lag, or tau_c is not between zero and the lag.
    """
    reduced, before = _first_order(model, closed_loop_time)
    lag = reduced.time_constants[0]
    if closed_loop_time >= lag:
        raise ModelError(
            f"direct synthesis, P: closed-loop time {closed_loop_time:g} s is not below the "
            f"model's lag of {lag:g} s; a P block cannot make a loop slower: "
            "ask for a shorter time, or take PI"
        )
    return Synthesis(
        settings=_settings((lag / closed_loop_time - 1.0) / reduced.gain, None),
        reduced=reduced,
        rule=f"{before}pole placement, P: Kc = (tau/tau_c - 1)/K",
        closed_loop_time=closed_loop_time,
    )


def proportional_offset(
    model: LagModel, settings: ControllerSettings, setpoint_change: float
) -> float:
    """Return the lasting error a P block leaves after a setpoint step: r/(1 + K Kc).

    Parameters
    ----------
    model : LagModel
        From controller output to process variable.
    settings : ControllerSettings
        Settings of the block.
    setpoint_change : float
        r, from the point of bumpless transfer [fraction of PV span].

    Returns
    -------
    float
        Setpoint minus process variable, once steady; zero with integral action
        [fraction of PV span].
    """
    if settings.integral_time is not None:
        return 0.0
    return setpoint_change / (1.0 + abs(model.gain) * settings.gain)


def simc_pi(model: LagModel, closed_loop_time: float) -> Synthesis:
    """Return PI settings with Kc = tau/(K (tau_c + theta)), Ti = min(tau, 4 (tau_c + theta)).

    Source: S. Skogestad, J. Process Control 13:291-309, 2003.

    Parameters
    ----------
    model : LagModel
        From controller output to process variable; a second lag is reduced by the half rule.
    closed_loop_time : float
        tau_c [s].

    Returns
    -------
    Synthesis
        Settings.

    Raises
    ------
    ModelError
        If the model has no gain, no lag, or tau_c is not above zero.
    """
    reduced, before = _first_order(model, closed_loop_time)
    lag, span = reduced.time_constants[0], closed_loop_time + reduced.dead_time
    return Synthesis(
        settings=_settings(lag / (reduced.gain * span), min(lag, 4.0 * span)),
        reduced=reduced,
        rule=f"{before}PI: Kc = tau/(K (tau_c + theta)), Ti = min(tau, 4 (tau_c + theta))",
        closed_loop_time=closed_loop_time,
    )


def chen_seborg_pi(model: LagModel, closed_loop_time: float) -> Synthesis:
    """Return PI settings by direct synthesis of the response to a load at the process input.

    With N = tau^2 + tau theta - (tau_c - tau)^2: Kc = N/(K (tau_c + theta)^2),
    Ti = N/(tau + theta). Source: D. Chen and D. E. Seborg, Ind. Eng. Chem. Res. 41:4807, 2002
    (formula from memory).

    Parameters
    ----------
    model : LagModel
        From controller output to process variable; a second lag is reduced by the half rule.
    closed_loop_time : float
        tau_c [s].

    Returns
    -------
    Synthesis
        Settings.

    Raises
    ------
    ModelError
        If the model has no gain or no lag, or tau_c is so large that the settings would be
        zero or negative.
    """
    reduced, before = _first_order(model, closed_loop_time)
    lag, dead = reduced.time_constants[0], reduced.dead_time
    numerator = lag**2 + lag * dead - (closed_loop_time - lag) ** 2
    if numerator <= 0.0:
        limit = lag + math.sqrt(lag**2 + lag * dead)
        raise ModelError(
            f"load synthesis, PI: closed-loop time {closed_loop_time:g} s leaves no positive "
            f"gain; for this model it must be below {limit:g} s"
        )
    gain = numerator / (reduced.gain * (closed_loop_time + dead) ** 2)
    return Synthesis(
        settings=_settings(gain, numerator / (lag + dead)),
        reduced=reduced,
        rule=f"{before}direct synthesis for load response, PI (D. Chen, D. E. Seborg, 2002)",
        closed_loop_time=closed_loop_time,
    )


def _first_order(model: LagModel, closed_loop_time: float) -> tuple[LagModel, str]:
    """Return the model to tune on, and the words for how it was made."""
    if not (math.isfinite(closed_loop_time) and closed_loop_time > 0.0):
        raise ModelError(
            f"synthesis: closed-loop time is {closed_loop_time:g} s; it must be above 0"
        )
    reduced = reduce_to_first_order(model)
    if reduced.gain == 0.0:
        raise ModelError(
            "synthesis: the model's gain is 0; an output that moves nothing cannot control"
        )
    return reduced, f"{HALF_RULE}, then " if len(model.time_constants) > 1 else ""


def _settings(signed_gain: float, integral_time: float | None) -> ControllerSettings:
    """Return settings whose action undoes the sign: a rising process asks for reverse action."""
    return ControllerSettings(
        gain=abs(signed_gain),
        integral_time=integral_time,
        action=Action.REVERSE if signed_gain > 0.0 else Action.DIRECT,
    )
