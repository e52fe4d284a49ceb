"""Ticks, orders, events and the record, in virtual time and by a clock that the test drives."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest

from harness.controllers.block import AUTOMATIC
from harness.domain.models import ControllerSettings
from harness.domain.rig import Action
from harness.domain.run import EventKind
from harness.domain.signals import Exchange
from harness.engine.engine import Engine
from harness.errors import InvalidRunError, RecordError, UsageError
from harness.runtime.clock import HandClock
from harness.runtime.news import LinkActivity, LinkEvent, LinkEventKind, LinkNews
from harness.runtime.requests import Advance, Compute, NothingToCompute
from harness.runtime.session import Pacing, Session, require_controllers

S = 1_000_000_000
TICK_NS = S // 2  # of the test rig, at pace 1


class FakeRecorder:
    """Keeps what it is handed, as the file would hold it."""

    def __init__(self):
        self.blocks, self.events, self.exchanged = [], [], []
        self.full = False

    def rows(self, segment, first_tick, block, lateness):
        if self.full:
            raise RecordError("the disk is full")
        self.blocks.append((segment, first_tick, block.copy(), lateness))

    def event(self, event):
        self.events.append(event)

    def exchanges(self, exchanges):
        self.exchanged.extend(exchanges)

    @property
    def ticks(self):
        return [
            tick
            for _, first, block, _ in self.blocks
            for tick in range(first, first + len(block))
        ]

    def of(self, kind):
        return [event for event in self.events if event.kind is kind]


class FakeLinks:
    """Links whose peers do what the test has put up for each tick."""

    def __init__(self, clock):
        self.clock = clock
        self.images = []
        self.coming = {}
        self.calls = []

    def publish(self, tick, values, currents, qualities):
        self.calls.append("publish")
        self.images.append((tick, values.copy(), currents.copy(), qualities.copy()))

    def drain(self):
        self.calls.append("drain")
        make = self.coming.get(self.images[-1][0])
        return make(self.clock.now_ns()) if make else LinkNews()


def write(now_ns, value=70.0, point="FV-1", connection=1, image_tick=0):
    exchange = Exchange(
        link="modbus",
        arrival_ns=now_ns,
        peer=f"peer {connection}",
        connection=connection,
        function="FC16",
        address="40",
        point=point,
        value=value,
        raw="",
        image_tick=image_tick,
    )
    return LinkNews(writes=[[exchange]])


def happening(now_ns, kind, text="", count=1):
    event = LinkEvent(
        kind=kind,
        link="modbus",
        connection=1,
        peer="peer 1",
        text=text,
        arrival_ns=now_ns,
        count=count,
    )
    return LinkNews(events=[event])


class Bench:
    """A session with everything around it in the test's hands."""

    def __init__(self, rig, *, paced=True, external=True, pace=1.0, **how):
        self.clock = HandClock()
        self.links = FakeLinks(self.clock)
        self.recorder = FakeRecorder()
        self.computer = how.pop("computer", NothingToCompute())
        self.told = []
        pacing = Pacing(
            clock=self.clock,
            pace=pace,
            links=self.links if external else None,
            computer=self.computer,
        )
        self.session = Session(
            Engine(rig, built_in=not external),
            self.recorder,
            pacing if paced else None,
            external=external,
            on_event=self.told.append,
            **how,
        )
        self.loop = rig.loops[0]
        self.names = [point.name for point in self.session.points]

    def column(self, rows, name):
        columns = [column.name for column in self.session.engine.columns]
        return rows[:, columns.index(name)]

    def shown(self, tick, name):
        """Return what a peer reads of a point in the image of a tick."""
        number, values, *_ = self.links.images[tick]
        assert number == tick
        return values[self.names.index(name)]


# Virtual time.


def test_in_virtual_time_rows_come_at_once_and_are_recorded_without_lateness(two_tanks):
    looks = []
    bench = Bench(two_tanks(), paced=False, external=False, on_look=looks.append)
    rows = bench.session.advance(40)
    assert rows.shape == (40, len(bench.session.engine.columns))
    assert (bench.session.tick, bench.session.time, bench.session.pace) == (40, 20.0, 0.0)
    bench.session.advance(3)
    assert bench.recorder.ticks == list(range(43))
    assert all(lateness is None for *_, lateness in bench.recorder.blocks)
    assert bench.session.rows_taken == 43
    assert looks == [bench.session] * 2
    np.testing.assert_array_equal(bench.recorder.blocks[0][2], rows)


def test_a_script_asks_for_time_and_computations_and_gets_their_answers(two_tanks):
    bench = Bench(two_tanks(), paced=False, external=False)
    answers = []

    def script():
        answers.append((yield Advance(ticks=4)).shape[0])
        answers.append((yield Compute(function=math.hypot, arguments=(3.0, 4.0))))

    bench.session.run(script())
    assert answers == [4, 5.0]


def test_orders_reach_the_engine_and_the_record(two_tanks):
    bench = Bench(two_tanks(), paced=False, external=False)
    bench.session.advance(4)
    settings = ControllerSettings(gain=2.5, integral_time=None, action=Action.REVERSE)
    tick = bench.session.order(
        bench.loop, setpoint=0.9, mode=AUTOMATIC, manual_output=0.4, settings=settings
    )
    assert tick == 4
    assert bench.session.knows(bench.loop, tick)  # the built-in block is there in the same tick
    image = bench.session.image()
    assert {name: image[f"LIC-2.{name}"][1] for name in ("SP", "MODE", "MO", "KC", "TI")} == {
        "SP": pytest.approx(0.9),
        "MODE": 1.0,
        "MO": pytest.approx(40.0),
        "KC": 2.5,
        "TI": 0.0,  # stands for no integral action
    }
    (event,) = bench.recorder.of(EventKind.ORDER)
    assert (event.tick, event.subject) == (4, "LIC-2")
    assert event.data == {
        "gain": 2.5,
        "integral_time": None,
        "setpoint": 0.9,
        "manual_output": 0.4,
        "mode": AUTOMATIC,
    }
    assert bench.told == bench.recorder.events


def test_a_load_is_set_and_recorded(two_tanks):
    bench = Bench(two_tanks(), paced=False, external=False)
    bench.session.set_load("FV-2", 0.5)
    rows = bench.session.advance(1)
    assert bench.column(rows, "FV-2.command")[0] == pytest.approx(0.5)
    assert bench.recorder.of(EventKind.ORDER)[0].subject == "FV-2"


# Paced.


def test_each_tick_waits_for_its_time_then_publishes_then_latches(two_tanks):
    bench = Bench(two_tanks(), pace=10.0)
    bench.clock.late_by(0, 3_000_000, 0)
    bench.session.advance(3)
    bench.session.hand_over()
    assert bench.clock.deadlines == [0, TICK_NS // 10, 2 * TICK_NS // 10]
    assert bench.links.calls == ["publish", "drain"] * 3
    assert [image[0] for image in bench.links.images] == [0, 1, 2]
    assert [bench.shown(k, "TICK") for k in range(3)] == [0.0, 1.0, 2.0]
    ((segment, first, block, lateness),) = bench.recorder.blocks
    assert (segment, first, len(block)) == (0, 0, 3)
    assert lateness == pytest.approx([0.0, 0.003, 0.0])


def test_a_write_moves_the_valve_in_the_tick_that_latches_it(two_tanks):
    bench = Bench(two_tanks())
    bench.links.coming[2] = write
    rows = bench.session.advance(4)
    command = bench.column(rows, "FV-1.command")
    assert command == pytest.approx([0.55, 0.55, 0.70, 0.70])
    assert bench.shown(2, "FV-1") == pytest.approx(55.0)  # published before it was latched
    assert bench.shown(3, "FV-1") == pytest.approx(70.0)
    ((tick, exchange),) = bench.recorder.exchanged
    assert (tick, exchange.value) == (2, 70.0)
    (found,) = bench.recorder.of(EventKind.CONTROLLER_FOUND)
    assert (found.tick, found.text) == (2, "peer 1 on modbus writes FV-1")


def test_an_order_is_known_once_a_scan_that_read_it_has_written(two_tanks):
    bench = Bench(two_tanks())
    bench.session.advance(3)
    order = bench.session.order(bench.loop, setpoint=0.8)
    assert order == 3
    bench.links.coming[3] = lambda now: write(now, image_tick=2)  # read before the order
    bench.links.coming[4] = lambda now: write(now, image_tick=3)
    bench.session.advance(1)
    assert bench.shown(3, "LIC-2.SP") == pytest.approx(0.8)  # in the image of its own tick
    assert not bench.session.knows(bench.loop, order)
    bench.session.advance(1)
    assert bench.session.knows(bench.loop, order)


def test_a_heartbeat_is_shown_back(two_tanks):
    bench = Bench(two_tanks())
    bench.links.coming[0] = lambda now: write(now, 17.0, point="LIC-2.HB")
    bench.session.advance(2)
    assert bench.shown(0, "LIC-2.HB") == 0.0
    assert bench.shown(1, "LIC-2.HB") == 17.0


def test_a_second_writer_is_told_with_the_first(two_tanks):
    bench = Bench(two_tanks())
    for tick in range(8):
        bench.links.coming[tick] = lambda now, who=tick % 2: write(now, connection=who)
    bench.session.advance(8)
    assert [event.text for event in bench.recorder.of(EventKind.CONTROLLER_FOUND)] == [
        "peer 0 on modbus writes FV-1",
        "peer 1 on modbus writes FV-1, which peer 0 on modbus wrote before",
    ]


@pytest.mark.parametrize(("position", "command", "where"), [
    (0.0, 0.0, "goes to 0 %"), (1.0, 1.0, "goes to 100 %"), (None, 0.7, "holds its position"),
])  # fmt: skip
def test_silence_moves_the_valve_where_the_rig_says(two_tanks, position, command, where):
    rig = two_tanks()
    valves = (dataclasses.replace(rig.valves[0], fail_position=position), rig.valves[1])
    bench = Bench(dataclasses.replace(rig, valves=valves))
    bench.links.coming[0] = write
    rows = bench.session.advance(24)  # the watchdog allows 10 s: until tick 20
    command_column = bench.column(rows, "FV-1.command")
    assert command_column[:21] == pytest.approx(np.full(21, 0.7))
    assert command_column[21:] == pytest.approx(np.full(3, command))
    (event,) = bench.recorder.of(EventKind.CONTROLLER_SILENT)
    assert event.tick == 21
    assert event.text.endswith(f"allows 10 s; FV-1 {where}")
    with pytest.raises(InvalidRunError, match=r"loop LIC-2: no valid request from peer 1"):
        require_controllers(bench.session)


def test_a_controller_that_comes_back_is_told_and_may_go_on(two_tanks):
    bench = Bench(two_tanks())
    bench.links.coming[0] = write
    bench.links.coming[30] = lambda now: LinkNews(
        activity=[
            LinkActivity(
                link="modbus",
                connection=1,
                peer="peer 1",
                requests=3,
                arrival_ns=now,
                image_tick=29,
            )
        ]
    )
    bench.session.advance(32)
    (event,) = bench.recorder.of(EventKind.CONTROLLER_BACK)
    assert (event.tick, event.text) == (30, "peer 1 on modbus is back")
    require_controllers(bench.session)


def test_what_peers_do_becomes_events(two_tanks):
    bench = Bench(two_tanks())
    kinds = LinkEventKind
    bench.links.coming[0] = lambda now: happening(now, kinds.CONNECTED)
    bench.links.coming[1] = lambda now: happening(now, kinds.REFUSED, "NaN is no output", 3)
    bench.session.advance(2)
    assert bench.session.connected == {("modbus", 1): "peer 1"}
    bench.links.coming[2] = lambda now: happening(now, kinds.GONE)
    bench.session.advance(1)
    assert bench.session.connected == {}
    assert [(event.kind, event.subject, event.text) for event in bench.recorder.events] == [
        (EventKind.PEER_CONNECTED, "modbus", "peer 1"),
        (EventKind.REFUSED, "modbus", "peer 1: NaN is no output (3 times)"),
        (EventKind.PEER_GONE, "modbus", "peer 1"),
    ]
    assert bench.session.refusals == 3
    assert bench.session.last_refusal == "peer 1: NaN is no output (3 times)"


def test_rows_are_handed_over_in_order_once_each_whatever_ends_the_run(two_tanks):
    bench = Bench(two_tanks())

    def script():
        yield Advance(ticks=300)
        raise InvalidRunError("enough")

    with pytest.raises(InvalidRunError, match="enough"):
        bench.session.run(script())
    assert bench.recorder.ticks == list(range(300))
    assert bench.session.rows_taken == 300


def test_rows_that_the_recorder_refused_are_not_handed_over_again(two_tanks):
    bench = Bench(two_tanks())
    bench.session.advance(1)
    bench.recorder.full = True
    with pytest.raises(RecordError):
        bench.session.hand_over()
    bench.recorder.full = False
    bench.session.hand_over()
    assert bench.recorder.ticks == []


@pytest.mark.parametrize("paced", [True, False])
def test_a_stop_is_heeded_between_two_ticks(two_tanks, paced):
    asked = []
    bench = Bench(two_tanks(), paced=paced, external=False, stop_asked=lambda: bool(asked))

    def script():
        yield Advance(ticks=5)
        asked.append(True)
        yield Advance(ticks=5)

    with pytest.raises(KeyboardInterrupt):
        bench.session.run(script())
    assert bench.recorder.ticks == list(range(5))
    assert bench.session.rows_taken == bench.session.tick == 5


class SlowComputer:
    """Needs so many looks until a result is there."""

    def __init__(self, looks):
        self.looks = looks
        self.request = None

    def begin(self, request):
        self.request = request

    def result(self):
        self.looks -= 1
        if self.looks:
            return False, None
        return True, self.request.function(*self.request.arguments)


def test_the_plant_goes_on_while_a_fit_is_made(two_tanks):
    bench = Bench(two_tanks(), computer=SlowComputer(looks=4))
    answers = []

    def script():
        answers.append((yield Compute(function=math.hypot, arguments=(3.0, 4.0))))

    bench.session.run(script())
    assert answers == [5.0]
    assert bench.recorder.ticks == [0, 1, 2]


def test_a_session_without_computer_says_so(two_tanks):
    bench = Bench(two_tanks())

    def script():
        yield Compute(function=math.hypot, arguments=(3.0, 4.0))

    with pytest.raises(UsageError, match="nobody to compute"):
        bench.session.run(script())


def test_the_view_is_called_a_few_times_a_second_of_the_wall(two_tanks):
    looks = []
    bench = Bench(two_tanks(), pace=50.0, on_look=lambda session: looks.append(session.tick))
    bench.session.advance(101)  # a second
    assert len(looks) == 4
