"""From the engine's state to the values of the points, as links show them."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from harness.domain.points import position_point
from harness.domain.signals import PointKind
from harness.engine import places as place
from plants import layout as at

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from harness.domain.signals import Point
    from harness.engine.engine import Engine

    Floats = NDArray[np.float64]


class ImageValues:
    """Makes the image of an engine's present tick.

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
        written = {
            PointKind.HEARTBEAT: self.heartbeats,
            PointKind.READ_BACK: self.read_backs,
        }
        self._readers = [
            _reader(engine, point, written.get(point.kind, {})) for point in points
        ]
        self._measurements = [
            (i, engine.place_of_transmitter(point.name))
            for i, point in enumerate(points)
            if point.kind is PointKind.MEASUREMENT
        ]
        self._current = int(engine.table[at.AT_CURRENT])
        self._quality = int(engine.table[at.AT_QUALITY])

    def take(self) -> tuple[Floats, Floats, Floats]:
        """Return values, currents and qualities of the present tick.

        Returns
        -------
        values, currents, qualities : ndarray, shape (n_points,)
            Values in each point's unit; currents [mA], not a number where there is none;
            ``Quality`` numbers [-]. The arrays are used again by the next call.
        """
        for i, read in enumerate(self._readers):
            self._values[i] = read()
        for i, number in self._measurements:
            self._currents[i] = self._engine.state[self._current + number]
            self._qualities[i] = self._engine.state[self._quality + number]
        return self._values, self._currents, self._qualities


def _reader(engine: Engine, point: Point, written: dict[str, float]) -> Callable[[], float]:
    """Return a function that reads one point in its unit; ``written`` is what a peer wrote."""
    state = engine.state
    match point.kind:
        case PointKind.MEASUREMENT:
            return lambda: engine.measured(point.name)
        case PointKind.COMMAND:
            command = engine.place_of_valve(point.name, at.AT_COMMAND)
            return lambda: 100.0 * state[command]
        case PointKind.POSITION:
            tags = {position_point(valve.tag): valve.tag for valve in engine.rig.valves}
            travel = engine.place_of_valve(tags[point.name], at.AT_TRAVEL)
            return lambda: 100.0 * state[travel]
        case PointKind.HEARTBEAT | PointKind.READ_BACK:
            return lambda: written.get(point.name, 0.0)
        case PointKind.TICK:
            return lambda: float(engine.tick)
        case _:
            return _order_reader(engine, point)


def _order_reader(engine: Engine, point: Point) -> Callable[[], float]:
    """Return a function that reads one order of a loop."""
    state = engine.state
    base = engine.place_of_loop(point.name.rpartition(".")[0])
    match point.kind:
        case PointKind.SETPOINT:
            shown = point.range
            return lambda: shown.from_fraction(state[base + place.SETPOINT])
        case PointKind.MODE:
            return lambda: float(state[base + place.MODE])
        case PointKind.MANUAL_OUTPUT:
            return lambda: 100.0 * state[base + place.MANUAL_OUTPUT]
        case PointKind.GAIN:
            return lambda: float(state[base + place.GAIN])
        case _:
            return lambda: _finite_or_zero(state[base + place.INTEGRAL_TIME])


def _finite_or_zero(integral_time: float) -> float:
    """Return the integral time; 0 stands for no integral action."""
    return float(integral_time) if math.isfinite(integral_time) else 0.0
