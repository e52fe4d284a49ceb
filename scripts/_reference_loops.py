"""The two-tank loop of the benchmark, and the same loop in other people's tools.

The engine's figures mean something only beside others for the same loop on the same machine:
``scipy.integrate.solve_ivp`` called once per scan, and hard-coded C.
"""

from __future__ import annotations

import math
import shutil
import subprocess
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from harness.domain.orders import LoopOrders
from harness.domain.rig import (
    Action,
    Characteristic,
    ControlValve,
    Loop,
    Measurement,
    Orifice,
    Rig,
    Source,
    Transmitter,
    VerticalCylinder,
    Vessel,
)
from harness.domain.signals import Range
from plants.flow import WATER_REFERENCE_DENSITY, orifice_coefficient

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

GAIN = 3.0  # [fraction of output per fraction of span]
INTEGRAL_TIME = 600.0  # [s]
SETPOINT = 0.55  # [fraction of span]
SPAN = 2.0  # [m]
TICK = 0.1  # [s]
NOISE = 0.0005  # [fraction of span]
RESOLUTION = 1.0 / 65536.0  # [fraction of span]
_INITIAL_LEVELS = (0.9, 1.0)  # [m]
_INITIAL_OUTPUTS = (0.55, 0.35)  # [-]


def benchmark_rig(noise: float = NOISE) -> Rig:
    """Return the two-tank rig of the benchmark.

    It stands apart from the rigs in ``configs``, so that figures stay comparable when those
    change. Tick and scan are 0.1 s.

    Parameters
    ----------
    noise : float
        Noise of both transmitters [fraction of span].

    Returns
    -------
    Rig
        Two tanks in series, a control valve into each, PI control of the lower level.
    """
    tanks = ("TK-901", "TK-902")
    valves = ("FV-901", "FV-902")
    return Rig(
        name="benchmark",
        description="Two tanks in series for measuring speed",
        tick=TICK,
        seed=1,
        gravity=9.80665,
        sources=(Source(tag="HEADER", pressure=3e5, density=WATER_REFERENCE_DENSITY),),
        vessels=tuple(
            Vessel(
                tag=tag,
                shape=VerticalCylinder(diameter=0.8, height=2.5),
                initial_level=level,
            )
            for tag, level in zip(tanks, _INITIAL_LEVELS, strict=True)
        ),
        orifices=(
            Orifice(
                tag="RO-901",
                origin=tanks[0],
                destination=tanks[1],
                discharge_coefficient=0.61,
                diameter=0.030,
            ),
            Orifice(
                tag="RO-902",
                origin=tanks[1],
                destination="drain",
                discharge_coefficient=0.61,
                diameter=0.034,
            ),
        ),
        overflows=(),
        valves=tuple(
            ControlValve(
                tag=tag,
                origin="HEADER",
                destination=tank,
                kv=kv,
                characteristic=Characteristic.EQUAL_PERCENTAGE,
                rangeability=50.0,
                line_kv=12.0,
                stroke_time=8.0,
                lag=1.0,
                fail_position=0.0,
                initial_output=output,
            )
            for tag, tank, kv, output in zip(
                valves, tanks, (10.0, 6.0), _INITIAL_OUTPUTS, strict=True
            )
        ),
        transmitters=tuple(
            Transmitter(
                tag=tag,
                measures=Measurement.LEVEL,
                subject=tank,
                range=Range(lower=0.0, upper=SPAN, unit="m"),
                damping=0.0,
                noise=noise,
                resolution=RESOLUTION,
                failure_current_ma=21.5,
            )
            for tag, tank in zip(("LT-901", "LT-902"), tanks, strict=True)
        ),
        loops=(
            Loop(
                tag="LIC-902",
                process_variable="LT-902",
                output=valves[0],
                load=valves[1],
                action=Action.REVERSE,
                initial_setpoint=SETPOINT * SPAN,
                output_low=0.0,
                output_high=1.0,
                scan=TICK,
                scan_phase=0,
                output_delay=0,
                watchdog=10.0,
                heartbeat_timeout=None,
                orders=LoopOrders(),
            ),
        ),
        links=(),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class LoopRun:
    """What running the loop took, and where it ended.

    Parameters
    ----------
    plant_time : float
        Simulated time [s].
    wall_time : float
        Time taken, without set-up [s].
    levels : tuple of float
        Last levels, upper and lower [m].
    output : float
        Last controller output [-].
    """

    plant_time: float
    wall_time: float
    levels: tuple[float, float]
    output: float

    @property
    def times_real_time(self) -> float:
        """Return simulated over taken time [-]."""
        return self.plant_time / self.wall_time


def _numbers(rig: Rig) -> list[float]:
    """Return the loop's numbers in the order of ``struct loop`` in two_tank_loop.c."""
    source = rig.sources[0]
    root = math.sqrt(source.pressure / 1e5 * WATER_REFERENCE_DENSITY / source.density) / 3600.0
    outlets = [
        orifice_coefficient(path.discharge_coefficient, path.area, rig.gravity)
        for path in rig.orifices
    ]
    return [
        rig.tick,
        *(vessel.shape.area for vessel in rig.vessels),
        *outlets,
        *(valve.kv for valve in rig.valves),
        *(valve.line_kv or 0.0 for valve in rig.valves),
        *(valve.rangeability for valve in rig.valves),
        *(valve.stroke_time for valve in rig.valves),
        *(valve.lag for valve in rig.valves),
        root,
        SPAN,
        rig.transmitters[0].noise,
        RESOLUTION,
        GAIN,
        INTEGRAL_TIME,
        SETPOINT,
        *_INITIAL_LEVELS,
        *_INITIAL_OUTPUTS,
    ]


class CompiledLoop:
    """The loop in C, compiled for this machine when there is a compiler.

    Raises
    ------
    FileNotFoundError
        When there is no C compiler.
    """

    def __init__(self) -> None:
        compiler = next(filter(None, map(shutil.which, ("cc", "gcc", "clang"))), None)
        if compiler is None:
            raise FileNotFoundError("no C compiler (cc, gcc or clang)")
        self._folder = tempfile.TemporaryDirectory()
        self._program = Path(self._folder.name) / "two_tank_loop"
        source = Path(__file__).with_name("two_tank_loop.c")
        flags = ["-std=c11", "-O3", "-march=native", "-o", str(self._program)]
        subprocess.run([compiler, *flags, str(source), "-lm"], check=True)

    def run(self, rig: Rig, ticks: int) -> LoopRun:
        """Run the loop.

        Parameters
        ----------
        rig : Rig
            A rig of ``benchmark_rig``.
        ticks : int
            Length [ticks].

        Returns
        -------
        LoopRun
            Time taken and end.
        """
        words = [str(ticks), *map(repr, _numbers(rig))]
        result = subprocess.run(
            [str(self._program), *words], check=True, capture_output=True, text=True
        )
        taken, upper, lower, output, _ = map(float, result.stdout.split())
        return LoopRun(
            plant_time=ticks * rig.tick,
            wall_time=taken,
            levels=(upper, lower),
            output=output,
        )

    def close(self) -> None:
        """Delete the program."""
        self._folder.cleanup()


def run_with_solve_ivp(rig: Rig, ticks: int) -> LoopRun:
    """Run the loop with ``scipy.integrate.solve_ivp``, called once per scan.

    Tolerances are 1e-6 relative and 1e-9 absolute, the method is the default (RK45).

    Parameters
    ----------
    rig : Rig
        A rig of ``benchmark_rig``.
    ticks : int
        Length [ticks].

    Returns
    -------
    LoopRun
        Time taken and end.
    """
    import numpy as np  # noqa: PLC0415  each section loads what it measures
    from scipy.integrate import solve_ivp  # noqa: PLC0415

    plant = _Plant(_numbers(rig))
    noise = np.random.default_rng(1)
    state = [*_INITIAL_LEVELS, *_INITIAL_OUTPUTS]
    commands = list(_INITIAL_OUTPUTS)
    integral = 0.0
    start = time.perf_counter()
    for tick in range(ticks):
        seen = []
        for level in state[:2]:
            fraction = level / SPAN + rig.transmitters[0].noise * noise.standard_normal()
            seen.append(math.floor(fraction / RESOLUTION + 0.5) * RESOLUTION)
        error = SETPOINT - seen[1]
        if tick == 0:  # the first scan is in manual, as in every way to run this loop
            integral = commands[0] - GAIN * error - GAIN * TICK / INTEGRAL_TIME * error
        increment = GAIN * TICK / INTEGRAL_TIME * error
        wanted = GAIN * error + integral + increment
        if (wanted > 1.0 and increment > 0.0) or (wanted < 0.0 and increment < 0.0):
            wanted -= increment
        else:
            integral += increment
        commands[0] = min(max(wanted, 0.0), 1.0)
        plant.commands = commands
        solution = solve_ivp(plant.rates, (0.0, TICK), state, rtol=1e-6, atol=1e-9)
        state = solution.y[:, -1].tolist()
        plant.move_stems(TICK)
    return LoopRun(
        plant_time=ticks * TICK,
        wall_time=time.perf_counter() - start,
        levels=(state[0], state[1]),
        output=commands[0],
    )


class _Plant:
    """The right-hand side of the loop in plain Python, with the valves' stems as ramps."""

    def __init__(self, numbers: list[float]) -> None:
        (
            _, area_1, area_2, self.outlet_1, self.outlet_2, kv_1, kv_2, line_1, line_2,
            ratio_1, ratio_2, stroke_1, stroke_2, lag_1, lag_2, self.root, *_rest,
        ) = numbers  # fmt: skip
        self.areas = (area_1, area_2)
        self.valves = (
            (kv_1, line_1, math.log(ratio_1), stroke_1, lag_1),
            (kv_2, line_2, math.log(ratio_2), stroke_2, lag_2),
        )
        self.stems = list(_INITIAL_OUTPUTS)
        self.commands = list(_INITIAL_OUTPUTS)

    def stem_after(self, valve: int, elapsed: float) -> float:
        reach = elapsed / self.valves[valve][3]
        way = self.commands[valve] - self.stems[valve]
        if abs(way) <= reach:
            return self.commands[valve]
        return self.stems[valve] + math.copysign(reach, way)

    def move_stems(self, elapsed: float) -> None:
        self.stems = [self.stem_after(valve, elapsed) for valve in (0, 1)]

    def flow(self, valve: int, travel: float) -> float:
        rated, line, log_ratio, _, _ = self.valves[valve]
        kv = rated * math.exp((travel - 1.0) * log_ratio)
        return self.root * kv * line / math.sqrt(kv * kv + line * line)

    def rates(self, elapsed: float, state: NDArray[np.float64]) -> list[float]:
        upper, lower, travel_1, travel_2 = state.tolist()
        between = self.outlet_1 * math.sqrt(max(upper, 0.0))
        leaving = self.outlet_2 * math.sqrt(max(lower, 0.0))
        return [
            (self.flow(0, travel_1) - between) / self.areas[0],
            (self.flow(1, travel_2) + between - leaving) / self.areas[1],
            (self.stem_after(0, elapsed) - travel_1) / self.valves[0][4],
            (self.stem_after(1, elapsed) - travel_2) / self.valves[1][4],
        ]
