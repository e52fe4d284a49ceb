"""The wider family of processes that are tuned, and the P, PI or PID block on them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.domain.models import LagModel
from harness.domain.rig import Action
from harness.errors import ModelError
from harness.tuning.reduction import half_rule

if TYPE_CHECKING:
    from harness.domain.models import ControllerSettings


@dataclass(frozen=True, slots=True, kw_only=True)
class ProcessModel:
    """K prod(T_i s + 1) exp(-theta s) / (s^m prod(tau_i s + 1)), with m 0 or 1.

    Parameters
    ----------
    gain : float
        K; with ``integrating`` per second of time
        [fraction of PV span per fraction of output, or that per second].
    time_constants : tuple of float
        tau_i, any number, in any order [s].
    dead_time : float
        theta [s].
    integrating : bool
        Whether m is 1: the output goes on for as long as the input stands off its balance.
    numerator_times : tuple of float
        T_i; a negative one is an inverse response [s].
    """

    gain: float
    time_constants: tuple[float, ...] = ()
    dead_time: float = 0.0
    integrating: bool = False
    numerator_times: tuple[float, ...] = ()

    @property
    def inverse_response(self) -> float:
        """Return the sum of the inverse-response times [s]."""
        return -sum(time for time in self.numerator_times if time < 0.0)

    @property
    def total_lag(self) -> float:
        """Return the sum of lags, dead time and inverse-response times, less the leads [s]."""
        return sum(self.time_constants) + self.dead_time - sum(self.numerator_times)


@dataclass(frozen=True, slots=True, kw_only=True)
class PidSettings:
    """Settings of an ideal-form block: Kc (1 + 1/(Ti s) + Td s/(Tf s + 1)).

    Parameters
    ----------
    gain : float
        Kc, positive; the sign of the action is in ``action`` [fraction of output per fraction of PV span].
    integral_time : float or None
        Ti; None for no integral action [s].
    derivative_time : float
        Td; 0 for none [s].
    derivative_filter : float
        Tf, the lag on the derivative part alone [s].
    derivative_on_error : bool
        Whether the derivative sees the setpoint too; most blocks take the process variable alone.
    action : Action
        Direct or reverse.
    """

    gain: float
    integral_time: float | None
    derivative_time: float = 0.0
    derivative_filter: float = 0.0
    derivative_on_error: bool = False
    action: Action

    @property
    def law(self) -> str:
        """Return the terms of the law: P, PI, PD or PID."""
        integral = "" if self.integral_time is None else "I"
        return "P" + integral + ("D" if self.derivative_time > 0.0 else "")


def process_of(model: LagModel | ProcessModel) -> ProcessModel:
    """Return a lag model as a member of the wider family.

    Parameters
    ----------
    model : LagModel or ProcessModel
        Model.
    """
    if isinstance(model, ProcessModel):
        return model
    return ProcessModel(
        gain=model.gain, time_constants=model.time_constants, dead_time=model.dead_time
    )


def pid_of(settings: ControllerSettings | PidSettings) -> PidSettings:
    """Return P or PI settings as those of a PID block without derivative.

    Parameters
    ----------
    settings : ControllerSettings or PidSettings
        Settings.
    """
    if isinstance(settings, PidSettings):
        return settings
    return PidSettings(
        gain=settings.gain, integral_time=settings.integral_time, action=settings.action
    )


def action_for(model: ProcessModel) -> Action:
    """Return the action that makes negative feedback.

    Parameters
    ----------
    model : ProcessModel
        From controller output to process variable.
    """
    return Action.REVERSE if model.gain > 0.0 else Action.DIRECT


def check_process(model: ProcessModel) -> None:
    """Refuse a process that no loop can be closed on.

    Parameters
    ----------
    model : ProcessModel
        Model.

    Raises
    ------
    ModelError
        If the gain is 0, or `check_shape` refuses it.
    """
    check_shape(model)
    if model.gain == 0.0:
        raise ModelError(
            "process: gain is 0; it must be a number other than 0: an output that moves nothing "
            "cannot control"
        )


def check_shape(model: ProcessModel) -> None:
    """Refuse a process whose figures make no transfer function of the family.

    Parameters
    ----------
    model : ProcessModel
        Model.

    Raises
    ------
    ModelError
        If a figure is no number or a time is negative, there is no lag, or there are as many
        numerator factors as lags.
    """
    if not math.isfinite(model.gain):
        raise ModelError(f"process: gain is {model.gain:g}; it must be a finite number")
    times = [("time constant", value) for value in model.time_constants]
    for name, value in (*times, ("dead time", model.dead_time)):
        if not (math.isfinite(value) and value >= 0.0):
            raise ModelError(f"process: {name} is {value:g} s; it must be 0 or more")
    if not all(math.isfinite(value) for value in model.numerator_times):
        raise ModelError(
            f"process: numerator times {model.numerator_times} s must be finite numbers"
        )
    lags = sum(value > 0.0 for value in model.time_constants) + model.integrating
    if lags == 0:
        raise ModelError(
            "process: it has no time constant above 0 s and does not integrate; a pure dead "
            "time is not covered: give a time constant"
        )
    if sum(value != 0.0 for value in model.numerator_times) >= lags:
        raise ModelError(
            f"process: {len(model.numerator_times)} numerator factors on {lags} lags; there "
            "must be fewer, or the output would jump with the input"
        )


def check_settings(model: ProcessModel, settings: PidSettings) -> None:
    """Refuse a block that makes no control loop on a process.

    Parameters
    ----------
    model : ProcessModel
        From controller output to process variable.
    settings : PidSettings
        Settings of the block.

    Raises
    ------
    ModelError
        If a setting is out of its range, or the feedback is positive.
    """
    check_process(model)
    if not (math.isfinite(settings.gain) and settings.gain > 0.0):
        raise ModelError(
            f"controller: gain {settings.gain:g}; it must be above 0, the direction is the action's"
        )
    integral = settings.integral_time
    if integral is not None and not (math.isfinite(integral) and integral > 0.0):
        raise ModelError(
            f"controller: integral time {integral:g} s; it must be above 0, or none at all"
        )
    if settings.derivative_time < 0.0 or settings.derivative_filter < 0.0:
        raise ModelError(
            f"controller: derivative time {settings.derivative_time:g} s with a filter of "
            f"{settings.derivative_filter:g} s; neither may be negative"
        )
    if settings.derivative_time > 0.0 and settings.derivative_filter == 0.0:
        raise ModelError(
            f"controller: derivative time {settings.derivative_time:g} s without a filter; no "
            "block can do that: give the derivative a filter time (a tenth of it, as a rule)"
        )
    if settings.action is not action_for(model):
        raise ModelError(
            f"controller: {settings.action} action on a process gain of {model.gain:g} is "
            f"positive feedback; it must be {action_for(model)}"
        )


def reduce_process(model: ProcessModel, order: int, extra_delay: float = 0.0) -> ProcessModel:
    """Return the process that a tuning rule is applied to, by the half rule.

    An integrating process keeps its integrator as the slow mode, and ``order - 1`` lags beside
    it; half of the largest neglected lag then goes to the integrator, where it is lost, and half
    to the dead time (S. Skogestad, J. Process Control 13:291-309, 2003, section 3).

    Parameters
    ----------
    model : ProcessModel
        Process.
    order : int
        Modes to keep, 1 or 2 [-].
    extra_delay : float
        What counts as dead time besides: half the scan, a filter, an output delay [s].

    Returns
    -------
    ProcessModel
        Without numerator; integrating as the given one.

    Raises
    ------
    ModelError
        If the process is not usable, or the rule does not cover it.
    """
    check_process(model)
    inverse = [-value for value in model.numerator_times if value < 0.0]
    leads = [value for value in model.numerator_times if value > 0.0]
    lags = [value for value in model.time_constants if value > 0.0]
    if model.integrating:
        slow = 1e6 * (sum(lags) + model.dead_time + sum(leads) + 1.0)
        lags = [slow, *lags]
    reduced = half_rule(
        lags,
        order=min(order, len(lags)),
        dead_time=model.dead_time + extra_delay,
        inverse_responses=inverse,
        leads=leads,
    )
    kept = reduced.time_constants[1:] if model.integrating else reduced.time_constants
    return ProcessModel(
        gain=model.gain,
        time_constants=kept,
        dead_time=reduced.dead_time,
        integrating=model.integrating,
    )


def as_lags(model: ProcessModel) -> LagModel:
    """Return a process of one or two lags as a lag model.

    Parameters
    ----------
    model : ProcessModel
        Self-regulating, without numerator.

    Raises
    ------
    ModelError
        If it is no such process.
    """
    if model.integrating or model.numerator_times or len(model.time_constants) not in {1, 2}:
        raise ModelError("process: only one or two lags with dead time are a lag model")
    return LagModel(
        gain=model.gain, time_constants=model.time_constants, dead_time=model.dead_time
    )
