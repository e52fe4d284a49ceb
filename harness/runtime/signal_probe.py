"""Holds instruments still and listens to what the controller says of them, tick by tick.

What a controller says belongs to the image that it read last; the probe therefore keeps the
images of the last ticks, and compares what was said with the registers of that very image.
"""

from __future__ import annotations

import math
import time
from collections import deque
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from harness.analysis.bench_quality import BenchQuality, bench_quality
from harness.analysis.signal_case import Said, TransmitterCase
from harness.domain.points import heartbeat_point, read_back_point
from harness.domain.rig import Encoding, ModbusServerLink
from harness.domain.signals import PointKind
from harness.links.codecs import register_count
from harness.links.port import Snapshot
from harness.links.registers import RegisterBank
from harness.runtime.clock import NS_PER_S
from harness.runtime.requests import Advance

if TYPE_CHECKING:
    from collections.abc import Generator

    from harness.domain.rig import Loop, RegisterItem
    from harness.domain.signals import Point
    from harness.runtime.requests import Request
    from harness.runtime.session import Session

    Wait = Generator[Request, Any, None]

_IMAGES_KEPT = (
    2000  # of the last ticks: the slowest controller reads more often than that [ticks]
)
_SCANS_KEPT = 400  # of the controller, for its period and delay [-]
LEAST_PATIENCE = 0.5  # a busy machine holds up a controller for a tenth of that [wall s]
_WALL_SHARE = 0.9  # of a span, for ticks that are not quite regular [-]
_REFUSALS_KEPT = 20  # different texts [-]


@dataclass(slots=True)
class _Image:
    values: dict[str, float]
    snapshot: Snapshot


@dataclass(slots=True)
class Span:
    """A span of plant time that is over no sooner than it should be on the wall.

    A session that was held up catches up with its ticks; its controller cannot.

    Parameters
    ----------
    session : Session
        The session.
    ticks : int
        Length [ticks].
    least : float
        Least length, whatever the pace [wall s].
    """

    session: Session
    ticks: int
    least: float = 0.0
    _first: int = field(init=False)
    _start_ns: int = field(init=False)

    def __post_init__(self) -> None:
        self._first = self.session.tick
        self._start_ns = time.perf_counter_ns()

    @property
    def over(self) -> bool:
        """Return whether it is over."""
        if self.session.tick - self._first < self.ticks:
            return False
        wall = self.ticks * self.session.rig.tick / max(self.session.pace, 1e-9)
        wall = max(_WALL_SHARE * wall, self.least)
        return (time.perf_counter_ns() - self._start_ns) / NS_PER_S >= wall


@dataclass(slots=True)
class SignalProbe:
    """Forces, waits and listens, for one loop's controller.

    Parameters
    ----------
    session : Session
        Who carries it out.
    loop : Loop
        The loop whose controller is asked.
    refused : deque of str
        What the rig has refused since this was last emptied, each text once.
    heartbeats : set of float
        Every count of the heartbeat that was seen [-].
    """

    session: Session
    loop: Loop
    refused: deque[str] = field(default_factory=lambda: deque(maxlen=_REFUSALS_KEPT))
    heartbeats: set[float] = field(default_factory=set)
    _images: dict[int, _Image] = field(default_factory=dict)
    _read: deque[int] = field(default_factory=lambda: deque(maxlen=_SCANS_KEPT))
    _acted: deque[int] = field(default_factory=lambda: deque(maxlen=_SCANS_KEPT))
    _refusals: int = 0
    _banks: dict[str, RegisterBank] = field(default_factory=dict)
    _forced: set[str] = field(default_factory=set)

    # Time.

    def step(self) -> Wait:
        """Let one tick pass, and remember what it showed."""
        session = self.session
        self._remember()
        before = session.watches[self.loop.tag].read_tick
        yield Advance(ticks=1)
        now = session.watches[self.loop.tag].read_tick
        if now > before:
            self._read.append(now)
            self._acted.append(session.tick - 1)
        if session.refusals != self._refusals:
            self._refusals = session.refusals
            if session.last_refusal not in self.refused:
                self.refused.append(session.last_refusal)
        beat = session.image().get(heartbeat_point(self.loop.tag))
        if beat is not None and heartbeat_point(self.loop.tag) in session.last_writer:
            self.heartbeats.add(beat[1])

    def wait(self, ticks: int) -> Wait:
        """Let ticks pass.

        Parameters
        ----------
        ticks : int
            How many [ticks].
        """
        span = self.span(ticks)
        while not span.over:
            yield from self.step()

    def span(self, ticks: int, least: float = 0.0) -> Span:
        """Return a span of time that begins now.

        Parameters
        ----------
        ticks : int
            Its length [ticks].
        least : float
            Least length, whatever the pace [wall s].
        """
        return Span(session=self.session, ticks=ticks, least=least)

    def until_read(self, tick: int, patience: int) -> Generator[Request, Any, bool]:
        """Wait until the controller has acted on an image, or the patience is out.

        Parameters
        ----------
        tick : int
            Tick of the image [ticks].
        patience : int
            Longest wait [ticks].

        Returns
        -------
        bool
            Whether it has.
        """
        span = self.span(patience, least=LEAST_PATIENCE)
        while self.read_tick < tick and not span.over:
            yield from self.step()
        return self.read_tick >= tick

    @property
    def read_tick(self) -> int:
        """Return the newest image of which anything that the controller wrote is made [ticks]."""
        known = [self.session.watches[self.loop.tag].read_tick]
        known += [back.image_tick for back in self.session.read_backs.values()]
        return max(known)

    @property
    def scan(self) -> int:
        """Return the controller's period, as measured or else as the rig says [ticks]."""
        period = self.quality.period
        seconds = self.loop.scan if math.isnan(period) else period
        return max(1, round(seconds / self.session.rig.tick))

    @property
    def quality(self) -> BenchQuality:
        """Return how the controller scans."""
        return bench_quality(list(self._read), list(self._acted), self.session.rig.tick)

    # Instruments.

    def force(self, tag: str, current_ma: float) -> int:
        """Force a transmitter's current; return the first tick that shows it.

        Parameters
        ----------
        tag : str
            Tag of the transmitter.
        current_ma : float
            Current [mA].

        Returns
        -------
        int
            The tick [ticks].
        """
        self.session.engine.force_current(tag, current_ma)
        self._forced.add(tag)
        return self.session.tick + 1

    def let_go(self) -> None:
        """Let every forced transmitter go."""
        for tag in self._forced:
            self.session.engine.force_current(tag, 0.0)
        self._forced.clear()

    # What the controller says.

    def heard_of(self, name: str) -> bool:
        """Return whether the controller has ever read a point back.

        Parameters
        ----------
        name : str
            Name of the point, e.g. ``"LT-102"``.
        """
        return read_back_point(name) in self.session.read_backs

    def said(self, name: str, since: int, current_ma: float) -> Said:
        """Return what the controller says of a point.

        Parameters
        ----------
        name : str
            Name of the point.
        since : int
            First tick that showed what was forced; what was said of earlier images is not
            counted [ticks].
        current_ma : float
            Current forced, or the one that an order stands for [mA].

        Returns
        -------
        Said
            With the registers of the image that it belongs to.
        """
        back = self.session.read_backs.get(read_back_point(name))
        fresh = back is not None and back.image_tick >= since
        tick = back.image_tick if back is not None and fresh else self.session.tick
        image = self._images.get(tick) or self._remember()
        others = {
            point.name: image.values[point.name]
            for point in self.session.points
            if point.kind is PointKind.MEASUREMENT and point.name != name
        }
        return Said(
            current_ma=current_ma,
            said=back.value if back is not None and fresh else None,
            registers=self._registers(image.snapshot),
            others=others,
            age=(self.session.tick - tick) * self.session.rig.tick,
        )

    def case(self, name: str, points: list[Said]) -> TransmitterCase:
        """Return the case of a point for the diagnosis.

        Parameters
        ----------
        name : str
            Name of the point.
        points : list of Said
            Test points.
        """
        by_name = {point.name: point for point in self.session.points}
        items = self._items()
        return TransmitterCase(
            point=by_name[name],
            items=tuple(i for i in items if i.point == name and i.encoding is not Encoding.BIT),
            neighbours=tuple((by_name[i.point], i) for i in items if i.point != name),
            points=tuple(points),
        )

    def point(self, name: str) -> Point:
        """Return a point by its name."""
        return next(point for point in self.session.points if point.name == name)

    def _items(self) -> tuple[RegisterItem, ...]:
        link = self._link()
        return () if link is None else link.items

    def _link(self) -> ModbusServerLink | None:
        """Return the Modbus link that the controller uses; None over OPC UA."""
        contact = self.session.last_writer.get(self.loop.output)
        for link in self.session.rig.links:
            if contact is not None and link.name == contact.link:
                return link if isinstance(link, ModbusServerLink) else None
        return None

    def _registers(self, snapshot: Snapshot) -> dict[int, int]:
        """Return the registers as they stood in an image."""
        link = self._link()
        if link is None:
            return {}
        bank = self._banks.get(link.name)
        if bank is None:
            bank = self._banks[link.name] = RegisterBank(self.session.points, link.items)
        bank.load(snapshot)
        registers: dict[int, int] = {}
        for item in link.items:
            if item.encoding is Encoding.BIT:
                continue
            count = register_count(item.encoding)
            data = bank.read_registers(item.address, count)
            for offset in range(count):
                word = data[2 * offset : 2 * offset + 2]
                registers[item.address + offset] = int.from_bytes(word, "big")
        return registers

    def _remember(self) -> _Image:
        """Keep the image of the present tick."""
        tick = self.session.tick
        if tick in self._images:
            return self._images[tick]
        shown = self.session.image()
        image = _Image(
            values={name: value for name, (_, value, _, _) in shown.items()},
            snapshot=Snapshot(
                tick=tick,
                values=np.array([entry[1] for entry in shown.values()]),
                currents=np.array([entry[2] for entry in shown.values()]),
                qualities=np.array([entry[3] for entry in shown.values()]),
            ),
        )
        self._images[tick] = image
        if len(self._images) > _IMAGES_KEPT:
            del self._images[next(iter(self._images))]
        return image
