"""Keeps an eye on the controller at the other end: found, silent, back, and what it knows."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from harness.domain.rig import Loop
    from harness.domain.signals import Exchange
    from harness.runtime.news import LinkActivity

_NS_PER_S = 1e9


@dataclass(slots=True)
class ControllerWatch:
    """The controller of one loop, as its link shows it.

    The controller is the connection that last wrote the loop's output; until one has, nobody
    is. Any valid request on that connection counts as a sign of life, a read as well as a write.
    Where it only writes, so do requests on other connections of its host: some controllers keep
    one for each. Time in which the rig itself stood still is not held against the controller.
    Where the rig gives the heartbeat a time limit, that counts from the first write of the output.

    Parameters
    ----------
    loop : Loop
        The loop, for its watchdog.
    pace : float
        Plant seconds per wall second [-].
    """

    loop: Loop
    pace: float
    _connection: tuple[str, int] | None = field(default=None, init=False)
    _peer: str = field(default="", init=False)
    _last_ns: int = field(default=0, init=False)
    _read_tick: int = field(default=-1, init=False)
    _heartbeat_ns: int | None = field(default=None, init=False)
    _heartbeat: float | None = field(default=None, init=False)
    _silent: bool = field(default=False, init=False)
    _only_writes: bool = field(default=False, init=False)
    _known: set[tuple[str, int]] = field(default_factory=set, init=False)

    @property
    def found(self) -> bool:
        """Return whether a controller has ever written the loop's output."""
        return self._connection is not None

    @property
    def silent(self) -> bool:
        """Return whether the controller counts as lost."""
        return self._silent

    @property
    def peer(self) -> str:
        """Return who the controller is, as text."""
        if self._connection is None:
            return ""
        return f"{self._peer} on {self._connection[0]}"

    @property
    def read_tick(self) -> int:
        """Return the newest image that a scan with effect has worked on; -1 before [ticks]."""
        return self._read_tick

    def output_written(self, exchange: Exchange) -> bool:
        """Take a write of the loop's output; its connection is the controller's from now on.

        Parameters
        ----------
        exchange : Exchange
            The write.

        Returns
        -------
        bool
            Whether this connection writes the output for the first time: two that write it in
            turns are each told once.
        """
        connection = (exchange.link, exchange.connection)
        new = connection not in self._known
        self._known.add(connection)
        self._connection = connection
        if new:
            self._only_writes = True  # until its first read is told of
        self._peer = exchange.peer
        self._last_ns = max(self._last_ns, exchange.arrival_ns)
        self._read_tick = max(self._read_tick, exchange.image_tick)
        if self._heartbeat_ns is None:
            self._heartbeat_ns = exchange.arrival_ns  # stands still until it beats
        return new

    def heartbeat_written(self, exchange: Exchange) -> None:
        """Take a write of the heartbeat point; only a changed value counts.

        Parameters
        ----------
        exchange : Exchange
            The write.
        """
        if exchange.value != self._heartbeat:
            self._heartbeat = exchange.value
            self._heartbeat_ns = exchange.arrival_ns

    def active(self, activity: LinkActivity) -> None:
        """Take note of valid requests.

        Parameters
        ----------
        activity : LinkActivity
            Of any connection; others than the controller's do not count.
        """
        if (activity.link, activity.connection) == self._connection:
            self._only_writes = activity.image_tick < 0
        elif not (self._only_writes and self._is_beside(activity)):
            return
        self._last_ns = max(self._last_ns, activity.arrival_ns)

    def stood_still(self, time_ns: int) -> None:
        """Take note that the rig itself did not run for a time, and could hear nobody.

        Parameters
        ----------
        time_ns : int
            How long [ns].
        """
        self._last_ns += time_ns
        if self._heartbeat_ns is not None:
            self._heartbeat_ns += time_ns

    def _is_beside(self, activity: LinkActivity) -> bool:
        """Return whether a request came on the controller's link from its host."""
        here = self._connection is not None and activity.link == self._connection[0]
        return here and activity.peer.rpartition(":")[0] == self._peer.rpartition(":")[0]

    def check(self, now_ns: int) -> str | None:
        """Return why the controller counts as lost, from now on; None when nothing changed.

        Parameters
        ----------
        now_ns : int
            Time on the clock of the arrivals [ns].
        """
        if self._connection is None or self._silent:
            return None
        quiet = (now_ns - self._last_ns) / _NS_PER_S * self.pace
        if quiet > self.loop.watchdog:
            self._silent = True
            return (
                f"no valid request from {self.peer} for {quiet:.1f} s of plant time; the watchdog "
                f"of {self.loop.tag} allows {self.loop.watchdog:g} s"
            )
        limit = self.loop.heartbeat_timeout
        if limit is not None and self._heartbeat_ns is not None:
            still = (now_ns - self._heartbeat_ns) / _NS_PER_S * self.pace
            if still > limit:
                self._silent = True
                return (
                    f"the heartbeat of {self.peer} stood still for {still:.1f} s of plant time; "
                    f"{self.loop.tag} allows {limit:g} s"
                )
        return None

    def came_back(self, now_ns: int) -> bool:
        """Return whether a lost controller has shown signs of life, and count it as found.

        Parameters
        ----------
        now_ns : int
            Time on the clock of the arrivals [ns].
        """
        if not self._silent:
            return False
        fresh = (now_ns - self._last_ns) / _NS_PER_S * self.pace < self.loop.watchdog
        limit = self.loop.heartbeat_timeout
        if fresh and limit is not None and self._heartbeat_ns is not None:
            fresh = (now_ns - self._heartbeat_ns) / _NS_PER_S * self.pace < limit
        if fresh:
            self._silent = False
        return fresh
