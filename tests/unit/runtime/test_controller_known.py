"""When a controller counts as silent: any request keeps it alive, plant seconds, and whose they are."""

from __future__ import annotations

import dataclasses

import pytest

from harness.domain.signals import Exchange
from harness.runtime.news import LinkActivity

SECOND_NS = 1_000_000_000
PLC, PANEL, OTHER = 1, 2, 3


@pytest.fixture
def loop(small_rig):
    return dataclasses.replace(small_rig.loops[0], watchdog=10.0, heartbeat_timeout=None)


def write(at, connection=PLC, value=50.0, image_tick=7, host="10.0.0.5", link="modbus"):
    return Exchange(
        link=link, arrival_ns=round(at * SECOND_NS), peer=f"{host}:{40_000 + connection}",
        connection=connection, function="FC16", address="40", point="FV-101", value=value,
        raw="", image_tick=image_tick,
    )  # fmt: skip


def request(at, connection=PLC, image_tick=7, host="10.0.0.5", link="modbus"):
    return LinkActivity(
        link=link, connection=connection, peer=f"{host}:{40_000 + connection}", requests=1,
        arrival_ns=round(at * SECOND_NS), image_tick=image_tick,
    )  # fmt: skip
