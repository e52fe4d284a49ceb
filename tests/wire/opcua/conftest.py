"""A rig of fakes behind a real server, started once: the address space takes over a second."""

from __future__ import annotations

import itertools
from dataclasses import dataclass, field

import numpy as np
import pytest
import pytest_asyncio
from asyncua import Client, ua

from harness.domain.rig import OpcUaServerLink
from harness.domain.signals import Point, PointKind, Quality, Range
from harness.links.opcua.server import OpcUaServer
from harness.links.port import Snapshot


def _point(name, kind, upper, unit, *, writable=False, lower=0.0):
    return Point(
        name=name,
        kind=kind,
        range=Range(lower=lower, upper=upper, unit=unit),
        writable=writable,
        description=f"what {name} is",
    )


POINTS = (
    _point("LT-102", PointKind.MEASUREMENT, 2.0, "m"),
    _point("FT-101", PointKind.MEASUREMENT, 18.0, "m3/h"),
    _point("FV-101", PointKind.COMMAND, 100.0, "%", writable=True),
    _point("FV-102", PointKind.COMMAND, 100.0, "%", writable=True),
    _point("LIC-102.SP", PointKind.SETPOINT, 2.0, "m", writable=True),
    _point("LIC-102.KC", PointKind.GAIN, 100.0, "", writable=True),
    _point("LIC-102.TI", PointKind.INTEGRAL_TIME, 3600.0, "s", writable=True),
    _point("LIC-102.MODE", PointKind.MODE, 1.0, "", writable=True),
    _point("HEARTBEAT", PointKind.HEARTBEAT, 65535.0, "", writable=True),
    _point("TICK", PointKind.TICK, 2.0**53, ""),
)


class FakeImage:
    """An image that a test fills by hand."""

    def __init__(self, points):
        self._places = {point.name: place for place, point in enumerate(points)}
        self._tick = 0
        self.values = np.zeros(len(points))
        self.qualities = np.zeros(len(points), dtype=np.int64)

    def tick(self):
        return self._tick

    def read(self):
        return Snapshot(
            tick=self._tick,
            values=self.values.copy(),
            currents=np.full(self.values.shape, np.nan),
            qualities=self.qualities.copy(),
        )

    def advance(self, ticks=1, values=None, qualities=None):
        """Go on by some ticks and change points by name."""
        self._tick += ticks
        for name, value in (values or {}).items():
            self.values[self._places[name]] = value
        for name, quality in (qualities or {}).items():
            self.qualities[self._places[name]] = quality


@dataclass
class FakeSink:
    """Remember what it is told."""

    exchanges: list = field(default_factory=list)
    activities: list = field(default_factory=list)
    reads: list = field(default_factory=list)
    connections: list = field(default_factory=list)
    refusals: list = field(default_factory=list)

    def writes(self, exchanges):
        self.exchanges.append(list(exchanges))

    def activity(self, link, connection, peer, image_tick, arrival_ns, points=()):
        self.activities.append((link, connection, peer, image_tick, arrival_ns))
        self.reads.append(points)

    def connection(self, link, connection, peer, connected):
        self.connections.append((link, connection, peer, connected))

    def refused(self, link, connection, peer, text):
        self.refusals.append((link, connection, peer, text))

    def clear(self):
        for told in (
            self.exchanges,
            self.activities,
            self.reads,
            self.connections,
            self.refusals,
        ):
            told.clear()


@dataclass
class Bench:
    """The server and what stands behind it."""

    server: OpcUaServer
    image: FakeImage
    sink: FakeSink

    @property
    def endpoint(self):
        return self.server.endpoint

    @property
    def port(self):
        return int(self.endpoint.rsplit(":", 1)[1])


def make_server(image, sink, *, port=0, host="127.0.0.1", name="opc", points=POINTS, shown=()):
    stamps = itertools.count(1000)
    link = OpcUaServerLink(name=name, host=host, port=port, points=shown)
    return OpcUaServer(link, points, image, sink, lambda: next(stamps), "skid")


@pytest.fixture(scope="session")
def new_server():
    """Hand out the maker of servers, for tests that need one of their own."""
    return make_server


@pytest.fixture(scope="session")
def points():
    return POINTS


@pytest.fixture(scope="session")
def new_image():
    return FakeImage


@pytest.fixture(scope="session")
def new_sink():
    return FakeSink


@pytest_asyncio.fixture(scope="session", loop_scope="session")
async def shared_bench():
    image, sink = FakeImage(POINTS), FakeSink()
    server = make_server(image, sink)
    await server.start()
    try:
        yield Bench(server, image, sink)
    finally:
        await server.stop()


@pytest_asyncio.fixture(loop_scope="session")
async def bench(shared_bench):
    """The server with a fresh image, all held writes let go, and nothing told yet."""
    shared_bench.image.values[:] = 0.0
    shared_bench.image.qualities[:] = Quality.GOOD
    shared_bench.image.advance(10)
    await shared_bench.server.publish()
    shared_bench.sink.clear()
    return shared_bench


@pytest_asyncio.fixture(loop_scope="session")
async def client(bench):
    """An independent client's session, of the library's own making."""
    async with Client(bench.endpoint, timeout=5) as session:
        bench.sink.clear()
        yield session


def write_item(name, variant, attribute=ua.AttributeIds.Value):
    return ua.WriteValue(
        NodeId=ua.NodeId(name, 2), AttributeId=attribute, Value=ua.DataValue(variant)
    )


@pytest.fixture(scope="session")
def item():
    """Hand out the maker of items for a Write."""
    return write_item
