"""Linear prediction in continuous mode: ideal P or PI, exact dead time, method of steps.

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


def _state_space(
    model: LagModel | IntegratorModel,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return A and B of the delay-free model; its output is the last state."""
    if isinstance(model, IntegratorModel):
        return np.zeros((1, 1)), np.array([model.gain])
    lags = [tau for tau in model.time_constants if tau > 0.0]
    if not lags or min(model.time_constants) < 0.0:
        raise ModelError(
            f"model: time constants {model.time_constants} s; at least one positive one is needed"
        )
    rates = 1.0 / np.array(lags)
    matrix = np.diag(-rates) + np.diag(rates[1:], -1)
    inlet = np.zeros(len(lags))
    inlet[0] = model.gain * rates[0]
    return matrix, inlet


@dataclass(frozen=True, slots=True, kw_only=True)
class _Loop:
    """z' = now z + before z(t - delay) + forcing + (delayed_forcing once t > delay).

    The last state is the integral part; ``output = law z + law_offset``, PV = ``measured z``.
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
    model: LagModel | IntegratorModel,
    settings: ControllerSettings,
    load: LagModel | IntegratorModel | None,
    setpoint_step: float,
    input_step: float,
    load_step: float,
) -> _Loop:
    """Assemble the closed loop; the load path enters with no dead time of its own."""
    matrix, inlet = _state_space(model)
    order = len(inlet)
    load_matrix, load_inlet = (
        (np.zeros((0, 0)), np.zeros(0)) if load is None else _state_space(load)
    )
    size = order + len(load_inlet) + 1
    gain = settings.gain if settings.action is Action.REVERSE else -settings.gain
    reset = 0.0 if settings.integral_time is None else gain / settings.integral_time
    measured = np.zeros(size)
    measured[order - 1] = 1.0
    if len(load_inlet):
        measured[size - 2] = 1.0
    law = -gain * measured
    law[-1] = 1.0
    now = np.zeros((size, size))
    now[:order, :order] = matrix
    now[order:-1, order:-1] = load_matrix
    now[-1] = -reset * measured
    forcing = np.zeros(size)
    forcing[order:-1] = load_inlet * load_step
    forcing[-1] = reset * setpoint_step
    full_inlet = np.zeros(size)
    full_inlet[:order] = inlet
    return _Loop(
        now=now,
        before=np.outer(full_inlet, law),
        forcing=forcing,
        delayed_forcing=full_inlet * (gain * setpoint_step + input_step),
        measured=measured,
        law=law,
        law_offset=gain * setpoint_step,
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
    model: LagModel | IntegratorModel,
    settings: ControllerSettings,
    times: NDArray[np.float64],
    *,
    setpoint_step: float = 0.0,
    input_step: float = 0.0,
    load: LagModel | IntegratorModel | None = None,
    load_step: float = 0.0,
) -> ContinuousResponse:
    """Predict the response of an ideal, unlimited P or PI loop to steps at time 0.

    Parameters
    ----------
    model : LagModel or IntegratorModel
        From controller output to process variable.
    settings : ControllerSettings
        Settings of the ideal block.
    times : ndarray, shape (n,)
        Where the response is wanted; 0 before time 0 [s].
    setpoint_step : float
        Step of the setpoint [-].
    input_step : float
        Step added to the controller output at the plant input [-].
    load : LagModel or IntegratorModel or None
        Path of the load; needed when ``load_step`` is not 0.
    load_step : float
        Step of the load output [-].

    Returns
    -------
    ContinuousResponse
        Deviations from the initial steady state.

    Raises
    ------
    UsageError
        When there is a load step and no load path.
    ModelError
        When a model has no positive lag or a negative dead time.
    """
    for path in (model, load):
        if path is not None and not path.dead_time >= 0.0:
            raise ModelError(f"model: dead time {path.dead_time} s; it must be at least 0")
    times = np.asarray(times, dtype=np.float64)
    direct = _solve(_close(model, settings, None, setpoint_step, input_step, 0.0), times)
    if load_step == 0.0:
        return direct
    if load is None:
        raise UsageError("prediction: a load step without a load path; give the load's model")
    # The loop is linear and starts at rest, so that the load's dead time only shifts its part.
    part = _solve(_close(model, settings, load, 0.0, 0.0, load_step), times - load.dead_time)
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
