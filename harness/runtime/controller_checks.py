"""What the pre-flight and the check of all signals do alike with a controller."""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass, field, replace
from typing import TYPE_CHECKING, Any

from harness.analysis.signal_case import TagCheck, ValvePoint, band_of
from harness.analysis.signal_check import check_transmitter
from harness.analysis.valve_check import refusal_cause
from harness.controllers.block import MANUAL
from harness.domain.points import heartbeat_point
from harness.domain.verdict import Outcome
from harness.errors import InvalidRunError
from harness.runtime.order_words import Order
from harness.runtime.requests import Advance

if TYPE_CHECKING:
    from collections.abc import Generator

    from harness.analysis.signal_case import Said
    from harness.runtime.orders import OrderDesk
    from harness.runtime.requests import Request
    from harness.runtime.session import Session
    from harness.runtime.signal_probe import SignalProbe

    Checks = Generator[Request, Any, list[TagCheck]]
    Wait = Generator[Request, Any, None]

SETTLE = 2  # scans from when the controller has read a value to when it must say so [-]
PATIENCE = 8  # scans until a filtered input must have arrived [-]
_LEARN = 4  # scans over which period and delay are measured first [-]
_MOST_SCAN = 20.0  # times the rig's scan, after which a controller counts as not reading [-]
_ARRIVED = 1e-3  # of an output [-]


@dataclass(slots=True)
class ControllerChecks:
    """Steps with one loop's controller.

    Parameters
    ----------
    session : Session
        The session.
    probe : SignalProbe
        Listens to the loop's controller.
    desk : OrderDesk or None
        Gives orders that do not go over the link; None where all of them do.
    base : float
        Output to come back to [-].
    """

    session: Session
    probe: SignalProbe
    desk: OrderDesk | None
    base: float = field(init=False)

    def __post_init__(self) -> None:
        self.base = self.session.engine.output(self.probe.loop.output)

    @property
    def by_link(self) -> bool:
        """Return whether every order goes over the link."""
        return self.probe.loop.orders.by_link_alone

    def hold(self) -> Checks:
        """Order manual at the present output, and learn how the controller scans.

        Returns
        -------
        list of TagCheck
            Empty, unless the controller does not follow.
        """
        probe, loop = self.probe, self.probe.loop
        if not self.by_link and self.desk is not None:
            order = Order(loop=loop.tag, mode=MANUAL, manual_output=self.base)
            yield from self.desk.give(order)
        tick = self.session.tick
        if self.by_link:
            tick = self.session.order(loop, mode=MANUAL, manual_output=self.base)
        most = round(_MOST_SCAN * loop.scan / self.session.rig.tick)
        known = yield from probe.until_read(tick, most)
        if not known:
            return [self._deaf(tick)]
        yield from probe.wait(_LEARN * probe.scan)
        return []

    def _deaf(self, tick: int) -> TagCheck:
        loop = self.probe.loop
        cause = refusal_cause(tuple(self.probe.refused) or (self.session.last_refusal,))
        if cause is not None:
            return replace(cause, tag=loop.tag)
        return TagCheck(
            tag=loop.tag,
            outcome=Outcome.INVALID,
            mistake="does not read the rig",
            evidence=f"it writes {loop.output} without having read anything since the order of "
            f"tick {tick}",
            look_at="whether it reads in every scan, on the connection that it writes on",
        )

    def listen(
        self, currents: dict[str, float], since: int
    ) -> Generator[Request, Any, dict[str, Said]]:
        """Wait until all is said right, or the patience is out.

        Parameters
        ----------
        currents : dict of str to float
            Current forced by point, or the one that an order stands for [mA].
        since : int
            First tick that shows them [ticks].

        Returns
        -------
        dict of str to Said
            What is said then.
        """
        probe = self.probe
        yield from probe.until_read(since + SETTLE * probe.scan, PATIENCE * probe.scan)
        if all(band_of(ma).failed or band_of(ma).undefined for ma in currents.values()):
            yield from probe.wait(SETTLE * probe.scan)  # there is no right value to wait for
            return {name: probe.said(name, since, ma) for name, ma in currents.items()}
        for _ in range(PATIENCE):
            heard = {name: probe.said(name, since, ma) for name, ma in currents.items()}
            cases = (
                probe.case(name, [one]) for name, one in heard.items() if probe.heard_of(name)
            )
            if all(_settled(check_transmitter(case)) for case in cases):
                return heard
            yield from probe.wait(probe.scan)
        return {name: probe.said(name, since, ma) for name, ma in currents.items()}

    def move(self, output: float) -> Generator[Request, Any, ValvePoint]:
        """Order an output in manual and return what arrives.

        Parameters
        ----------
        output : float
            Output [-].

        Returns
        -------
        ValvePoint
            What the controller was told, and what came.
        """
        session, probe, loop = self.session, self.probe, self.probe.loop
        probe.refused.clear()
        order = session.tick
        if self.by_link:
            order = session.order(loop, manual_output=output)
        elif self.desk is not None:
            yield from self.desk.give(Order(loop=loop.tag, manual_output=output))
        yield from probe.until_read(order + SETTLE * probe.scan, PATIENCE * probe.scan)
        for _ in range(PATIENCE):
            if abs(session.engine.output(loop.output) - output) < _ARRIVED:
                break
            yield from probe.wait(probe.scan)
        came = session.watches[loop.tag].read_tick >= order
        return ValvePoint(
            told=100.0 * output,
            received=100.0 * session.engine.output(loop.output) if came else None,
            refused=tuple(probe.refused),
        )

    def heartbeat(self) -> list[TagCheck]:
        """Judge the heartbeat by its counter, where there is one."""
        name = heartbeat_point(self.probe.loop.tag)
        beats = self.probe.heartbeats
        if name not in self.session.last_writer:
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

    def restore(self) -> Wait:
        """Put instruments, mode and output back where they were."""
        probe, session, loop = self.probe, self.session, self.probe.loop
        if not self.by_link:
            probe.let_go()
            yield from probe.wait(2)
            return
        order = session.order(loop, mode=MANUAL, manual_output=self.base)
        yield from probe.until_read(order + probe.scan, PATIENCE * probe.scan)
        probe.let_go()
        yield from probe.wait(2)
        order = session.order(loop, setpoint=session.engine.measured(loop.process_variable))
        yield from probe.until_read(order + probe.scan, PATIENCE * probe.scan)


def _settled(check: TagCheck) -> bool:
    return check.outcome is Outcome.PASS


def find_controller(
    session: Session, tag: str, wait: float
) -> Generator[Request, Any, TagCheck | None]:
    """Wait until a controller writes a loop's output.

    Parameters
    ----------
    session : Session
        The session.
    tag : str
        Tag of the loop.
    wait : float
        Longest wait [wall s].

    Returns
    -------
    TagCheck or None
        None once it is found; else what is wrong, from what was refused meanwhile.
    """
    loop = session.rig.loop(tag)
    refused: dict[str, None] = {}
    for _ in range(round(wait * session.pace / session.rig.tick)):
        if session.watches[tag].found:
            return None
        yield Advance(ticks=1)
        if session.last_refusal:
            refused[session.last_refusal] = None
    if session.watches[tag].found:
        return None
    cause = refusal_cause(tuple(refused))
    if cause is not None:
        return replace(cause, tag=tag)
    seen = ", ".join(session.connected.values())
    return TagCheck(
        tag=tag,
        outcome=Outcome.INVALID,
        mistake="no controller",
        evidence=f"nobody wrote {loop.output} within {wait:g} s; "
        + (f"connected: {seen}" if seen else "nobody is connected"),
        look_at="host, port and unit, and the address that it writes to",
    )


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


def controller_facts(probe: SignalProbe) -> dict[str, object]:
    """Return how the controller scans, as JSON-able facts.

    Parameters
    ----------
    probe : SignalProbe
        It has listened for a while.

    Returns
    -------
    dict
        Period [s], jitter [s], delay [s], missed scans [-], scans [-]; null where not known.
    """
    return {
        key: value if math.isfinite(value) else None
        for key, value in asdict(probe.quality).items()
    }


def require_passed(checks: list[TagCheck]) -> None:
    """End a run whose controller did not pass.

    Parameters
    ----------
    checks : list of TagCheck
        Every check.

    Raises
    ------
    InvalidRunError
        It names each mistake, the evidence and where to look.
    """
    wrong = [check for check in checks if check.outcome not in {Outcome.PASS, Outcome.SHOWN}]
    if wrong:
        raise InvalidRunError(
            f"pre-flight: {'; '.join(sentence(check) for check in wrong)}. No phase was run. Put it "
            "right, or skip these checks with --no-preflight"
        )
