"""Linear prediction in continuous mode: ideal P, PI or PID, exact dead time, method of steps.

The loop with dead time is a linear delay differential equation. Each element of time carries
the solution as a polynomial through Chebyshev points; the elements divide the dead time, so
that the delayed solution is known at the very same points of an earlier element, and every
kink (they sit at multiples of the dead time) falls on an edge. No Pade approximation.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.domain.models import ControlLaw, ControllerSettings, LagModel
from harness.domain.rig import Action
from harness.errors import ModelError, UsageError
from harness.tuning.process import PidSettings, ProcessModel, pid_of, process_of
from harness.tuning.state_space import state_space

_REACH = 1.0  # longest element, in time constants of the fastest delay-free rate [-]
_DEGREE = (
    12  # of an element's polynomial: at that reach it cuts off below 4 (1/4)**13 / 13! = 1e-17
)


@dataclass(frozen=True, slots=True, kw_only=True)
class IntegratorModel:
    """K exp(-theta s) / s: a vessel whose outflow does not depend on its level.

    Parameters
    ----------
    gain : float
        K [fraction of PV span per second per fraction of output].
    dead_time : float
        theta [s].
    """

    gain: float
    dead_time: float


AnyModel = LagModel | IntegratorModel | ProcessModel


@dataclass(frozen=True, slots=True, kw_only=True)
class ContinuousResponse:
    """Deviations from the initial steady state.

    Parameters
    ----------
    times : ndarray, shape (n,)
        As asked for [s].
    process_variable, output : ndarray, shape (n,)
        Process variable and controller output; at time 0 the output has already jumped [-].
    """

    times: NDArray[np.float64]
    process_variable: NDArray[np.float64]
    output: NDArray[np.float64]


def _process(model: AnyModel) -> ProcessModel:
    """Return any of the models as a process."""
    if isinstance(model, IntegratorModel):
        return ProcessModel(gain=model.gain, dead_time=model.dead_time, integrating=True)
    return process_of(model)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Loop:
    """z' = now z + before z(t - delay) + forcing + (delayed_forcing once t > delay).

    The states are the plant's (with the measurement's filter), the load path's, the integral
    part and, with a derivative, its filter; ``output = law z + law_offset``, PV = ``measured z``.
    """

    now: NDArray[np.float64]
    before: NDArray[np.float64]
    forcing: NDArray[np.float64]
    delayed_forcing: NDArray[np.float64]
    measured: NDArray[np.float64]
    law: NDArray[np.float64]
    law_offset: float
    delay: float


def _close(
    model: ProcessModel,
    settings: PidSettings,
    load: ProcessModel | None,
    steps: tuple[float, float, float],
    filter_time: float,
) -> _Loop:
    """Assemble the closed loop; the load path enters with no dead time of its own.

    ``steps`` are those of the setpoint, of the plant input and of the load.
    """
    setpoint_step, input_step, load_step = steps
    plant = state_space(model)
    path = None if load is None else state_space(load)
    order, extra = plant.inlet.size, 0 if path is None else path.inlet.size
    filtered, derived = filter_time > 0.0, settings.derivative_time > 0.0
    size = order + extra + filtered + 1 + derived
    integral = order + extra + filtered
    sign = 1.0 if settings.action is Action.REVERSE else -1.0
    gain = sign * settings.gain
    reset = 0.0 if settings.integral_time is None else gain / settings.integral_time
    measured, now, forcing = np.zeros(size), np.zeros((size, size)), np.zeros(size)
    measured[:order] = plant.outlet
    now[:order, :order] = plant.matrix
    if path is not None:
        measured[order : order + extra] = path.outlet
        now[order : order + extra, order : order + extra] = path.matrix
        forcing[order : order + extra] = path.inlet * load_step
    seen = measured
    if filtered:
        now[integral - 1] = measured / filter_time
        now[integral - 1, integral - 1] = -1.0 / filter_time
        seen = np.zeros(size)
        seen[integral - 1] = 1.0
    now[integral] = -reset * seen
    forcing[integral] = reset * setpoint_step
    law, law_offset = -gain * seen, gain * setpoint_step
    law[integral] += 1.0
    if derived:
        # The filter's state follows what is derived; the derivative is how far it is behind.
        rate = 1.0 / settings.derivative_filter
        weight = gain * settings.derivative_time * rate
        target = setpoint_step if settings.derivative_on_error else 0.0
        now[-1] = -rate * seen
        now[-1, -1] -= rate
        forcing[-1] = rate * target
        law = law - weight * seen
        law[-1] -= weight
        law_offset += weight * target
    full_inlet = np.zeros(size)
    full_inlet[:order] = plant.inlet
    return _Loop(
        now=now,
        before=np.outer(full_inlet, law),
        forcing=forcing,
        delayed_forcing=full_inlet * (law_offset + input_step),
        measured=measured,
        law=law,
        law_offset=law_offset,
        delay=model.dead_time,
    )


def _chebyshev(degree: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return points on [0, 1], from 0 up, and the differentiation matrix.

    L. N. Trefethen, *Spectral Methods in MATLAB*, SIAM 2000, ch. 6 (from memory).
    """
    index = np.arange(degree + 1)
    points = (1.0 - np.cos(np.pi * index / degree)) / 2.0
    weights = np.where((index == 0) | (index == degree), 2.0, 1.0) * (-1.0) ** index
    gaps = points[:, None] - points[None, :] + np.eye(degree + 1)
    matrix = np.outer(weights, 1.0 / weights) / gaps
    return points, matrix - np.diag(matrix.sum(axis=1))


def _march(loop: _Loop, element: float, per_delay: int, count: int) -> NDArray[np.float64]:
    """Return the states at the points of every element, shape (count, points, states)."""
    _, slope = _chebyshev(_DEGREE)
    size = len(loop.forcing)
    operator = np.kron(slope[1:, 1:] / element, np.eye(size)) - np.kron(
        np.eye(_DEGREE), loop.now
    )
    inverse = np.linalg.inv(operator)
    from_start = inverse @ np.kron(-slope[1:, :1] / element, np.eye(size))
    from_before = inverse @ np.kron(np.eye(_DEGREE), loop.before)
    driven = inverse @ np.tile(loop.forcing, _DEGREE)
    driven_late = driven + inverse @ np.tile(loop.delayed_forcing, _DEGREE)
    states = np.zeros((count, _DEGREE + 1, size))
    start = np.zeros(size)
    for index in range(count):
        rest = from_start @ start
        if index >= per_delay:
            if per_delay:
                rest += from_before @ states[index - per_delay, 1:].ravel()
            rest += driven_late
        else:
            rest += driven
        states[index, 0] = start
        states[index, 1:] = rest.reshape(_DEGREE, size)
        start = states[index, -1]
    return states


def _evaluate(
    states: NDArray[np.float64], element: float, times: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return the states at any times, by barycentric interpolation, shape (times, states)."""
    points, _ = _chebyshev(_DEGREE)
    place = np.clip((times / element).astype(np.int64), 0, len(states) - 1)
    local = times / element - place
    weights = (-1.0) ** np.arange(_DEGREE + 1)
    weights[[0, -1]] *= 0.5
    gaps = local[:, None] - points[None, :]
    on_point = np.abs(gaps) < np.finfo(np.float64).eps
    ratios = weights / np.where(on_point, 1.0, gaps)
    hit = on_point.any(axis=1)
    ratios[hit] = on_point[hit]
    ratios /= ratios.sum(axis=1, keepdims=True)
    return np.asarray(np.einsum("tp,tps->ts", ratios, states[place]))


def _solve(loop: _Loop, times: NDArray[np.float64]) -> ContinuousResponse:
    now = loop.now if loop.delay > 0.0 else loop.now + loop.before
    fastest = float(np.abs(now).sum(axis=1).max())
    horizon = float(times.max(initial=0.0))
    if loop.delay > 0.0:
        per_delay = max(1, math.ceil(loop.delay * fastest / _REACH))
        element = loop.delay / per_delay
    else:
        per_delay = 0
        element = _REACH / fastest if fastest > 0.0 else max(horizon, 1.0)
        loop = _Loop(
            now=now,
            before=loop.before,
            forcing=loop.forcing,
            delayed_forcing=loop.delayed_forcing,
            measured=loop.measured,
            law=loop.law,
            law_offset=loop.law_offset,
            delay=0.0,
        )
    count = max(1, math.ceil(horizon / element))
    states = _evaluate(_march(loop, element, per_delay, count), element, np.maximum(times, 0.0))
    begun = times >= 0.0
    return ContinuousResponse(
        times=times,
        process_variable=np.where(begun, states @ loop.measured, 0.0),
        output=np.where(begun, states @ loop.law + loop.law_offset, 0.0),
    )


def predict_continuous(
    model: AnyModel,
    settings: ControllerSettings | PidSettings,
    times: NDArray[np.float64],
    *,
    setpoint_step: float = 0.0,
    input_step: float = 0.0,
    load: AnyModel | None = None,
    load_step: float = 0.0,
    filter_time: float = 0.0,
) -> ContinuousResponse:
    """Predict the response of an ideal, unlimited P, PI or PID loop to steps at time 0.

    Parameters
    ----------
    model : LagModel, IntegratorModel or ProcessModel
        From controller output to process variable.
    settings : ControllerSettings or PidSettings
        Settings of the ideal block; a derivative has a filter of its own.
    times : ndarray, shape (n,)
        Where the response is wanted; 0 before time 0 [s].
    setpoint_step : float
        Step of the setpoint [-].
    input_step : float
        Step added to the controller output at the plant input [-].
    load : LagModel, IntegratorModel, ProcessModel or None
        Path of the load; needed when ``load_step`` is not 0.
    load_step : float
        Step of the load output [-].
    filter_time : float
        First-order filter between process variable and block; 0 for none [s].

    Returns
    -------
    ContinuousResponse
        Deviations from the initial steady state; the process variable is the one before the
        filter.

    Raises
    ------
    UsageError
        When there is a load step and no load path.
    ModelError
        When a model has no positive lag or a negative dead time, or a derivative no filter.
    """
    process, block = _process(model), pid_of(settings)
    path = None if load is None else _process(load)
    for one in (process, path):
        if one is not None and not one.dead_time >= 0.0:
            raise ModelError(f"model: dead time {one.dead_time} s; it must be at least 0")
    if block.derivative_time > 0.0 and not block.derivative_filter > 0.0:
        raise ModelError(
            f"prediction: a derivative time of {block.derivative_time} s without a filter; give "
            "the derivative a filter time"
        )
    times = np.asarray(times, dtype=np.float64)
    steps = (setpoint_step, input_step, 0.0)
    direct = _solve(_close(process, block, None, steps, filter_time), times)
    if load_step == 0.0:
        return direct
    if path is None:
        raise UsageError("prediction: a load step without a load path; give the load's model")
    # The loop is linear and starts at rest, so that the load's dead time only shifts its part.
    part = _solve(
        _close(process, block, path, (0.0, 0.0, load_step), filter_time), times - path.dead_time
    )
    return ContinuousResponse(
        times=times,
        process_variable=direct.process_variable + part.process_variable,
        output=direct.output + part.output,
    )


def design_target(
    model: LagModel,
    closed_loop_time: float,
    times: NDArray[np.float64],
    *,
    step: float = 1.0,
    law: ControlLaw = ControlLaw.PI,
) -> NDArray[np.float64]:
    """Return the setpoint response that direct synthesis asks for; shown, never scored.

    With PI it is exp(-theta s) / (closed_loop_time s + 1). A P block on one lag tau with its
    pole placed at 1 / closed_loop_time reaches the fraction 1 - closed_loop_time / tau of the
    step (from K Kc = tau / closed_loop_time - 1).

    Parameters
    ----------
    model : LagModel
        The reduced model that the tuning was computed from; its dead time cannot be removed.
    closed_loop_time : float
        Time constant asked for [s].
    times : ndarray, shape (n,)
        Where the response is wanted; 0 before the dead time is over [s].
    step : float
        Step of the setpoint [-].
    law : ControlLaw
        Law of the block.

    Returns
    -------
    ndarray, shape (n,)
        Deviation from the initial value, in the unit of the step.

    Raises
    ------
    UsageError
        When the closed-loop time constant is not positive.
    ModelError
        When a P block is asked for on a model with more than one lag, or not faster than it.
    """
    if not closed_loop_time > 0.0:
        raise UsageError(f"design: closed-loop time {closed_loop_time} s; it must be positive")
    reach = 1.0
    if law is ControlLaw.P:
        if len(model.time_constants) != 1 or closed_loop_time >= model.time_constants[0]:
            raise ModelError(
                f"design: P with closed-loop time {closed_loop_time} s on lags "
                f"{model.time_constants} s; one lag, longer than that time, is needed"
            )
        reach = 1.0 - closed_loop_time / model.time_constants[0]
    since = np.maximum(np.asarray(times, dtype=np.float64) - model.dead_time, 0.0)
    return np.asarray(-step * reach * np.expm1(-since / closed_loop_time))


def design_target_load(
    model: LagModel,
    load: LagModel,
    settings: ControllerSettings,
    times: NDArray[np.float64],
    *,
    step: float = 1.0,
) -> NDArray[np.float64]:
    """Return the load response of the reduced model under its own tuning; shown, never scored.

    Direct synthesis for the setpoint asks nothing of the load response; this is what follows.

    Parameters
    ----------
    model : LagModel
        The reduced model that the tuning was computed from.
    load : LagModel
        Path of the load.
    settings : ControllerSettings
        Settings computed from the reduced model.
    times : ndarray, shape (n,)
        Where the response is wanted [s].
    step : float
        Step of the load output [-].

    Returns
    -------
    ndarray, shape (n,)
        Deviation of the process variable from its initial value [-].
    """
    return predict_continuous(
        model, settings, times, load=load, load_step=step
    ).process_variable
