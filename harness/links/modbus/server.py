"""The Modbus TCP server: sockets around the protocol core, and nothing of the protocol itself."""

from __future__ import annotations

import asyncio
import errno
import socket
from typing import TYPE_CHECKING, cast

from harness.errors import LinkError
from harness.links.modbus.core import FrameError, ServerSession
from harness.links.registers import RegisterBank

if TYPE_CHECKING:
    from collections.abc import Callable

    from harness.domain.rig import ModbusServerLink
    from harness.domain.signals import Point
    from harness.links.port import ExchangeSink, ImageSource

# One turn of the event loop takes this much from one peer, so that a flood on one connection
# holds the others up by about 170 requests at most [bytes].
_TURN = 2048
_SWEEPS = 4  # looks for silent connections within one idle timeout [-]
_KEEPALIVE_IDLE_S = 10  # silence before the first probe [s]
_KEEPALIVE_INTERVAL_S = 5  # between probes [s]
_KEEPALIVE_PROBES = 3  # unanswered before the connection counts as dead [-]
_NANOSECONDS = 1e9  # in a second


class ModbusServer:
    """The rig as a Modbus TCP server.

    Parameters
    ----------
    link : ModbusServerLink
        Where to listen, the unit and the map; port 0 takes a free one.
    points : tuple of Point
        Points of the rig, in the order of the image.
    image : ImageSource
        Where answers come from; each request is answered from one tick's image.
    sink : ExchangeSink
        Told of connections, requests, writes and refusals.
    now_ns : callable
        The run's clock [ns].

    Raises
    ------
    LinkError
        If the map has problems.
    """

    def __init__(
        self,
        link: ModbusServerLink,
        points: tuple[Point, ...],
        image: ImageSource,
        sink: ExchangeSink,
        now_ns: Callable[[], int],
    ) -> None:
        self._link = link
        self._image = image
        self._sink = sink
        self._now_ns = now_ns
        self._bank = RegisterBank(points, link.items)
        self._server: asyncio.Server | None = None
        self._sweep_handle: asyncio.TimerHandle | None = None
        self._connections: set[_Connection] = set()
        self._count = 0
        self._all_gone = asyncio.Event()
        self._all_gone.set()

    @property
    def address(self) -> tuple[str, int]:
        """Return host and port that are listened on; raises LinkError before ``start``."""
        if self._server is None or not self._server.sockets:
            raise LinkError(f'link "{self._link.name}" is not open; start it first')
        host, port = self._server.sockets[0].getsockname()[:2]
        return str(host), int(port)

    async def start(self) -> None:
        """Listen.

        Raises
        ------
        LinkError
            If the address cannot be had, with the place and what to do.
        """
        loop = asyncio.get_running_loop()
        link = self._link
        try:
            self._server = await loop.create_server(self._accept, link.host, link.port)
        except OSError as error:
            raise LinkError(_listen_text(link, error)) from error
        self._sweep()

    async def stop(self) -> None:
        """Close the port and every connection; may be called more than once."""
        if self._sweep_handle is not None:
            self._sweep_handle.cancel()
            self._sweep_handle = None
        server, self._server = self._server, None
        if server is not None:
            server.close()
        for connection in tuple(self._connections):
            connection.abort()
        await self._all_gone.wait()
        if server is not None:
            await server.wait_closed()

    def _accept(self) -> _Connection:
        self._count += 1
        return _Connection(self, self._count)

    def _sweep(self) -> None:
        """Close what has been silent for too long, and come back."""
        oldest = self._now_ns() - self._link.idle_timeout * _NANOSECONDS
        for connection in tuple(self._connections):
            if connection.last_ns < oldest:
                connection.abort()
        self._sweep_handle = asyncio.get_running_loop().call_later(
            self._link.idle_timeout / _SWEEPS, self._sweep
        )

    def admit(self, connection: _Connection, number: int, peer: str) -> ServerSession | None:
        """Return the session of a new connection, or None when there are too many."""
        link = self._link
        if len(self._connections) >= link.max_connections:
            text = f"connection closed: {link.max_connections} are open, which is the limit"
            self._sink.refused(link.name, number, peer, text)
            return None
        self._connections.add(connection)
        self._all_gone.clear()
        self._sink.connection(link.name, number, peer, connected=True)
        return ServerSession(
            bank=self._bank,
            image=self._image,
            sink=self._sink,
            unit=link.unit,
            link=link.name,
            connection=number,
            peer=peer,
            beside=lambda: self._read_from(_host(peer)),
        )

    def _read_from(self, host: str) -> int:
        """Return the newest image that any connection of a host has read; -1 when none."""
        ticks = (each.image_tick for each in self._connections if _host(each.peer) == host)
        return max(ticks, default=-1)

    def leave(self, connection: _Connection, number: int, peer: str) -> None:
        """Forget a connection that is gone."""
        self._connections.discard(connection)
        self._sink.connection(self._link.name, number, peer, connected=False)
        if not self._connections:
            self._all_gone.set()

    def broken(self, number: int, peer: str, error: FrameError) -> None:
        """Tell of a peer that does not speak Modbus."""
        text = f"connection closed: {error}"
        self._sink.refused(self._link.name, number, peer, text)

    def now_ns(self) -> int:
        """Return the run's clock [ns]."""
        return self._now_ns()


class _Connection(asyncio.BufferedProtocol):
    """One peer; a buffered protocol, so that a turn of the loop takes a bounded bite."""

    def __init__(self, server: ModbusServer, number: int) -> None:
        self._server = server
        self._number = number
        self._buffer = bytearray(_TURN)
        self._view = memoryview(self._buffer)
        self._peer = ""
        self._session: ServerSession | None = None
        self._transport: asyncio.Transport | None = None
        self.last_ns = 0

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        self._transport = cast("asyncio.Transport", transport)
        name = transport.get_extra_info("peername")
        self._peer = f"{name[0]}:{name[1]}" if name else "gone"
        self.last_ns = self._server.now_ns()
        _keep_alive(transport.get_extra_info("socket"))
        self._session = self._server.admit(self, self._number, self._peer)
        if self._session is None:
            self._transport.abort()

    @property
    def peer(self) -> str:
        """Return the other end."""
        return self._peer

    @property
    def image_tick(self) -> int:
        """Return the newest image that the peer has read here; -1 when none [ticks]."""
        return -1 if self._session is None else self._session.image_tick

    def get_buffer(self, sizehint: int) -> bytearray:
        return self._buffer

    def buffer_updated(self, nbytes: int) -> None:
        session, transport = self._session, self._transport
        if session is None or transport is None:
            return
        self.last_ns = now_ns = self._server.now_ns()
        try:
            replies = session.receive(bytes(self._view[:nbytes]), now_ns)
        except FrameError as error:
            self._server.broken(self._number, self._peer, error)
            transport.write(error.replies)
            transport.close()
        else:
            if replies:
                transport.write(replies)

    def pause_writing(self) -> None:
        """Take no more requests from a peer that does not fetch its replies."""
        if self._transport is not None:
            self._transport.pause_reading()

    def resume_writing(self) -> None:
        if self._transport is not None:
            self._transport.resume_reading()

    def connection_lost(self, exc: Exception | None) -> None:
        if self._session is not None:
            self._session = None
            self._server.leave(self, self._number, self._peer)

    def abort(self) -> None:
        """Close at once, without waiting for a peer that may never fetch its replies."""
        if self._transport is not None:
            self._transport.abort()


def _host(peer: str) -> str:
    return peer.rpartition(":")[0]


def _keep_alive(connection: socket.socket | None) -> None:
    """Let the system find out about peers that went without a word, where it can be told how."""
    if connection is None:
        return
    connection.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)
    for name, value in (
        ("TCP_KEEPIDLE", _KEEPALIVE_IDLE_S),
        ("TCP_KEEPINTVL", _KEEPALIVE_INTERVAL_S),
        ("TCP_KEEPCNT", _KEEPALIVE_PROBES),
    ):
        option = getattr(socket, name, None)  # not on every system
        if option is not None:
            connection.setsockopt(socket.IPPROTO_TCP, option, value)


def _listen_text(link: ModbusServerLink, error: OSError) -> str:
    """Return why a port could not be had, and what to do."""
    where = f'link "{link.name}": cannot listen on {link.host}:{link.port}'
    if error.errno == errno.EADDRINUSE:
        return (
            f"{where}: another program has the port; stop that program, or give the link "
            "another port in the rig file"
        )
    if error.errno == errno.EACCES:
        return (
            f"{where}: the system does not allow it; ports below 1024 need a privilege, "
            "take one above, e.g. 5020"
        )
    return (
        f"{where}: {error.strerror or error}; the host must be an address of this machine, "
        "e.g. 127.0.0.1"
    )
