"""The Modbus server on real sockets: clients good, greedy, slow, silent and broken."""

from __future__ import annotations

import asyncio
import contextlib
import math
import socket
import struct
import time

import numpy as np
import pytest
from pymodbus.client import AsyncModbusTcpClient

from harness.domain.rig import Encoding, ModbusServerLink, RegisterItem, WordOrder
from harness.domain.signals import Point, PointKind, Range
from harness.errors import ExitCode, LinkError
from harness.links.modbus.server import ModbusServer
from harness.links.port import Snapshot

pytestmark = pytest.mark.wire

WIDTH = 40  # registers of points that all hold the tick, so that a torn reply would show


class TickImage:
    """An image in which every value is the tick."""

    def __init__(self, points):
        self.now = 0
        self.points = points

    def tick(self):
        return self.now

    def read(self):
        return Snapshot(
            tick=self.now,
            values=np.full(self.points, float(self.now)),
            currents=np.full(self.points, math.nan),
            qualities=np.zeros(self.points),
        )


class Notes:
    def __init__(self):
        self.written = []
        self.active = 0
        self.connections = []
        self.refusals = []

    def writes(self, exchanges):
        self.written.extend(exchanges)

    def activity(self, link, connection, peer, image_tick, arrival_ns, points=()):
        self.active += 1

    def connection(self, link, connection, peer, connected):
        self.connections.append((connection, peer, connected))

    def refused(self, link, connection, peer, text):
        self.refusals.append((connection, peer, text))


COUNTER = Range(lower=0.0, upper=60000.0, unit="")
POINTS = tuple(
    Point(
        name=f"P{place}", kind=PointKind.COMMAND, range=COUNTER, writable=True, description=""
    )
    for place in range(WIDTH + 2)
)
ITEMS = (
    *(
        RegisterItem(point=f"P{place}", address=place, encoding=Encoding.UINT16)
        for place in range(WIDTH)
    ),
    RegisterItem(point=f"P{WIDTH}", address=100, encoding=Encoding.FLOAT32),
    RegisterItem(
        point=f"P{WIDTH + 1}", address=102, encoding=Encoding.FLOAT32, word_order=WordOrder.CDAB
    ),
)


class Stand:
    """A server with its image and its notes."""

    def __init__(self, port=0, **changes):
        self.image = TickImage(len(POINTS))
        self.notes = Notes()
        link = ModbusServerLink(
            name="modbus", host="127.0.0.1", port=port, unit=3, items=ITEMS, **changes
        )
        self.server = ModbusServer(link, POINTS, self.image, self.notes, time.perf_counter_ns)

    async def __aenter__(self):
        await self.server.start()
        return self

    async def __aexit__(self, *_):
        await self.server.stop()

    async def open(self):
        return await asyncio.open_connection(*self.server.address)


def read_request(transaction, address=0, count=WIDTH, unit=3):
    return struct.pack(">HHHBBHH", transaction, 0, 6, unit, 3, address, count)


async def reply(reader):
    head = await reader.readexactly(6)
    transaction, protocol, length = struct.unpack(">HHH", head)
    assert protocol == 0
    return transaction, (await reader.readexactly(length))[1:]


async def until(condition):
    """Give the loop turns until something holds; the test's own time limit ends a vain wait."""
    while not condition():  # noqa: ASYNC110  what is waited for happens in the kernel
        await asyncio.sleep(0.005)


async def closed(reader):
    """Return whether the other end has closed, having sent nothing more."""
    try:
        return await reader.read(1) == b""
    except ConnectionError:
        return True


async def close(writer):
    writer.close()
    with contextlib.suppress(ConnectionError):
        await writer.wait_closed()


@pytest.mark.parametrize("number", [2, 30])
async def test_requests_in_one_segment_are_all_answered_in_order(number):
    async with Stand() as stand:
        reader, writer = await stand.open()
        writer.write(b"".join(read_request(place, 0, 1) for place in range(number)))
        got = [await reply(reader) for _ in range(number)]
        assert got == [(place, b"\x03\x02\x00\x00") for place in range(number)]
        assert stand.notes.active == number
        await close(writer)


async def test_one_that_reads_here_and_writes_there_is_known_to_have_read():
    """Some controllers keep a connection for reading and another for writing."""
    async with Stand() as stand:
        reader, writes = await stand.open()
        other, reads = await stand.open()
        request = struct.pack(">HHHBBHH", 1, 0, 6, 3, 6, 0, 44)
        writes.write(request)
        await reply(reader)
        assert [each.image_tick for each in stand.notes.written] == [-1]  # nobody has read yet
        stand.image.now = 12
        reads.write(read_request(2, 0, 1))
        await reply(other)
        stand.image.now = 13
        writes.write(request)
        await reply(reader)
        assert stand.notes.written[-1].image_tick == 12
        writes.write(read_request(3, 0, 1))  # from now on its own reads count
        await reply(reader)
        stand.image.now = 14
        reads.write(read_request(4, 0, 1))
        await reply(other)
        writes.write(request)
        await reply(reader)
        assert stand.notes.written[-1].image_tick == 13
        await close(writes)
        await close(reads)


async def test_a_request_in_pieces():
    async with Stand() as stand:
        reader, writer = await stand.open()
        writer.get_extra_info("socket").setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        for byte in read_request(5, 0, 1):
            writer.write(bytes((byte,)))
            await writer.drain()
            await asyncio.sleep(0.002)
        assert await reply(reader) == (5, b"\x03\x02\x00\x00")
        await close(writer)


async def test_an_independent_client_reads_and_writes():
    async with Stand() as stand:
        host, port = stand.server.address
        client = AsyncModbusTcpClient(host, port=port, timeout=2, retries=0)
        assert await client.connect()
        stand.image.now = 7
        read = await client.read_input_registers(0, count=3, device_id=3)
        assert read.registers == [7, 7, 7]
        words = client.convert_to_registers(123.456, client.DATATYPE.FLOAT32)
        swapped = client.convert_to_registers(
            55.5, client.DATATYPE.FLOAT32, word_order="little"
        )
        assert not (
            await client.write_registers(100, [*words, *swapped], device_id=3)
        ).isError()
        assert not (await client.write_register(1, 500, device_id=255)).isError()
        masked = await client.mask_write_register(address=2, and_mask=0, or_mask=9, device_id=0)
        assert not masked.isError()
        both = await client.readwrite_registers(
            read_address=0, read_count=2, write_address=0, values=[44], device_id=3
        )
        assert both.registers == [44, 500]
        assert (
            await client.read_holding_registers(60, count=1, device_id=3)
        ).exception_code == 2
        assert (
            await client.read_holding_registers(0, count=1, device_id=9)
        ).exception_code == 11
        assert [
            (one.point, one.function, one.raw, one.image_tick) for one in stand.notes.written
        ] == [
            ("P40", "FC16", "42F6E979", 7),
            ("P41", "FC16", "0000425E", 7),
            ("P1", "FC06", "01F4", 7),
            ("P2", "FC22", "0009", 7),
            ("P0", "FC23", "002C", 7),
        ]
        assert stand.notes.written[0].value == pytest.approx(123.456, rel=1e-7)
        local = client.ctx.transport.get_extra_info("sockname")
        assert stand.notes.written[0].peer == f"127.0.0.1:{local[1]}"
        client.close()
        await until(lambda: len(stand.notes.connections) == 2)


async def test_five_calls_in_flight_keep_their_own_replies():
    async with Stand() as stand:
        host, port = stand.server.address
        client = AsyncModbusTcpClient(host, port=port, timeout=2, retries=0)
        await client.connect()
        stand.image.now = 11
        calls = [
            client.read_holding_registers(0, count=size, device_id=3) for size in range(1, 6)
        ]
        answers = await asyncio.gather(*calls)
        assert [answer.registers for answer in answers] == [[11] * size for size in range(1, 6)]
        client.close()


async def test_ten_clients_at_once_and_never_a_torn_reply():
    async def poll(stand, number):
        reader, writer = await stand.open()
        for turn in range(100):
            writer.write(read_request(turn))
            writer.write(read_request(turn + 1000, 100, 2))
            transaction, pdu = await reply(reader)
            assert transaction == turn
            words = struct.unpack(f">{WIDTH}H", pdu[2:])
            assert len(set(words)) == 1
            stand.image.now += 1
            assert (await reply(reader))[0] == turn + 1000
        await close(writer)
        return number

    async with Stand() as stand:
        done = await asyncio.gather(*(poll(stand, number) for number in range(10)))
        assert done == list(range(10))
        assert stand.notes.active == 2000
        await until(lambda: len(stand.notes.connections) == 20)
        assert {number for number, _, _ in stand.notes.connections} == set(range(1, 11))


async def test_a_slow_reader_is_held_back_and_loses_nothing():
    async with Stand() as stand:
        host, port = stand.server.address
        slow = socket.socket()
        slow.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 4096)
        slow.connect((host, port))
        slow.setblocking(False)
        loop = asyncio.get_running_loop()
        number = 100_000  # 8.9 MB of replies: more than the systems' buffers hold
        sender = asyncio.ensure_future(
            loop.sock_sendall(slow, b"".join(read_request(n % 65536) for n in range(number)))
        )
        # Once it takes no more from the slow one, another is still served at once.
        before = -1
        while stand.notes.active != before:
            before = stand.notes.active
            await asyncio.sleep(0.2)
        assert 0 < before < number
        reader, writer = await stand.open()
        writer.write(read_request(1, 0, 1))
        assert (await reply(reader))[0] == 1
        await close(writer)
        size = 9 + 2 * WIDTH
        received = bytearray()
        while len(received) < number * size:
            received += await loop.sock_recv(slow, 65536)
        await sender
        assert [
            int.from_bytes(received[start : start + 2], "big")
            for start in range(0, len(received), size)
        ] == [n % 65536 for n in range(number)]
        slow.close()


async def test_no_more_connections_than_allowed():
    async with Stand(max_connections=2) as stand:
        first, second = await stand.open(), await stand.open()
        third = await stand.open()
        assert await closed(third[0])
        ((number, _, text),) = stand.notes.refusals
        assert (number, "2 are open" in text) == (3, True)
        await close(first[1])
        await until(lambda: len(stand.notes.connections) == 3)
        fourth = await stand.open()
        fourth[1].write(read_request(8, 0, 1))
        assert (await reply(fourth[0]))[0] == 8
        for _, writer in (second, third, fourth):
            await close(writer)


async def test_a_silent_connection_is_closed_and_a_busy_one_is_not():
    async with Stand(idle_timeout=0.2) as stand:
        silent, busy = await stand.open(), await stand.open()
        ended = asyncio.ensure_future(closed(silent[0]))
        turn = 0
        while not ended.done():
            turn += 1
            busy[1].write(read_request(turn, 0, 1))
            assert (await reply(busy[0]))[0] == turn
            await asyncio.sleep(0.02)
        assert ended.result()
        busy[1].write(read_request(9, 0, 1))
        assert (await reply(busy[0]))[0] == 9
        assert [(number, there) for number, _, there in stand.notes.connections] == [
            (1, True),
            (2, True),
            (1, False),
        ]
        await close(busy[1])
        await close(silent[1])


async def test_a_peer_that_never_reads_is_closed_as_silent():
    async with Stand(idle_timeout=0.3) as stand:
        greedy = socket.socket()
        greedy.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 4096)
        greedy.connect(stand.server.address)
        greedy.setblocking(False)
        flood = b"".join(read_request(n % 65536) for n in range(100_000))
        sender = asyncio.ensure_future(asyncio.get_running_loop().sock_sendall(greedy, flood))
        await until(lambda: len(stand.notes.connections) == 2)
        assert [there for _, _, there in stand.notes.connections] == [True, False]
        assert 0 < stand.notes.active < 100_000
        await asyncio.wait([sender])  # done, or cut off by the server
        assert isinstance(sender.exception(), ConnectionError | None)
        greedy.close()


@pytest.mark.parametrize("junk", [b"GET / HTTP/1.1\r\n\r\n", bytes.fromhex("0001000000ff03")])
async def test_what_is_no_modbus_closes_that_connection_only(junk):
    async with Stand() as stand:
        good, bad = await stand.open(), await stand.open()
        bad[1].write(read_request(1, 0, 1) + junk)
        assert (await reply(bad[0]))[0] == 1  # what came before is still answered
        assert await closed(bad[0])
        good[1].write(read_request(2, 0, 1))
        assert (await reply(good[0]))[0] == 2
        ((number, _, text),) = stand.notes.refusals
        assert (number, text.startswith("connection closed: ")) == (2, True)
        await close(good[1])
        await close(bad[1])


async def test_a_port_that_is_taken_says_where_and_what_to_do():
    async with Stand() as stand:
        port = stand.server.address[1]
        second = Stand(port=port)
        with pytest.raises(LinkError) as caught:
            await second.server.start()
        text = str(caught.value)
        assert f'link "modbus": cannot listen on 127.0.0.1:{port}' in text
        assert "another program has the port" in text
        assert "another port in the rig file" in text
        assert caught.value.exit_code is ExitCode.USAGE
        await second.server.stop()


async def test_a_host_that_is_not_here():
    link = ModbusServerLink(name="m", host="192.0.2.1", port=0, unit=1, items=ITEMS)  # RFC 5737
    image = TickImage(len(POINTS))
    server = ModbusServer(link, POINTS, image, Notes(), time.perf_counter_ns)
    with pytest.raises(LinkError, match="must be an address of this machine"):
        await server.start()


async def test_stop_ends_every_connection_and_frees_the_port():
    stand = Stand()
    await stand.server.start()
    port = stand.server.address[1]
    reader, writer = await stand.open()
    await until(lambda: stand.notes.connections)
    await stand.server.stop()
    assert await closed(reader)
    assert [there for _, _, there in stand.notes.connections] == [True, False]
    await stand.server.stop()  # twice does no harm
    with pytest.raises(LinkError, match="not open"):
        _ = stand.server.address
    await close(writer)
    async with Stand(port=port) as again:
        assert again.server.address == ("127.0.0.1", port)
