"""Exact sampled response of a lag model to an input held over each tick, dead time included."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.errors import DataError, ModelError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.domain.models import LagModel

_NEGLIGIBLE = 1e-18  # a remainder of this size is below the resolution of a float64


@dataclass(frozen=True, slots=True, kw_only=True)
class HeldStep:
    """One tick of a unit-gain cascade of two lags, exactly, under a delayed and held input.

    With w the input delayed by ``whole`` ticks, ``x1' = a1 x1 + b1[0] w + b1[1] w_before`` and
    ``x2' = a2 x2 + c x1 + b2[0] w + b2[1] w_before``, the prime marking the next tick.

    Parameters
    ----------
    whole : int
        Whole ticks in the dead time [ticks].
    a1, a2 : float
        Poles of the first and second lag; 0 for a lag of zero [-].
    c : float
        What the first state adds to the second [-].
    b1, b2 : tuple of float
        What the input adds to the first and second state, newest part first [-].
    """

    whole: int
    a1: float
    a2: float
    c: float
    b1: tuple[float, float]
    b2: tuple[float, float]


def check_model(model: LagModel) -> None:
    """Refuse a model with no lag or more than two, or with figures that are not times.

    Parameters
    ----------
    model : LagModel
        Model to check.

    Raises
    ------
    ModelError
        If the number of lags, a lag, the dead time or the gain is not usable.
    """
    lags = model.time_constants
    if len(lags) not in {1, 2}:
        raise ModelError(f"lag model: it has {len(lags)} time constants; give one or two")
    if max(lags) <= 0.0:
        raise ModelError("lag model: no time constant is above 0 s; a pure dead time is no lag")
    for name, value in (("dead time", model.dead_time), *(("time constant", t) for t in lags)):
        if not (math.isfinite(value) and value >= 0.0):
            raise ModelError(f"lag model: {name} is {value:g} s; it must be 0 or more")
    if not math.isfinite(model.gain):
        raise ModelError(f"lag model: gain is {model.gain:g}; it must be a finite number")


def unit_step(model: LagModel, time: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the response of the model to a step of one of its input at time zero.

    The two lags may be equal, or as near to it as one likes: the difference of the exponentials
    is taken by ``expm1``.

    Parameters
    ----------
    model : LagModel
        Model.
    time : ndarray, shape (n,)
        Time since the step; negative is before it [s].

    Returns
    -------
    ndarray, shape (n,)
        Response, gain included [fraction of PV span per fraction of output].
    """
    check_model(model)
    since = np.maximum(np.asarray(time, dtype=np.float64) - model.dead_time, 0.0)
    lags = sorted((t for t in model.time_constants if t > 0.0), reverse=True)
    slow = np.exp(-since / lags[0])
    if len(lags) == 1:
        return model.gain * (1.0 - slow)
    difference = since * (1.0 / lags[1] - 1.0 / lags[0])
    share = np.where(difference > 0.0, -np.expm1(-difference), 1.0)
    share = share / np.where(difference > 0.0, difference, 1.0)
    return model.gain * (1.0 - slow - slow * since / lags[0] * share)


def held_step(model: LagModel, tick: float) -> HeldStep:
    """Return the exact one-tick recursion of a model, gain left out.

    Parameters
    ----------
    model : LagModel
        Model; a first-order one gets a second lag of zero.
    tick : float
        Tick [s].

    Returns
    -------
    HeldStep
        Coefficients.
    """
    whole = math.floor(model.dead_time / tick)
    late = min(max(model.dead_time - whole * tick, 0.0), tick)  # old input at the tick's start
    first, second = sorted((*model.time_constants, 0.0)[:2], reverse=True)
    a1, a2, c = _transition(first, second, tick)
    _, rest2, rest_c = _transition(first, second, tick - late)
    new1, new2 = _driven(first, second, tick - late)
    old1, old2 = _driven(first, second, late)
    rest1 = _decay(tick - late, first)
    return HeldStep(
        whole=whole,
        a1=a1,
        a2=a2,
        c=c,
        b1=(new1, rest1 * old1),
        b2=(new2, rest2 * old2 + rest_c * old1),
    )


def simulate(
    model: LagModel,
    inputs: NDArray[np.float64],
    tick: float,
    initial_input: float | None = None,
) -> NDArray[np.float64]:
    """Return the response of a model to an input held over each tick.

    Row k is the sample at k ticks, and the input that holds from there to the next sample. The
    dead time is exact: a part of a tick is no rounding. The model starts in the steady state of
    ``initial_input``.

    Parameters
    ----------
    model : LagModel
        Model.
    inputs : ndarray, shape (n,)
        Input [fraction of output].
    tick : float
        Tick [s].
    initial_input : float, optional
        Input that held before the first row; the first row's by default [fraction of output].

    Returns
    -------
    ndarray, shape (n,)
        Deviation of the output from the steady state it started in [fraction of PV span].

    Raises
    ------
    DataError
        If the inputs are not a row of numbers or the tick is not above zero.
    ModelError
        If the model is not usable.
    """
    check_model(model)
    inputs = np.asarray(inputs, dtype=np.float64)
    if inputs.ndim != 1 or inputs.size == 0:
        raise DataError(f"simulate: inputs have shape {inputs.shape}; give one row of numbers")
    if not (math.isfinite(tick) and tick > 0.0):
        raise DataError(f"simulate: the tick is {tick:g} s; it must be above 0")
    start = float(inputs[0]) if initial_input is None else initial_input
    return model.gain * unit_response(held_step(model, tick), inputs - start)


def unit_response(step: HeldStep, change: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the response of the unit-gain recursion to changes of its input, from rest.

    Parameters
    ----------
    step : HeldStep
        Recursion.
    change : ndarray, shape (n,)
        Input, as deviation from the value at which the model rested [fraction of output].

    Returns
    -------
    ndarray, shape (n,)
        Response [fraction of output].
    """
    n = change.size
    newest = np.zeros(n)  # the delayed input of the tick that ends at each row
    before = np.zeros(n)
    lag = step.whole + 1
    if lag < n:
        newest[lag:] = change[: n - lag]
    if lag + 1 < n:
        before[lag + 1 :] = change[: n - lag - 1]
    first = _accumulate(step.a1, step.b1[0] * newest + step.b1[1] * before)
    driven = step.b2[0] * newest + step.b2[1] * before
    driven[1:] += step.c * first[:-1]
    return _accumulate(step.a2, driven)


def _accumulate(pole: float, driven: NDArray[np.float64]) -> NDArray[np.float64]:
    """Solve x[k] = pole x[k-1] + driven[k] by doubling: log2(n) passes over the whole array."""
    state = driven.copy()
    shift, weight = 1, pole
    while shift < state.size and abs(weight) > _NEGLIGIBLE:
        state[shift:] += weight * state[:-shift]  # numpy copies where operands overlap
        shift, weight = 2 * shift, weight * weight
    return state


def _decay(duration: float, lag: float) -> float:
    """Return what is left of a first-order state."""
    return math.exp(-duration / lag) if lag > 0.0 else (1.0 if duration == 0.0 else 0.0)


def _transition(first: float, second: float, duration: float) -> tuple[float, float, float]:
    """Return the decays of both lags and what the first state adds to the second."""
    a1, a2 = _decay(duration, first), _decay(duration, second)
    if first <= 0.0 or duration == 0.0:
        return a1, a2, 0.0
    if second <= 0.0:
        return a1, a2, a1
    difference = duration * (1.0 / second - 1.0 / first)
    share = -math.expm1(-difference) / difference if difference != 0.0 else 1.0
    return a1, a2, a1 * duration / second * share


def _driven(first: float, second: float, duration: float) -> tuple[float, float]:
    """Return both states, from zero, after a unit input has held for a while."""
    a1, a2, c = _transition(first, second, duration)
    return 1.0 - a1, 1.0 - a2 - c  # rounding of 1e-16 of the input, absolute
