"""A controller that reads by subscription, against a rig in motion with its watchdog running."""

from __future__ import annotations

import asyncio
import threading

import pytest
from asyncua import Client, ua

from harness.domain.rig import OpcUaServerLink
from harness.domain.run import EventKind
from harness.engine.engine import Engine
from harness.runtime.clock import PacedClock
from harness.runtime.link_process import LinkProcess
from harness.runtime.requests import NothingToCompute
from harness.runtime.session import Pacing, Session

pytestmark = [pytest.mark.wire, pytest.mark.asyncio(loop_scope="session")]

PACE = 10.0  # a tick of 0.5 s takes 50 ms, the watchdog of 10 s a second
TAGS = ("LT-2", "LIC-2.SP", "LIC-2.MODE")


class Live:
    """A session that ticks in a thread of its own until it is told to stop."""

    def __init__(self, rig):
        self.events = []
        self._links = LinkProcess(
            (OpcUaServerLink(name="opcua", host="127.0.0.1", port=0),),
            Session(Engine(rig, built_in=False), None, None, external=True).points,
            rig.name,
        )
        self._rig = rig
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._run)
        self.session = None

    def _run(self):
        pacing = Pacing(
            clock=PacedClock(), pace=PACE, links=self._links, computer=NothingToCompute()
        )
        self.session = Session(
            Engine(self._rig, built_in=False), None, pacing, external=True,
            on_event=self.events.append,
        )  # fmt: skip
        while not self._stop.is_set():
            self.session.advance(1)

    def __enter__(self):
        self._links.start()
        self._thread.start()
        return self

    def __exit__(self, *_):
        self._stop.set()
        self._thread.join()
        self._links.stop()

    @property
    def endpoint(self):
        host, port = self._links.addresses["opcua"]
        return f"opc.tcp://{host}:{port}"

    def heard(self, kind):
        return any(event.kind is kind for event in self.events)

    async def until(self, condition):
        async with asyncio.timeout(15):
            while not condition():  # noqa: ASYNC110  another thread makes it so
                await asyncio.sleep(0.02)


class Deaf:
    """A handler of notifications that does nothing with them."""

    def datachange_notification(self, *_):
        pass


@pytest.fixture
def live(two_tanks):
    with Live(two_tanks()) as live:
        yield live


async def test_a_subscriber_is_alive_for_as_long_as_it_asks_for_notifications(live):
    async with Client(live.endpoint, timeout=5) as client:
        place = await client.get_namespace_index("urn:dryrig:points")
        subscription = await client.create_subscription(100, Deaf())
        await subscription.subscribe_data_change(
            [client.get_node(ua.NodeId(name, place)) for name in TAGS]
        )
        output = client.get_node(ua.NodeId("FV-1", place))
        await output.write_attribute(
            ua.AttributeIds.Value, ua.DataValue(ua.Variant(61.0, ua.VariantType.Double))
        )
        await live.until(lambda: live.heard(EventKind.CONTROLLER_FOUND))
        start = live.session.tick
        await live.until(lambda: live.session.tick > start + 60)  # three watchdogs long
        assert not live.heard(EventKind.CONTROLLER_SILENT)
        assert live.session.engine.output("FV-1") == 0.61
        assert set(TAGS) <= set(live.session.last_reader)  # what never changes was read as well
        assert live.session.last_reader["LT-2"].link == "opcua"

        # The client library goes on reading the server's own state: no sign of the controller.
        await subscription.delete()
        await client.nodes.server_state.read_value()
        await live.until(lambda: live.heard(EventKind.CONTROLLER_SILENT))
        await client.nodes.server_state.read_value()
        assert live.session.engine.output("FV-1") == 0.0  # where the rig says
        assert not live.heard(EventKind.CONTROLLER_BACK)

        # A single read of a point is one.
        await client.get_node(ua.NodeId("LT-2", place)).read_value()
        await live.until(lambda: live.heard(EventKind.CONTROLLER_BACK))
