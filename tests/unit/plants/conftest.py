"""An independent model of any test rig, written from the formulas alone, for a general solver."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from harness.domain.rig import DRAIN, Characteristic


def _characteristic(valve, travel):
    """IEC 60534-2-4, and the landing on the seat below 2 % of travel."""
    if travel <= 0.0:
        return 0.0
    if valve.characteristic is Characteristic.LINEAR:
        relative = 1 / valve.rangeability + (1 - 1 / valve.rangeability) * travel
    else:
        relative = valve.rangeability ** (travel - 1)
    s = min(travel / 0.02, 1.0)
    return relative * (3 * s**2 - 2 * s**3)


class IndependentPlant:
    """The plant as ordinary differential equations for scipy, with every corner a new start."""

    def __init__(self, rig, commands, levels):
        self.rig = rig
        self.commands = dict(commands)
        self.time = 0.0
        self._names = [vessel.tag for vessel in rig.vessels]
        self._areas = np.array([math.pi / 4 * v.shape.diameter**2 for v in rig.vessels])
        self.volumes = np.array(levels) * self._areas
        self.travels = np.array([commands[valve.tag] for valve in rig.valves])
        self.positions = self.travels.copy()
        self.totals = np.zeros(3)

    @property
    def levels(self):
        return self.volumes / self._areas

    def flow(self, number, travel):
        valve = self.rig.valves[number]
        source = next(s for s in self.rig.sources if s.tag == valve.origin)
        kv = valve.kv * _characteristic(valve, travel)
        if kv and valve.line_kv:
            kv = (kv**-2 + valve.line_kv**-2) ** -0.5
        return kv / 3600 * math.sqrt(source.pressure / 1e5 * 999.1 / source.density)

    def _position(self, number, elapsed):
        valve = self.rig.valves[number]
        way = self.commands[valve.tag] - self.positions[number]
        reach = elapsed / valve.stroke_time
        return self.positions[number] + math.copysign(min(abs(way), reach), way)

    def _travel(self, number, elapsed, lagged):
        if self.rig.valves[number].lag > 0:
            return lagged
        return self._position(number, elapsed)

    def _rates(self, elapsed, y):
        n, m = len(self._names), len(self.rig.valves)
        volumes, lagged = y[:n], y[n : n + m]
        change, totals, moving = np.zeros(n), np.zeros(3), np.zeros(m)
        for i, valve in enumerate(self.rig.valves):
            flow = self.flow(i, self._travel(i, elapsed, lagged[i]))
            change[self._names.index(valve.destination)] += flow
            totals[0] += flow
            if valve.lag > 0:
                moving[i] = (self._position(i, elapsed) - lagged[i]) / valve.lag
        levels = volumes / self._areas
        for path in self.rig.orifices:
            area = math.pi / 4 * path.diameter**2
            level = max(levels[self._names.index(path.origin)], 0.0)
            flow = path.discharge_coefficient * area * math.sqrt(2 * self.rig.gravity * level)
            self._move(change, totals, path.origin, path.destination, flow)
        for weir in self.rig.overflows:
            head = max(levels[self._names.index(weir.origin)] - weir.crest, 0.0)
            root = math.sqrt(2 * self.rig.gravity)
            flow = 2 / 3 * weir.discharge_coefficient * weir.width * root * head**1.5
            self._move(change, totals, weir.origin, weir.destination, weir.fraction * flow)
            change[self._names.index(weir.origin)] -= (1 - weir.fraction) * flow
            totals[2] += (1 - weir.fraction) * flow
        return np.concatenate([change, moving, totals])

    def _move(self, change, totals, origin, destination, flow):
        change[self._names.index(origin)] -= flow
        if destination == DRAIN:
            totals[1] += flow
        else:
            change[self._names.index(destination)] += flow

    def _corners(self, duration):
        """Times at which a stem reaches its command, or lands on or leaves its seat (no lag)."""
        times = {0.0, duration}
        for i, valve in enumerate(self.rig.valves):
            command, start = self.commands[valve.tag], self.positions[i]
            times.add(abs(command - start) * valve.stroke_time)
            if min(command, start) < 0.02 < max(command, start):
                times.add(abs(0.02 - start) * valve.stroke_time)
        return sorted(t for t in times if t <= duration)

    def run(self, duration):
        """Go on for a time with the commands held."""
        n, m = len(self._names), len(self.rig.valves)
        y = np.concatenate([self.volumes, self.travels, self.totals])
        corners = self._corners(duration)
        for start, end in itertools.pairwise(corners):
            solution = solve_ivp(
                self._rates, (start, end), y, method="DOP853", rtol=1e-12, atol=1e-15
            )
            assert solution.success
            y = solution.y[:, -1]
        self.volumes, self.totals = y[:n], y[n + m :]
        self.travels = np.array([self._travel(i, duration, y[n + i]) for i in range(m)])
        self.positions = np.array([self._position(i, duration) for i in range(m)])
        self.time += duration


@pytest.fixture
def independent_plant():
    return IndependentPlant
