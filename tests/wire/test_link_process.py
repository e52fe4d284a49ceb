"""The link process with real sockets: image out, writes in, and what happens when one side dies."""

from __future__ import annotations

import asyncio
import multiprocessing
import os
import signal
import socket
import subprocess
import sys
import textwrap
import time

import numpy as np
import pytest
from pymodbus.client import AsyncModbusTcpClient, ModbusTcpClient

from harness.domain.points import points_of
from harness.domain.rig import Encoding, ModbusServerLink, OpcUaServerLink, RegisterItem
from harness.domain.signals import Quality
from harness.errors import InvalidRunError, LinkError
from harness.links.opcua.client import OpcUaClient
from harness.runtime.clock import PacedClock
from harness.runtime.image import ImageReader
from harness.runtime.link_process import LinkProcess
from harness.runtime.news import LinkEventKind, LinkNews

pytestmark = pytest.mark.wire

LEVEL, COMMAND, TICK = 100, 200, 300  # addresses


def modbus_link(port: int = 0, name: str = "modbus") -> ModbusServerLink:
    items = (
        RegisterItem(point="LT-2", address=LEVEL, encoding=Encoding.FLOAT32),
        RegisterItem(point="FV-1", address=COMMAND, encoding=Encoding.FLOAT32),
        RegisterItem(point="TICK", address=TICK, encoding=Encoding.UINT32),
    )
    return ModbusServerLink(name=name, host="127.0.0.1", port=port, unit=1, items=items)


def pause(seconds):
    clock = PacedClock()
    clock.wait_until(clock.now_ns() + int(seconds * 1e9))


class Side:
    """The tick's side of a link process, with the points of a rig."""

    def __init__(self, rig, *links):
        self.points = points_of(rig, external=True)
        self.names = [point.name for point in self.points]
        self.process = LinkProcess(links, self.points, rig.name)
        self.news = []

    def publish(self, tick, **values):
        image = np.zeros(len(self.points))
        for name, value in values.items():
            image[self.names.index(name.replace("_", "-"))] = value
        image[self.names.index("TICK")] = tick
        self.process.publish(tick, image, np.full(len(image), np.nan), np.zeros(len(image)))

    def drain_until(self, enough):
        """Drain until the news gathered so far are enough; the test's own time limit ends it."""
        while not enough(self.gathered()):
            self.news.append(self.process.drain())
            pause(0.002)
        return self.gathered()

    def gathered(self):
        return LinkNews(
            writes=[request for news in self.news for request in news.writes],
            activity=[each for news in self.news for each in news.activity],
            events=[event for news in self.news for event in news.events],
            readers={name: who for news in self.news for name, who in news.readers.items()},
        )


@pytest.fixture
def side(two_tanks):
    made = Side(two_tanks(), modbus_link())
    made.process.start()
    yield made
    made.process.stop()


def connect(side, name="modbus"):
    host, port = side.process.addresses[name]
    client = ModbusTcpClient(host, port=port, timeout=2, retries=0)
    assert client.connect()
    return client


def read_float(client, address):
    answer = client.read_holding_registers(address, count=2, device_id=1)
    assert not answer.isError()
    return client.convert_from_registers(answer.registers, client.DATATYPE.FLOAT32)


def write_float(client, address, value):
    registers = client.convert_to_registers(value, client.DATATYPE.FLOAT32)
    return client.write_registers(address, registers, device_id=1)


def test_port_0_becomes_a_real_port_and_values_go_out(side):
    host, port = side.process.addresses["modbus"]
    assert host == "127.0.0.1"
    assert port > 0
    client = connect(side)
    side.publish(1, LT_2=0.75)
    assert read_float(client, LEVEL) == 0.75
    side.publish(2, LT_2=0.5)
    assert read_float(client, LEVEL) == 0.5
    client.close()


def test_writes_come_up_stamped_with_peer_value_and_the_image_that_was_read(side):
    client = connect(side)
    side.publish(41, LT_2=0.75)
    read_float(client, LEVEL)
    before_ns = time.perf_counter_ns()
    assert not write_float(client, COMMAND, 62.5).isError()
    after_ns = time.perf_counter_ns()
    news = side.drain_until(lambda news: news.writes)
    ((exchange,),) = news.writes
    assert (exchange.point, exchange.value, exchange.image_tick) == ("FV-1", 62.5, 41)
    assert exchange.link == "modbus"
    assert exchange.peer == "{}:{}".format(*client.socket.getsockname())
    assert before_ns < exchange.arrival_ns < after_ns  # one clock for both processes
    assert sum(each.requests for each in news.activity) == 2
    assert news.activity[-1].image_tick == 41
    client.close()


def test_who_read_a_point_last_comes_up_with_link_and_time(side):
    first, second = connect(side), connect(side)
    side.publish(1, LT_2=0.75)
    read_float(first, LEVEL)
    read_float(first, COMMAND)
    before_ns = time.perf_counter_ns()
    read_float(second, LEVEL)
    peers = ["{}:{}".format(*client.socket.getsockname()) for client in (first, second)]
    news = side.drain_until(
        lambda news: "LT-2" in news.readers and news.readers["LT-2"].peer == peers[1]
    )
    assert news.readers["LT-2"].arrival_ns > before_ns
    assert news.readers["LT-2"].link == "modbus"
    assert news.readers["FV-1"].peer == peers[0]
    assert "TICK" not in news.readers
    first.close()
    second.close()


def test_the_activity_of_a_write_is_never_behind_it(side):
    client = connect(side)
    side.publish(1)
    for value in range(50):
        write_float(client, COMMAND, float(value))
        while not (news := side.process.drain()).writes:
            side.news.append(news)
        stamps = [each.arrival_ns for each in news.activity]
        assert stamps
        assert max(stamps) >= news.writes[-1][-1].arrival_ns
        side.news.append(news)
    client.close()
    assert sum(each.requests for each in side.gathered().activity) == 50


def test_connections_and_refusals_come_up_in_words(side):
    client = connect(side)
    side.publish(1)
    assert write_float(client, COMMAND, 101.0).isError()
    assert write_float(client, LEVEL, 1.0).isError()
    client.close()
    news = side.drain_until(lambda news: len(news.events) >= 4)
    kinds = [event.kind for event in news.events]
    assert kinds == [
        LinkEventKind.CONNECTED,
        LinkEventKind.REFUSED,
        LinkEventKind.REFUSED,
        LinkEventKind.GONE,
    ]
    assert "101" in news.events[1].text
    assert not news.writes


async def test_reads_at_full_speed_are_condensed_and_no_write_is_lost_unread(side):
    """The tick's process does not look for a while, as when it is busy elsewhere."""
    host, port = side.process.addresses["modbus"]
    side.publish(1)

    async def peer(number: int) -> int:
        client = AsyncModbusTcpClient(host, port=port, timeout=5, retries=0)
        await client.connect()
        registers = client.convert_to_registers(float(number), client.DATATYPE.FLOAT32)
        for _ in range(300):
            await client.read_holding_registers(LEVEL, count=2, device_id=1)
            answer = await client.write_registers(COMMAND, registers, device_id=1)
            assert not answer.isError()
        client.close()
        return number

    await asyncio.gather(*(peer(number) for number in range(4)))
    news = side.drain_until(lambda news: len(news.writes) >= 1200)
    values = [exchange.value for request in news.writes for exchange in request]
    assert sorted(values) == sorted([0.0, 1.0, 2.0, 3.0] * 300)
    stamps = [exchange.arrival_ns for request in news.writes for exchange in request]
    assert stamps == sorted(stamps)
    assert sum(each.requests for each in news.activity) == 2400
    assert len(news.activity) < 600


@pytest.mark.timeout(60)
@pytest.mark.slow  # an OPC UA server takes more than a second to start
def test_both_kinds_of_link_are_open_and_opc_ua_is_told_of_new_images(two_tanks):
    opcua = OpcUaServerLink(name="opcua", host="127.0.0.1", port=0)
    side = Side(two_tanks(), modbus_link(), opcua)
    side.process.start()
    try:
        assert set(side.process.addresses) == {"modbus", "opcua"}
        host, port = side.process.addresses["opcua"]

        async def read_and_write():
            client = OpcUaClient(f"opc.tcp://{host}:{port}")
            await client.connect()
            side.publish(5, LT_2=0.625)
            while (reading := (await client.read(["LT-2"]))["LT-2"]).value != 0.625:
                pass
            await client.write({"FV-1": 33.0})
            await client.close()
            return reading

        reading = asyncio.run(read_and_write())
        assert reading.quality is Quality.GOOD
        news = side.drain_until(lambda news: news.writes)
        assert [(each.link, each.point, each.value) for each in news.writes[0]] == [
            ("opcua", "FV-1", 33.0)
        ]
        if sys.platform != "win32":  # a process that stands still holds up no tick
            os.kill(side.process.process_id, signal.SIGSTOP)
            for tick in range(6, 20_006):  # calls for all of them would fill the pipe twice
                side.publish(tick)
            os.kill(side.process.process_id, signal.SIGCONT)
    finally:
        side.process.stop()


def test_a_taken_port_is_a_link_error_with_its_text_and_leaves_nothing_behind(two_tanks):
    with socket.create_server(("127.0.0.1", 0)) as taken:
        port = taken.getsockname()[1]
        side = Side(two_tanks(), modbus_link(name="first"), modbus_link(port))
        with pytest.raises(LinkError, match=str(port)):
            side.process.start()
    assert side.process.process_id is None
    assert not multiprocessing.active_children()
    side.process.stop()


def test_stopping_frees_the_port_and_the_image_and_hands_over_the_last_news(two_tanks):
    side = Side(two_tanks(), modbus_link())
    side.process.start()
    client = connect(side)
    side.publish(1)
    write_float(client, COMMAND, 10.0)
    address = side.process.addresses["modbus"]
    image = side.process._image.name
    side.process.stop()
    side.process.stop()
    news = side.process.drain()
    assert [exchange.value for request in news.writes for exchange in request] == [10.0]
    assert news.events[-1].kind is LinkEventKind.GONE
    assert not side.process.drain()
    with socket.create_server(address):
        pass
    with pytest.raises(FileNotFoundError):
        ImageReader(image)
    client.close()


def test_the_death_of_the_link_process_is_noticed_after_its_last_news(side):
    client = connect(side)
    side.publish(1)
    write_float(client, COMMAND, 10.0)
    side.drain_until(lambda news: news.writes)
    multiprocessing.active_children()[0].kill()
    with pytest.raises(InvalidRunError, match="ended by itself"):
        side.drain_until(lambda _: False)
    with pytest.raises(InvalidRunError, match="ended by itself"):
        side.process.drain()
    side.publish(2)  # nobody reads it, and nothing breaks
    client.close()


@pytest.mark.skipif(sys.platform == "win32", reason="there is no SIGINT for one process")
def test_ctrl_c_leaves_the_links_open(side):
    os.kill(side.process.process_id, signal.SIGINT)
    client = connect(side)
    side.publish(3, LT_2=0.5)
    assert read_float(client, LEVEL) == 0.5
    client.close()


PARENT = """
    import sys, time
    sys.path.insert(0, {tests!r})
    import conftest
    from harness.domain.points import points_of
    from harness.domain.rig import ModbusServerLink
    from harness.runtime.link_process import LinkProcess

    if __name__ == "__main__":
        rig = conftest.make_two_tanks()
        link = ModbusServerLink(name="modbus", host="127.0.0.1", port=0, unit=1, items=())
        process = LinkProcess([link], points_of(rig, True), rig.name)
        process.start()
        print(process.addresses["modbus"][1], process._image.name, flush=True)
        time.sleep(60)
"""


def test_a_killed_parent_takes_the_link_process_and_the_image_with_it(tmp_path, request):
    script = tmp_path / "parent.py"
    tests = str(request.config.rootpath / "tests")
    script.write_text(textwrap.dedent(PARENT.format(tests=tests)), encoding="utf-8")
    parent = subprocess.Popen(
        [sys.executable, str(script)],
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        text=True,
    )
    try:
        port, image = parent.stdout.readline().split()
        socket.create_connection(("127.0.0.1", int(port))).close()
    finally:
        parent.kill()
        parent.communicate()
    while True:  # until refused; the test's own time limit ends it
        try:
            socket.create_connection(("127.0.0.1", int(port)), timeout=1.0).close()
        except ConnectionRefusedError:
            break
        pause(0.02)
    while True:
        try:
            ImageReader(image).close()
        except FileNotFoundError:
            break
        pause(0.02)


@pytest.mark.skipif(sys.platform == "win32", reason="segments end with their last handle there")
def test_an_ordinary_run_says_nothing_about_leaked_memory(tmp_path, request):
    script = tmp_path / "parent.py"
    tests = str(request.config.rootpath / "tests")
    text = textwrap.dedent(PARENT.format(tests=tests)).replace(
        "time.sleep(60)", "process.stop()"
    )
    script.write_text(text, encoding="utf-8")
    result = subprocess.run(
        [sys.executable, str(script)], capture_output=True, text=True, check=True, timeout=25
    )
    assert result.stderr == ""


def test_no_image_is_torn_between_processes_at_full_speed(side):
    """The far side reads 13 points in one request while this side publishes without a pause."""
    client = connect(side)
    stop_at = time.perf_counter() + 1.0
    seen = set()
    tick = 0
    client.socket.setblocking(True)
    reads = 0
    while time.perf_counter() < stop_at:
        for _ in range(20):
            tick += 1
            side.publish(tick, LT_2=float(tick))
        level = read_float(client, LEVEL)
        seen.add(level)
        reads += 1
        assert level == int(level)
    assert len(seen) == reads
    client.close()
