"""The rig as an OPC UA server."""

from __future__ import annotations

import ipaddress
import socket
from contextlib import suppress
from datetime import UTC, datetime
from importlib import metadata
from typing import TYPE_CHECKING

from asyncua import ua
from asyncua.server.server import Server

from harness.errors import LinkError
from harness.links.opcua.board import Board
from harness.links.opcua.mapping import plan_address_space
from harness.links.opcua.nodes import build_nodes
from harness.links.opcua.session import Desk, RigInternalServer
from harness.links.opcua.stack import quieten

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from harness.domain.rig import OpcUaServerLink
    from harness.domain.signals import Point
    from harness.links.port import ExchangeSink, ImageSource

_APPLICATION_URI = "urn:dryrig:server"
_PRODUCT_URI = "urn:dryrig"
_MAX_CONNECTIONS = 64
_MAX_SUBSCRIPTIONS = 256
_MAX_QUEUE = 1000  # notifications kept for one item of a client that does not fetch them


def _utc_now() -> datetime:
    return datetime.now(UTC)  # noqa: TID251  a stamp for the wire; it never steers


class OpcUaServer:
    """A server that shows the points of a rig and takes a controller's writes.

    Parameters
    ----------
    link : OpcUaServerLink
        Where to listen, and which points to show.
    points : sequence of Point
        Every point of the rig, in the order of its image.
    image : ImageSource
        Where the values come from.
    sink : ExchangeSink
        Who hears of what clients do.
    now_ns : callable
        Returns the time for arrival stamps [ns].
    rig_name : str
        Name of the folder that holds the points.
    utc : callable
        Returns the present time, aware, for the stamps on the wire.

    Raises
    ------
    LinkError
        The points cannot be shown as asked.
    """

    def __init__(
        self,
        link: OpcUaServerLink,
        points: Sequence[Point],
        image: ImageSource,
        sink: ExchangeSink,
        now_ns: Callable[[], int],
        rig_name: str,
        *,
        utc: Callable[[], datetime] = _utc_now,
    ) -> None:
        self._link = link
        self._plans = plan_address_space(points, link.points, link=link.name)
        self._image = image
        self._sink = sink
        self._now_ns = now_ns
        self._rig_name = rig_name
        self._utc = utc
        self._port = link.port
        self._server: Server | None = None
        self._board: Board | None = None

    @property
    def endpoint(self) -> str:
        """Return the URL that clients connect to; with port 0 it is known after the start."""
        return f"opc.tcp://{_in_url(self._link.host)}:{self._port}"

    async def start(self) -> None:
        """Create the nodes and listen.

        Raises
        ------
        LinkError
            The address is not a loopback address, or the port is taken.
        """
        if self._server is not None:
            raise LinkError(f"{self._subject}: already open; stop it before starting it again")
        host = self._loopback_host()
        self._probe(host)
        quieten()
        core = RigInternalServer()
        server = Server(iserver=core)
        try:
            await self._prepare(server, core, host)
            await server.start()
        except BaseException as error:
            self._board = None
            await server.stop()  # else the port stays taken
            if isinstance(error, OSError):
                raise self._port_error(error) from error
            raise
        self._server = server
        self._port = _listening_port(server, self._link.port)

    async def stop(self) -> None:
        """Close every connection and free the port; may be called more than once."""
        server, self._server, self._board = self._server, None, None
        if server is not None:
            await server.stop()

    async def publish(self) -> None:
        """Show the latest image, if its tick is new; only what changed is written.

        Raises
        ------
        LinkError
            The server is not open.
        """
        if self._board is None:
            raise LinkError(f"{self._subject}: not open; call start before publish")
        await self._board.publish()

    @property
    def _subject(self) -> str:
        return (
            f"link {self._link.name!r} (OPC UA server on {self._link.host}:{self._link.port})"
        )

    async def _prepare(self, server: Server, core: RigInternalServer, host: str) -> None:
        server.name = f"dryrig {self._rig_name}"
        server.manufacturer_name = "dryrig"
        server.product_uri = _PRODUCT_URI
        server.application_type = ua.ApplicationType.Server
        server.set_endpoint(f"opc.tcp://{_in_url(host)}:{self._link.port}")
        server.set_security_policy([ua.SecurityPolicyType.NoSecurity])  # loopback only
        server.set_identity_tokens([ua.AnonymousIdentityToken])
        core.max_connections = _MAX_CONNECTIONS
        core.max_subscriptions = _MAX_SUBSCRIPTIONS
        core.max_monitored_item_queue_size = _MAX_QUEUE
        await server.init()
        await server.set_application_uri(_APPLICATION_URI)
        await server.set_build_info(
            _PRODUCT_URI, "dryrig", server.name, metadata.version("dryrig"), "0", self._utc()
        )
        node_ids = await build_nodes(server, self._rig_name, self._plans)
        self._board = Board(
            plans=self._plans,
            node_ids=node_ids,
            image=self._image,
            address_space=core.aspace,
            utc=self._utc,
        )
        core.open_desk(
            Desk(link=self._link.name, board=self._board, sink=self._sink, now_ns=self._now_ns)
        )
        await self._board.publish()

    def _loopback_host(self) -> str:
        """Return the address to listen on, or refuse one that others can reach."""
        if self._link.host == "localhost":
            return "127.0.0.1"  # one socket, so that port 0 means one port
        with suppress(ValueError):
            if ipaddress.ip_address(self._link.host).is_loopback:
                return self._link.host
        raise LinkError(
            f"{self._subject}: refused to listen where other machines can reach it, because this "
            'server has no secure policies yet (they come later); use host = "127.0.0.1", and '
            "let a controller on another machine come through an SSH tunnel"
        )

    def _probe(self, host: str) -> None:
        """Find a taken port before the second and a half that the address space takes."""
        family = socket.AF_INET6 if ":" in host else socket.AF_INET
        try:
            # create_server picks the address reuse that each system needs, as asyncio does.
            socket.create_server((host, self._link.port), family=family).close()
        except OSError as error:
            raise self._port_error(error) from error

    def _port_error(self, error: OSError) -> LinkError:
        return LinkError(
            f"{self._subject}: cannot listen: {error.strerror or error}; stop the program that "
            "has this port, or give the link another one"
        )


def _in_url(host: str) -> str:
    return f"[{host}]" if ":" in host else host


def _listening_port(server: Server, wanted: int) -> int:
    return wanted if server.bserver is None else server.bserver.port
