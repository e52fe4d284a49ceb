"""Coordinates in which the shape of a lag model is searched, each within its bounds."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    Array = NDArray[np.float64]
    Shape = tuple[float, ...]  # first lag, second lag, dead time, and what a family adds [s]

_SHORTEST = 1e-6  # shortest sum of lags looked at, over the longest or the fitted total lag
_MOST_DEAD = 0.999  # share of the total lag that may be dead time; some lag must be left


@dataclass(frozen=True, slots=True, kw_only=True)
class Frame:
    """Coordinates of the shape for one search, each within its bounds.

    Parameters
    ----------
    shape : callable
        From coordinates to first lag, second lag and dead time.
    low, high : ndarray, shape (k,)
        Bounds; equal bounds fix a coordinate [s, or a share].
    gain : float or None
        Gain held fixed, or None to solve for it [fraction of PV span per fraction of output].
    """

    shape: Callable[[Array], Shape]
    low: Array
    high: Array
    gain: float | None = None


def unit_frame(order: int, longest: float) -> Frame:
    """Return the frame in which the well-determined sum comes first.

    Coordinates: total lag, dead time over total lag, and 4 tau1 tau2 / (tau1 + tau2)^2. The
    last is smooth where the two lags meet, which the lags themselves are not.

    Parameters
    ----------
    order : int
        1 or 2 lags [-].
    longest : float
        Longest total lag looked at [s].

    Returns
    -------
    Frame
        Frame.
    """
    return Frame(
        shape=lambda x: split(x[0] * (1.0 - x[1]), x[2], x[0] * x[1]),
        low=np.array([_SHORTEST * longest, 0.0, 0.0]),
        high=np.array([longest, _MOST_DEAD, 1.0 if order > 1 else 0.0]),
    )


def split(lags: float, evenness: float, dead_time: float) -> Shape:
    """Return two lags from their sum and evenness, and the dead time.

    Parameters
    ----------
    lags : float
        tau1 + tau2 [s].
    evenness : float
        4 tau1 tau2 / (tau1 + tau2)^2, 0 for a single lag and 1 for equal ones [-].
    dead_time : float
        Dead time [s].

    Returns
    -------
    tuple of float
        First lag, second lag, dead time [s].
    """
    root = math.sqrt(max(1.0 - evenness, 0.0))
    return 0.5 * lags * (1.0 + root), 0.5 * lags * evenness / (1.0 + root), dead_time


def evenness_of(shape: Shape) -> float:
    """Return 4 tau1 tau2 / (tau1 + tau2)^2 of a shape [-].

    Parameters
    ----------
    shape : tuple of float
        First lag, second lag, dead time [s].

    Returns
    -------
    float
        Evenness [-].
    """
    total = shape[0] + shape[1]
    return 4.0 * shape[0] * shape[1] / total**2 if total > 0.0 else 0.0


def profile_frame(best: Shape, order: int, name: str, value: float) -> tuple[Frame, Array]:
    """Return the frame that holds one parameter, and where to start in it.

    Parameters
    ----------
    best : tuple of float
        Shape of the fit: first lag, second lag, dead time [s].
    order : int
        Lags [-].
    name : str
        Parameter held.
    value : float
        Its value, in its own unit.

    Returns
    -------
    frame : Frame
        Coordinates of what is left free.
    start : ndarray, shape (k,)
        Start, in the frame's coordinates [s, or a share].
    """
    first, second, dead = best
    total, even = first + second + dead, evenness_of(best)
    most, top = 1.0 if order > 1 else 0.0, 50.0 * total
    match name:
        case "gain":
            frame = Frame(
                shape=lambda x: split(x[0] * (1.0 - x[1]), x[2], x[0] * x[1]),
                low=np.array([_SHORTEST * total, 0.0, 0.0]),
                high=np.array([top, _MOST_DEAD, most]),
                gain=value,
            )
            return frame, np.array([total, dead / total, even])
        case "total_lag":
            frame = Frame(
                shape=lambda x: split(value * (1.0 - x[0]), x[1], value * x[0]),
                low=np.zeros(2),
                high=np.array([_MOST_DEAD, most]),
            )
            return frame, np.array([dead / total, even])
        case "dead_time":
            frame = Frame(
                shape=lambda x: split(x[0], x[1], value),
                low=np.array([_SHORTEST * total, 0.0]),
                high=np.array([top, most]),
            )
            return frame, np.array([max(total - value, 1e-3 * total), even])
        case "time_constant_1":
            frame = Frame(
                shape=lambda x: (value, x[0], x[1]),
                low=np.zeros(2),
                high=np.array([value * most, top]),
            )
            return frame, np.array([min(second, value), dead])
        case _:
            frame = Frame(
                shape=lambda x: (x[0], value, x[1]),
                low=np.array([max(value, _SHORTEST * total), 0.0]),
                high=np.array([top, top]),
            )
            return frame, np.array([max(first, value), dead])
