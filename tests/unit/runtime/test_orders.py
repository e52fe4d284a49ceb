"""Orders by link, prompt and callable: what is asked, when it counts as known, and how it fails.

The far end is a list of writes per tick; time is a clock that the test drives.
"""

from __future__ import annotations

import dataclasses
import sys
import types

import pytest

from harness.controllers.block import AUTOMATIC, MANUAL
from harness.domain.models import ControllerSettings
from harness.domain.orders import BlockUnits, GainUnit, LoopOrders, OrderBy, TimeUnit
from harness.domain.rig import Action
from harness.domain.run import EventKind
from harness.domain.signals import Exchange
from harness.engine.engine import Engine
from harness.errors import InvalidRunError, UsageError
from harness.runtime.answers import Answer, AnyAnswers, PointAnswers
from harness.runtime.clock import HandClock
from harness.runtime.news import LinkNews
from harness.runtime.order_words import Order, parts_by_way
from harness.runtime.orders import OrderDesk, load_function
from harness.runtime.requests import NothingToCompute
from harness.runtime.session import Pacing, Session

PI = ControllerSettings(gain=1.234, integral_time=100.0, action=Action.REVERSE)
ALL = dict.fromkeys(("setpoint", "mode", "manual_output", "settings"), OrderBy.PROMPT)
FV, SP, MODE, ACK = "FV-1", "LIC-2.SP.RB", "LIC-2.MODE.RB", "LIC-2.ACK"


class Script:
    """Answers by the poll at which they come, counted from each prompt."""

    how = "say so"

    def __init__(self, *answers):
        self.answers = [
            answer if isinstance(answer, dict) else {3: answer} for answer in answers
        ]
        self.asked = []
        self.taken_away = 0
        self.polls = 0

    def ask(self, ask):
        self.asked.append(ask)
        self.polls = 0

    def poll(self):
        self.polls += 1
        script = self.answers[len(self.asked) - 1] if self.asked else {}
        text = script.get(self.polls)
        return None if text is None else Answer(text=text, who="somebody")

    def done(self):
        self.taken_away += 1


class Recorder:
    def __init__(self):
        self.events = []

    def rows(self, segment, first_tick, block, lateness):
        pass

    def exchanges(self, exchanges):
        pass

    def event(self, event):
        self.events.append(event)

    def of(self, kind):
        return [event for event in self.events if event.kind is kind]


class Links:
    """A controller that writes at every tick, and more at chosen ticks."""

    def __init__(self, writes, read=None):
        self.writes, self.read = writes, read
        self.tick = -1
        self.held = {FV: 55.0}

    def publish(self, tick, values, currents, qualities):
        self.tick = tick

    def drain(self):
        self.held |= self.writes.get(self.tick, {})
        return LinkNews(
            writes=[[self._exchange(point, value) for point, value in self.held.items()]]
        )

    def _exchange(self, point, value):
        return Exchange(
            link="modbus", arrival_ns=0, peer="10.0.0.7:502", connection=1, function="FC16",
            address="40", point=point, value=value, raw="",
            image_tick=self.tick - 1 if self.read is None else self.read,
        )  # fmt: skip


class Bench:
    def __init__(self, rig, orders, answers, writes=None, *, block=None, read=None, **desk):
        loop = dataclasses.replace(
            rig.loops[0], orders=LoopOrders(**orders), block=block or BlockUnits(), watchdog=1e6
        )
        rig = dataclasses.replace(rig, loops=(loop,))
        self.recorder = Recorder()
        self.prompts = []
        self.session = Session(
            Engine(rig, built_in=False),
            self.recorder,
            Pacing(
                clock=HandClock(), pace=1.0, links=Links(writes or {}, read),
                computer=NothingToCompute(),
            ),
            external=True,
        )  # fmt: skip
        places = (answers, PointAnswers(self.session, ACK)) if answers else ()
        self.desk = OrderDesk(self.session, AnyAnswers(places), 5.0, **desk)
        self.session.advance(1)

    def give(self, **order):
        """Carry out an order; return it as taken and the tick at which it is known."""
        script = self.desk.give(Order(loop="LIC-2", **order))
        answer = None
        while True:
            try:
                request = script.send(answer)
            except StopIteration as stop:
                return stop.value, self.session.tick
            self.prompts.append(self.session.prompt)
            answer = self.session.advance(request.ticks)


@pytest.fixture
def bench(two_tanks):
    def make(*arguments, **how):
        return Bench(two_tanks(), *arguments, **how)

    return make


def test_over_the_link_it_is_known_once_the_controller_acts_on_what_it_read_since(bench):
    taken, tick = bench({}, None).give(setpoint=0.8)
    assert taken.by is OrderBy.LINK
    assert (taken.asked, tick) == (1, 3)  # the write at tick 2 answers the image of tick 1
    assert len(taken.rows) == 2


def test_over_the_link_a_controller_that_never_reads_is_told_of(bench):
    with pytest.raises(
        InvalidRunError, match="without having read the rig since the order of tick 1"
    ):
        bench({}, None, read=0).give(setpoint=0.8)


def test_a_prompt_says_what_to_type_and_is_known_at_the_tick_of_the_answer(bench):
    answers = Script({4: ""})
    rig = bench(ALL, answers, block=BlockUnits(setpoint_resolution=0.005))
    taken, tick = rig.give(setpoint=0.8031)
    assert answers.asked[0].text == "LIC-2: set the setpoint to 0.805 m (53.67 %)"
    assert (
        rig.prompts
        == [
            f"LIC-2: set the setpoint to 0.805 m (53.67 %); say so, or change {ACK} over a link when"
            " it is done"
        ]
        * 3
    )
    assert (taken.order.setpoint, taken.by, taken.who) == (0.805, OrderBy.PROMPT, "somebody")
    assert tick == 4
    # the rig's own setpoint, by which it is scored, moves then and not before
    (order,) = rig.recorder.of(EventKind.ORDER)
    assert (order.tick, order.data["setpoint"]) == (4, 0.805)
    (known,) = rig.recorder.of(EventKind.ORDER_KNOWN)
    assert known.tick == 4
    assert known.data == {
        "order": 1, "by": "prompt", "who": "somebody", "evidence": "confirmed",
    }  # fmt: skip
    assert rig.session.prompt == ""
    assert answers.taken_away == 1


def test_settings_are_asked_for_in_the_blocks_own_form_and_units(bench):
    block = BlockUnits(
        gain_unit=GainUnit.BAND, gain_resolution=1.0,
        time_unit=TimeUnit.MINUTES, time_resolution=0.1,
    )  # fmt: skip
    answers = Script("done")
    taken, _ = bench(ALL, answers, block=block).give(settings=PI)
    assert answers.asked[0].text == (
        "LIC-2: set proportional band 81 %, integral time 1.7 min (ideal form, reverse action)"
    )
    # what the block has is what a prediction must use
    assert taken.order.settings.gain == pytest.approx(100 / 81)
    assert taken.order.settings.integral_time == pytest.approx(102.0)
    assert taken.order.typed.words.startswith("proportional band 81 %")


def test_a_manual_output_is_seen_in_the_data_and_nobody_has_to_confirm(bench):
    answers = Script({})
    rig = bench(ALL, answers, writes={6: {FV: 60.04}})
    taken, tick = rig.give(manual_output=0.6)
    assert tick == 7  # latched at tick 6
    assert taken.evidence == "seen in the data"
    assert rig.prompts[0].endswith("nothing to confirm")


def test_a_manual_output_that_misses_its_resolution_is_not_the_one_asked_for(bench):
    rig = bench(ALL, Script({}), writes={6: {FV: 60.3}}, timeout=10.0)
    with pytest.raises(InvalidRunError, match=r"the data show FV-1 at 60\.3 %"):
        rig.give(manual_output=0.6)


def test_setpoint_and_mode_are_seen_where_the_controller_reads_them_back(bench):
    writes = {0: {SP: 0.7, MODE: 0.0}, 5: {SP: 0.8}, 9: {MODE: 1.0}}
    taken, tick = bench(ALL, Script({}), writes=writes).give(setpoint=0.8, mode=AUTOMATIC)
    assert (tick, taken.evidence) == (10, "seen in the data")


def test_an_answer_that_the_data_belie_is_doubted_until_they_agree(bench):
    writes = {0: {SP: 0.7}, 9: {SP: 0.8}}
    rig = bench(ALL, Script({2: ""}), writes=writes)
    _, tick = rig.give(setpoint=0.8)
    assert tick == 10
    (note,) = rig.recorder.of(EventKind.NOTE)
    assert note.text.endswith("the data do not show it yet: a setpoint of 0.7 m")


def in_automatic(rig):
    """Have the rig know that the block is in automatic with its settings."""
    rig.session.order(rig.session.rig.loops[0], settings=PI, mode=AUTOMATIC, setpoint=0.75)
    return rig


JUMP = 100 * PI.gain * 0.06 / 1.5  # of a step from 0.75 to 0.81 m of 1.5 m: Kc de [%]


def test_a_setpoint_shows_in_the_output_of_a_block_in_automatic(bench):
    rig = in_automatic(bench(ALL, Script({}), writes={4: {FV: 55.1}, 6: {FV: 55.1 + JUMP}}))
    taken, tick = rig.give(setpoint=0.81)
    assert (tick, taken.evidence) == (7, "seen in the output")
    assert rig.prompts[0].endswith("unless the output has shown it by then")


@pytest.mark.parametrize("jump", [-JUMP, 0.4 * JUMP], ids=["wrong way", "too small"])
def test_another_move_of_the_output_does_not_count_as_the_setpoint(bench, jump):
    rig = in_automatic(bench(ALL, Script({20: ""}), writes={6: {FV: 55.0 + jump}}))
    taken, tick = rig.give(setpoint=0.81)
    assert (tick, taken.evidence) == (20, "confirmed")


def test_where_the_output_is_restless_a_jump_shows_nothing(bench):
    writes = {4: {FV: 55.0 - 0.3 * JUMP}, 6: {FV: 55.0 + JUMP}}
    rig = in_automatic(bench(ALL, Script({20: ""}), writes=writes))
    taken, _ = rig.give(setpoint=0.81)
    assert taken.evidence == "confirmed"


def test_a_manual_block_at_its_output_counts_only_where_it_says_that_it_is_in_manual(bench):
    _, tick = bench(ALL, Script({}), writes={0: {MODE: 0.0}}).give(
        mode=MANUAL, manual_output=0.55
    )
    assert tick == 1
    _, tick = bench(ALL, Script({5: ""})).give(mode=MANUAL, manual_output=0.55)
    assert tick == 5


def test_manual_comes_before_its_output_and_automatic_after_the_setpoint(bench):
    answers = Script("", "")
    rig = bench(ALL, answers, writes={2: {FV: 60.0}})
    rig.give(manual_output=0.6, mode=MANUAL)
    rig.give(mode=AUTOMATIC, setpoint=0.8)
    assert [ask.text for ask in answers.asked] == [
        "LIC-2: put the block in manual, then set its output to 60.0 %",
        "LIC-2: set the setpoint to 0.8 m (53.33 %), then put the block in automatic",
    ]
    assert [ask.number for ask in answers.asked] == [1, 2]


def test_too_late_is_invalid_with_what_was_asked(bench):
    rig = bench(ALL, Script({}), timeout=7.0)
    with pytest.raises(
        InvalidRunError, match=r"0\.8 m .*nobody said that it was done, within 7 s"
    ):
        rig.give(setpoint=0.8)
    assert rig.session.tick == 16  # the first tick later than 7 s of 0.5 s each
    assert rig.session.prompt == ""


def test_a_no_is_invalid_with_who_and_why(bench):
    rig = bench(ALL, Script("no, the display is locked"))
    with pytest.raises(InvalidRunError, match="somebody answered 'no, the display is locked'"):
        rig.give(setpoint=0.8)


def test_an_answer_that_says_nothing_is_asked_for_again(bench):
    rig = bench(ALL, Script({2: "what?", 6: "yes"}))
    _, tick = rig.give(setpoint=0.8)
    assert tick == 6
    assert "was not understood" in rig.recorder.of(EventKind.NOTE)[0].text


def test_a_point_answers_by_changing(bench):
    writes = {0: {ACK: 4.0}, 8: {ACK: 5.0}}
    taken, tick = bench(ALL, Script({}), writes=writes).give(setpoint=0.8)
    assert (tick, taken.who) == (9, "10.0.0.7:502")


def test_where_nobody_can_answer_and_nothing_shows_it_the_run_ends_at_once(bench):
    with pytest.raises(InvalidRunError, match=r"--answers FILE, or .* write LIC-2\.SP\.RB"):
        bench(ALL, None).give(setpoint=0.8)
    _, tick = bench(ALL, None, writes={0: {SP: 0.7}, 4: {SP: 0.8}}).give(setpoint=0.8)
    assert tick == 5


def test_settings_that_the_block_cannot_hold_are_invalid(bench):
    rig = bench(ALL, Script(""), block=BlockUnits(gain_resolution=10.0))
    with pytest.raises(InvalidRunError, match=r"LIC-2: gain: 1\.234 is less than half"):
        rig.give(settings=PI)


def test_each_kind_goes_its_own_way(two_tanks):
    loop = dataclasses.replace(
        two_tanks().loops[0],
        orders=LoopOrders(settings=OrderBy.PROMPT, mode=OrderBy.CALLABLE, function="a:b"),
    )
    order = Order(loop="LIC-2", settings=PI, setpoint=0.8, manual_output=0.5, mode=AUTOMATIC)
    parts = parts_by_way(order, loop)
    assert [(way, [kind.value for kind in part.kinds]) for way, part in parts] == [
        (OrderBy.PROMPT, ["settings"]),
        (OrderBy.LINK, ["manual_output", "setpoint"]),
        (OrderBy.CALLABLE, ["mode"]),
    ]


@pytest.fixture
def function():
    """Have a module with functions to order by; gone after the test."""
    module = types.ModuleType("bench_orders")
    sys.modules["bench_orders"] = module
    yield module
    del sys.modules["bench_orders"]


CALLABLE = dict.fromkeys(ALL, OrderBy.CALLABLE) | {"function": "bench_orders:take"}


def test_a_callable_gets_the_order_and_is_known_when_it_returns(bench, function):
    got = []
    function.take = lambda order: got.append(order) or "over the vendor's library"
    rig = bench(CALLABLE, None)
    taken, _ = rig.give(setpoint=0.8, mode=AUTOMATIC)
    assert [(order.setpoint, order.mode) for order in got] == [(0.8, AUTOMATIC)]
    assert (taken.by, taken.who) == (OrderBy.CALLABLE, "bench_orders:take")
    assert taken.evidence == "over the vendor's library"
    assert rig.recorder.of(EventKind.ORDER)[0].data["setpoint"] == 0.8


def test_a_callable_that_fails_makes_the_run_invalid(bench, function):
    def take(_order):
        raise OSError("no route to host")

    function.take = take
    with pytest.raises(InvalidRunError, match=r"bench_orders:take failed .*no route to host"):
        bench(CALLABLE, None).give(setpoint=0.8)


def test_a_function_that_is_not_there_is_told_of_before_anything_runs(function):
    with pytest.raises(UsageError, match='the function "bench_orders:gone" is not there'):
        load_function("bench_orders:gone")
    with pytest.raises(UsageError, match='the function "no_such_module:f" is not there'):
        load_function("no_such_module:f")
    function.number = 3
    with pytest.raises(UsageError, match="is no function but 3"):
        load_function("bench_orders:number")
