"""Before the clock of a trial starts: does the controller read, write and act as it should.

All in manual, but for one short test: each transmitter that the controller reads back is forced to
25 and 75 % of its range, setpoint and mode are read back, one small move of the output and back
confirms the valve. Then, with the process variable forced still, so that the loop is open, the
block is put in automatic for a few scans and its input stepped by 2 %: the output must go the
right way, by the gain and the integral time ordered. Instruments and output are then let go where
they were; the plant has been moved by less than a step of the trial, and the phase that follows
waits for a steady state.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from harness.analysis.law_test import LawStep, check_law
from harness.analysis.loop_models import linearised_models
from harness.analysis.signal_case import LIVE_ZERO_MA, SPAN_MA, TagCheck
from harness.analysis.signal_check import check_transmitter
from harness.analysis.valve_check import check_valve
from harness.controllers.block import AUTOMATIC
from harness.domain.models import ControllerSettings
from harness.domain.orders import OrderBy
from harness.domain.points import (
    gain_point,
    integral_time_point,
    mode_point,
    read_back_point,
    setpoint_point,
    shown_range,
)
from harness.domain.rig import Action, ModbusServerLink
from harness.domain.run import EventKind
from harness.domain.verdict import Outcome
from harness.runtime.controller_checks import (
    PATIENCE,
    SETTLE,
    ControllerChecks,
    check_document,
    controller_facts,
    require_passed,
)
from harness.runtime.signal_probe import LEAST_PATIENCE, SignalProbe

if TYPE_CHECKING:
    from collections.abc import Generator

    from harness.analysis.signal_case import Said
    from harness.domain.rig import Loop
    from harness.runtime.controller_checks import Checks
    from harness.runtime.orders import OrderDesk
    from harness.runtime.requests import Request
    from harness.runtime.session import Session

LOW, HIGH = 0.25, 0.75  # where transmitters are forced [fraction of span]
_STAGGER = 0.04  # by which each further one lies elsewhere, so that two can be told apart [-]
_SETPOINTS = (0.7, 0.3)  # ordered in manual, where they move nothing [fraction of span]
_MOVE = 0.03  # of the output, in manual [-]
_ERROR = 0.02  # the input of the block is stepped by this [fraction of span]
_GAIN = 0.8  # ordered for the test of the law: no power of ten, so that a wrong unit shows [-]
_INTEGRAL_SCANS = 10.0  # integral time ordered for it, in scans [-]
_LAW_SCANS = 6  # scans for which the law is watched [-]
_MIDDLE = 0.5


def preflight(
    session: Session, loop: Loop, desk: OrderDesk | None = None, *, judge: bool = True
) -> Checks:
    """Try a loop's controller before a trial.

    Parameters
    ----------
    session : Session
        A session with a controller outside, which has been found.
    loop : Loop
        The loop.
    desk : OrderDesk or None
        Gives the orders that do not go over the link.
    judge : bool
        Whether a check that is not passed ends the run.

    Yields
    ------
    Request
        Time to pass.

    Returns
    -------
    list of TagCheck
        Every check, in order.

    Raises
    ------
    InvalidRunError
        When a check is not passed; it names the mistake, the evidence and where to look.
    """
    flight = _Preflight(session, loop, desk)
    start = session.tick
    checks = yield from flight.run()
    _tell(flight, checks, (session.tick - start) * session.rig.tick)
    if judge:
        require_passed(checks)
    return checks


class _Preflight:
    def __init__(self, session: Session, loop: Loop, desk: OrderDesk | None) -> None:
        self.probe = SignalProbe(session=session, loop=loop)
        self.session = session
        self.loop = loop
        self._steps = ControllerChecks(session=session, probe=self.probe, desk=desk)
        # Now, while nothing waits for a tick: it takes a moment.
        self._before: ControllerSettings | None = None
        self._plant_gain = linearised_models(session.engine, loop).output.gain

    def run(self) -> Checks:
        """Carry out every check that this controller can be given."""
        steps = self._steps
        checks = yield from steps.hold()
        if checks:
            return checks
        checks += yield from self._inputs()
        checks += self._sign()
        if steps.by_link:
            checks += yield from self._valve()
            if all(check.outcome in {Outcome.PASS, Outcome.SHOWN} for check in checks):
                checks += yield from self._law()
        else:
            checks.append(
                TagCheck(
                    tag=self.loop.tag,
                    outcome=Outcome.SHOWN,
                    evidence="valve and direction not tried: its orders are typed in",
                )
            )
        checks += steps.heartbeat()
        yield from steps.restore()
        if self._before is not None:
            self.session.order(self.loop, settings=self._before)
        return checks

    # What it reads.

    def _inputs(self) -> Checks:
        probe, session, orders = self.probe, self.session, self.loop.orders
        first = self.loop.process_variable
        read_back = [t.tag for t in session.rig.transmitters if probe.heard_of(t.tag)]
        tags = [first, *(tag for tag in read_back if tag != first)]
        setpoint, mode = setpoint_point(self.loop.tag), mode_point(self.loop.tag)
        told = [setpoint] if orders.setpoint is OrderBy.LINK else []
        told += [mode] if orders.mode is OrderBy.LINK else []
        said: dict[str, list[Said]] = {tag: [] for tag in (*tags, *told)}
        for stage, own in enumerate((LOW, HIGH)):
            currents = {}
            for place, tag in enumerate(tags):
                # The others lie opposite, and apart from one another.
                fraction = own if place == 0 else 1.0 - own + (own - 0.5) * 2 * _STAGGER * place
                currents[tag] = LIVE_ZERO_MA + SPAN_MA * fraction
            since = max(probe.force(tag, current) for tag, current in currents.items())
            if setpoint in told:
                shown = shown_range(session.rig.transmitter(first))
                session.order(self.loop, setpoint=shown.from_fraction(_SETPOINTS[stage]))
            currents[setpoint] = LIVE_ZERO_MA + SPAN_MA * _SETPOINTS[stage]
            currents[mode] = LIVE_ZERO_MA  # manual
            heard = yield from self._steps.listen(
                {name: currents[name] for name in said}, since
            )
            for name, one in heard.items():
                said[name].append(one)
        probe.let_go()
        return [
            self._input_check(name, said[name])
            for name in said
            if name == first or probe.heard_of(name)
        ]

    def _input_check(self, name: str, said: list[Said]) -> TagCheck:
        if self.probe.heard_of(name):
            return check_transmitter(self.probe.case(name, said))
        others = [t.tag for t in self.session.rig.transmitters if self.probe.heard_of(t.tag)]
        if others:
            return TagCheck(
                tag=name,
                outcome=Outcome.INVALID,
                mistake="no value",
                evidence=f"forced to 25 and 75 %, nothing came in {read_back_point(name)}, while "
                f"{', '.join(others)} are read back: the controller takes it for failed",
                look_at="type, word order and address of that tag in the controller",
            )
        return TagCheck(
            tag=name,
            outcome=Outcome.SHOWN,
            evidence="not read back by the controller, so not checked",
            notes=(f"map {read_back_point(name)}, or check it with the command signals",),
        )

    # What it writes.

    def _valve(self) -> Checks:
        """Move the output a little in manual, and back."""
        steps = self._steps
        move = _MOVE if steps.base + _MOVE <= self.loop.output_high else -_MOVE
        away = yield from steps.move(steps.base + move)
        back = yield from steps.move(steps.base)
        return [check_valve(self.loop.output, (away, back))]

    # How it acts.

    def _law(self) -> Checks:
        """Open the loop by holding the process variable, and step it for a few scans."""
        probe, session, loop = self.probe, self.session, self.loop
        shown = shown_range(session.rig.transmitter(loop.process_variable))
        scan = probe.scan * session.rig.tick
        time = _INTEGRAL_SCANS * scan
        units = self._takes_settings()
        if units:
            self._before = self._settings()
            settings = ControllerSettings(gain=_GAIN, integral_time=time, action=loop.action)
            session.order(loop, settings=settings)
        middle = LIVE_ZERO_MA + SPAN_MA * _MIDDLE
        held = probe.force(loop.process_variable, middle)
        session.order(loop, setpoint=shown.from_fraction(_MIDDLE))
        yield from probe.until_read(held + probe.scan, PATIENCE * probe.scan)
        order = session.order(loop, mode=AUTOMATIC)
        yield from probe.until_read(order + SETTLE * probe.scan, PATIENCE * probe.scan)
        checks = []
        if probe.heard_of(mode_point(loop.tag)):
            heard = yield from self._steps.listen(
                {mode_point(loop.tag): LIVE_ZERO_MA + SPAN_MA}, order
            )
            case = probe.case(mode_point(loop.tag), list(heard.values()))
            checks.append(check_transmitter(case))
        sign = 1.0 if loop.action is Action.REVERSE else -1.0
        before = session.engine.output(loop.output)
        since = probe.force(loop.process_variable, middle - sign * SPAN_MA * _ERROR)
        step = yield from self._watch(since, before)
        found = LawStep(
            times=[time for time, _ in step],
            outputs=[output for _, output in step],
            error=_ERROR,
            scan=scan,
            gain=_GAIN,
            integral_time=time,
            span=shown.span,
            limited=any(not self._inside(before + output) for _, output in step),
        )
        return [*checks, check_law(loop.tag, found, units=units)]

    def _sign(self) -> list[TagCheck]:
        """Hold the action that the rig file says against what the plant does."""
        gain = self._plant_gain
        needed = Action.REVERSE if gain > 0.0 else Action.DIRECT
        if needed is self.loop.action:
            return []
        return [
            TagCheck(
                tag=self.loop.tag,
                outcome=Outcome.FAIL,
                mistake="action of the rig file",
                evidence=f"more output moves the process variable by {gain:+.3g} %/%, which asks "
                f"for {needed.value} action; the rig file says {self.loop.action.value}",
                look_at="action of the loop in the rig file, and in the controller",
            )
        ]

    def _inside(self, output: float) -> bool:
        return self.loop.output_low < output < self.loop.output_high

    def _watch(
        self, since: int, before: float
    ) -> Generator[Request, Any, list[tuple[float, float]]]:
        """Return time and output of each scan that read the stepped input."""
        probe, session, loop = self.probe, self.session, self.loop
        found: list[tuple[float, float]] = []
        last = -1
        first = 0
        span = probe.span((_LAW_SCANS + PATIENCE) * probe.scan, least=LEAST_PATIENCE)
        while not span.over:
            yield from probe.step()
            read = session.watches[loop.tag].read_tick
            if read < since or read == last:
                continue
            first = first if found else read
            last = read
            moved = session.engine.output(loop.output) - before
            found.append(((read - first) * session.rig.tick, moved))
            if len(found) == _LAW_SCANS:
                break
        return found

    def _settings(self) -> ControllerSettings | None:
        """Return the settings ordered before; None where there were none."""
        image = self.session.image()
        gain, time = (
            image[name][1]
            for name in (gain_point(self.loop.tag), integral_time_point(self.loop.tag))
        )
        if not gain > 0.0:
            return None
        return ControllerSettings(
            gain=gain, integral_time=time or None, action=self.loop.action
        )

    def _takes_settings(self) -> bool:
        """Return whether gain and integral time go over the link that the controller uses."""
        contact = self.session.last_writer.get(self.loop.output)
        wanted = {gain_point(self.loop.tag), integral_time_point(self.loop.tag)}
        for link in self.session.rig.links:
            if contact is None or link.name != contact.link:
                continue
            if isinstance(link, ModbusServerLink):
                return wanted <= {item.point for item in link.items}
            return not link.points or wanted <= set(link.points)
        return False


def _tell(flight: _Preflight, checks: list[TagCheck], duration: float) -> None:
    """Record what was found, as an event."""
    quality = flight.probe.quality
    counted = [check for check in checks if check.outcome is not Outcome.SHOWN]
    passed = sum(check.outcome is Outcome.PASS for check in counted)
    text = f"{passed} of {len(counted)} checks passed in {duration:.3g} s"
    if not math.isnan(quality.period):
        text += (
            f"; scans every {quality.period:.3g} s, acts {quality.delay:.3g} s after its image"
        )
    flight.session.event(
        EventKind.PREFLIGHT,
        flight.loop.tag,
        text,
        {
            "passed": passed == len(counted),
            "duration": duration,
            "checks": [check_document(check) for check in checks],
            "controller": controller_facts(flight.probe),
            "disturbance": {"output": _MOVE, "input_of_block": _ERROR, "gain": _GAIN},
        },
    )
