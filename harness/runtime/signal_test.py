"""Every signal between rig and controller, checked by hand as at a loop check, but by itself.

Each transmitter is forced to 0, 25, 50, 75, 100 % and back, to the ends of its measuring band, into
the bands between, and to both failure currents of NAMUR NE 43; each valve is ordered to 0, 25, 50,
75, 100 % and back in manual. What the controller says is read back where it says so over the link,
else somebody is asked. Transmitters are forced at the same time but each to another value, so that
two that are exchanged do not look alike.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

from harness.analysis.signal_case import Said, TagCheck, band_of, fraction_of
from harness.analysis.signal_check import check_transmitter
from harness.analysis.valve_check import check_valve
from harness.domain.points import shown_range
from harness.domain.verdict import Outcome
from harness.runtime.controller_checks import (
    ControllerChecks,
    controller_facts,
    find_controller,
)
from harness.runtime.signal_asking import ASK_TIMEOUT, SignalDesk
from harness.runtime.signal_probe import SignalProbe

if TYPE_CHECKING:
    from collections.abc import Generator, Sequence

    from harness.analysis.signal_case import ValvePoint
    from harness.domain.rig import Loop
    from harness.runtime.answers import Answers
    from harness.runtime.orders import OrderDesk
    from harness.runtime.requests import Request
    from harness.runtime.session import Session

FIVE_POINTS = (4.0, 8.0, 12.0, 16.0, 20.0, 16.0, 12.0, 8.0)  # a round, without its last [mA]
# The ends of the measuring band, between the bands, failure (NAMUR NE 43), and back [mA].
BANDS = (3.8, 20.5, 3.7, 20.75, 3.6, 21.0, 12.0)
VALVE_POINTS = (0.0, 0.25, 0.5, 0.75, 1.0, 0.75, 0.5, 0.25, 0.0)  # [-]
_TOGETHER = 4  # transmitters forced at once: each begins the round two points after the other
_READ_BY_EYE = 0.005  # of span; a display of three digits, and its last digit moving [-]


@dataclass(slots=True)
class SignalReport:
    """What the check of all signals found.

    Parameters
    ----------
    checks : list of TagCheck
        By tag, in order.
    points : dict of str to list
        Test points of each tag, JSON-able.
    controllers : dict of str to dict
        How each loop's controller scans, JSON-able.
    """

    checks: list[TagCheck] = field(default_factory=list)
    points: dict[str, list[dict[str, object]]] = field(default_factory=dict)
    controllers: dict[str, dict[str, object]] = field(default_factory=dict)

    @property
    def outcome(self) -> Outcome:
        """Return fail before invalid before pass; invalid where nothing was checked."""
        found = {check.outcome for check in self.checks}
        for outcome in (Outcome.FAIL, Outcome.INVALID, Outcome.PASS):
            if outcome in found:
                return outcome
        return Outcome.INVALID


@dataclass(frozen=True, slots=True, kw_only=True)
class SignalPlan:
    """Who is asked, and how long is waited.

    Parameters
    ----------
    answers : Answers
        Where answers of people come from.
    desk : OrderDesk
        Gives orders that do not go over the link.
    wait : float
        Longest wait for a controller to be there [wall s].
    ask_timeout : float
        Longest wait for an answer [wall s].
    """

    answers: Answers
    desk: OrderDesk
    wait: float
    ask_timeout: float = ASK_TIMEOUT


def signal_test(
    session: Session, plan: SignalPlan, report: SignalReport
) -> Generator[Request, Any, None]:
    """Check every signal of a rig.

    Parameters
    ----------
    session : Session
        A session with links.
    plan : SignalPlan
        Who is asked, and how long is waited.
    report : SignalReport
        Where what is found goes, as it is found.

    Yields
    ------
    Request
        Time to pass.
    """
    asked: dict[str, _LoopTest] = {}
    for loop in session.rig.loops:
        nobody = yield from find_controller(session, loop.tag, plan.wait)
        if nobody is not None:
            report.checks.append(nobody)
            continue
        test = _LoopTest(session, loop, plan, report)
        yield from test.run()
        for transmitter in session.rig.transmitters:
            if transmitter.tag not in report.points:
                asked.setdefault(transmitter.tag, test)
    for tag, test in asked.items():
        if tag not in report.points:
            yield from test.ask_about(tag)


class _LoopTest:
    def __init__(
        self, session: Session, loop: Loop, plan: SignalPlan, report: SignalReport
    ) -> None:
        self._session = session
        self._loop = loop
        self._plan = plan
        self._report = report
        self._probe = SignalProbe(session=session, loop=loop)
        self._steps = ControllerChecks(session=session, probe=self._probe, desk=plan.desk)
        self._people = SignalDesk(
            probe=self._probe, answers=plan.answers, timeout=plan.ask_timeout
        )

    def run(self) -> Generator[Request, Any, None]:
        """Check the loop's valve, and every transmitter that its controller reads back."""
        report, steps = self._report, self._steps
        deaf = yield from steps.hold()
        if deaf:
            report.checks += deaf
            return
        yield from self._transmitters()
        yield from self._valve()
        report.checks += steps.heartbeat()
        yield from steps.restore()
        report.controllers[self._loop.tag] = controller_facts(self._probe)

    # Transmitters.

    def _transmitters(self) -> Generator[Request, Any, None]:
        tags = [
            transmitter.tag
            for transmitter in self._session.rig.transmitters
            if self._probe.heard_of(transmitter.tag) or self._must(transmitter.tag)
        ]
        for first in range(0, len(tags), _TOGETHER):
            yield from self._together(tags[first : first + _TOGETHER])

    def _must(self, tag: str) -> bool:
        """Return whether a tag should have been read back: its loop's, beside others that are."""
        others = any(self._probe.heard_of(t.tag) for t in self._session.rig.transmitters)
        return others and tag == self._loop.process_variable

    def _together(self, tags: Sequence[str]) -> Generator[Request, Any, None]:
        probe = self._probe
        rounds = {tag: _round(place) for place, tag in enumerate(tags)}
        said: dict[str, list[Said]] = {tag: [] for tag in tags}
        for step in range(len(FIVE_POINTS) + 1 + len(BANDS)):
            currents = {tag: rounds[tag][step] for tag in tags}
            since = max(probe.force(tag, current) for tag, current in currents.items())
            heard = yield from self._steps.listen(currents, since)
            for tag, one in heard.items():
                said[tag].append(one)
        probe.let_go()
        for tag in tags:
            self._take(tag, said[tag], check_transmitter(probe.case(tag, said[tag])))

    def ask_about(self, tag: str) -> Generator[Request, Any, None]:
        """Ask people what the controller shows for a tag at each point."""
        report, probe = self._report, self._probe
        if not self._plan.answers.how:
            report.points[tag] = []
            report.checks.append(
                TagCheck(
                    tag=tag,
                    outcome=Outcome.SHOWN,
                    evidence="not read back, and nobody here to ask: not checked",
                    notes=(f"map {tag}.RB, run in a terminal, or give --answers FILE",),
                )
            )
            return
        unit = shown_range(self._session.rig.transmitter(tag)).unit
        said = []
        for current in (*_round(0)[: len(FIVE_POINTS) + 1], *BANDS[-3:-1]):
            since = probe.force(tag, current)
            yield from probe.until_read(since, probe.scan)
            value = yield from self._people.ask(tag, unit)
            if value is None:
                break
            one = probe.said(tag, since, current)
            said.append(replace(one, said=value))
        probe.let_go()
        case = replace(probe.case(tag, said), tolerance=_READ_BY_EYE)
        self._take(tag, said, check_transmitter(case))

    def _take(self, tag: str, said: Sequence[Said], check: TagCheck) -> None:
        limits = shown_range(self._session.rig.transmitter(tag))
        self._report.checks.append(check)
        self._report.points[tag] = [
            {
                "current_ma": one.current_ma,
                "band": band_of(one.current_ma).value,
                "transmitted": limits.from_fraction(fraction_of(one.current_ma)),
                "said": one.number if math.isfinite(one.number) else None,
                "unit": limits.unit,
                "age": one.age,
            }
            for one in said
        ]

    # Valves.

    def _valve(self) -> Generator[Request, Any, None]:
        loop = self._loop
        points: list[ValvePoint] = []
        for output in VALVE_POINTS:
            if loop.output_low <= output <= loop.output_high:
                point = yield from self._steps.move(output)
                points.append(point)
        self._report.checks.append(check_valve(loop.output, points))
        self._report.points[loop.output] = [
            {
                "told": point.told,
                "received": point.received,
                "unit": "%",
                "refused": list(point.refused),
            }
            for point in points
        ]


def _round(place: int) -> tuple[float, ...]:
    """Return the currents of a transmitter: its round from where it begins, then the bands."""
    start = 2 * place % len(FIVE_POINTS)
    turned = FIVE_POINTS[start:] + FIVE_POINTS[:start]
    return (*turned, turned[0], *BANDS)
