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
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

from harness.analysis.law_test import LawStep, check_law
from harness.analysis.loop_models import linearised_models
from harness.analysis.signal_case import LIVE_ZERO_MA, SPAN_MA, TagCheck, ValvePoint
from harness.analysis.signal_check import check_transmitter
from harness.analysis.valve_check import check_valve, refusal_cause
from harness.controllers.block import AUTOMATIC, MANUAL
from harness.domain.models import ControllerSettings
from harness.domain.points import (
    gain_point,
    heartbeat_point,
    integral_time_point,
    mode_point,
    setpoint_point,
    shown_range,
)
from harness.domain.rig import Action, ModbusServerLink
from harness.domain.run import EventKind
from harness.domain.verdict import Outcome
from harness.errors import InvalidRunError
from harness.runtime.signal_probe import SignalProbe

if TYPE_CHECKING:
    from collections.abc import Generator

    from harness.analysis.signal_case import Said
    from harness.domain.rig import Loop
    from harness.runtime.requests import Request
    from harness.runtime.session import Session

    Checks = Generator[Request, Any, list[TagCheck]]
    Wait = Generator[Request, Any, None]

LOW, HIGH = 0.25, 0.75  # where transmitters are forced [fraction of span]
_STAGGER = 0.04  # by which each further one lies elsewhere, so that two can be told apart [-]
_SETPOINTS = (0.7, 0.3)  # ordered in manual, where they move nothing [fraction of span]
_MOVE = 0.03  # of the output, in manual [-]
_ERROR = 0.02  # the input of the block is stepped by this [fraction of span]
_GAIN = 1.0  # ordered for the test of the law [-]
_INTEGRAL_SCANS = 10.0  # integral time ordered for it, in scans [-]
_LAW_SCANS = 6  # scans for which the law is watched [-]
_SETTLE = 2  # scans from when the controller has read a value to when it must say so [-]
_PATIENCE = 8  # scans until a filtered input must have arrived [-]
_LEARN = 6  # scans over which period and delay are measured [-]
_MOST_SCAN = 20.0  # times the rig's scan, after which a controller counts as not reading [-]
_MIDDLE = 0.5


def preflight(session: Session, loop: Loop, *, judge: bool = True) -> Checks:
    """Try a loop's controller before a trial.

    Parameters
    ----------
    session : Session
        A session with a controller outside, which has been found.
    loop : Loop
        The loop.
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
    flight = _Preflight(session, loop)
    checks = yield from flight.run()
    _tell(session, loop, flight.probe, checks)
    wrong = [check for check in checks if check.outcome is not Outcome.PASS]
    if judge and wrong:
        raise InvalidRunError(
            "pre-flight: "
            + "; ".join(sentence(check) for check in wrong)
            + ". No phase was run. Put it right, or skip these checks with --no-preflight"
        )
    return checks


def sentence(check: TagCheck) -> str:
    """Return a check that was not passed, in a sentence.

    Parameters
    ----------
    check : TagCheck
        The check.
    """
    others = f" (or: {', '.join(check.others)})" if check.others else ""
    return f"{check.tag}: {check.mistake}{others}: {check.evidence}. Look at {check.look_at}"


def check_document(check: TagCheck) -> dict[str, object]:
    """Return a check as JSON-able facts.

    Parameters
    ----------
    check : TagCheck
        The check.
    """
    return {
        "tag": check.tag,
        "verdict": check.outcome.value,
        "mistake": check.mistake or None,
        "evidence": check.evidence,
        "look_at": check.look_at or None,
        "others": list(check.others),
        "notes": list(check.notes),
    }


class _Preflight:
    def __init__(self, session: Session, loop: Loop) -> None:
        self.probe = SignalProbe(session=session, loop=loop)
        self._session = session
        self._loop = loop
        self._base = session.engine.output(loop.output)

    def run(self) -> Checks:
        """Carry out every check that this controller can be given."""
        probe = self.probe
        if not self._loop.orders.by_link_alone:
            # Nobody can put it in manual from here, and forced inputs would move the plant.
            yield from probe.wait(_LEARN * probe.scan)
            return [
                TagCheck(
                    tag=self._loop.tag,
                    outcome=Outcome.PASS,
                    evidence="orders do not go over the link: inputs were not forced",
                    notes=("use the command signals to check inputs and outputs by hand",),
                )
            ]
        checks = yield from self._hold()
        if not checks:
            checks += yield from self._inputs()
            checks += yield from self._valve()
            checks += self._sign()
            if all(check.outcome is Outcome.PASS for check in checks):
                checks += yield from self._law()
            checks += self._heartbeat()
        yield from self._restore()
        return checks

    def _hold(self) -> Checks:
        """Order manual at the present output, and learn how the controller scans."""
        probe, session = self.probe, self._session
        order = session.order(self._loop, mode=MANUAL, manual_output=self._base)
        most = round(_MOST_SCAN * self._loop.scan / session.rig.tick)
        known = yield from probe.until_read(order, most)
        if not known:
            cause = refusal_cause(tuple(probe.refused) or (session.last_refusal,))
            if cause is not None:
                return [cause_of(self._loop.tag, cause)]
            return [
                TagCheck(
                    tag=self._loop.tag,
                    outcome=Outcome.INVALID,
                    mistake="does not read the rig",
                    evidence=f"it writes {self._loop.output} without having read anything since "
                    f"the order of tick {order}",
                    look_at="whether it reads in every scan, on the connection that it writes on",
                )
            ]
        yield from probe.wait(_LEARN * probe.scan)
        return []

    # What it reads.

    def _inputs(self) -> Checks:
        probe, session = self.probe, self._session
        first = self._loop.process_variable
        read_back = [t.tag for t in session.rig.transmitters if probe.mapped(t.tag)]
        tags = [first, *(tag for tag in read_back if tag != first)]
        said: dict[str, list[Said]] = {tag: [] for tag in tags}
        setpoint, mode = setpoint_point(self._loop.tag), mode_point(self._loop.tag)
        said[setpoint], said[mode] = [], []
        for stage, own in enumerate((LOW, HIGH)):
            currents = {}
            for place, tag in enumerate(tags):
                # The others lie opposite, and apart from one another.
                fraction = own if place == 0 else 1.0 - own + (0.5 - own) * 2 * _STAGGER * place
                currents[tag] = LIVE_ZERO_MA + SPAN_MA * fraction
            since = max(probe.force(tag, current) for tag, current in currents.items())
            shown = shown_range(session.rig.transmitter(first))
            since = max(
                since,
                session.order(self._loop, setpoint=shown.from_fraction(_SETPOINTS[stage])),
            )
            currents[setpoint] = LIVE_ZERO_MA + SPAN_MA * _SETPOINTS[stage]
            currents[mode] = LIVE_ZERO_MA  # manual
            heard = yield from self._listen(currents, since)
            for name, one in heard.items():
                said[name].append(one)
        probe.let_go()
        return [
            self._input_check(name, said[name])
            for name in (*tags, setpoint, mode)
            if name == first or probe.mapped(name)
        ]

    def _input_check(self, name: str, said: list[Said]) -> TagCheck:
        if not self.probe.mapped(name):
            return TagCheck(
                tag=name,
                outcome=Outcome.PASS,
                evidence="not read back by the controller, so not checked",
                notes=(f"map {name}.RB, or check it with the command signals",),
            )
        return check_transmitter(self.probe.case(name, said))

    def _listen(
        self, currents: dict[str, float], since: int
    ) -> Generator[Request, Any, dict[str, Said]]:
        """Wait until all is said right, or the patience is out; return what is said then."""
        probe = self.probe
        yield from probe.until_read(since + _SETTLE * probe.scan, _PATIENCE * probe.scan)
        for _ in range(_PATIENCE):
            heard = {name: probe.said(name, since, ma) for name, ma in currents.items()}
            cases = (
                probe.case(name, [one]) for name, one in heard.items() if probe.mapped(name)
            )
            if all(check_transmitter(case).outcome is Outcome.PASS for case in cases):
                return heard
            yield from probe.wait(probe.scan)
        return {name: probe.said(name, since, ma) for name, ma in currents.items()}

    # What it writes.

    def _valve(self) -> Checks:
        """Move the output a little in manual, and back."""
        move = _MOVE if self._base + _MOVE <= self._loop.output_high else -_MOVE
        home = yield from move_valve(self.probe, self._base)
        away = yield from move_valve(self.probe, self._base + move)
        back = yield from move_valve(self.probe, self._base)
        return [check_valve(self._loop.output, (home, away, back))]

    # How it acts.

    def _law(self) -> Checks:
        """Open the loop by holding the process variable, and step it for a few scans."""
        probe, session, loop = self.probe, self._session, self._loop
        shown = shown_range(session.rig.transmitter(loop.process_variable))
        scan = probe.scan * session.rig.tick
        time = _INTEGRAL_SCANS * scan
        units = self._takes_settings()
        if units:
            settings = ControllerSettings(gain=_GAIN, integral_time=time, action=loop.action)
            session.order(loop, settings=settings)
        middle = LIVE_ZERO_MA + SPAN_MA * _MIDDLE
        held = probe.force(loop.process_variable, middle)
        session.order(loop, setpoint=shown.from_fraction(_MIDDLE))
        yield from probe.until_read(held + _SETTLE * probe.scan, _PATIENCE * probe.scan)
        order = session.order(loop, mode=AUTOMATIC)
        yield from probe.until_read(order + _SETTLE * probe.scan, _PATIENCE * probe.scan)
        checks = []
        if probe.mapped(mode_point(loop.tag)):
            automatic = LIVE_ZERO_MA + SPAN_MA
            said = probe.said(mode_point(loop.tag), order, automatic)
            checks.append(check_transmitter(probe.case(mode_point(loop.tag), [said])))
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
        gain = linearised_models(self._session.engine, self._loop).output.gain
        needed = Action.REVERSE if gain > 0.0 else Action.DIRECT
        if needed is self._loop.action:
            return []
        return [
            TagCheck(
                tag=self._loop.tag,
                outcome=Outcome.FAIL,
                mistake="action of the rig file",
                evidence=f"more output moves the process variable by {gain:+.3g} %/%, which asks "
                f"for {needed.value} action; the rig file says {self._loop.action.value}",
                look_at="action of the loop in the rig file, and in the controller",
            )
        ]

    def _inside(self, output: float) -> bool:
        return self._loop.output_low < output < self._loop.output_high

    def _watch(
        self, since: int, before: float
    ) -> Generator[Request, Any, list[tuple[float, float]]]:
        """Return time and output of each scan that read the stepped input."""
        probe, session, loop = self.probe, self._session, self._loop
        found: list[tuple[float, float]] = []
        last = -1
        first = 0
        for _ in range((_LAW_SCANS + _PATIENCE) * probe.scan):
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

    def _takes_settings(self) -> bool:
        """Return whether gain and integral time go over the link that the controller uses."""
        contact = self._session.last_writer.get(self._loop.output)
        wanted = {gain_point(self._loop.tag), integral_time_point(self._loop.tag)}
        for link in self._session.rig.links:
            if contact is None or link.name != contact.link:
                continue
            if isinstance(link, ModbusServerLink):
                return wanted <= {item.point for item in link.items}
            return not link.points or wanted <= set(link.points)
        return False

    def _heartbeat(self) -> list[TagCheck]:
        """Judge the heartbeat by its counter, where there is one."""
        name = heartbeat_point(self._loop.tag)
        beats = self.probe.heartbeats
        if name not in self._session.last_writer:
            return []
        if len(beats) > 1:
            return [
                TagCheck(tag=name, outcome=Outcome.PASS, evidence=f"{len(beats)} counts seen")
            ]
        return [
            TagCheck(
                tag=name,
                outcome=Outcome.FAIL,
                mistake="heartbeat stuck",
                evidence=f"it is written, but always as {next(iter(beats), math.nan):g}, over "
                f"{self.probe.quality.scans} scans",
                look_at="whether the controller counts it up in every scan",
            )
        ]

    def _restore(self) -> Wait:
        """Put instruments, mode and output back where they were."""
        probe, session, loop = self.probe, self._session, self._loop
        order = session.order(loop, mode=MANUAL, manual_output=self._base)
        yield from probe.until_read(order + probe.scan, _PATIENCE * probe.scan)
        probe.let_go()
        yield from probe.wait(2)
        order = session.order(loop, setpoint=session.engine.measured(loop.process_variable))
        yield from probe.until_read(order + probe.scan, _PATIENCE * probe.scan)


def move_valve(probe: SignalProbe, output: float) -> Generator[Request, Any, ValvePoint]:
    """Order an output in manual and return what arrives.

    Parameters
    ----------
    probe : SignalProbe
        Of the loop.
    output : float
        Output [-].

    Returns
    -------
    ValvePoint
        What the controller was told, and what came.
    """
    session, loop = probe.session, probe.loop
    probe.refused.clear()
    order = session.order(loop, manual_output=output)
    yield from probe.until_read(order + _SETTLE * probe.scan, _PATIENCE * probe.scan)
    for _ in range(_PATIENCE):
        if abs(session.engine.output(loop.output) - output) < 1e-3:  # noqa: PLR2004  arrived
            break
        yield from probe.wait(probe.scan)
    came = session.watches[loop.tag].read_tick >= order
    return ValvePoint(
        told=100.0 * output,
        received=100.0 * session.engine.output(loop.output) if came else None,
        refused=tuple(probe.refused),
    )


def cause_of(tag: str, cause: TagCheck) -> TagCheck:
    """Return a cause without tag as the check of a tag.

    Parameters
    ----------
    tag : str
        The tag.
    cause : TagCheck
        From ``refusal_cause``.
    """
    return TagCheck(
        tag=tag,
        outcome=cause.outcome,
        mistake=cause.mistake,
        evidence=cause.evidence,
        look_at=cause.look_at,
    )


def _tell(session: Session, loop: Loop, probe: SignalProbe, checks: list[TagCheck]) -> None:
    """Record what was found, as an event."""
    wrong = [check for check in checks if check.outcome is not Outcome.PASS]
    quality = probe.quality
    text = f"{len(checks) - len(wrong)} of {len(checks)} checks passed"
    if not math.isnan(quality.period):
        text += (
            f"; scans every {quality.period:.3g} s, acts {quality.delay:.3g} s after its image"
        )
    facts = {key: None if value != value else value for key, value in asdict(quality).items()}  # noqa: PLR0124  not a number
    session.event(
        EventKind.PREFLIGHT,
        loop.tag,
        text,
        {
            "passed": not wrong,
            "checks": [check_document(check) for check in checks],
            "controller": facts,
            "disturbance": {"output": _MOVE, "input_of_block": _ERROR, "gain": _GAIN},
        },
    )
