"""The inside of the link process: one event loop with every link of the rig."""

from __future__ import annotations

import asyncio
import pickle
import signal
import threading
from contextlib import AsyncExitStack, suppress
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol, runtime_checkable
from urllib.parse import urlsplit

from harness.domain.rig import ModbusServerLink, OpcUaServerLink
from harness.errors import DryrigError
from harness.runtime.clock import PacedClock
from harness.runtime.image import ImageReader
from harness.runtime.news import NewsBox
from harness.runtime.steadiness import set_memory_aside

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence
    from multiprocessing.connection import Connection

    from harness.domain.signals import Point

_QUIET_S = 0.010  # reads are condensed for this long [s]
_FITS_BYTES = 4_096  # into any system's pipe, whatever stands in it already has been announced
_LAST_WORDS_S = 4.0  # longest wait for the last news to go out [s]
WAKE = b"image"  # down the pipe: there is a new image to show


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkSetup:
    """What the link process is started with.

    Parameters
    ----------
    links : tuple of ModbusServerLink or OpcUaServerLink
        The links to open.
    points : tuple of Point
        The points of the rig, in the order of the image.
    rig_name : str
        Name of the rig.
    image : str
        Name of the shared image.
    """

    links: tuple[ModbusServerLink | OpcUaServerLink, ...]
    points: tuple[Point, ...]
    rig_name: str
    image: str


@dataclass(frozen=True, slots=True, kw_only=True)
class LinksOpen:
    """First message up: every link is open.

    Parameters
    ----------
    addresses : dict of str to tuple of str and int
        Host and port [-] that each link has, by its name.
    """

    addresses: dict[str, tuple[str, int]]


@dataclass(frozen=True, slots=True, kw_only=True)
class LinksFailed:
    """Last message up: the links cannot be opened or kept.

    Parameters
    ----------
    text : str
        Why.
    """

    text: str


class LinkServer(Protocol):
    """What the link process asks of a server."""

    async def start(self) -> None:
        """Open the link; raises LinkError."""
        ...

    async def stop(self) -> None:
        """Close the link."""
        ...


@runtime_checkable
class PublishingServer(LinkServer, Protocol):
    """A server that has to be told of a new image."""

    async def publish(self) -> None:
        """Show the latest image."""
        ...


def run_links(setup: LinkSetup, up: Connection, down: Connection) -> None:
    """Serve the links until the parent says so or is gone; the body of the process.

    Parameters
    ----------
    setup : LinkSetup
        What to serve.
    up : Connection
        Pipe to the parent: `LinksOpen` or `LinksFailed`, then `LinkNews`.
    down : Connection
        Pipe from the parent; anything on it, and its end, asks to stop.
    """
    # Ctrl-C goes to every process of a terminal; the parent decides when the links close.
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    if hasattr(signal, "SIGBREAK"):
        signal.signal(signal.SIGBREAK, signal.SIG_IGN)
    try:
        asyncio.run(_serve(setup, up, down))
    except DryrigError as error:
        _tell(up, LinksFailed(text=str(error)))
    except BaseException as error:
        _tell(up, LinksFailed(text=f"link process: {error!r}; this is a defect of the program"))
        raise


def _tell(up: Connection, message: object) -> None:
    try:
        up.send(message)
    except OSError:  # the parent is gone, nobody is there to read it
        return


async def _serve(setup: LinkSetup, up: Connection, down: Connection) -> None:
    clock = PacedClock()
    image = ImageReader(setup.image)
    box = NewsBox(clock.now_ns)
    stop = asyncio.Event()
    async with AsyncExitStack() as closing:
        closing.callback(image.close)
        sender = threading.Thread(target=_send, args=(box, image, up), daemon=True)
        closing.push_async_callback(_finish, box, sender)
        addresses: dict[str, tuple[str, int]] = {}
        publishers: list[PublishingServer] = []
        for link in setup.links:
            server, address = _make(link, setup, image, box, clock)
            closing.push_async_callback(server.stop)
            await server.start()
            addresses[link.name] = address()
            if isinstance(server, PublishingServer):
                publishers.append(server)
        set_memory_aside()
        _tell(up, LinksOpen(addresses=addresses))
        sender.start()
        fresh = asyncio.Event()
        _listen(down, image, fresh, stop)
        await _until_stopped(stop, publishers, fresh)


async def _finish(box: NewsBox, sender: threading.Thread) -> None:
    """Send what is left in the box, after the servers have closed."""
    box.close()
    if sender.is_alive():
        await asyncio.to_thread(sender.join, _LAST_WORDS_S)


def _make(
    link: ModbusServerLink | OpcUaServerLink,
    setup: LinkSetup,
    image: ImageReader,
    box: NewsBox,
    clock: PacedClock,
) -> tuple[LinkServer, Callable[[], tuple[str, int]]]:
    """Make the server of a link, and what tells its address once it is open.

    The libraries are loaded only where a link needs them.
    """
    match link:
        case ModbusServerLink():
            from harness.links.modbus.server import ModbusServer  # noqa: PLC0415

            modbus = ModbusServer(link, setup.points, image, box, clock.now_ns)
            return modbus, lambda: modbus.address
        case OpcUaServerLink():
            from harness.links.opcua.server import OpcUaServer  # noqa: PLC0415

            opcua = OpcUaServer(link, setup.points, image, box, clock.now_ns, setup.rig_name)
            return opcua, lambda: _address_in(opcua.endpoint)


def _address_in(url: str) -> tuple[str, int]:
    parts = urlsplit(url)
    return parts.hostname or "", parts.port or 0


def _listen(
    down: Connection, image: ImageReader, fresh: asyncio.Event, stop: asyncio.Event
) -> None:
    """Set an event when there is a new image, and another when the parent asks to stop or is gone."""
    loop = asyncio.get_running_loop()

    def listen() -> None:
        calls = 0
        # The parent's end of the pipe closes with it, and the image when this side gives up.
        with suppress(EOFError, OSError, ValueError):
            while down.recv_bytes() == WAKE:
                calls += 1
                image.tell_awake(
                    calls
                )  # before the image is read, so that no later one is missed
                loop.call_soon_threadsafe(fresh.set)
        with suppress(RuntimeError):  # the loop has ended already
            loop.call_soon_threadsafe(stop.set)

    threading.Thread(target=listen, daemon=True).start()


def _send(box: NewsBox, image: ImageReader, up: Connection) -> None:
    """Send news on until the box is closed; the body of a thread, which alone may block."""
    messages = 0
    while (news := box.wait(_QUIET_S)) is not None:
        messages += 1
        data = pickle.dumps(news, pickle.HIGHEST_PROTOCOL)
        # Announced when it is there in full, so that the parent's tick can take it without a
        # look first. What does not fit into a pipe is there in full only while it is read.
        if len(data) > _FITS_BYTES:
            image.tell_news(messages)
        try:
            up.send_bytes(data)
        except OSError:  # the parent is gone; the other pipe says so as well
            return
        image.tell_news(messages)


async def _until_stopped(
    stop: asyncio.Event, publishers: Sequence[PublishingServer], fresh: asyncio.Event
) -> None:
    async with asyncio.TaskGroup() as tasks:
        publishing = tasks.create_task(_publish(publishers, fresh))
        await stop.wait()
        publishing.cancel()


async def _publish(publishers: Sequence[PublishingServer], fresh: asyncio.Event) -> None:
    """Show each new image on the servers that must be told; where ticks are faster, the latest."""
    while True:
        await fresh.wait()
        fresh.clear()
        for publisher in publishers:
            await publisher.publish()
