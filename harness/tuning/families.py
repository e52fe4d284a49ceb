"""Families of shapes that are fitted: what each is searched by, and which figures get limits."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

import numpy as np

from harness.tuning.frames import Frame, evenness_of, profile_frame, split, unit_frame

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.tuning.frames import Shape
    from harness.tuning.least_squares import Record, Solution

    Array = NDArray[np.float64]

_SHORTEST = 1e-6  # shortest sum of lags looked at, over the longest
_MOST_DEAD = 0.999  # share of the total lag that may be dead time; some lag must be left
_LEAST_EVEN = 0.02  # of an inverse response: with one lag it would jump with the input
_MOST_INVERSE = 5.0  # inverse-response time over the sum of the lags


class Family(Protocol):
    """A family of shapes."""

    def unit_frame(self, longest: float) -> Frame:
        """Return the coordinates of the search; the longest total lag in [s]."""
        ...

    def starts(self, tick: float, record: float) -> list[Array]:
        """Return where to start the search; row spacing and length of the record in [s]."""
        ...

    def parameters(self, solution: Solution) -> dict[str, float]:
        """Return the figures that get limits, the best determined first."""
        ...

    def count(self, problem: Record) -> int:
        """Return how many parameters a fit has, level and drift included [-]."""
        ...

    def scale(self, solution: Solution) -> float:
        """Return a time typical of the shape [s]."""
        ...

    def profile_frame(self, best: Shape, name: str, value: float) -> tuple[Frame, Array]:
        """Return the coordinates with one figure held at a value [its unit], and a start."""
        ...

    def offset(self, best: Solution, name: str, spread: Array) -> float:
        """Return a first guess of the distance from a figure to its limit [its unit]."""
        ...

    def bound(self, name: str, value: float) -> float:
        """Return the least that a figure can be [its unit]."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class LagFamily:
    """One or two lags and dead time.

    Parameters
    ----------
    order : int
        Lags, 1 or 2 [-].
    """

    order: int

    def unit_frame(self, longest: float) -> Frame:
        """Return total lag, share of dead time, evenness of the lags; longest total lag in [s]."""
        return unit_frame(self.order, longest)

    def starts(self, tick: float, record: float) -> list[Array]:
        """Return a grid over total lag and dead time; row spacing and length in [s]."""
        even = 0.8 if self.order > 1 else 0.0
        return [
            np.array([total, dead, even])
            for total in np.geomspace(max(tick, 1e-3 * record), record, 10)
            for dead in (0.02, 0.3, 0.7)
        ]

    def parameters(self, solution: Solution) -> dict[str, float]:
        """Return total lag, gain, dead time and lags."""
        first, second, dead = solution.shape
        values = {
            "total_lag": first + second + dead,
            "gain": solution.gain,
            "dead_time": dead,
            "time_constant_1": first,
        }
        return values | ({"time_constant_2": second} if self.order > 1 else {})

    def count(self, problem: Record) -> int:
        """Return gain, dead time, lags, level and drift [-]."""
        return self.order + 2 + int(problem.nuisance.shape[0])

    def scale(self, solution: Solution) -> float:
        """Return the total lag [s]."""
        return sum(solution.shape)

    def profile_frame(self, best: Shape, name: str, value: float) -> tuple[Frame, Array]:
        """Return what is left free with one figure held [its unit], and a start."""
        return profile_frame(best, self.order, name, value)

    def offset(self, best: Solution, name: str, spread: Array) -> float:
        """Return a first guess of the distance to the limit [its unit]."""
        total, even = sum(best.shape), evenness_of(best.shape)
        if name == "gain":
            return float(spread[-1])
        if name == "total_lag":
            return float(spread[0])
        if name == "dead_time":
            return float(spread[1] * total)
        root = math.sqrt(max(1.0 - even, 0.0))
        parting = 0.5 * total * (math.sqrt(1.0 - even + float(spread[2])) - root)
        return max(parting, 0.5 * float(spread[1]) * total)

    def bound(self, name: str, value: float) -> float:
        """Return the least that a figure can be [its unit]."""
        return {"gain": -math.inf, "total_lag": 1e-6 * value}.get(name, 0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class IntegratingFamily:
    """An integrator with dead time; the shape is (0, 0, dead time).

    Parameters
    ----------
    longest : float
        Longest dead time looked at [s].
    """

    longest: float

    def unit_frame(self, longest: float) -> Frame:
        """Return the dead time as the one coordinate; the longest total lag [s] plays no part."""
        return Frame(
            shape=lambda x: (0.0, 0.0, float(x[0])),
            low=np.zeros(1),
            high=np.array([self.longest]),
        )

    def starts(self, tick: float, record: float) -> list[Array]:
        """Return dead times to start from; row spacing and length in [s]."""
        return [np.array([value]) for value in (0.0, *np.geomspace(tick, 0.5 * record, 12))]

    def parameters(self, solution: Solution) -> dict[str, float]:
        """Return gain and dead time."""
        return {"gain": solution.gain, "dead_time": solution.shape[2]}

    def count(self, problem: Record) -> int:
        """Return gain, dead time, level and drift [-]."""
        return 2 + int(problem.nuisance.shape[0])

    def scale(self, solution: Solution) -> float:
        """Return the dead time, or a share of the record [s]."""
        return max(solution.shape[2], 1e-3 * self.longest)

    def profile_frame(self, best: Shape, name: str, value: float) -> tuple[Frame, Array]:
        """Return what is left free with one figure held [its unit], and a start."""
        if name == "gain":
            free = self.unit_frame(self.longest)
            held = Frame(shape=free.shape, low=free.low, high=free.high, gain=value)
            return held, np.array([best[2]])
        return Frame(
            shape=lambda x: (0.0, 0.0, value),  # noqa: ARG005  nothing is left free
            low=np.zeros(0),
            high=np.zeros(0),
        ), np.zeros(0)

    def offset(self, best: Solution, name: str, spread: Array) -> float:
        """Return a first guess of the distance to the limit [its unit]."""
        return float(spread[-1] if name == "gain" else spread[0])

    def bound(self, name: str, value: float) -> float:
        """Return the least that a figure can be [its unit]."""
        return -math.inf if name == "gain" else 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class InverseFamily:
    """Two lags, dead time and one zero on the wrong side; the shape ends with its time."""

    def unit_frame(self, longest: float) -> Frame:
        """Return total of lags and dead time, share of dead time, evenness, share of the zero.

        The longest total in [s].
        """
        return Frame(
            shape=_inverse,
            low=np.array([_SHORTEST * longest, 0.0, _LEAST_EVEN, 0.0]),
            high=np.array([longest, _MOST_DEAD, 1.0, _MOST_INVERSE]),
        )

    def starts(self, tick: float, record: float) -> list[Array]:
        """Return a grid over total, dead time and zero; row spacing and length in [s]."""
        return [
            np.array([total, dead, 0.8, zero])
            for total in np.geomspace(max(tick, 1e-3 * record), record, 8)
            for dead in (0.02, 0.3)
            for zero in (0.1, 0.5, 1.5)
        ]

    def parameters(self, solution: Solution) -> dict[str, float]:
        """Return total of lags and dead time, gain, dead time, lags and the zero's time."""
        first, second, dead, zero = solution.shape
        return {
            "total_lag": first + second + dead + zero,
            "gain": solution.gain,
            "dead_time": dead,
            "time_constant_1": first,
            "time_constant_2": second,
            "inverse_response": zero,
        }

    def count(self, problem: Record) -> int:
        """Return gain, dead time, lags, zero, level and drift [-]."""
        return 5 + int(problem.nuisance.shape[0])

    def scale(self, solution: Solution) -> float:
        """Return lags, dead time and the zero's time together [s]."""
        return sum(solution.shape)

    def profile_frame(self, best: Shape, name: str, value: float) -> tuple[Frame, Array]:
        """Return what is left free with one figure held [its unit], and a start."""
        first, second, dead, zero = best
        lags, even = first + second, max(evenness_of(best), _LEAST_EVEN)
        total, top = lags + dead, 50.0 * (lags + dead + zero)
        share, ratio = dead / total, min(zero / lags, _MOST_INVERSE)
        low = np.array([_SHORTEST * total, 0.0, _LEAST_EVEN, 0.0])
        high = np.array([top, _MOST_DEAD, 1.0, _MOST_INVERSE])
        match name:
            case "gain":
                frame = Frame(shape=_inverse, low=low, high=high, gain=value)
                return frame, np.array([total, share, even, ratio])
            case "total_lag":
                # lags, dead time and zero in shares of the sum that is held
                frame = Frame(shape=lambda x: _sum_held(value, x), low=low[1:], high=high[1:])
                return frame, np.array([dead / (total + zero), even, ratio])
            case "dead_time":
                frame = Frame(
                    shape=lambda x: (*split(x[0], x[1], value), x[2] * x[0]),
                    low=low[[0, 2, 3]],
                    high=high[[0, 2, 3]],
                )
                return frame, np.array([max(lags, 1e-3 * total), even, ratio])
            case "inverse_response":
                frame = Frame(
                    shape=lambda x: (*split(x[0] * (1.0 - x[1]), x[2], x[0] * x[1]), value),
                    low=low[:3],
                    high=high[:3],
                )
                return frame, np.array([total, share, even])
            case "time_constant_1":
                frame = Frame(
                    shape=lambda x: (value, x[0] * value, x[1], x[2]),
                    low=np.array([5e-3, 0.0, 0.0]),
                    high=np.array([1.0, top, top]),
                )
                return frame, np.array([min(second / value, 1.0), dead, zero])
            case _:
                frame = Frame(
                    shape=lambda x: (x[0], value, x[1], x[2]),
                    low=np.array([max(value, _SHORTEST * total), 0.0, 0.0]),
                    high=np.array([top, top, top]),
                )
                return frame, np.array([max(first, value), dead, zero])

    def offset(self, best: Solution, name: str, spread: Array) -> float:
        """Return a first guess of the distance to the limit [its unit]."""
        if name == "gain":
            return float(spread[-1])
        first, second, dead, _ = best.shape
        lags = first + second
        shares = {"total_lag": spread[0], "dead_time": spread[1] * (lags + dead)}
        return float(shares.get(name, spread[3] * lags))

    def bound(self, name: str, value: float) -> float:
        """Return the least that a figure can be [its unit]."""
        if name == "gain":
            return -math.inf
        # Without any lag there would be no response but a jump.
        return 0.0 if name in {"dead_time", "inverse_response"} else 1e-4 * value


def _inverse(x: Array) -> Shape:
    lags = x[0] * (1.0 - x[1])
    return (*split(lags, x[2], x[0] * x[1]), x[3] * lags)


def _sum_held(total: float, x: Array) -> Shape:
    """Return a shape from the share of dead time, evenness, and the zero's time over the lags."""
    rest = total * (1.0 - x[0])
    lags = rest / (1.0 + x[2])
    return (*split(lags, x[1], total * x[0]), rest - lags)
