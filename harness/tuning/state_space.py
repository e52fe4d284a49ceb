"""A process as a cascade of first-order blocks, and its exact discretisation under a held input."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.tuning.process import check_shape

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.tuning.process import ProcessModel

    Array = NDArray[np.float64]

_SMALL, _TERMS = 0.5, 14  # 0.5**15/15! = 2e-17: the series ends below rounding
_DUST = 1e-9  # of a tick: a dead time this close to a whole number of ticks counts as whole


@dataclass(frozen=True, slots=True, kw_only=True)
class StateSpace:
    """x' = A x + B u(t - dead time), y = C x, and what the controller sees of y.

    Parameters
    ----------
    matrix : ndarray, shape (n, n)
        A [1/s].
    inlet : ndarray, shape (n,)
        B [1/s].
    outlet : ndarray, shape (n,)
        C, the true process variable [-].
    seen : ndarray, shape (n,)
        The process variable behind the measurement's filter; C without one [-].
    dead_time : float
        Dead time at the input [s].
    """

    matrix: Array
    inlet: Array
    outlet: Array
    seen: Array
    dead_time: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Discrete:
    """One tick under an input delayed by whole ticks and a part.

    With w the input delayed by ``whole`` ticks: first ``early`` acts with the w of the tick
    before, then ``late`` with w.

    Parameters
    ----------
    whole : int
        Whole ticks in the dead time [ticks].
    early, late : tuple of ndarray
        Transition of shape (n, n) and inlet of shape (n,) of each part [-].
    """

    whole: int
    early: tuple[Array, Array]
    late: tuple[Array, Array]

    @property
    def transition(self) -> Array:
        """Return the transition of the whole tick, shape (n, n) [-]."""
        return np.asarray(self.late[0] @ self.early[0])

    @property
    def old_inlet(self) -> Array:
        """Return what the older input adds, shape (n,) [-]."""
        return np.asarray(self.late[0] @ self.early[1])


def state_space(model: ProcessModel, filter_time: float = 0.0) -> StateSpace:
    """Return a process as a cascade: pure lags first, then those that carry a numerator.

    Parameters
    ----------
    model : ProcessModel
        Process.
    filter_time : float
        First-order filter between process variable and controller; 0 for none [s].

    Returns
    -------
    StateSpace
        Matrices.

    Raises
    ------
    ModelError
        If the process is not usable.
    """
    check_shape(model)
    rates = [1.0 / lag for lag in sorted(model.time_constants, reverse=True) if lag > 0.0]
    leads = [lead for lead in model.numerator_times if lead != 0.0]
    order = len(rates) + model.integrating
    size = order + (filter_time > 0.0)
    matrix, inlet = np.zeros((size, size)), np.zeros(size)
    signal, feed = np.zeros(size), model.gain  # of the block before: signal x + feed u
    rows = ([0.0] if model.integrating else []) + rates
    for index, rate in enumerate(rows):
        # The last blocks carry the numerator, so that no block before them jumps with the input.
        pair = index - (order - len(leads))
        lead = leads[pair] if pair >= 0 else 0.0
        drive = rate if rate > 0.0 else 1.0
        matrix[index] = drive * signal
        matrix[index, index] -= rate
        inlet[index] = drive * feed
        share = lead * rate
        signal, feed = share * signal, share * feed
        signal[index] += 1.0 - share
    outlet, seen = signal, signal
    if filter_time > 0.0:
        matrix[-1] = outlet / filter_time
        matrix[-1, -1] = -1.0 / filter_time
        seen = np.zeros(size)
        seen[-1] = 1.0
    return StateSpace(
        matrix=matrix, inlet=inlet, outlet=outlet, seen=seen, dead_time=model.dead_time
    )


def discretise(system: StateSpace, tick: float, extra_delay: float = 0.0) -> Discrete:
    """Return the exact one-tick recursion under an input that is held over each tick.

    Parameters
    ----------
    system : StateSpace
        System.
    tick : float
        Tick, above 0 [s].
    extra_delay : float
        Delay besides the dead time [s].

    Returns
    -------
    Discrete
        Recursion.
    """
    ticks = (system.dead_time + extra_delay) / tick
    whole = round(ticks) if abs(ticks - round(ticks)) < _DUST else math.floor(ticks)
    part = max(ticks - whole, 0.0)
    return Discrete(
        whole=whole,
        early=_held(system, part * tick),
        late=_held(system, (1.0 - part) * tick),
    )


def _held(system: StateSpace, duration: float) -> tuple[Array, Array]:
    """Return transition and inlet of a constant input over a while."""
    size = system.inlet.size
    block = np.zeros((size + 1, size + 1))
    block[:size, :size] = system.matrix * duration
    block[:size, size] = system.inlet * duration
    whole = _exponential(block)
    return whole[:size, :size], whole[:size, size]


def _exponential(matrix: Array) -> Array:
    """Return the exponential of a small matrix: Taylor on a scaled one, squared back.

    The library's own takes milliseconds for a matrix of four, most of it in starting threads.
    """
    norm = float(np.abs(matrix).sum(axis=1).max())
    halvings = max(0, math.ceil(math.log2(norm / _SMALL))) if norm > _SMALL else 0
    scaled = matrix / 2.0**halvings
    total = np.eye(matrix.shape[0])
    for power in range(_TERMS, 0, -1):
        total = np.eye(matrix.shape[0]) + scaled @ total / power
    for _ in range(halvings):
        total = total @ total
    return total
