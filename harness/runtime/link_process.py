"""The link process, seen from the tick's process: start, publish, drain, stop."""

from __future__ import annotations

import multiprocessing
import time
from contextlib import suppress
from typing import TYPE_CHECKING

from harness.domain.rig import OpcUaServerLink
from harness.errors import InvalidRunError, LinkError
from harness.recording.children import interrupts_blocked
from harness.runtime.image import ImageWriter
from harness.runtime.link_child import WAKE, LinkSetup, LinksFailed, LinksOpen, run_links
from harness.runtime.news import NO_NEWS, LinkNews

if TYPE_CHECKING:
    from collections.abc import Sequence
    from multiprocessing.connection import Connection
    from multiprocessing.context import SpawnProcess
    from types import TracebackType

    import numpy as np
    from numpy.typing import NDArray

    from harness.domain.rig import ModbusServerLink
    from harness.domain.signals import Point

_START_TIMEOUT_S = 30.0  # an OPC UA server takes 1.4 s to start, more on a busy machine [s]
_STOP_TIMEOUT_S = 5.0  # links close within a second; then the process is ended by force [s]
_CHECK_NS = 250_000_000  # between two looks at whether the process is alive [ns]


class LinkProcess:
    """All links of a rig in a process of their own, started with ``spawn``.

    Neither `publish` nor `drain` ever waits for the other process.

    Parameters
    ----------
    links : sequence of ModbusServerLink or OpcUaServerLink
        The links.
    points : sequence of Point
        The points of the rig, in the order of the image.
    rig_name : str
        Name of the rig, shown to OPC UA clients.
    """

    def __init__(
        self,
        links: Sequence[ModbusServerLink | OpcUaServerLink],
        points: Sequence[Point],
        rig_name: str,
    ) -> None:
        self._links = tuple(links)
        self._points = tuple(points)
        self._rig_name = rig_name
        self._image: ImageWriter | None = None
        self._process: SpawnProcess | None = None
        self._up: Connection | None = None
        self._down: Connection | None = None
        self._must_call = any(isinstance(link, OpcUaServerLink) for link in self._links)
        self._calls = 0
        self._received = 0
        self._checked_ns = 0
        self._left: list[LinkNews] = []
        self._failure: str | None = None
        self._addresses: dict[str, tuple[str, int]] = {}

    @property
    def addresses(self) -> dict[str, tuple[str, int]]:
        """Return host and port of each open link by name; port 0 has become a real one."""
        return dict(self._addresses)

    @property
    def process_id(self) -> int | None:
        """Return the id of the process; None when there is none."""
        return None if self._process is None else self._process.pid

    def start(self, timeout: float = _START_TIMEOUT_S) -> None:
        """Start the process and wait until every link is open.

        Parameters
        ----------
        timeout : float
            Longest wait [s].

        Raises
        ------
        LinkError
            When a link cannot be opened; everything is closed again.
        """
        context = multiprocessing.get_context("spawn")
        self._image = ImageWriter(len(self._points))
        self._up, child_up = context.Pipe(duplex=False)
        child_down, self._down = context.Pipe(duplex=False)
        setup = LinkSetup(
            links=self._links,
            points=self._points,
            rig_name=self._rig_name,
            image=self._image.name,
        )
        self._process = context.Process(
            target=run_links, args=(setup, child_up, child_down), name="links", daemon=True
        )
        try:
            with interrupts_blocked():
                self._process.start()
            # Only when the child alone holds its ends does either side see the other go.
            child_up.close()
            child_down.close()
            self._addresses = self._first_word(self._up, timeout)
        except BaseException:
            self.stop()
            raise
        self._checked_ns = time.perf_counter_ns()

    def publish(
        self,
        tick: int,
        values: NDArray[np.float64],
        currents: NDArray[np.float64],
        qualities: NDArray[np.float64],
    ) -> None:
        """Make an image the latest; see `ImageWriter.publish`.

        Parameters
        ----------
        tick : int
            Its tick [ticks].
        values : ndarray, shape (n_points,)
            Values in each point's unit.
        currents : ndarray, shape (n_points,)
            Loop currents; NaN where there is none [mA].
        qualities : ndarray, shape (n_points,)
            ``Quality`` numbers [-].
        """
        if self._image is None or self._down is None:
            return
        self._image.publish(tick, values, currents, qualities)
        # One call at a time: while one lies in the pipe, the pipe cannot fill up, and whoever
        # takes it finds the latest image.
        if self._must_call and self._image.awake() == self._calls:
            self._calls += 1
            with suppress(OSError):  # the process is gone; drain says so
                self._down.send_bytes(WAKE)

    def drain(self) -> LinkNews:
        """Return all that has happened since the last call, without waiting.

        Also after `stop`, for what came in until then.

        Returns
        -------
        LinkNews
            Writes, activity and events, each in order of arrival.

        Raises
        ------
        InvalidRunError
            When the process has ended by itself, once all it sent has been returned.
        """
        if self._image is not None and self._up is not None:
            announced = self._image.news()
            if announced != self._received:
                self._receive(self._up, announced)
        if self._left:
            return self._merged()
        now_ns = time.perf_counter_ns()
        if now_ns - self._checked_ns > _CHECK_NS and self._process is not None:
            if not self._process.is_alive():
                raise InvalidRunError(self._cause())
            self._checked_ns = now_ns
        return NO_NEWS

    def stop(self) -> None:
        """Close the links and end the process; a second call does nothing."""
        process, self._process = self._process, None
        if process is not None and process.pid is not None:
            self._end(process)
        for connection in (self._up, self._down):
            if connection is not None:
                connection.close()
        self._up = self._down = None
        if self._image is not None:
            self._image.close()
            self._image = None
        self._addresses = {}

    def __enter__(self) -> LinkProcess:
        self.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.stop()

    def _first_word(self, up: Connection, timeout: float) -> dict[str, tuple[str, int]]:
        names = ", ".join(link.name for link in self._links)
        if not up.poll(timeout):
            raise LinkError(
                f"links {names}: not open within {timeout:g} s; is the machine very busy? "
                "Close what else runs on it, or serve fewer links"
            )
        try:
            message = up.recv()
        except EOFError:
            message = None
        match message:
            case LinksOpen():
                return message.addresses
            case LinksFailed():
                raise LinkError(message.text)
            case _:
                raise LinkError(f"links {names}: the link process ended before they were open")

    def _receive(self, up: Connection, announced: int) -> None:
        """Take the messages that were announced; they are there, so that this does not wait."""
        with suppress(EOFError, OSError):  # cut off in the middle: the process is gone
            while self._received != announced:
                self._take(up.recv())
                self._received += 1

    def _take_late(self, up: Connection) -> bool:
        """Take a message of a process that is ending; return whether there was one."""
        try:
            if not up.poll(0):
                return False
            self._take(up.recv())
        except (EOFError, OSError):
            return False
        return True

    def _take(self, message: object) -> None:
        match message:
            case LinkNews():
                self._left.append(message)
            case LinksFailed():
                self._failure = message.text
            case _:
                raise LinkError(
                    f"links: {message!r} came up the pipe, which nothing here sends"
                )

    def _merged(self) -> LinkNews:
        parts, self._left = self._left, []
        if len(parts) == 1:
            return parts[0]
        return LinkNews(
            writes=[request for part in parts for request in part.writes],
            activity=[each for part in parts for each in part.activity],
            events=[event for part in parts for event in part.events],
            readers={name: who for part in parts for name, who in part.readers.items()},
        )

    def _cause(self) -> str:
        """Say why the process is gone, from its last message if there is one."""
        while self._failure is None and self._up is not None and self._take_late(self._up):
            pass
        code = None if self._process is None else self._process.exitcode
        return self._failure or (
            f"link process: ended by itself with code {code}; no controller can reach the rig. "
            "Start the run again"
        )

    def _end(self, process: SpawnProcess) -> None:
        if self._down is not None:
            with suppress(OSError):  # it may have gone already
                self._down.send_bytes(b"stop")
        deadline_ns = time.perf_counter_ns() + int(_STOP_TIMEOUT_S * 1e9)
        while process.is_alive() and time.perf_counter_ns() < deadline_ns:
            if self._up is None or not self._take_late(self._up):
                process.join(0.01)
        while self._up is not None and self._take_late(self._up):
            pass
        if process.is_alive():
            process.kill()
        process.join()
        process.close()
