"""Benchmark section: one hour of the two-tank loop at a tick and scan of 0.1 s."""

from __future__ import annotations

import tempfile
import time
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from _figures import Figure
from _reference_loops import (
    GAIN,
    INTEGRAL_TIME,
    TICK,
    CompiledLoop,
    LoopRun,
    benchmark_rig,
    run_with_solve_ivp,
)

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

    from harness.domain.rig import Rig

HOUR = 36_000  # [ticks]
_ROWS_A_BLOCK = 1_000  # of the record [ticks]
_LOOP, _VALVE = "LIC-902", "FV-901"


def engine_builtin(rig: Rig, ticks: int) -> LoopRun:
    """Run the loop in the engine, closed by its own compiled block."""
    from harness.controllers.block import AUTOMATIC  # noqa: PLC0415  each loads what it measures
    from harness.domain.models import ControllerSettings  # noqa: PLC0415
    from harness.engine.engine import Engine  # noqa: PLC0415

    engine = Engine(rig)
    engine.set_settings(
        _LOOP,
        ControllerSettings(
            gain=GAIN, integral_time=INTEGRAL_TIME, action=rig.loop(_LOOP).action
        ),
    )
    start = time.perf_counter()
    engine.advance(1)  # one scan in manual, from which the block starts bumplessly
    engine.set_mode(_LOOP, AUTOMATIC)
    engine.advance(ticks - 1)
    wall_time = time.perf_counter() - start
    upper, lower = engine.levels().tolist()
    return LoopRun(
        plant_time=ticks * rig.tick,
        wall_time=wall_time,
        levels=(upper, lower),
        output=engine.output(_VALVE),
    )


class _PythonController:
    """A PI block as somebody would write it in Python, behind the engine's port."""

    def __init__(self, rig: Rig) -> None:
        self._integral: float | None = None
        self._output = rig.valve(_VALVE).initial_output

    def scan(
        self,
        process_variable: float,
        setpoint: float,
        mode: int,
        manual_output: float,
        bad: bool,
    ) -> float:
        error = setpoint - process_variable
        if self._integral is None:  # the first scan is in manual
            self._integral = self._output - GAIN * error
            return self._output
        increment = GAIN * TICK / INTEGRAL_TIME * error
        wanted = GAIN * error + self._integral + increment
        if (wanted > 1.0 and increment > 0.0) or (wanted < 0.0 and increment < 0.0):
            wanted -= increment
        else:
            self._integral += increment
        return min(max(wanted, 0.0), 1.0)


def engine_python(rig: Rig, ticks: int) -> LoopRun:
    """Run the loop in the engine, closed by a PI block in Python, without a record."""
    from harness.engine.drive import Drive  # noqa: PLC0415
    from harness.engine.engine import Engine  # noqa: PLC0415

    engine = Engine(rig)
    drive = Drive(engine, _LOOP, _PythonController(rig))
    start = time.perf_counter()
    drive.advance(ticks)
    wall_time = time.perf_counter() - start
    upper, lower = engine.levels().tolist()
    return LoopRun(
        plant_time=ticks * rig.tick,
        wall_time=wall_time,
        levels=(upper, lower),
        output=engine.output(_VALVE),
    )


def engine_python_recorded(rig: Rig, ticks: int) -> LoopRun:
    """Run the loop as in ``engine_python``, with every tick written to a record on disk."""
    from harness.domain.run import Closing, RunEnd, RunHeader  # noqa: PLC0415
    from harness.engine.drive import Drive  # noqa: PLC0415
    from harness.engine.engine import Engine  # noqa: PLC0415
    from harness.recording.writer import Recorder  # noqa: PLC0415

    engine = Engine(rig)
    drive = Drive(engine, _LOOP, _PythonController(rig))
    header = RunHeader(
        run="benchmark", started_utc="", rig_name=rig.name, trial_name="", rig_text="",
        trial_text="", versions={}, seed=rig.seed, tick=rig.tick, clock="virtual", pace=0.0,
        controller="callable", columns=engine.columns,
    )  # fmt: skip
    with tempfile.TemporaryDirectory() as folder:
        start = time.perf_counter()
        writer = Recorder.create(Path(folder), header, time.perf_counter_ns)
        for first in range(0, ticks, _ROWS_A_BLOCK):
            writer.rows(0, first, drive.record(min(_ROWS_A_BLOCK, ticks - first)), None)
        writer.close(Closing(end=RunEnd.COMPLETE, reason="", last_tick=ticks - 1, rows=ticks))
        wall_time = time.perf_counter() - start
    upper, lower = engine.levels().tolist()
    return LoopRun(
        plant_time=ticks * rig.tick,
        wall_time=wall_time,
        levels=(upper, lower),
        output=engine.output(_VALVE),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Contestant:
    """One way to run the loop: its name, its function, its length in ticks, what is wanted."""

    name: str
    run: Callable[[Rig, int], LoopRun]
    ticks: int
    wanted: str = ""
    note: str = ""


def loops(rounds: int) -> Iterator[Figure]:
    """Measure every way to run the loop, in rounds of alternating blocks.

    Parameters
    ----------
    rounds : int
        Number of rounds; the best of each way is given, since whatever else the machine does
        can only slow it [-].

    Yields
    ------
    Figure
        Simulated over wall time, and ratios of the same run.
    """
    contestants = [
        Contestant(name="built_in", run=engine_builtin, ticks=HOUR, wanted=">= 300000"),
        Contestant(name="python_pi", run=engine_python, ticks=HOUR, wanted=">= 50000"),
        Contestant(
            name="python_pi_recorded", run=engine_python_recorded, ticks=HOUR, wanted=">= 10000"
        ),
        Contestant(
            name="solve_ivp",
            run=run_with_solve_ivp,
            ticks=600,
            note="RK45, rtol 1e-6, atol 1e-9, one call a scan; one minute of the loop",
        ),
    ]
    compiled: CompiledLoop | None = None
    try:
        compiled = CompiledLoop()
        contestants.append(
            Contestant(name="c", run=compiled.run, ticks=HOUR, note="-O3 -march=native")
        )
    except FileNotFoundError as error:
        yield Figure(name="loops.c", value=None, unit="x real time", note=str(error))
    try:
        yield from _agreement(contestants)
        yield from _speeds(contestants, rounds)
    finally:
        if compiled is not None:
            compiled.close()


def _agreement(contestants: list[Contestant]) -> Iterator[Figure]:
    """Run all without noise for a minute: only the same loop is worth comparing."""
    rig = benchmark_rig(noise=0.0)
    first, *others = contestants
    lower = first.run(rig, 600).levels[1]  # compiles, where something is compiled
    for contestant in others:
        yield Figure(
            name=f"loops.{contestant.name}_differs",
            value=abs(contestant.run(rig, 600).levels[1] - lower),
            unit="m",
            note="from built_in: the lower level after a minute without noise",
        )


def _speeds(contestants: list[Contestant], rounds: int) -> Iterator[Figure]:
    rig = benchmark_rig()
    speeds: dict[str, list[float]] = {contestant.name: [] for contestant in contestants}
    for _ in range(rounds):
        for contestant in contestants:
            speeds[contestant.name].append(
                contestant.run(rig, contestant.ticks).times_real_time
            )
    best = {name: max(found) for name, found in speeds.items()}
    for contestant in contestants:
        yield Figure(
            name=f"loops.{contestant.name}",
            value=best[contestant.name],
            unit="x real time",
            wanted=contestant.wanted,
            note=contestant.note,
        )
    for name in ("c", "solve_ivp"):
        if name in best:
            yield Figure(
                name=f"loops.built_in_over_{name}",
                value=best["built_in"] / best[name],
                unit="1",
            )
