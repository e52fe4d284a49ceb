"""From the engine's state to the values of the points, as links show them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.domain.points import position_point
from harness.domain.signals import PointKind
from harness.engine import places as place
from harness.links.codecs import CURRENT_LOW_MA, CURRENT_SPAN_MA
from plants import layout as at

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.domain.signals import Point
    from harness.engine.engine import Engine

    Floats = NDArray[np.float64]

_WRITTEN = (PointKind.HEARTBEAT, PointKind.READ_BACK)  # what a peer wrote, not of the engine


class ImageValues:
    """Makes the image of an engine's present tick.

    Nearly every point is a place in the state on a straight line, and they are all worked out
    together: point by point it took 200 microseconds of every tick for 80 points.

    Parameters
    ----------
    engine : Engine
        The engine.
    points : tuple of Point
        The points, in the order of the image.
    """

    def __init__(self, engine: Engine, points: tuple[Point, ...]) -> None:
        self._engine = engine
        n = len(points)
        self._values = np.zeros(n)
        self._currents = np.full(n, math.nan)
        self._qualities = np.zeros(n)
        self.heartbeats: dict[str, float] = {}
        self.read_backs: dict[str, float] = {}
        self._number = {point.name: i for i, point in enumerate(points)}
        apart = (*_WRITTEN, PointKind.TICK)
        shown = [(i, point) for i, point in enumerate(points) if point.kind not in apart]
        lines = [_line(engine, point) for _, point in shown]
        self._shown = np.array([i for i, _ in shown], dtype=np.intp)
        self._places = np.array([line.place for line in lines], dtype=np.intp)
        self._zeros = np.array([line.zero for line in lines])
        self._spans = np.array([line.span for line in lines])
        self._lowers = np.array([line.lower for line in lines])
        self._gains = np.array([line.gain for line in lines])
        self._ticks = [i for i, point in enumerate(points) if point.kind is PointKind.TICK]
        self._integral_times = [
            i for i, point in enumerate(points) if point.kind is PointKind.INTEGRAL_TIME
        ]
        measured = [
            (i, engine.place_of_transmitter(point.name))
            for i, point in enumerate(points)
            if point.kind is PointKind.MEASUREMENT
        ]
        numbers = np.array([number for _, number in measured], dtype=np.intp)
        self._measured = np.array([i for i, _ in measured], dtype=np.intp)
        self._current_places = numbers + int(engine.table[at.AT_CURRENT])
        self._quality_places = numbers + int(engine.table[at.AT_QUALITY])

    def take(self) -> tuple[Floats, Floats, Floats]:
        """Return values, currents and qualities of the present tick.

        Returns
        -------
        values, currents, qualities : ndarray, shape (n_points,)
            Values in each point's unit; currents [mA], not a number where there is none;
            ``Quality`` numbers [-]. The arrays are used again by the next call.
        """
        state, values = self._engine.state, self._values
        fractions = (state[self._places] - self._zeros) / self._spans
        values[self._shown] = self._lowers + fractions * self._gains
        for i in self._integral_times:
            if not math.isfinite(values[i]):
                values[i] = 0.0  # stands for no integral action
        for i in self._ticks:
            values[i] = self._engine.tick
        for written in (self.heartbeats, self.read_backs):
            for name, value in written.items():
                values[self._number[name]] = value
        self._currents[self._measured] = state[self._current_places]
        self._qualities[self._measured] = state[self._quality_places]
        return values, self._currents, self._qualities


@dataclass(frozen=True, slots=True, kw_only=True)
class _Line:
    """A point as lower + gain * (state - zero) / span."""

    place: int
    lower: float = 0.0
    gain: float = 1.0
    zero: float = 0.0
    span: float = 1.0


def _line(engine: Engine, point: Point) -> _Line:
    """Return how a point follows from one place of the state."""
    match point.kind:
        case PointKind.MEASUREMENT:
            number = engine.place_of_transmitter(point.name)
            return _Line(
                place=int(engine.table[at.AT_CURRENT]) + number,
                zero=CURRENT_LOW_MA,
                span=CURRENT_SPAN_MA,
                lower=point.range.lower,
                gain=point.range.span,
            )
        case PointKind.COMMAND:
            return _Line(place=engine.place_of_valve(point.name, at.AT_COMMAND), gain=100.0)
        case PointKind.POSITION:
            tags = {position_point(valve.tag): valve.tag for valve in engine.rig.valves}
            return _Line(
                place=engine.place_of_valve(tags[point.name], at.AT_TRAVEL), gain=100.0
            )
        case _:
            return _order_line(engine, point)


def _order_line(engine: Engine, point: Point) -> _Line:
    """Return how an order of a loop follows from its place."""
    base = engine.place_of_loop(point.name.rpartition(".")[0])
    match point.kind:
        case PointKind.SETPOINT:
            return _Line(
                place=base + place.SETPOINT, lower=point.range.lower, gain=point.range.span
            )
        case PointKind.MODE:
            return _Line(place=base + place.MODE)
        case PointKind.MANUAL_OUTPUT:
            return _Line(place=base + place.MANUAL_OUTPUT, gain=100.0)
        case PointKind.GAIN:
            return _Line(place=base + place.GAIN)
        case _:
            return _Line(place=base + place.INTEGRAL_TIME)
