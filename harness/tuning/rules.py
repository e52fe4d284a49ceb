"""Tuning rules by name: what each makes of a process, and where it comes from.

A rule is one function and one line in ``RULES``. It gets the process after the half rule, with
as many modes as it asks for, and returns settings of a positive gain in its own published form.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.errors import ModelError, UsageError
from harness.tuning.classical import (
    cohen_coon_p,
    cohen_coon_pi,
    cohen_coon_pid,
    reaction_curve_p,
    reaction_curve_pi,
    reaction_curve_pid,
)
from harness.tuning.forms import Form
from harness.tuning.process import as_lags
from harness.tuning.rule_settings import RuleSettings
from harness.tuning.synthesis import chen_seborg_pi, direct_synthesis_p

if TYPE_CHECKING:
    from collections.abc import Callable

    from harness.tuning.process import ProcessModel

SEBORG = (
    "D. E. Seborg, T. F. Edgar, D. A. Mellichamp, Process Dynamics and Control, ch. 12 "
    "(value from memory)"
)
CHEN_SEBORG = "D. Chen, D. E. Seborg, Ind. Eng. Chem. Res. 41:4807, 2002 (formula from memory, re-derived)"
SKOGESTAD = "S. Skogestad, J. Process Control 13:291-309, 2003"
RIVERA = (
    "D. E. Rivera, M. Morari, S. Skogestad, Ind. Eng. Chem. Process Des. Dev. 25:252, 1986 "
    "(value from memory)"
)
ZIEGLER_NICHOLS = "J. G. Ziegler, N. B. Nichols, Trans. ASME 64:759, 1942 (value from memory)"
COHEN_COON = "G. H. Cohen, G. A. Coon, Trans. ASME 75:827, 1953 (value from memory)"


@dataclass(frozen=True, slots=True, kw_only=True)
class Rule:
    """One tuning rule.

    Parameters
    ----------
    name : str
        Name on the command line.
    title : str
        Name for people.
    law : str
        P, PI or PID.
    order : int
        Modes of the process it is applied to, 1 or 2 [-].
    aim : str
        What it is made for.
    source : str
        Where it comes from.
    settle : callable
        From the reduced process and the closed-loop time constant [s] to settings.
    takes_closed_loop_time : bool
        Whether the closed-loop time constant matters to it.
    """

    name: str
    title: str
    law: str
    order: int
    aim: str
    source: str
    settle: Callable[[ProcessModel, float], RuleSettings]
    takes_closed_loop_time: bool = True


def _size(model: ProcessModel) -> float:
    return abs(model.gain)


def _lag(model: ProcessModel) -> float:
    return model.time_constants[0]


def _synthesis_p(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    if model.integrating:
        span = closed_loop_time + model.dead_time
        return RuleSettings(gain=1.0 / (_size(model) * span), integral_time=None)
    found = direct_synthesis_p(as_lags(model), closed_loop_time).settings
    return RuleSettings(gain=found.gain, integral_time=None)


def _synthesis_pi(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    if model.integrating:
        raise ModelError(
            "direct synthesis for setpoint on an integrating process comes to P alone: integral "
            "action would cancel the integrator; take ds-p, load-pi, simc-pi or lambda-pi"
        )
    gain = _lag(model) / (_size(model) * (closed_loop_time + model.dead_time))
    return RuleSettings(gain=gain, integral_time=_lag(model))


def _synthesis_pid(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    span = _size(model) * (closed_loop_time + model.dead_time)
    if model.integrating:
        # The controller that leaves exp(-theta s)/((tau_c + theta) s) of K/(s (tau s + 1)) is PD.
        raise ModelError(
            "direct synthesis for setpoint on an integrating process has no integral action; "
            "take load-pid or simc-pid"
        )
    first, second = _two_lags(model, "ds-pid")
    return RuleSettings(
        gain=(first + second) / span,
        integral_time=first + second,
        derivative_time=first * second / (first + second),
    )


def _load_pi(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    if model.integrating:
        return _integrator_pi(model, closed_loop_time)
    found = chen_seborg_pi(as_lags(model), closed_loop_time).settings
    return RuleSettings(gain=found.gain, integral_time=found.integral_time)


def _integrator_pi(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    """Ti = 2 tau_c + theta, Kc = Ti/(K (tau_c + theta)^2)."""
    integral = 2.0 * closed_loop_time + model.dead_time
    gain = integral / (_size(model) * (closed_loop_time + model.dead_time) ** 2)
    return RuleSettings(gain=gain, integral_time=integral)


def _load_pid(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    """Match C = Kc (tau_c s + 1)^3 exp(theta s)/(Ti s) - 1/G to a PID with 1 - theta s for the delay.

    With q = Ti/(K Kc), the coefficients of s, s^2 and s^3 give
    q = (tau_c + theta)^3/((tau1 + theta)(tau2 + theta)), Ti = 3 tau_c + theta - q and
    Ti Td = 3 tau_c^2 - (tau1 + tau2) q + theta Ti.
    """
    dead, tau_c = model.dead_time, closed_loop_time
    if model.integrating:
        if not model.time_constants:
            raise ModelError(
                "load-pid on an integrating process needs a lag beside the integrator; "
                "without one the derivative comes out negative: take load-pi"
            )
        lag = _lag(model)
        share = (tau_c + dead) ** 3 / (lag + dead)
        integral = 3.0 * tau_c + dead
        product = 3.0 * tau_c**2 - share + dead * integral
    else:
        first, second = _two_lags(model, "load-pid")
        share = (tau_c + dead) ** 3 / ((first + dead) * (second + dead))
        integral = 3.0 * tau_c + dead - share
        product = 3.0 * tau_c**2 - (first + second) * share + dead * integral
    if integral <= 0.0 or product <= 0.0:
        raise ModelError(
            f"load-pid: closed-loop time {tau_c:g} s leaves no positive integral or derivative "
            "time; ask for a shorter one, or take load-pi"
        )
    return RuleSettings(
        gain=integral / (_size(model) * share),
        integral_time=integral,
        derivative_time=product / integral,
    )


def _simc(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    span = closed_loop_time + model.dead_time
    if model.integrating:
        derivative = _lag(model) if model.time_constants else 0.0
        gain, integral = 1.0 / (_size(model) * span), 4.0 * span
    else:
        derivative = model.time_constants[1] if len(model.time_constants) > 1 else 0.0
        gain, integral = _lag(model) / (_size(model) * span), min(_lag(model), 4.0 * span)
    return RuleSettings(
        gain=gain, integral_time=integral, derivative_time=derivative, form=Form.SERIES
    )


def _simc_pid(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    found = _simc(model, closed_loop_time)
    if found.derivative_time == 0.0:
        raise ModelError(
            "simc-pid gets its derivative time from a second lag, and this process has none: "
            "take simc-pi"
        )
    return found


def _lambda_pi(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    if model.integrating:
        return _integrator_pi(model, closed_loop_time)
    return _synthesis_pi(model, closed_loop_time)


def _imc_pi(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    if model.integrating:
        return _integrator_pi(model, closed_loop_time)
    integral = _lag(model) + 0.5 * model.dead_time
    return RuleSettings(
        gain=integral / (_size(model) * closed_loop_time), integral_time=integral
    )


def _imc_pid(model: ProcessModel, closed_loop_time: float) -> RuleSettings:
    dead, tau_c = model.dead_time, closed_loop_time
    if len(model.time_constants) > 1:
        return _synthesis_pid(model, closed_loop_time)
    if dead == 0.0:
        raise ModelError(
            "imc-pid on one lag gets its derivative time from the dead time, and there is none: "
            "take imc-pi"
        )
    half = tau_c + 0.5 * dead
    if model.integrating:
        integral = 2.0 * tau_c + dead
        return RuleSettings(
            gain=integral / (_size(model) * half**2),
            integral_time=integral,
            derivative_time=(tau_c * dead + 0.25 * dead**2) / integral,
        )
    lag = _lag(model)
    return RuleSettings(
        gain=(lag + 0.5 * dead) / (_size(model) * half),
        integral_time=lag + 0.5 * dead,
        derivative_time=lag * dead / (2.0 * lag + dead),
    )


def _two_lags(model: ProcessModel, rule: str) -> tuple[float, float]:
    if len(model.time_constants) < 2:  # noqa: PLR2004  the rule's own order
        raise ModelError(
            f"{rule} cancels two lags, and this process has one; take the PI of the same name, "
            "or imc-pid, which gets its derivative time from the dead time"
        )
    return model.time_constants[0], model.time_constants[1]


_SETPOINT, _LOAD, _BOTH = "setpoint", "load", "setpoint and load"

_LIST = (
    Rule(name="ds-p", title="Direct synthesis, P", law="P", order=1, aim=_SETPOINT,
         source=f"pole placement; {SEBORG}", settle=_synthesis_p),
    Rule(name="ds-pi", title="Direct synthesis, PI", law="PI", order=1, aim=_SETPOINT,
         source=SEBORG, settle=_synthesis_pi),
    Rule(name="ds-pid", title="Direct synthesis, PID", law="PID", order=2, aim=_SETPOINT,
         source=SEBORG, settle=_synthesis_pid),
    Rule(name="load-pi", title="Direct synthesis for load, PI", law="PI", order=1, aim=_LOAD,
         source=CHEN_SEBORG, settle=_load_pi),
    Rule(name="load-pid", title="Direct synthesis for load, PID", law="PID", order=2, aim=_LOAD,
         source=CHEN_SEBORG, settle=_load_pid),
    Rule(name="simc-pi", title="SIMC, PI", law="PI", order=1, aim=_BOTH, source=SKOGESTAD,
         settle=_simc),
    Rule(name="simc-pid", title="SIMC, PID", law="PID", order=2, aim=_BOTH, source=SKOGESTAD,
         settle=_simc_pid),
    Rule(name="lambda-pi", title="Lambda, PI", law="PI", order=1, aim=_SETPOINT,
         source=f"the PI of internal model control: {RIVERA}", settle=_lambda_pi),
    Rule(name="imc-pi", title="IMC, improved PI", law="PI", order=1, aim=_SETPOINT,
         source=RIVERA, settle=_imc_pi),
    Rule(name="imc-pid", title="IMC, PID", law="PID", order=2, aim=_SETPOINT, source=RIVERA,
         settle=_imc_pid),
    Rule(name="zn-p", title="Ziegler-Nichols reaction curve, P", law="P", order=1, aim=_LOAD,
         source=ZIEGLER_NICHOLS, settle=reaction_curve_p, takes_closed_loop_time=False),
    Rule(name="zn-pi", title="Ziegler-Nichols reaction curve, PI", law="PI", order=1, aim=_LOAD,
         source=ZIEGLER_NICHOLS, settle=reaction_curve_pi, takes_closed_loop_time=False),
    Rule(name="zn-pid", title="Ziegler-Nichols reaction curve, PID", law="PID", order=1,
         aim=_LOAD, source=ZIEGLER_NICHOLS, settle=reaction_curve_pid,
         takes_closed_loop_time=False),
    Rule(name="cc-p", title="Cohen-Coon, P", law="P", order=1, aim=_LOAD, source=COHEN_COON,
         settle=cohen_coon_p, takes_closed_loop_time=False),
    Rule(name="cc-pi", title="Cohen-Coon, PI", law="PI", order=1, aim=_LOAD, source=COHEN_COON,
         settle=cohen_coon_pi, takes_closed_loop_time=False),
    Rule(name="cc-pid", title="Cohen-Coon, PID", law="PID", order=1, aim=_LOAD,
         source=COHEN_COON, settle=cohen_coon_pid, takes_closed_loop_time=False),
)  # fmt: skip

RULES = {rule.name: rule for rule in _LIST}

_FAMILIES = {
    "direct-synthesis": "ds", "setpoint": "ds", "disturbance": "load", "chen-seborg": "load",
    "disturbance-rejection": "load", "direct-synthesis-load": "load", "skogestad": "simc",
    "ziegler-nichols": "zn", "cohen-coon": "cc", "reaction-curve": "zn",
}  # fmt: skip


def rules_named(names: tuple[str, ...]) -> tuple[Rule, ...]:
    """Return the rules of given names; a family's name stands for all of its laws.

    Parameters
    ----------
    names : tuple of str
        ``"simc-pi"``, ``"simc"``, ``"direct-synthesis"``, ``"all"``; empty for all.

    Returns
    -------
    tuple of Rule
        In the order of the table.

    Raises
    ------
    UsageError
        When there is no rule of a name.
    """
    chosen: set[str] = set()
    for name in names or ("all",):
        found = _matching(name)
        if not found:
            families = ", ".join(sorted(_FAMILIES))
            raise UsageError(
                f'no tuning rule "{name}"; there are {", ".join(RULES)}; '
                f"a family stands for all of its laws: ds, load, simc, imc, zn, cc, {families}, all"
            )
        chosen |= found
    return tuple(rule for rule in _LIST if rule.name in chosen)


def _matching(name: str) -> set[str]:
    plain = name.strip().lower().replace("_", "-").replace(" ", "-")
    for long in sorted(_FAMILIES, key=len, reverse=True):
        if plain == long or plain.startswith(long + "-"):
            plain = _FAMILIES[long] + plain[len(long) :]
            break
    if plain == "all":
        return set(RULES)
    if plain in RULES:
        return {plain}
    return {rule for rule in RULES if rule.rpartition("-")[0] == plain}


def default_closed_loop_time(model: ProcessModel) -> float:
    """Return a closed-loop time constant where none is asked for.

    The effective dead time, at which SIMC is balanced (S. Skogestad, 2003), or a tenth of the
    lag where that is longer: common practice, since a loop hardly runs away by more than ten.

    Parameters
    ----------
    model : ProcessModel
        After the half rule, one mode kept.

    Returns
    -------
    float
        tau_c [s].

    Raises
    ------
    ModelError
        When neither dead time nor lag says anything of the speed.
    """
    lag = 0.0 if model.integrating else _lag(model)
    time = max(model.dead_time, 0.1 * lag)
    if not (math.isfinite(time) and time > 0.0):
        raise ModelError(
            "tuning: the process integrates without any dead time, so that any speed is "
            "possible; say the closed-loop time constant that is wanted"
        )
    return time
