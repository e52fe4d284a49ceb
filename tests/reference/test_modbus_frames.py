"""Every worked example of the Modbus specification, byte for byte.

Source: MODBUS Application Protocol Specification V1.1b3, sections 6.1 to 6.17 and 7.
"""

from __future__ import annotations

import math
import struct

import numpy as np
import pytest

from harness.domain.rig import Encoding, RegisterItem
from harness.domain.signals import Point, PointKind, Range
from harness.links.modbus.core import ServerSession
from harness.links.port import Snapshot
from harness.links.registers import RegisterBank

pytestmark = pytest.mark.reference


class StillImage:
    def __init__(self, values):
        self.values = values

    def tick(self):
        return 0

    def read(self):
        size = len(self.values)
        return Snapshot(
            tick=0,
            values=np.array(self.values, dtype=float),
            currents=np.full(size, math.nan),
            qualities=np.zeros(size),
        )


class Deaf:
    def writes(self, exchanges):
        """Take nothing."""

    def activity(self, link, connection, peer, image_tick, arrival_ns, points=()):
        """Take nothing."""

    def connection(self, link, connection, peer, connected):
        """Take nothing."""

    def refused(self, link, connection, peer, text):
        """Take nothing."""


def session(first, contents, encoding):
    top = 1.0 if encoding is Encoding.BIT else 65535.0
    points = tuple(
        Point(name=str(place), kind=PointKind.COMMAND, range=Range(lower=0.0, upper=top, unit=""), writable=True, description="")
        for place in range(len(contents))
    )  # fmt: skip
    items = tuple(
        RegisterItem(point=str(place), address=first + place, encoding=encoding)
        for place in range(len(contents))
    )
    return ServerSession(
        bank=RegisterBank(points, items), image=StillImage(contents), sink=Deaf(), unit=1,
        link="", connection=1, peer="",
    )  # fmt: skip


def bits(first, text, count):
    """Bits as the specification's examples give them: bytes in order, lowest bit first."""
    packed = int.from_bytes(bytes.fromhex(text), "little")
    return session(first, [packed >> place & 1 for place in range(count)], Encoding.BIT)


def words(first, *contents):
    return session(first, contents, Encoding.UINT16)


def ask(made, request_):
    pdu = bytes.fromhex(request_)
    reply = made.receive(struct.pack(">HHHB", 0x1501, 0, len(pdu) + 1, 1) + pdu, 0)
    assert reply[:7] == struct.pack(">HHHB", 0x1501, 0, len(reply) - 6, 1)
    return reply[7:].hex(" ").upper()


@pytest.mark.parametrize(
    ("made", "request_", "response"),
    [
        (bits(0x13, "CD 6B 05", 19), "01 00 13 00 13", "01 03 CD 6B 05"),
        (bits(0xC4, "AC DB 35", 22), "02 00 C4 00 16", "02 03 AC DB 35"),
        (words(0x6B, 0x022B, 0, 0x64), "03 00 6B 00 03", "03 06 02 2B 00 00 00 64"),
        (words(0x08, 0x0A), "04 00 08 00 01", "04 02 00 0A"),
        (bits(0xAC, "00", 1), "05 00 AC FF 00", "05 00 AC FF 00"),
        (words(0x01, 0), "06 00 01 00 03", "06 00 01 00 03"),
        (bits(0x13, "00 00", 10), "0F 00 13 00 0A 02 CD 01", "0F 00 13 00 0A"),
        (words(0x01, 0, 0), "10 00 01 00 02 04 00 0A 01 02", "10 00 01 00 02"),
        (words(0x04, 0x12), "16 00 04 00 F2 00 25", "16 00 04 00 F2 00 25"),
        (
            words(0x03, 0xFE, 0x0ACD, 1, 3, 0x0D, 0xFF, 0, 0, 0, 0, 0, 7, 7, 7),
            "17 00 03 00 06 00 0E 00 03 06 00 FF 00 FF 00 FF",
            "17 0C 00 FE 0A CD 00 01 00 03 00 0D 00 FF",
        ),
        (bits(0, "00", 8), "01 04 A1 00 01", "81 02"),
    ],
)
def test_example(made, request_, response):
    assert ask(made, request_) == response


def test_what_the_examples_leave_behind():
    coil = bits(0xAC, "00", 1)
    ask(coil, "05 00 AC FF 00")
    assert ask(coil, "01 00 AC 00 01") == "01 01 01"
    coils = bits(0x13, "00 00", 10)
    ask(coils, "0F 00 13 00 0A 02 CD 01")
    assert ask(coils, "01 00 13 00 0A") == "01 02 CD 01"
    register = words(0x04, 0x12)
    ask(register, "16 00 04 00 F2 00 25")
    assert ask(register, "03 00 04 00 01") == "03 02 00 17"
    several = words(0x01, 0, 0)
    ask(several, "10 00 01 00 02 04 00 0A 01 02")
    assert ask(several, "03 00 01 00 02") == "03 04 00 0A 01 02"


def test_function_23_writes_before_it_reads():
    # V1.1b3, 6.17: "The write operation is performed before the read."
    made = words(0, 1, 2, 3)
    assert ask(made, "17 00 00 00 03 00 01 00 01 02 00 63") == "17 06 00 01 00 63 00 03"
