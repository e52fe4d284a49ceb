"""Every mistake of the table, made by the soft PLC on a real link, is found and named; none is on the right one."""

from __future__ import annotations

import asyncio
import dataclasses
import threading
from pathlib import Path

import pytest

from harness.app.loading import read_rig
from harness.app.trial import warm_up
from harness.domain.points import points_of
from harness.domain.rig import ModbusServerLink
from harness.domain.verdict import Outcome
from harness.engine.engine import Engine
from harness.runtime.answers import AnyAnswers
from harness.runtime.clock import PacedClock
from harness.runtime.controller_checks import find_controller, sentence
from harness.runtime.link_process import LinkProcess
from harness.runtime.orders import OrderDesk
from harness.runtime.plc_mistakes import MISTAKES
from harness.runtime.preflight import preflight
from harness.runtime.requests import NothingToCompute
from harness.runtime.session import Pacing, Session
from harness.runtime.signal_test import SignalPlan, SignalReport, signal_test
from harness.runtime.soft_plc import run_soft_plc
from harness.runtime.soft_plc_process import soft_plc_parts

pytestmark = [pytest.mark.wire, pytest.mark.slow]

RIG = Path(__file__).parents[2] / "configs" / "rigs" / "bench_skid.toml"
PACE = 20.0
LOOP = "LIC-102"
WAIT = 0.7  # wall seconds for a controller that never writes


class Plc:
    """The soft PLC in a thread: it shares whatever holds up the rig's own ticks."""

    def __init__(self, rig, port, mistake):
        self._stop = None
        self._ready = threading.Event()
        self._thread = threading.Thread(
            target=self._run, args=(rig, port, mistake), daemon=True
        )
        self._thread.start()
        self._ready.wait()

    def _run(self, rig, port, mistake):
        asyncio.run(self._scan(rig, port, mistake))

    async def _scan(self, rig, port, mistake):
        stop = asyncio.Event()
        loop = asyncio.get_running_loop()
        self._stop = lambda: loop.call_soon_threadsafe(stop.set)
        self._ready.set()
        client, program = soft_plc_parts(rig, "modbus", LOOP, port=port, mistake=mistake)
        await run_soft_plc(
            client, program, stop, clock=PacedClock(), pace=PACE, on_event=lambda _: None
        )

    def end(self):
        if self._thread.is_alive():
            self._stop()
        self._thread.join()


class Bench:
    """One rig and one open link for all; each mistake gets a session at the rig's start."""

    def __init__(self):
        rig, _ = read_rig(RIG)
        links = tuple(
            dataclasses.replace(link, port=0)
            for link in rig.links
            if isinstance(link, ModbusServerLink)
        )
        self.rig = dataclasses.replace(rig, links=links)
        self.engine = Engine(self.rig, built_in=False)
        warm_up(self.engine)
        self.start = self.engine.save()
        self.links = LinkProcess(links, points_of(self.rig, external=True), rig.name)
        self.links.start()

    def session(self):
        self.engine.restore(self.start)
        self.links.drain()
        pacing = Pacing(
            clock=PacedClock(), pace=PACE, links=self.links, computer=NothingToCompute()
        )
        return Session(self.engine, None, pacing, external=True)

    def fly(self, mistake):
        """Return the checks of the pre-flight, or the one that says that nobody was there."""
        checks = []

        def script(session):
            nobody = yield from find_controller(session, LOOP, WAIT)
            if nobody is not None:
                checks.append(nobody)
                return
            checks.extend((yield from preflight(session, self.rig.loop(LOOP), judge=False)))

        self._run(mistake, script)
        return checks

    def signals(self, mistake):
        """Return the checks of all signals."""
        report = SignalReport()

        def script(session):
            answers = AnyAnswers(())
            desk = OrderDesk(session, answers, WAIT)
            plan = SignalPlan(answers=answers, desk=desk, wait=WAIT)
            yield from signal_test(session, plan, report)

        self._run(mistake, script)
        return report

    def _run(self, mistake, script):
        plc = Plc(self.rig, self.links.addresses["modbus"][1], mistake)
        try:
            session = self.session()
            session.run(script(session))
        finally:
            plc.end()


@pytest.fixture(scope="module")
def bench():
    made = Bench()
    yield made
    made.links.stop()


def told(checks):
    return [sentence(check) for check in checks if check.outcome is not Outcome.PASS]


def test_the_table_is_long_enough():
    assert len(MISTAKES) >= 15
    assert len({mistake.name for mistake in MISTAKES}) == len(MISTAKES)


def test_nothing_is_found_on_the_right_one(bench):
    for _ in range(3):
        checks = bench.fly(None)
        assert told(checks) == []
    tags = {check.tag for check in checks}
    assert tags >= {"LT-102", "LIC-102.SP", "LIC-102.MODE", "FV-101", LOOP, "LIC-102.HB"}


@pytest.mark.parametrize(
    "mistake", [m for m in MISTAKES if not m.by_signals], ids=lambda mistake: mistake.name
)
def test_a_mistake_is_found_and_named_before_a_trial(bench, mistake):
    wrong = [check for check in bench.fly(mistake.name) if check.outcome is not Outcome.PASS]
    assert wrong
    assert wrong[0].mistake.startswith(mistake.found_as), told(wrong)
    assert wrong[0].evidence
    assert wrong[0].look_at


def test_no_signal_of_the_right_one_is_found_wrong(bench):
    report = bench.signals(None)
    assert told(report.checks) == []
    assert report.outcome is Outcome.PASS
    assert {"LT-101", "LT-102", "FT-101", "FT-102", "FV-101"} <= set(report.points)
    assert len(report.points["LT-101"]) == 16  # five points and back, and seven of the bands


@pytest.mark.parametrize(
    "mistake", [m for m in MISTAKES if m.by_signals], ids=lambda mistake: mistake.name
)
def test_what_only_the_full_check_can_see_is_found_by_it(bench, mistake):
    assert told(bench.fly(mistake.name)) == []  # at 25 and 75 % it does not show
    wrong = [c for c in bench.signals(mistake.name).checks if c.outcome is Outcome.FAIL]
    assert [check.mistake for check in wrong] == [mistake.found_as], told(wrong)
