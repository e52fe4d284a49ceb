"""What this rig would have done under the ideal block: same orders, sampling, delay and noise."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.optimize import brentq

from harness.analysis.loop_models import operating_point
from harness.controllers.block import AUTOMATIC, MANUAL, block_scan
from harness.domain.models import ControllerSettings
from harness.domain.rig import Action
from harness.domain.run import EventKind
from harness.engine.engine import Engine

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from harness.analysis.run_data import RunData
    from harness.analysis.schedule import ScanLog
    from harness.domain.rig import Loop

    Floats = NDArray[np.float64]


class IdealBlock:
    """The reference block with its state, scanned by hand.

    Parameters
    ----------
    loop : Loop
        The loop: action and limits.
    output : float
        Output to start from [-].
    """

    def __init__(self, loop: Loop, output: float) -> None:
        self._sign = 1.0 if loop.action is Action.REVERSE else -1.0
        self._limits = (loop.output_low, loop.output_high)
        self.gain = 0.0
        self.integral_time = math.inf
        self.integral = output
        self.output = output
        # As after a held scan: the first scan in automatic continues from the output.
        self._held = 1

    def order(self, settings: ControllerSettings) -> None:
        """Take new settings.

        Parameters
        ----------
        settings : ControllerSettings
            Gain and integral time.
        """
        self.gain = settings.gain
        self.integral_time = settings.integral_time or math.inf

    def scan(
        self,
        process_variable: float,
        setpoint: float,
        mode: int,
        manual_output: float,
        duration: float,
        *,
        bad: bool,
    ) -> float:
        """Execute one scan.

        Parameters
        ----------
        process_variable, setpoint : float
            Fractions of span [-].
        mode : int
            MANUAL or AUTOMATIC [-].
        manual_output : float
            Output in manual [-].
        duration : float
            Time since the scan before [s].
        bad : bool
            Whether the input is bad.

        Returns
        -------
        float
            Output [-].
        """
        self.output, self.integral, self._held = block_scan(
            process_variable,
            setpoint,
            bad,
            mode,
            manual_output,
            self.gain,
            self.integral_time,
            self._sign,
            *self._limits,
            duration,
            self.integral,
            self.output,
            self._held,
        )
        return self.output


@dataclass(frozen=True, slots=True, kw_only=True)
class Replay:
    """The nonlinear prediction of a run.

    Parameters
    ----------
    trace : dict of str to ndarray, shape (n,)
        Columns by name, as the engine would have recorded them [unit of the column].
    bias : dict of int to float
        Integral part of the block at each transfer to automatic, by tick [-].
    """

    trace: dict[str, Floats]
    bias: dict[int, float]


def replay(
    data: RunData, loop: Loop, log: ScanLog, settings: dict[int, ControllerSettings]
) -> Replay:
    """Run the rig from its start under the ideal block, with the orders and scans of a record.

    Parameters
    ----------
    data : RunData
        The run: orders and load at each tick.
    loop : Loop
        The loop.
    log : ScanLog
        When the controller read and acted.
    settings : dict of int to ControllerSettings
        Settings by the tick of their order [ticks].

    Returns
    -------
    Replay
        The prediction.
    """
    engine = Engine(data.rig, built_in=False)
    block = IdealBlock(loop, engine.output(loop.output))
    orders = _Orders(data, loop)
    reads = dict(zip(log.read.tolist(), log.acted.tolist(), strict=True))
    durations = dict(zip(log.read.tolist(), log.durations.tolist(), strict=True))
    ticks = sorted({0, *reads, *reads.values(), *settings, *orders.changes()})
    ticks = [tick for tick in ticks if tick < data.rows]
    rows = np.empty((data.rows, len(engine.columns)))
    bias: dict[int, float] = {}
    pending: dict[int, float] = {}
    last_mode = MANUAL
    for tick, following in zip(ticks, [*ticks[1:], data.rows], strict=True):
        if tick in settings:
            block.order(settings[tick])
        orders.give(engine, tick)
        if tick in reads:
            mode = orders.mode(tick)
            process_variable, bad = engine.transmitted(loop.process_variable)
            pending[reads[tick]] = block.scan(
                process_variable,
                orders.setpoint(tick),
                mode,
                orders.manual(tick),
                durations[tick],
                bad=bad,
            )
            if mode == AUTOMATIC and last_mode == MANUAL:
                bias[tick] = block.integral
            last_mode = mode
        if tick in pending:
            engine.set_output(loop.output, pending.pop(tick))
        rows[tick:following] = engine.record(following - tick)
    names = [column.name for column in engine.columns]
    return Replay(trace={name: rows[:, i] for i, name in enumerate(names)}, bias=bias)


class _Orders:
    """The orders of a record: setpoint, mode, manual output and the valves outside the loop."""

    def __init__(self, data: RunData, loop: Loop) -> None:
        self._loop = loop
        self._shown = data.shown(loop)
        self._setpoint = data.trace[f"{loop.tag}.setpoint"]
        self._mode = data.trace[f"{loop.tag}.mode"]
        self._manual = data.trace[f"{loop.tag}.manual_output"]
        self._loads = {
            valve.tag: data.trace[f"{valve.tag}.command"]
            for valve in data.rig.valves
            if valve.tag != loop.output
        }

    def changes(self) -> set[int]:
        """Return the ticks at which any order changes."""
        columns = (self._setpoint, self._mode, self._manual, *self._loads.values())
        return {int(tick) + 1 for column in columns for tick in np.flatnonzero(np.diff(column))}

    def setpoint(self, tick: int) -> float:
        return self._shown.to_fraction(float(self._setpoint[tick]))

    def mode(self, tick: int) -> int:
        return AUTOMATIC if self._mode[tick] > 0 else MANUAL

    def manual(self, tick: int) -> float:
        return float(self._manual[tick])

    def give(self, engine: Engine, tick: int) -> None:
        """Give the engine what holds from a tick on."""
        tag = self._loop.tag
        engine.set_setpoint(tag, float(self._setpoint[tick]))
        engine.set_mode(tag, self.mode(tick))
        engine.set_manual_output(tag, self.manual(tick))
        for valve, command in self._loads.items():
            engine.set_output(valve, float(command[tick]))


def static_balance(
    data: RunData,
    loop: Loop,
    settings: ControllerSettings,
    *,
    bias: float,
    setpoint: float,
    loads: dict[str, float],
) -> tuple[float, float]:
    """Return where a proportional block comes to rest on the nonlinear rig.

    The output is ``bias + Kc e`` and the level is the one at which inflow equals outflow with
    that output: one scalar root, or a limit of the output where the block wants to be beyond it.

    Parameters
    ----------
    data : RunData
        The run, for its rig.
    loop : Loop
        The loop.
    settings : ControllerSettings
        Settings; only the gain counts.
    bias : float
        Output without error [-].
    setpoint : float
        Setpoint [fraction of span].
    loads : dict of str to float
        Output of every other valve [-].

    Returns
    -------
    process_variable : float
        Where it comes to rest [fraction of span].
    output : float
        Output there [-].

    Raises
    ------
    ModelError
        When the rig has no steady state at some output within the limits.
    """
    engine = Engine(data.rig, built_in=False)
    transmitter = data.rig.transmitter(loop.process_variable)
    sign = 1.0 if loop.action is Action.REVERSE else -1.0

    def level(output: float) -> float:
        point = operating_point(engine, loads | {loop.output: output})
        return transmitter.range.to_fraction(point.levels[transmitter.subject])

    def excess(output: float) -> float:
        return output - bias - settings.gain * sign * (setpoint - level(output))

    output = _root_within(excess, loop.output_low, loop.output_high)
    return level(output), output


def _root_within(rising: Callable[[float], float], low: float, high: float) -> float:
    """Return the root of a rising function, or the limit that it lies beyond."""
    if rising(low) >= 0.0:
        return low
    if rising(high) <= 0.0:
        return high
    return float(brentq(rising, low, high, xtol=1e-12))


def settings_of(data: RunData, loop: Loop) -> dict[int, ControllerSettings]:
    """Return the settings ordered in a run, by the tick of their order.

    Parameters
    ----------
    data : RunData
        The run.
    loop : Loop
        The loop.
    """
    found = {}
    for event in data.events_of(EventKind.SETTINGS):
        if event.subject == loop.tag:
            ordered = event.data
            integral_time = ordered.get("integral_time")
            since = int(str(ordered.get("since", event.tick)))
            found[since] = ControllerSettings(
                gain=float(str(ordered["gain"])),
                integral_time=None if integral_time is None else float(str(integral_time)),
                action=Action(str(ordered["action"])),
            )
    return found
