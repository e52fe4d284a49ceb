"""A recorded step test at any spacing, and the exact response of a shape to its input."""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.tuning.frames import Shape

    Array = NDArray[np.float64]

_NEGLIGIBLE = 1e-18  # a remainder of this size is below the resolution of a float64
_FEW_EVENTS = 8  # up to that many changes of input their step responses are simply added
_MOST_ROWS = 5000  # longer records are averaged in blocks


class Kind(StrEnum):
    """Kinds of model that are fitted."""

    FIRST_ORDER = "first_order"
    SECOND_ORDER = "second_order"
    INTEGRATING = "integrating"
    INVERSE_RESPONSE = "inverse_response"


@dataclass(frozen=True, slots=True, kw_only=True)
class Trace:
    """A recorded test.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Times of the samples, rising, from 0 [s].
    output : ndarray, shape (n,)
        Output of the process [fraction of PV span, or the data's unit].
    event_time : ndarray, shape (m,)
        When the input changed [s].
    event_size : ndarray, shape (m,)
        By how much it changed, and stayed until the next [fraction of output, or the data's unit].
    """

    time: Array
    output: Array
    event_time: Array
    event_size: Array

    @property
    def duration(self) -> float:
        """Return the time from the first to the last sample [s]."""
        return float(self.time[-1])

    @property
    def spacing(self) -> float:
        """Return the median time between samples [s]."""
        return float(np.median(np.diff(self.time)))

    def averaged(self) -> Trace:
        """Return the same test in at most some thousand rows, each the mean of a block."""
        block = -(-self.time.size // _MOST_ROWS)
        if block == 1:
            return self
        rows = self.time.size // block
        time, output = (
            column[: rows * block].reshape(rows, block).mean(axis=1)
            for column in (self.time, self.output)
        )
        return Trace(
            time=time, output=output, event_time=self.event_time, event_size=self.event_size
        )


def trace_of(time: Array, inputs: Array, output: Array) -> Trace:
    """Return a trace whose input holds from each row to the next.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Times, rising [s].
    inputs, output : ndarray, shape (n,)
        Input and output of the process [fraction, or the data's unit].

    Returns
    -------
    Trace
        The trace; its time starts at 0.
    """
    changes = np.flatnonzero(np.diff(inputs)) + 1
    start = float(time[0])
    return Trace(
        time=np.asarray(time, np.float64) - start,
        output=np.asarray(output, np.float64),
        event_time=np.asarray(time[changes], np.float64) - start,
        event_size=np.asarray(np.diff(inputs)[changes - 1], np.float64),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class TraceProblem:
    """A trace to fit one kind of model to.

    Parameters
    ----------
    kind : Kind
        Kind of model.
    trace : Trace
        The trace, averaged where it is long.
    output : ndarray, shape (n,)
        Its output, nuisance terms projected out [fraction of PV span].
    nuisance : ndarray, shape (m, n)
        Orthonormal rows: level, and drift where it is fitted [-].
    """

    kind: Kind
    trace: Trace
    output: Array
    nuisance: Array

    def response(self, shape: Shape) -> Array:
        """Return the unit-gain response of a shape, nuisance terms projected out."""
        raw = unit_gain_response(self.kind, shape, self.trace)
        return raw - (self.nuisance @ raw) @ self.nuisance


def trace_problem(kind: Kind, trace: Trace, *, drift: bool) -> TraceProblem:
    """Return what the search needs of a trace.

    A level that only integrates is seldom in balance before the test, so that its fit always has
    a drift; the others have one where it is asked for.

    Parameters
    ----------
    kind : Kind
        Kind of model.
    trace : Trace
        The trace.
    drift : bool
        Whether a slow linear drift is fitted and taken away.
    """
    level = np.ones(trace.time.size)
    rows = [level / math.sqrt(level.size)]
    if drift or kind is Kind.INTEGRATING:
        slope = trace.time - trace.time.mean()
        rows.append(slope / math.sqrt(float(slope @ slope)))
    nuisance = np.array(rows)
    return TraceProblem(
        kind=kind,
        trace=trace,
        output=trace.output - (nuisance @ trace.output) @ nuisance,
        nuisance=nuisance,
    )


def unit_gain_response(kind: Kind, shape: Shape, trace: Trace) -> Array:
    """Return the response of a shape of gain one, from rest, at the samples of a trace.

    Exact at any spacing: between the samples and the delayed changes of the input everything is
    a sum of exponentials, and each stretch is one transition.

    Parameters
    ----------
    kind : Kind
        Kind of model.
    shape : tuple of float
        First lag, second lag, dead time, and the zero's time of an inverse response [s].
    trace : Trace
        The trace.

    Returns
    -------
    ndarray, shape (n,)
        Response [fraction of output, times seconds where it integrates].
    """
    if trace.event_time.size <= _FEW_EVENTS:
        return _superposed(kind, shape, trace)
    delayed = trace.event_time + shape[2]
    stamps = np.concatenate([trace.time, delayed])
    # Samples go before changes at the same time: what changes now is not yet seen.
    order = np.argsort(stamps, kind="stable")
    sizes = np.concatenate([np.zeros(trace.time.size), trace.event_size])[order]
    sampled = np.empty(trace.time.size, dtype=np.int64)
    place = np.flatnonzero(order < trace.time.size)
    sampled[order[place]] = place
    spans = np.diff(stamps[order], prepend=stamps[order[0]])
    level = np.concatenate([[0.0], np.cumsum(sizes)[:-1]])  # of the input over each stretch
    if kind is Kind.INTEGRATING:
        return np.asarray(np.cumsum(level * spans)[sampled])
    first, second = max(shape[0], shape[1]), min(shape[0], shape[1])
    decay_1, decay_2, coupling = _transitions(first, second, spans)
    state_1 = _accumulate(decay_1, (1.0 - decay_1) * level)
    driven = (1.0 - decay_2 - coupling) * level
    driven[1:] += coupling[1:] * state_1[:-1]
    state_2 = _accumulate(decay_2, driven)
    if kind is Kind.INVERSE_RESPONSE and second > 0.0:
        state_2 = state_2 - shape[3] / second * (state_1 - state_2)
    return np.asarray(state_2[sampled])


def _superposed(kind: Kind, shape: Shape, trace: Trace) -> Array:
    """Return the response as the sum of one step response for each change of the input."""
    since = np.maximum(trace.time - (trace.event_time + shape[2])[:, None], 0.0)
    if kind is Kind.INTEGRATING:
        return np.asarray(trace.event_size @ since)
    first, second = max(shape[0], shape[1]), min(shape[0], shape[1])
    # At the moment of the change nothing is seen of it, even without any lag.
    slow = np.exp(-since / first) if first > 0.0 else np.where(since > 0.0, 0.0, 1.0)
    if second <= 0.0:
        return np.asarray(trace.event_size @ (1.0 - slow))
    difference = since * (1.0 / second - 1.0 / first)
    share = np.where(difference > 0.0, -np.expm1(-difference), 1.0)
    share /= np.where(difference > 0.0, difference, 1.0)
    both = 1.0 - slow - slow * since / first * share
    if kind is Kind.INVERSE_RESPONSE:
        both -= shape[3] / second * (1.0 - slow - both)
    return np.asarray(trace.event_size @ both)


def _transitions(first: float, second: float, spans: Array) -> tuple[Array, Array, Array]:
    """Return, for each stretch, the decays of both lags and what the first adds to the second."""
    decay_1 = np.exp(-spans / first) if first > 0.0 else np.where(spans > 0.0, 0.0, 1.0)
    if second <= 0.0:
        decay_2 = np.zeros(spans.size)
        return decay_1, decay_2, decay_1
    decay_2 = np.exp(-spans / second)
    if first <= 0.0:
        return decay_1, decay_2, np.zeros(spans.size)
    difference = spans * (1.0 / second - 1.0 / first)
    share = np.where(difference > 0.0, -np.expm1(-difference), 1.0)
    share /= np.where(difference > 0.0, difference, 1.0)
    return decay_1, decay_2, decay_1 * spans / second * share


def _accumulate(decays: Array, driven: Array) -> Array:
    """Solve x[k] = decays[k] x[k-1] + driven[k] by doubling: log2(n) passes over the whole array."""
    state, weight = driven.copy(), decays.copy()
    shift = 1
    while shift < state.size:
        state[shift:] += weight[shift:] * state[:-shift]  # numpy copies where operands overlap
        following = weight[shift:] * weight[:-shift]
        weight[shift:] = following
        weight[:shift] = 0.0
        if following.size == 0 or float(following.max()) < _NEGLIGIBLE:
            break
        shift *= 2
    return state
