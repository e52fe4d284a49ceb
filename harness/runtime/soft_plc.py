"""The soft PLC: a scan cycle over a link, like that of any PLC in its place.

Read the inputs, execute the block, write the outputs, wait for the next scan. While the link is
lost it holds its output; when it is back it continues from there, unless the rig began anew.
"""

from __future__ import annotations

import asyncio
import sys
from typing import TYPE_CHECKING, Protocol

from harness.domain.points import TICK_POINT
from harness.domain.signals import Quality
from harness.errors import LinkError, PeerError
from harness.runtime.clock import NS_PER_S, TickSchedule
from harness.runtime.plc_block import (
    BlockState,
    PlcProgram,
    hold,
    is_silent,
    scan_once,
    take_over,
    writes_of,
)

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

    from harness.errors import DryrigError
    from harness.links.client import FieldClient, Reading
    from harness.runtime.clock import Clock

_RETRY_S = 0.5  # between two attempts to connect [s]
# The event loop's timers are late by 1-2 ms, on Windows by up to its timer grain of 15.6 ms;
# the last part of a wait is therefore left to the clock.
_COARSE_S = 0.020 if sys.platform == "win32" else 0.003


class Doze(Protocol):
    """Lets other tasks of the event loop run for a while, or until a stop is asked for."""

    async def __call__(self, seconds: float, stop: asyncio.Event) -> None:
        """Return after about that time, or at once when the event is set."""
        ...


async def doze(seconds: float, stop: asyncio.Event) -> None:
    """Wait on the event loop's own timer; see `Doze`.

    Parameters
    ----------
    seconds : float
        Longest wait [s].
    stop : asyncio.Event
        Ends the wait.
    """
    try:
        async with asyncio.timeout(seconds):
            await stop.wait()
    except TimeoutError:
        return


class SoftPlc:
    """One loop closed over a link.

    Parameters
    ----------
    client : FieldClient
        Its end of the link.
    program : PlcProgram
        What it does in a scan.
    clock : Clock
        Its clock.
    pace : float
        Plant seconds per second of the clock [-].
    on_event : callable
        Takes one line for people at each change: connected, first scan, lost, back, stopped.
    doze : Doze
        How it waits when there is nothing to be exact about.
    """

    def __init__(
        self,
        client: FieldClient,
        program: PlcProgram,
        clock: Clock,
        pace: float,
        on_event: Callable[[str], None],
        doze: Doze = doze,
    ) -> None:
        self._client = client
        self._program = program
        self._clock = clock
        self._pace = pace
        self._on_event = on_event
        self._doze = doze
        self._state: BlockState | None = None
        self._trouble: str | None = None
        self._missed = 0

    @property
    def state(self) -> BlockState | None:
        """Return the state of the block; None before it has taken over."""
        return self._state

    async def run(self, stop: asyncio.Event) -> None:
        """Scan until the event is set, then close the link.

        Parameters
        ----------
        stop : asyncio.Event
            Asks it to stop.
        """
        try:
            await self._connect(stop)
            await self._cycle(stop)
        finally:
            await self._client.close()
        scans = 0 if self._state is None else self._state.scans
        self._say(f"stopped after {scans} scans, {self._missed} missed")

    async def _connect(self, stop: asyncio.Event) -> None:
        while not stop.is_set():
            try:
                await self._client.connect()
            except (LinkError, PeerError) as error:
                self._in_trouble("waiting for the rig", error)
                await self._doze(_RETRY_S, stop)
            else:
                self._trouble = None
                self._say("connected")
                return

    async def _cycle(self, stop: asyncio.Event) -> None:
        schedule = TickSchedule(
            start_ns=self._clock.now_ns(), period=self._program.scan, pace=self._pace
        )
        scan = 0
        periods = 1
        while not stop.is_set():
            await self._scan(periods)
            due = schedule.tick_at(self._clock.now_ns()) + 1
            periods = due - scan
            self._missed += periods - 1  # a scan that came too late is left out, as in a PLC
            scan = due
            await self._wait_until(schedule.deadline_ns(scan), stop)

    async def _wait_until(self, deadline_ns: int, stop: asyncio.Event) -> None:
        left_s = (deadline_ns - self._clock.now_ns()) / NS_PER_S
        await self._doze(max(left_s - _COARSE_S, 0.0), stop)
        if not stop.is_set():
            self._clock.wait_until(deadline_ns)

    async def _scan(self, periods: int) -> None:
        if self._state is not None and is_silent(self._program, self._state):
            return
        try:
            readings = await self._client.read(self._program.reads)
            writes = self._execute(readings, periods)
            if writes:
                await self._client.write(writes)
        except LinkError as error:
            if self._state is not None:
                self._state = hold(self._state)
            self._in_trouble("link lost, output held", error)
        except PeerError as error:
            self._in_trouble("refused by the rig", error)
        else:
            if self._trouble is not None:
                self._trouble = None
                self._say("link back")

    def _execute(self, readings: Mapping[str, Reading], periods: int) -> Mapping[str, float]:
        """Do what lies between reading and writing."""
        if self._state is None or readings[TICK_POINT].value < self._state.tick:
            self._take_over(readings)
        if self._state is None:
            return {}
        self._state = scan_once(self._program, self._state, readings, periods)
        return writes_of(self._program, self._state, readings)

    def _take_over(self, readings: Mapping[str, Reading]) -> None:
        began_anew = self._state is not None
        self._state = take_over(self._program, readings)
        if self._state is None:
            return
        loop = self._program.loop
        measured = readings[loop.process_variable]
        shown = (
            "bad"
            if measured.quality is Quality.BAD
            else f"{measured.value:.4g} {self._program.measured.unit}"
        )
        self._say(
            f"{'the rig began anew, ' if began_anew else ''}first scan at tick "
            f"{readings[TICK_POINT].value:.0f}: {loop.process_variable} {shown}, takes over "
            f"{loop.output} at {100 * self._state.output:.1f} %"
        )

    def _in_trouble(self, what: str, error: DryrigError) -> None:
        """Say what is wrong once, not at every scan."""
        if what != self._trouble:
            self._trouble = what
            self._say(f"{what}: {error}")

    def _say(self, text: str) -> None:
        self._on_event(f"soft PLC {self._program.loop.tag}: {text}")


async def run_soft_plc(
    client: FieldClient,
    program: PlcProgram,
    stop: asyncio.Event,
    *,
    clock: Clock,
    pace: float,
    on_event: Callable[[str], None],
) -> None:
    """Close one loop over a link until asked to stop.

    Parameters
    ----------
    client : FieldClient
        The controller's end of the link.
    program : PlcProgram
        What it does in a scan.
    stop : asyncio.Event
        Asks it to stop.
    clock : Clock
        Its clock.
    pace : float
        Plant seconds per second of the clock [-].
    on_event : callable
        Takes one line for people at each change.
    """
    await SoftPlc(client, program, clock, pace, on_event).run(stop)
