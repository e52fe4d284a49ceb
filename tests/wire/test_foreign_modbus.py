"""The rig's ends of Modbus TCP against programs that nobody here wrote: mbpoll and libmodbus.

Both come from Debian's packages mbpoll and libmodbus5. Elsewhere the tests are left out and say
why; where CI=true they must be there, so that nothing is left out unseen.
"""

from __future__ import annotations

import asyncio
import ctypes
import ctypes.util
import math
import os
import re
import shutil
import socket
import struct
import subprocess
import threading
from pathlib import Path

import numpy as np
import pytest

from harness.app.loading import read_rig
from harness.domain.points import points_of
from harness.domain.rig import Encoding, ModbusServerLink, RegisterItem, Scaling, WordOrder
from harness.links.modbus.client import ModbusFieldClient
from harness.runtime.clock import PacedClock
from harness.runtime.link_process import LinkProcess

pytestmark = pytest.mark.wire

UNIT = 7
LEVEL = 0.3125  # m of 0.5
CURRENT = 14.0
ORDERS = tuple(WordOrder)
DIRECT, REPEATED, COIL = 0, 100, 3  # addresses of the map


def absent(what):
    """Leave a test out where a program is missing, but never in CI."""
    if os.environ.get("CI") == "true":
        pytest.fail(f"{what} is not installed; .ci/run installs it")
    pytest.skip(f"{what} is not installed (Debian: apt-get install mbpoll)")


@pytest.fixture(scope="module")
def mbpoll():
    found = shutil.which("mbpoll")
    return found or absent("mbpoll")


@pytest.fixture(scope="module")
def libmodbus():
    name = ctypes.util.find_library("modbus")
    if name is None:
        absent("libmodbus")
    library = ctypes.CDLL(name, use_errno=True)
    library.modbus_new_tcp.restype = ctypes.c_void_p
    library.modbus_mapping_new.restype = ctypes.POINTER(Mapping)
    library.modbus_strerror.restype = ctypes.c_char_p
    for order in ORDERS:
        getter = getattr(library, f"modbus_get_float_{order.value.lower()}")
        getter.restype = ctypes.c_float
    return library


class Mapping(ctypes.Structure):
    """modbus_mapping_t of libmodbus 3.1: counts, starts, and the four tables."""

    _fields_ = (
        *((f"count{i}", ctypes.c_int) for i in range(8)),
        ("bits", ctypes.POINTER(ctypes.c_uint8)),
        ("input_bits", ctypes.POINTER(ctypes.c_uint8)),
        ("input_registers", ctypes.POINTER(ctypes.c_uint16)),
        ("registers", ctypes.POINTER(ctypes.c_uint16)),
    )


def items():
    """The same level in every order; then counts, current, the valve, setpoint and mode."""
    floats = [
        RegisterItem(point="LT-102", address=2 * i, encoding=Encoding.FLOAT32, word_order=order)
        for i, order in enumerate(ORDERS)
    ]
    return (
        *floats,
        RegisterItem(
            point="LT-102", address=8, encoding=Encoding.UINT16, scaling=Scaling.CURRENT
        ),
        RegisterItem(
            point="LT-102", address=9, encoding=Encoding.INT16, scaling=Scaling.COUNTS,
            counts_low=0, counts_high=32000,
        ),
        RegisterItem(point="TICK", address=10, encoding=Encoding.UINT32),
        RegisterItem(point="FV-101", address=REPEATED, encoding=Encoding.FLOAT32),
        RegisterItem(point="LIC-102.HB", address=REPEATED + 2, encoding=Encoding.UINT16),
        RegisterItem(point="LIC-102.MODE", address=COIL, encoding=Encoding.BIT),
    )  # fmt: skip


class Served:
    """A rig whose image stands still, and what was written to it."""

    def __init__(self, rig):
        self.points = points_of(rig, external=True)
        names = [point.name for point in self.points]
        link = ModbusServerLink(
            name="modbus", host="127.0.0.1", port=0, unit=UNIT, items=items()
        )
        self.process = LinkProcess([link], self.points, rig.name)
        self.process.start()
        self.port = self.process.addresses["modbus"][1]
        values, currents = np.zeros(len(names)), np.full(len(names), math.nan)
        values[names.index("LT-102")], currents[names.index("LT-102")] = LEVEL, CURRENT
        values[names.index("LIC-102.MODE")] = 1.0
        values[names.index("TICK")] = 123456.0
        self.process.publish(5, values, currents, np.zeros(len(names)))
        self._clock = PacedClock()

    def written(self):
        """Return the next request's writes by point."""
        for _ in range(200):
            writes = self.process.drain().writes
            if writes:
                return {one.point: one for one in writes[0]}
            self._clock.wait_until(self._clock.now_ns() + 10_000_000)
        raise AssertionError("nothing was written within 2 s")


@pytest.fixture(scope="module")
def served():
    rig, _ = read_rig(Path(__file__).parents[2] / "configs" / "rigs" / "bench_skid.toml")
    made = Served(rig)
    yield made
    made.process.stop()


def poll(mbpoll, port, *options, unit=UNIT):
    """Run mbpoll once; return what it printed and its exit code."""
    command = [mbpoll, "-m", "tcp", "-0", "-1", "-a", str(unit), "-p", str(port)]
    done = subprocess.run(
        [*command, *options], capture_output=True, text=True, timeout=10, check=False
    )
    return done.stdout + done.stderr, done.returncode


def values_in(text):
    """Return the values of mbpoll's lines ``[reference]: value``, by reference."""
    found = re.findall(r"^\[(\d+)\]:\s+(\S+)", text, re.MULTILINE)
    return {int(reference): value for reference, value in found}


def test_mbpoll_reads_what_the_rig_shows(served, mbpoll):
    host = "127.0.0.1"
    for table in ("4", "3"):  # holding and input registers are the same values
        text, code = poll(
            mbpoll, served.port, "-r", "0", "-c", "1", "-t", f"{table}:float", "-B", host
        )
        assert code == 0, text
        assert float(values_in(text)[0]) == pytest.approx(LEVEL, rel=1e-5)
    text, _ = poll(mbpoll, served.port, "-r", "2", "-c", "1", "-t", "4:float", host)
    assert float(values_in(text)[2]) == pytest.approx(LEVEL, rel=1e-5)  # words exchanged
    text, _ = poll(mbpoll, served.port, "-r", "8", "-c", "2", "-t", "4", host)
    assert values_in(text) == {8: "14000", 9: "20000"}  # 14 mA; 62.5 % of 32000
    text, _ = poll(mbpoll, served.port, "-r", "10", "-c", "1", "-t", "4:int", "-B", host)
    assert values_in(text) == {10: "123456"}
    for kind in ("0", "1"):  # coil and discrete input
        text, _ = poll(mbpoll, served.port, "-r", str(COIL), "-c", "1", "-t", kind, host)
        assert values_in(text) == {COIL: "1"}


def test_mbpoll_writes_a_valve_and_a_heartbeat(served, mbpoll):
    text, code = poll(
        mbpoll, served.port, "-r", str(REPEATED), "-t", "4:float", "-B", "127.0.0.1", "57.25"
    )
    assert code == 0, text
    assert served.written()["FV-101"].value == pytest.approx(57.25)
    text, code = poll(
        mbpoll, served.port, "-r", str(REPEATED + 2), "-t", "4", "127.0.0.1", "4711"
    )
    assert code == 0, text
    assert served.written()["LIC-102.HB"].value == 4711.0


def test_mbpoll_is_told_what_is_wrong(served, mbpoll):
    text, _ = poll(mbpoll, served.port, "-r", "50", "-c", "1", "-t", "4", "127.0.0.1")
    assert "Illegal data address" in text
    text, _ = poll(mbpoll, served.port, "-r", "0", "-t", "4", "127.0.0.1", "5")
    assert "Illegal data address" in text  # read only
    text, _ = poll(
        mbpoll, served.port, "-r", str(REPEATED), "-t", "4:float", "-B", "127.0.0.1", "170"
    )
    assert "Illegal data value" in text  # over 100 %
    text, _ = poll(
        mbpoll, served.port, "-r", "0", "-c", "1", "-t", "4", "127.0.0.1", unit=UNIT + 1
    )
    assert "Target device failed to respond" in text


def registers_of(value):
    """Return the two registers of a float32, most significant first."""
    return (ctypes.c_uint16 * 2)(*struct.unpack(">HH", struct.pack(">f", value)))


class ForeignClient:
    """A libmodbus client."""

    def __init__(self, library, port):
        self._library = library
        self.context = ctypes.c_void_p(library.modbus_new_tcp(b"127.0.0.1", port))
        library.modbus_set_slave(self.context, UNIT)
        assert library.modbus_connect(self.context) == 0, self.why()

    def why(self):
        return self._library.modbus_strerror(ctypes.get_errno())

    def call(self, name, *arguments):
        result = getattr(self._library, name)(self.context, *arguments)
        assert result >= 0, self.why()
        return result

    def close(self):
        self._library.modbus_close(self.context)
        self._library.modbus_free(self.context)


def test_libmodbus_decodes_every_word_order_as_the_map_says(served, libmodbus):
    client = ForeignClient(libmodbus, served.port)
    registers = (ctypes.c_uint16 * 12)()
    assert client.call("modbus_read_registers", DIRECT, 12, registers) == 12
    for i, order in enumerate(ORDERS):
        pair = (ctypes.c_uint16 * 2)(registers[2 * i], registers[2 * i + 1])
        decode = getattr(libmodbus, f"modbus_get_float_{order.value.lower()}")
        assert decode(pair) == pytest.approx(LEVEL, rel=1e-7), order
    client.close()


def test_libmodbus_writes_masks_and_writes_while_reading(served, libmodbus):
    client = ForeignClient(libmodbus, served.port)
    # Its own setter turns the bytes around in version 3.1.6, so the registers are made here.
    client.call("modbus_write_registers", REPEATED, 2, registers_of(42.5))
    assert served.written()["FV-101"].value == 42.5
    client.call("modbus_write_register", REPEATED + 2, 0x12)
    assert served.written()["LIC-102.HB"].value == 0x12
    client.call("modbus_mask_write_register", REPEATED + 2, 0x00F2, 0x0025)
    assert served.written()["LIC-102.HB"].value == 0x17  # Modbus specification V1.1b3, 6.16
    read = (ctypes.c_uint16 * 2)()
    wanted = registers_of(61.0)
    client.call("modbus_write_and_read_registers", REPEATED, 2, wanted, REPEATED, 2, read)
    assert served.written()["FV-101"].value == 61.0
    assert libmodbus.modbus_get_float_abcd(read) == 61.0
    client.close()


class ForeignServer:
    """A libmodbus server in a thread; its calls let go of the interpreter's lock."""

    def __init__(self, library):
        self._library = library
        with socket.create_server(("127.0.0.1", 0)) as free:
            self.port = free.getsockname()[1]
        self.context = ctypes.c_void_p(library.modbus_new_tcp(b"127.0.0.1", self.port))
        self.mapping = library.modbus_mapping_new(10, 10, 200, 200)
        self._socket = library.modbus_tcp_listen(self.context, 1)
        assert self._socket >= 0
        self._thread = threading.Thread(target=self._serve, daemon=True)
        self._thread.start()

    def _serve(self):
        library, query = self._library, (ctypes.c_uint8 * 260)()
        library.modbus_tcp_accept(self.context, ctypes.byref(ctypes.c_int(self._socket)))
        while (length := library.modbus_receive(self.context, query)) >= 0:
            library.modbus_reply(self.context, query, length, self.mapping)

    def close(self):
        self._thread.join(5.0)
        self._library.modbus_close(self.context)
        self._library.modbus_mapping_free(self.mapping)
        self._library.modbus_free(self.context)


def test_our_client_reads_and_writes_a_server_of_libmodbus(served, libmodbus):
    server = ForeignServer(libmodbus)
    registers = server.mapping.contents.registers
    registers[0], registers[1] = 0x42F6, 0xE979  # 123.456 as float32 (IEEE 754)
    registers[20], registers[21] = 0xE979, 0x42F6  # the same with its words exchanged

    async def talk():
        client = ModbusFieldClient(
            host="127.0.0.1",
            port=server.port,
            unit=UNIT,
            points=served.points,
            items=(
                RegisterItem(point="LT-102", address=0, encoding=Encoding.FLOAT32),
                RegisterItem(
                    point="LT-101",
                    address=20,
                    encoding=Encoding.FLOAT32,
                    word_order=WordOrder.CDAB,
                ),
                RegisterItem(point="FV-101", address=150, encoding=Encoding.FLOAT32),
                RegisterItem(
                    point="LIC-102.SP",
                    address=160,
                    encoding=Encoding.FLOAT32,
                    word_order=WordOrder.CDAB,
                ),
            ),
        )
        await client.connect()
        readings = await client.read(("LT-102", "LT-101"))
        await client.write({"FV-101": 33.25, "LIC-102.SP": LEVEL})
        await client.close()
        return readings

    readings = asyncio.run(talk())
    assert readings["LT-102"].value == pytest.approx(123.456, rel=1e-7)
    assert readings["LT-101"].value == pytest.approx(123.456, rel=1e-7)
    pair = (ctypes.c_uint16 * 2)(registers[150], registers[151])
    assert libmodbus.modbus_get_float_abcd(pair) == 33.25
    pair = (ctypes.c_uint16 * 2)(registers[160], registers[161])
    assert libmodbus.modbus_get_float_cdab(pair) == LEVEL
    server.close()
