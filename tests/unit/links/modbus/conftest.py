"""A rig's image and a notebook of what peers did, for the Modbus tests."""

from __future__ import annotations

import math
from types import SimpleNamespace

import numpy as np
import pytest

from harness.domain.rig import Encoding, RegisterItem
from harness.domain.signals import Point, PointKind, Range
from harness.errors import LinkError
from harness.links.modbus.core import ServerSession
from harness.links.port import Snapshot
from harness.links.registers import RegisterBank

COUNTER = Range(lower=0.0, upper=65535.0, unit="")


class FakeImage:
    """An image set by hand."""

    def __init__(self, size):
        self.now = 0
        self.values = np.zeros(size)
        self.gone = False

    def tick(self):
        return self.now

    def read(self):
        if self.gone:
            raise LinkError("the image is gone")
        size = len(self.values)
        return Snapshot(
            tick=self.now,
            values=self.values.copy(),
            currents=np.full(size, math.nan),
            qualities=np.zeros(size),
        )


class Notebook:
    """A sink that writes everything down."""

    def __init__(self):
        self.written = []
        self.active = []
        self.read = []
        self.connections = []
        self.refusals = []

    def writes(self, exchanges):
        self.written.append(tuple(exchanges))

    def activity(self, link, connection, peer, image_tick, arrival_ns, points=()):
        self.active.append((link, connection, peer, image_tick, arrival_ns))
        self.read.append(points)

    def connection(self, link, connection, peer, connected):
        self.connections.append((link, connection, peer, connected))

    def refused(self, link, connection, peer, text):
        self.refusals.append((link, connection, peer, text))


@pytest.fixture(scope="session")
def registers():
    """Return a factory of sessions over plain registers and bits by address.

    ``words`` and ``bits`` map addresses to content; those in ``fixed`` are read only.
    """

    def make(words=None, bits=None, fixed=(), unit=1):
        cells = [(False, address, value) for address, value in (words or {}).items()]
        cells += [(True, address, value) for address, value in (bits or {}).items()]
        points, items = [], []
        for bit, address, _ in cells:
            name = f"{'bit' if bit else 'word'} {address}"
            points.append(
                Point(
                    name=name,
                    kind=PointKind.COMMAND,
                    range=Range(lower=0.0, upper=1.0, unit="") if bit else COUNTER,
                    writable=address not in fixed,
                    description="",
                )
            )
            encoding = Encoding.BIT if bit else Encoding.UINT16
            items.append(RegisterItem(point=name, address=address, encoding=encoding))
        image, notebook = FakeImage(len(points)), Notebook()
        image.values[:] = [value for _, _, value in cells]
        bank = RegisterBank(tuple(points), tuple(items))

        def session(number=1):
            return ServerSession(
                bank=bank, image=image, sink=notebook, unit=unit,
                link="modbus", connection=number, peer=f"10.0.0.1:{number}",
            )  # fmt: skip

        return SimpleNamespace(
            bank=bank, image=image, notebook=notebook, another=session, session=session()
        )

    return make
