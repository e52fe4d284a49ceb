"""The controller's end: against the rig's server, and against peers that are not one."""

from __future__ import annotations

import asyncio
import math

import pytest
import pytest_asyncio

from harness.domain.signals import Quality
from harness.errors import LinkError, PeerError, UsageError
from harness.links.opcua.client import OpcUaClient

pytestmark = [pytest.mark.wire, pytest.mark.asyncio(loop_scope="session")]


@pytest_asyncio.fixture(loop_scope="session")
async def controller(bench):
    client = OpcUaClient(bench.endpoint, timeout=5.0)
    await client.connect()
    yield client
    await client.close()


async def test_reads_values_with_their_quality(bench, controller):
    bench.image.advance(
        values={
            "LT-102": 1.25,
            "FT-101": 18.5,
            "FV-101": 40.0,
            "LIC-102.MODE": 1.0,
            "TICK": 9e9,
        },
        qualities={"FT-101": Quality.UNCERTAIN, "FV-101": Quality.BAD},
    )
    await bench.server.publish()
    readings = await controller.read(["LT-102", "FT-101", "FV-101", "LIC-102.MODE", "TICK"])
    assert {name: one.quality for name, one in readings.items()} == {
        "LT-102": Quality.GOOD,
        "FT-101": Quality.UNCERTAIN,
        "FV-101": Quality.BAD,
        "LIC-102.MODE": Quality.GOOD,
        "TICK": Quality.GOOD,
    }
    assert readings["LT-102"].value == 1.25
    assert readings["FT-101"].value == 18.5
    assert math.isnan(readings["FV-101"].value)
    assert (readings["LIC-102.MODE"].value, readings["TICK"].value) == (1.0, 9e9)


async def test_one_read_and_one_write_are_one_request_each(bench, controller):
    await controller.read(["LT-102", "FT-101", "TICK"])
    await controller.write({"FV-101": 33.0, "LIC-102.MODE": 1.0, "HEARTBEAT": 5.0})
    assert len(bench.sink.activities) == 2
    ((valve, mode, beat),) = bench.sink.exchanges
    assert [one.value for one in (valve, mode, beat)] == [33.0, 1.0, 5.0]
    assert valve.image_tick == bench.image.tick()
    readings = await controller.read(["FV-101", "HEARTBEAT"])
    assert [one.value for one in readings.values()] == [33.0, 5.0]


async def test_a_refused_value_is_named_and_the_others_are_written(bench, controller):
    with pytest.raises(PeerError, match=r"FV-101 = 120: BadOutOfRange$") as caught:
        await controller.write({"FV-101": 120.0, "FV-102": 20.0})
    assert bench.endpoint in str(caught.value)
    assert (await controller.read(["FV-102"]))["FV-102"].value == 20.0


async def test_a_read_only_point_is_refused(controller):
    with pytest.raises(PeerError, match="LT-102 = 1: BadNotWritable"):
        await controller.write({"LT-102": 1.0})


async def test_an_unknown_point_is_named_with_those_there_are(controller):
    with pytest.raises(PeerError, match=r"no node 'LT-999'; it has LT-102, FT-101"):
        await controller.read(["LT-999"])
    with pytest.raises(PeerError, match="no node 'LT-999'"):
        await controller.write({"LT-999": 1.0})


async def test_a_number_that_an_integer_node_cannot_hold_is_not_sent(bench, controller):
    for value in (math.nan, math.inf, 2.0**31):
        with pytest.raises(UsageError, match=r"HEARTBEAT = .* its node takes Int32"):
            await controller.write({"HEARTBEAT": value})
    assert bench.sink.refusals == []


async def test_connecting_twice_and_closing_twice_is_fine(bench):
    client = OpcUaClient(bench.endpoint, timeout=5.0)
    await asyncio.gather(client.connect(), client.connect())
    assert [connected for *_, connected in bench.sink.connections] == [True]
    await client.close()
    await client.close()
    assert [connected for *_, connected in bench.sink.connections] == [True, False]


class Relay:
    """A stand-in for a server's port that can go away and come back in no time."""

    def __init__(self, target):
        self._target = target
        self.port = 0
        self._writers = []
        self._pumps = set()

    async def open(self):
        self._server = await asyncio.start_server(self._serve, "127.0.0.1", self.port)
        self.port = self._server.sockets[0].getsockname()[1]

    async def close(self):
        self._server.close()
        for writer in self._writers:
            writer.close()
        await asyncio.gather(*self._pumps, return_exceptions=True)
        self._writers.clear()
        await self._server.wait_closed()

    async def _serve(self, reader, writer):
        far_reader, far_writer = await asyncio.open_connection("127.0.0.1", self._target)
        self._writers += [writer, far_writer]
        self._pumps.add(asyncio.current_task())
        await asyncio.gather(self._pump(reader, far_writer), self._pump(far_reader, writer))

    async def _pump(self, reader, writer):
        try:
            while chunk := await reader.read(65536):
                writer.write(chunk)
        except ConnectionError:
            pass
        finally:
            writer.close()


async def test_comes_back_by_itself_after_the_server_was_gone(bench):
    relay = Relay(bench.port)
    await relay.open()
    client = OpcUaClient(f"opc.tcp://127.0.0.1:{relay.port}", timeout=5.0)
    try:
        assert (await client.read(["LT-102"]))["LT-102"].quality is Quality.GOOD
        await relay.close()
        with pytest.raises(LinkError, match="cannot read"):
            await client.read(["LT-102"])
        with pytest.raises(LinkError, match=r"cannot connect.*start the server"):
            await client.read(["LT-102"])
        await relay.open()
        assert (await client.read(["LT-102"]))["LT-102"].quality is Quality.GOOD
    finally:
        await client.close()
        await relay.close()


class Peer:
    """A TCP server that is no OPC UA server: it says one thing and waits."""

    def __init__(self, words):
        self._words = words
        self._leave = asyncio.Event()

    async def __aenter__(self):
        self._server = await asyncio.start_server(self._serve, "127.0.0.1", 0)
        self.endpoint = f"opc.tcp://127.0.0.1:{self._server.sockets[0].getsockname()[1]}"
        return self

    async def __aexit__(self, *_):
        self._leave.set()
        self._server.close()
        await self._server.wait_closed()
        await asyncio.sleep(0.05)  # let the last handler close its end

    async def _serve(self, reader, writer):
        writer.write(self._words)
        if not self._words:
            await self._leave.wait()
        writer.close()
        await writer.wait_closed()


async def test_a_mute_peer_costs_one_timeout_and_says_so():
    async with Peer(b"") as peer:
        client = OpcUaClient(peer.endpoint, timeout=0.2)
        with pytest.raises(LinkError, match=r"no answer to connect within 0\.2 s"):
            await client.read(["LT-102"])
        await client.close()


async def test_a_peer_that_speaks_something_else_is_an_error_of_ours():
    async with Peer(b"HTTP/1.1 400 Bad Request\r\n\r\n") as peer:
        client = OpcUaClient(peer.endpoint, timeout=1.0)
        with pytest.raises((LinkError, PeerError), match="cannot connect"):
            await client.read(["LT-102"])
        await client.close()


async def test_nobody_there():
    client = OpcUaClient("opc.tcp://127.0.0.1:1", timeout=1.0)
    with pytest.raises(LinkError, match=r"cannot connect.*start the server"):
        await client.connect()
    await client.close()
