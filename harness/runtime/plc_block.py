"""What the soft PLC computes in a scan: readings in, state of the block and writes out.

No clock, no socket: everything that the soft PLC decides is decided here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from harness.controllers.block import AUTOMATIC, MANUAL, block_scan
from harness.domain.points import (
    COUNTER_16,
    PERCENT,
    TICK_POINT,
    gain_point,
    heartbeat_point,
    integral_time_point,
    manual_output_point,
    mode_point,
    read_back_point,
    setpoint_point,
)
from harness.domain.rig import Action
from harness.domain.signals import PointKind, Quality
from harness.errors import UsageError
from harness.links.client import Reading

if TYPE_CHECKING:
    from collections.abc import Collection, Mapping, Sequence

    from harness.domain.rig import Loop
    from harness.domain.signals import Point, Range

_HEARTBEATS = int(COUNTER_16.upper) + 1


@dataclass(frozen=True, slots=True, kw_only=True)
class SoftPlcFaults:
    """Mistakes made on purpose, to see whether the checker finds them.

    Parameters
    ----------
    gain_factor : float
        The gain used is the ordered one times this [-].
    integral_time_factor : float
        The integral time used is the ordered one times this [-].
    reversed_action : bool
        Whether the block acts the wrong way round.
    output_bias : float
        Added to the output on its way out [-].
    freeze_after : float or None
        Time from the first scan after which the output stands still, with the link and the
        heartbeat alive [plant s].
    silent_after : float or None
        Time from the first scan after which nothing is said any more [plant s].
    """

    gain_factor: float = 1.0
    integral_time_factor: float = 1.0
    reversed_action: bool = False
    output_bias: float = 0.0
    freeze_after: float | None = None
    silent_after: float | None = None


NO_FAULTS = SoftPlcFaults()


@dataclass(frozen=True, slots=True, kw_only=True)
class PlcProgram:
    """One loop as it is programmed into the soft PLC.

    Parameters
    ----------
    loop : Loop
        The loop.
    measured : Range
        Range of its process variable as the link shows it.
    scan : float
        Scan period [plant s].
    faults : SoftPlcFaults
        Mistakes made on purpose.
    echoes : tuple of str
        Points of the link whose read-backs it writes: the transmitters as it reads them, its
        setpoint and mode as they are in effect.
    """

    loop: Loop
    measured: Range
    scan: float
    faults: SoftPlcFaults = NO_FAULTS
    echoes: tuple[str, ...] = ()

    @property
    def reads(self) -> tuple[str, ...]:
        """Return the names of the points that a scan reads."""
        tag = self.loop.tag
        own = (
            self.loop.process_variable,
            setpoint_point(tag),
            mode_point(tag),
            manual_output_point(tag),
            gain_point(tag),
            integral_time_point(tag),
            self.loop.output,
            TICK_POINT,
        )
        return own + tuple(name for name in self.echoes if name not in own)


@dataclass(frozen=True, slots=True, kw_only=True)
class Orders:
    """What the controller was last told.

    Parameters
    ----------
    setpoint : float
        Setpoint [fraction of PV span].
    mode : int
        MANUAL or AUTOMATIC [-].
    manual_output : float
        Output in manual [-].
    gain : float
        Kc [-].
    integral_time : float
        Ti; infinite for none [s].
    """

    setpoint: float
    mode: int
    manual_output: float
    gain: float
    integral_time: float


@dataclass(frozen=True, slots=True, kw_only=True)
class BlockState:
    """What the soft PLC remembers from scan to scan.

    Parameters
    ----------
    output : float
        Last output [-].
    integral : float
        Integral part [-].
    held : int
        1 when the coming scan has to continue from ``output``, whatever the error [-].
    orders : Orders or None
        Last good orders; None before the first.
    scans : int
        Scans executed [-].
    tick : float
        Tick of the values last read; -1 before the first [ticks].
    """

    output: float
    integral: float = 0.0
    held: int = 1
    orders: Orders | None = None
    scans: int = 0
    tick: float = -1.0


def program_of(
    loop: Loop,
    points: Sequence[Point],
    scan: float | None = None,
    faults: SoftPlcFaults = NO_FAULTS,
    shown: Collection[str] = (),
) -> PlcProgram:
    """Return the program for a loop.

    Parameters
    ----------
    loop : Loop
        The loop.
    points : sequence of Point
        The points of the rig.
    scan : float or None
        Scan period; None takes the loop's [plant s].
    faults : SoftPlcFaults
        Mistakes made on purpose.
    shown : collection of str
        Names of the points that its link has; it writes the read-backs among them.

    Returns
    -------
    PlcProgram
        The program.

    Raises
    ------
    UsageError
        When the scan is not positive, or the process variable is not among the points.
    """
    period = loop.scan if scan is None else scan
    if not period > 0.0:
        raise UsageError(f"soft PLC {loop.tag}: scan {period} s; it must be positive")
    for point in points:
        if point.name == loop.process_variable:
            return PlcProgram(
                loop=loop,
                measured=point.range,
                scan=period,
                faults=faults,
                echoes=_echoes(loop, points, shown),
            )
    raise UsageError(
        f"soft PLC {loop.tag}: {loop.process_variable} is not among the points of the rig"
    )


def _echoes(loop: Loop, points: Sequence[Point], shown: Collection[str]) -> tuple[str, ...]:
    """Return the points that this loop's program can read back over its link."""
    tag = loop.tag
    return tuple(
        point.name
        for point in points
        if read_back_point(point.name) in shown
        and (
            point.name in (setpoint_point(tag), mode_point(tag))
            or (point.kind is PointKind.MEASUREMENT and point.name in shown)
        )
    )


def take_over(program: PlcProgram, readings: Mapping[str, Reading]) -> BlockState | None:
    """Return the state that continues from the valve command that stands now.

    Parameters
    ----------
    program : PlcProgram
        The program.
    readings : mapping of str to Reading
        What was read.

    Returns
    -------
    BlockState or None
        None while the command or the orders cannot be read: then there is nothing to do yet.
    """
    command = readings[program.loop.output].value
    orders = _orders(program, readings)
    if math.isnan(command) or orders is None:
        return None
    output = PERCENT.to_fraction(command)
    return BlockState(output=output, orders=orders, tick=readings[TICK_POINT].value)


def hold(state: BlockState) -> BlockState:
    """Return the state after scans were missed: the next one continues from the output.

    Parameters
    ----------
    state : BlockState
        State before.
    """
    return replace(state, held=1)


def scan_once(
    program: PlcProgram,
    state: BlockState,
    readings: Mapping[str, Reading],
    periods: int = 1,
) -> BlockState:
    """Execute one scan.

    Settings that change in automatic do not bump the output: the integral part takes up the
    difference. It integrates over the time since the last scan, also where one was left out.

    Parameters
    ----------
    program : PlcProgram
        The program.
    state : BlockState
        State after the last scan.
    readings : mapping of str to Reading
        What was read, by point.
    periods : int
        Scan periods since the last scan [-].

    Returns
    -------
    BlockState
        New state.
    """
    orders = _orders(program, readings) or state.orders
    measured = readings[program.loop.process_variable]
    value = program.measured.to_fraction(measured.value)
    bad = measured.quality is Quality.BAD or math.isnan(value)
    tick = readings[TICK_POINT].value
    if math.isnan(tick):  # a rig that has just opened its link shows nothing yet
        tick = state.tick
    frozen = _after(program, state, program.faults.freeze_after)
    if orders is None or frozen:
        return replace(state, scans=state.scans + 1, tick=tick)
    sign = _sign(program)
    integral = state.integral
    if state.orders is not None and orders.mode == AUTOMATIC and not bad:
        error = sign * (orders.setpoint - value)
        integral += (state.orders.gain - orders.gain) * error
    output, integral, held = block_scan(
        value,
        orders.setpoint,
        bad,
        orders.mode,
        orders.manual_output,
        orders.gain,
        orders.integral_time,
        sign,
        program.loop.output_low,
        program.loop.output_high,
        periods * program.scan,
        integral,
        state.output,
        state.held,
    )
    return BlockState(
        output=output,
        integral=integral,
        held=held,
        orders=orders,
        scans=state.scans + 1,
        tick=tick,
    )


def warm_up(program: PlcProgram) -> None:
    """Execute a scan for nothing, so that the block is compiled before the first real one.

    Parameters
    ----------
    program : PlcProgram
        The program.
    """
    good = Reading(value=0.0, quality=Quality.GOOD)
    readings = dict.fromkeys(program.reads, good)
    scan_once(program, BlockState(output=0.0), readings)


def writes_of(
    program: PlcProgram, state: BlockState, readings: Mapping[str, Reading]
) -> dict[str, float]:
    """Return what a scan writes, in the points' units.

    Parameters
    ----------
    program : PlcProgram
        The program.
    state : BlockState
        State after the scan.
    readings : mapping of str to Reading
        What the scan has read, by point.

    Returns
    -------
    dict of str to float
        Valve command, heartbeat and read-backs by point, each in its point's unit.
    """
    biased = min(max(state.output + program.faults.output_bias, 0.0), 1.0)
    writes = {
        program.loop.output: PERCENT.from_fraction(biased),
        heartbeat_point(program.loop.tag): float(state.scans % _HEARTBEATS),
    }
    has = {
        name: math.nan if readings[name].quality is Quality.BAD else readings[name].value
        for name in program.echoes
    }
    if state.orders is not None:
        has |= {
            setpoint_point(program.loop.tag): program.measured.from_fraction(
                state.orders.setpoint
            ),
            mode_point(program.loop.tag): float(state.orders.mode),
        }
    return writes | {
        read_back_point(name): has[name]
        for name in program.echoes
        if math.isfinite(has[name])  # no number stands for a broken wire
    }


def is_silent(program: PlcProgram, state: BlockState) -> bool:
    """Return whether the program keeps silent from now on, on purpose.

    Parameters
    ----------
    program : PlcProgram
        The program.
    state : BlockState
        State after the last scan.
    """
    return _after(program, state, program.faults.silent_after)


def _orders(program: PlcProgram, readings: Mapping[str, Reading]) -> Orders | None:
    """Return the orders as the block takes them; None unless all of them can be read."""
    tag = program.loop.tag
    faults = program.faults
    names = (setpoint_point, mode_point, manual_output_point, gain_point, integral_time_point)
    read = [readings[name(tag)] for name in names]
    if any(each.quality is Quality.BAD or math.isnan(each.value) for each in read):
        return None
    setpoint, mode, manual_output, gain, integral_time = (each.value for each in read)
    return Orders(
        setpoint=program.measured.to_fraction(setpoint),
        mode=AUTOMATIC if mode >= 0.5 else MANUAL,  # noqa: PLR2004  a switch: nearer to 1 than to 0
        manual_output=PERCENT.to_fraction(manual_output),
        gain=gain * faults.gain_factor,
        integral_time=integral_time * faults.integral_time_factor
        if integral_time
        else math.inf,
    )


def _sign(program: PlcProgram) -> float:
    reverse = program.loop.action is Action.REVERSE
    return 1.0 if reverse is not program.faults.reversed_action else -1.0


def _after(program: PlcProgram, state: BlockState, limit: float | None) -> bool:
    return limit is not None and state.scans * program.scan >= limit
