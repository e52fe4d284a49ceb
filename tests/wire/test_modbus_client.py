"""The controller's end of Modbus: against the rig's server, and against bad ones."""

from __future__ import annotations

import asyncio
import math
import struct
import time

import numpy as np
import pytest

from harness.domain.rig import Encoding, ModbusServerLink, RegisterItem, Scaling, WordOrder
from harness.domain.signals import Point, PointKind, Quality, Range
from harness.errors import LinkError, PeerError, UsageError
from harness.links.client import Reading
from harness.links.modbus.client import ModbusFieldClient
from harness.links.modbus.server import ModbusServer
from harness.links.port import Snapshot

pytestmark = pytest.mark.wire

LEVEL = Range(lower=0.0, upper=4.0, unit="m")
PERCENT = Range(lower=0.0, upper=100.0, unit="%")
SWITCH = Range(lower=0.0, upper=1.0, unit="")


def point(name, kind, limits, writable):
    return Point(name=name, kind=kind, range=limits, writable=writable, description=name)


POINTS = (
    point("LT-1", PointKind.MEASUREMENT, LEVEL, False),
    point("LT-2", PointKind.MEASUREMENT, LEVEL, False),
    point("LIC.SP", PointKind.SETPOINT, LEVEL, False),
    point("FV-1", PointKind.COMMAND, PERCENT, True),
    point("FV-2", PointKind.COMMAND, PERCENT, True),
    point("LIC.MODE", PointKind.MODE, SWITCH, True),
    point("UNMAPPED", PointKind.COMMAND, PERCENT, True),
)
ITEMS = (
    RegisterItem(point="LT-1", address=0, encoding=Encoding.FLOAT32),
    RegisterItem(point="LT-2", address=2, encoding=Encoding.UINT16, scaling=Scaling.CURRENT),
    RegisterItem(
        point="LIC.SP", address=3, encoding=Encoding.FLOAT32, word_order=WordOrder.BADC
    ),
    RegisterItem(point="FV-1", address=5, encoding=Encoding.FLOAT32, word_order=WordOrder.DCBA),
    RegisterItem(point="FV-2", address=7, encoding=Encoding.UINT16, factor=100.0),
    RegisterItem(point="LIC.MODE", address=0, encoding=Encoding.BIT),
)
NAMES = tuple(item.point for item in ITEMS)


class HandImage:
    """An image set by hand."""

    def __init__(self):
        self.now = 1
        self.values = np.array([1.0, 2.0, 1.5, 40.0, 50.0, 1.0, 0.0])
        self.currents = np.array([8.0, 12.0, *[math.nan] * 5])
        self.qualities = np.zeros(7)

    def tick(self):
        return self.now

    def read(self):
        return Snapshot(
            tick=self.now,
            values=self.values.copy(),
            currents=self.currents.copy(),
            qualities=self.qualities.copy(),
        )


class Tally:
    def __init__(self):
        self.requests = []
        self.active = 0

    def writes(self, exchanges):
        self.requests.append([(one.function, one.point, one.value) for one in exchanges])

    def activity(self, link, connection, peer, image_tick, arrival_ns, points=()):
        self.active += 1

    def connection(self, link, connection, peer, connected):
        """Not of interest here."""

    def refused(self, link, connection, peer, text):
        """Not of interest here."""


def rig_server(image, tally, port=0):
    link = ModbusServerLink(name="m", host="127.0.0.1", port=port, unit=1, items=ITEMS)
    return ModbusServer(link, POINTS, image, tally, time.perf_counter_ns)


def field_client(port, items=ITEMS, unit=1, **rest):
    return ModbusFieldClient(
        host="127.0.0.1", port=port, unit=unit, points=POINTS, items=items, **rest
    )


@pytest.fixture
async def served():
    image, tally = HandImage(), Tally()
    server = rig_server(image, tally)
    await server.start()
    client = field_client(server.address[1])
    await client.connect()
    yield image, tally, client
    await client.close()
    await server.stop()


async def test_reads_by_name_in_the_points_units(served):
    _, tally, client = served
    assert await client.read(NAMES) == {
        "LT-1": Reading(value=1.0, quality=Quality.GOOD),
        "LT-2": Reading(value=2.0, quality=Quality.GOOD),
        "LIC.SP": Reading(value=1.5, quality=Quality.GOOD),
        "FV-1": Reading(value=40.0, quality=Quality.GOOD),
        "FV-2": Reading(value=50.0, quality=Quality.GOOD),
        "LIC.MODE": Reading(value=1.0, quality=Quality.GOOD),
    }
    assert tally.active == 2  # one for the registers, one for the bit
    assert (await client.read(["LIC.SP", "LT-1"])).keys() == {"LIC.SP", "LT-1"}
    assert tally.active == 3


async def test_neighbours_are_written_in_one_request(served):
    _, tally, client = served
    await client.write({"FV-2": 12.34, "LIC.MODE": 0.0, "FV-1": 33.25})
    assert tally.requests == [
        [("FC16", "FV-1", 33.25), ("FC16", "FV-2", 12.34)],
        [("FC15", "LIC.MODE", 0.0)],
    ]
    read = await client.read(["FV-1", "FV-2", "LIC.MODE"])
    assert [one.value for one in read.values()] == [33.25, 12.34, 0.0]


async def test_a_failed_transmitter_is_bad_whichever_way_it_is_shown(served):
    image, _, client = served
    image.now, image.qualities[:2] = 2, float(Quality.BAD)
    image.values[:2], image.currents[:2] = -0.1, 3.6
    read = await client.read(["LT-1", "LT-2"])
    assert math.isnan(read["LT-1"].value)
    assert read["LT-1"].quality is Quality.BAD
    assert read["LT-2"].quality is Quality.BAD
    image.now, image.qualities[:2] = 3, float(Quality.UNCERTAIN)
    image.values[:2], image.currents[:2] = -0.075, 3.7  # between NE 43 failure and measurement
    read = await client.read(["LT-1", "LT-2"])
    assert {one.quality for one in read.values()} == {Quality.UNCERTAIN}


@pytest.mark.parametrize("value", [math.nan, math.inf, -0.1, 100.1])
async def test_what_the_point_does_not_take_is_not_sent(served, value):
    _, tally, client = served
    with pytest.raises(UsageError, match=r"FV-1 = .* must lie within 0 to 100 %"):
        await client.write({"FV-2": 1.0, "FV-1": value})
    assert tally.active == 0


async def test_names_that_are_not_in_the_map(served):
    _, _, client = served
    with pytest.raises(UsageError, match="UNMAPPED, X not in the register map; it has LT-1"):
        await client.read(["LT-1", "UNMAPPED", "X"])
    with pytest.raises(UsageError, match="UNMAPPED"):
        await client.write({"UNMAPPED": 1.0})


async def test_refusals_are_told_by_name(served):
    _, _, client = served
    with pytest.raises(PeerError, match=r"exception 02 \(illegal data address\).*writable"):
        await client.write({"LIC.SP": 1.0})
    stranger = field_client(client._port, unit=9)
    await stranger.connect()
    with pytest.raises(PeerError, match=r"exception 0B \(gateway target failed.*unit id right"):
        await stranger.read(["LT-1"])
    await stranger.close()
    moved = (RegisterItem(point="LT-1", address=50, encoding=Encoding.FLOAT32),)
    lost = field_client(client._port, moved)
    await lost.connect()
    with pytest.raises(PeerError, match=r"FC03 on 2 at 50 \(counted from 0\) for LT-1"):
        await lost.read(["LT-1"])
    await lost.close()


async def test_nobody_there():
    free = await asyncio.start_server(lambda *_: None, "127.0.0.1", 0)
    port = free.sockets[0].getsockname()[1]
    free.close()
    await free.wait_closed()
    client = field_client(port)
    with pytest.raises(LinkError, match=f"127.0.0.1:{port}, unit 1: no connection"):
        await client.connect()
    with pytest.raises(LinkError, match="not connected; connect first"):
        await client.read(["LT-1"])
    await client.close()
    await client.close()


async def test_a_server_that_went_and_came_back():
    image, tally = HandImage(), Tally()
    server = rig_server(image, tally)
    await server.start()
    port = server.address[1]
    client = field_client(port)
    await client.connect()
    await client.connect()  # twice does no harm
    await client.read(["LT-1"])
    await server.stop()
    with pytest.raises(LinkError, match=r"the connection is lost|no answer"):
        await client.read(["LT-1"])
    server = rig_server(image, tally, port)
    await server.start()
    started = time.perf_counter()
    while True:
        try:
            read = await client.read(["LT-1"])
            break
        except LinkError:
            assert time.perf_counter() - started < 10.0, "the client did not come back"
            await asyncio.sleep(0.02)
    assert read["LT-1"].value == 1.0
    await client.close()
    await server.stop()


class LateServer:
    """A server that answers FC03 after a wait of its choosing; None never."""

    def __init__(self, *waits):
        self.waits = list(waits)
        self.asked = 0
        self.open = []

    async def __aenter__(self):
        self.server = await asyncio.start_server(self.serve, "127.0.0.1", 0)
        self.port = self.server.sockets[0].getsockname()[1]
        return self

    async def __aexit__(self, *_):
        self.server.close()
        for writer in self.open:
            writer.transport.abort()
        await asyncio.gather(*self.tasks, return_exceptions=True)
        await self.server.wait_closed()

    tasks = ()

    async def serve(self, reader, writer):
        self.tasks = (*self.tasks, asyncio.current_task())
        self.open.append(writer)
        while True:
            try:
                head = await reader.readexactly(12)
            except (asyncio.IncompleteReadError, ConnectionError):
                return
            self.asked += 1
            wait = self.waits.pop(0) if self.waits else 0.0
            transaction = head[:2]
            reply = transaction + struct.pack(">HHBBBf", 0, 7, 1, 3, 4, float(self.asked))
            if wait is not None:
                asyncio.get_running_loop().call_later(wait, writer.write, reply)


async def test_a_mute_server_costs_the_timeout_and_no_more():
    async with LateServer(*[None] * 9) as server:
        client = field_client(server.port, timeout=0.1, retries=1)
        await client.connect()
        with pytest.raises(LinkError, match=r"no answer within 0\.1 s"):
            await client.read(["LT-1"])
        assert server.asked == 2
        await client.close()


async def test_a_late_answer_is_not_taken_for_the_next():
    async with LateServer(0.3, 0.15) as server:
        client = field_client(server.port, timeout=0.2, retries=0)
        await client.connect()
        with pytest.raises(LinkError, match="no answer"):
            await client.read(
                ["LT-1"]
            )  # whose answer, 1.0, comes 0.1 s later, while the next is waited for
        values = []
        for _ in range(10):
            values.append((await client.read(["LT-1"]))["LT-1"].value)
            await asyncio.sleep(0.01)
        assert values == [float(place) for place in range(2, 12)]
        await client.close()
