"""A paced session and its links: signs of life against stalls of the rig, and who dealt with what."""

from __future__ import annotations

import pytest

from harness.domain.run import EventKind
from harness.domain.signals import Exchange
from harness.engine.engine import Engine
from harness.runtime.clock import HandClock
from harness.runtime.news import (
    NO_NEWS,
    Contact,
    LinkActivity,
    LinkEvent,
    LinkEventKind,
    LinkNews,
)
from harness.runtime.requests import NothingToCompute
from harness.runtime.session import Pacing, Session

PACE = 50.0  # a tick of 0.5 s takes 10 ms, a watchdog of 10 s takes 200 ms
TICK_NS = 10_000_000


class FakeLinks:
    """Links whose news a test puts up, one for each tick."""

    def __init__(self):
        self.news = []
        self.published = []

    def publish(self, tick, values, currents, qualities):
        self.published.append(tick)

    def drain(self):
        return self.news.pop(0) if self.news else NO_NEWS


class Rig:
    """A session on a clock driven by hand."""

    def __init__(self, rig):
        self.clock, self.links = HandClock(), FakeLinks()
        self.events = []
        pacing = Pacing(
            clock=self.clock, pace=PACE, links=self.links, computer=NothingToCompute()
        )
        self.session = Session(
            Engine(rig, built_in=False), None, pacing, external=True,
            on_event=self.events.append,
        )  # fmt: skip

    def kinds(self):
        return [event.kind for event in self.events]

    def write(self, value=50.0):
        """Let the controller write the output at the next tick."""
        exchange = Exchange(
            link="modbus", arrival_ns=self.clock.now_ns(), peer="10.0.0.5:40001", connection=1,
            function="FC16", address="40", point="FV-1", value=value, raw="", image_tick=3,
        )  # fmt: skip
        self.links.news.append(LinkNews(writes=[[exchange]]))

    def read(self):
        activity = LinkActivity(
            link="modbus", connection=1, peer="10.0.0.5:40001", requests=1,
            arrival_ns=self.clock.now_ns(), image_tick=3,
        )  # fmt: skip
        self.links.news.append(LinkNews(activity=[activity]))


@pytest.fixture
def rig(two_tanks):
    return Rig(two_tanks())


def test_a_silent_controller_is_found_out_in_plant_time(rig):
    rig.write()
    rig.session.advance(20)
    assert EventKind.CONTROLLER_SILENT not in rig.kinds()
    rig.session.advance(3)
    assert rig.kinds().count(EventKind.CONTROLLER_SILENT) == 1
    assert rig.session.engine.output("FV-1") == 0.0  # where the rig says


def test_reads_alone_keep_the_valve_where_it_is(rig):
    rig.write()
    for _ in range(20):
        rig.session.advance(5)
        rig.read()
    assert EventKind.CONTROLLER_SILENT not in rig.kinds()
    assert rig.session.engine.output("FV-1") == 0.5


def test_a_machine_that_stood_still_for_longer_than_the_watchdog_condemns_nobody(rig):
    rig.write()
    rig.session.advance(5)
    rig.clock.late_by(500_000_000)
    rig.session.advance(40)  # catches up at once, before the controller got to scan
    assert EventKind.CONTROLLER_SILENT not in rig.kinds()
    rig.session.advance(60)
    assert EventKind.CONTROLLER_SILENT in rig.kinds()  # now it had its time


def test_who_read_and_wrote_a_point_last_is_kept(rig):
    rig.write()
    reader = Contact(link="opcua", peer="10.0.0.6:50000", arrival_ns=5)
    rig.links.news.append(LinkNews(readers={"LT-2": reader}))
    rig.session.advance(2)
    rig.links.news.append(LinkNews(readers={"FT-1": reader}))
    rig.session.advance(1)
    assert rig.session.last_reader == {"LT-2": reader, "FT-1": reader}
    assert rig.session.last_writer["FV-1"].peer == "10.0.0.5:40001"
    assert rig.session.last_writer["FV-1"].link == "modbus"
    assert rig.links.published == [0, 1, 2]


def test_a_peer_is_told_of_before_what_it_wrote_and_its_going_after(rig):
    rig.write()
    came, went = (
        LinkEvent(
            kind=kind, link="modbus", connection=1, peer="10.0.0.5:40001", text="", arrival_ns=0
        )
        for kind in (LinkEventKind.CONNECTED, LinkEventKind.GONE)
    )
    (written,) = rig.links.news
    rig.links.news = [LinkNews(writes=written.writes, events=[came, went])]
    rig.session.advance(1)
    assert rig.kinds() == [
        EventKind.PEER_CONNECTED,
        EventKind.CONTROLLER_FOUND,
        EventKind.PEER_GONE,
    ]
