"""A trial with a controller outside that is not there, does not read, or goes; no waiting."""

from __future__ import annotations

import pytest

from harness.domain.models import ControlLaw
from harness.domain.rig import ModbusServerLink
from harness.domain.run import EventKind
from harness.domain.signals import Exchange
from harness.domain.trial import (
    Mode,
    ModelSource,
    Phase,
    PhaseKind,
    SettingsSource,
    SteadyRule,
    Tolerances,
    Trial,
)
from harness.engine.engine import Engine
from harness.errors import InvalidRunError
from harness.runtime.clock import HandClock
from harness.runtime.news import LinkEvent, LinkEventKind, LinkNews
from harness.runtime.requests import NothingToCompute
from harness.runtime.session import Pacing, Session
from harness.runtime.trial_script import trial_script

PACE = 20.0
LINK = ModbusServerLink(name="modbus", host="127.0.0.1", port=0, unit=1, items=())


def phase(name, kind, mode, change=0.0, time_limit=5000.0):
    return Phase(
        name=name, loop="LIC-2", kind=kind, mode=mode, change=change, time_limit=time_limit
    )


SETTLE = phase("settle", PhaseKind.SETTLE, Mode.MANUAL)
STEP = phase("output up", PhaseKind.OUTPUT_STEP, Mode.MANUAL, 0.05)


def trial_of(*phases):
    return Trial(
        name="test",
        description="",
        law=ControlLaw.PI,
        closed_loop_time=60.0,
        models=ModelSource.LINEARISED,
        given=None,
        settings=SettingsSource.COMPUTED,
        as_found=None,
        phases=phases,
        steady=SteadyRule(),
        tolerances=Tolerances(),
    )


class ManualController:
    """A controller in manual at the far end: reads the image, writes the ordered output."""

    def __init__(self, names, clock):
        self.names, self.clock = names, clock
        self.scans = True
        self.reads = True
        self.there_from = 0
        self.refused = ""
        self.tick, self.read, self.ordered = -1, -1, 55.0

    def publish(self, tick, values, _currents, _qualities):
        self.tick = tick
        if self.reads:
            self.read = tick
            self.ordered = float(values[self.names.index("LIC-2.MO")])

    def drain(self):
        if self.tick == 0:
            return LinkNews(events=[self._event(LinkEventKind.CONNECTED, "")])
        if self.refused:
            return LinkNews(events=[self._event(LinkEventKind.REFUSED, self.refused)])
        if not self.scans or self.tick < self.there_from:
            return LinkNews()
        return LinkNews(
            writes=[
                [
                    Exchange(
                        link="modbus",
                        arrival_ns=self.clock.now_ns(),
                        peer="10.0.0.5:4711",
                        connection=1,
                        function="FC16",
                        address="40",
                        point="FV-1",
                        value=self.ordered,
                        raw="",
                        image_tick=self.read,
                    )
                ]
            ]
        )

    def _event(self, kind, text):
        return LinkEvent(
            kind=kind,
            link="modbus",
            connection=1,
            peer="10.0.0.5:4711",
            text=text,
            arrival_ns=self.clock.now_ns(),
        )


class Case:
    """A trial on the test rig, and what it left."""

    def __init__(self, rig):
        self.clock = HandClock()
        engine = Engine(rig, built_in=False)
        self.events, self.looks = [], []
        self.session = Session(
            engine,
            None,
            Pacing(clock=self.clock, pace=PACE, links=None, computer=NothingToCompute()),
            external=True,
            on_event=self.events.append,
        )
        names = [point.name for point in self.session.points]
        self.controller = ManualController(names, self.clock)
        self.session._pacing = Pacing(
            clock=self.clock, pace=PACE, links=self.controller, computer=NothingToCompute()
        )

    def run(self, *phases, wait=3.0):
        self.session.run(trial_script(self.session, trial_of(*phases), wait))

    def of(self, kind):
        return [event for event in self.events if event.kind is kind]


@pytest.fixture
def case(two_tanks):
    return Case(two_tanks(links=(LINK,)))


def test_a_controller_that_comes_late_is_waited_for(case):
    case.controller.there_from = 90  # 45 plant seconds, 2.25 of the wall
    case.run(SETTLE)
    (waiting,) = case.of(EventKind.NOTE)
    assert waiting.text == "waiting up to 3 s for a controller to write FV-1"
    assert case.of(EventKind.CONTROLLER_FOUND)[0].tick == 90
    assert case.of(EventKind.PHASE_ENDED)[0].data["steady"] is True


def test_a_controller_that_never_writes_is_told_with_what_was_seen_of_it(case):
    case.controller.refused = "address 140 is not in the map"
    with pytest.raises(InvalidRunError) as caught:
        case.run(SETTLE)
    assert 120 <= case.session.tick <= 122  # 3 s of the wall
    assert str(caught.value) == (
        "loop LIC-2: no controller wrote FV-1 over modbus within 3 s; connected: 10.0.0.5:4711; "
        "last refused: 10.0.0.5:4711: address 140 is not in the map (address base or wrong "
        "address: look at whether the controller counts registers from 0 or from 1, and the length "
        "of its block). Start the controller, check host, port, unit and the address that it writes to, or give it longer with --wait"
    )


def test_an_order_counts_from_the_tick_at_which_the_controller_has_it(case):
    case.run(SETTLE, STEP)
    order = case.of(EventKind.ORDER)[-1]
    known = [event for event in case.of(EventKind.ORDER_KNOWN) if event.subject == "output up"]
    assert order.data == {"manual_output": pytest.approx(0.60)}
    assert [event.data["order"] for event in known] == [order.tick]
    assert order.tick < known[0].tick <= order.tick + 2
    assert case.session.engine.output("FV-1") == pytest.approx(0.60)


def test_a_controller_that_writes_but_never_reads_is_told(case):
    case.controller.reads = False
    with pytest.raises(InvalidRunError, match=r"without having read the rig since the order"):
        case.run(STEP)


def test_a_controller_that_goes_in_a_phase_ends_the_trial(case):
    def look(session):
        if session.time > 30.0:
            case.controller.scans = False

    case.session._on_look = look
    with pytest.raises(
        InvalidRunError, match=r"the watchdog of LIC-2 allows 10 s; FV-1 goes to 0 %"
    ):
        case.run(SETTLE)
    assert case.session.engine.output("FV-1") == 0.0
    assert case.of(EventKind.PHASE_ENDED) == []


def test_a_phase_that_does_not_become_steady_in_its_time_is_no_verdict(case):
    short = phase("output up", PhaseKind.OUTPUT_STEP, Mode.MANUAL, 0.05, time_limit=60.0)
    with pytest.raises(InvalidRunError, match=r"'output up': not steady within .* 60 s"):
        case.run(short)
    (ended,) = case.of(EventKind.PHASE_ENDED)
    assert ended.data["steady"] is False
