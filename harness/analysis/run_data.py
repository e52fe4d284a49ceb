"""What scoring reads of a run: the record and nothing else."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.domain.points import shown_range
from harness.domain.run import EventKind
from harness.errors import RecordError

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from harness.domain.rig import Loop, Rig
    from harness.domain.run import Closing, Event, RunHeader
    from harness.domain.signals import Exchange, Range
    from harness.domain.trial import Trial

    Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class PhaseSpan:
    """Where a phase lies in the record.

    Parameters
    ----------
    name, loop, kind, mode : str
        As in the trial.
    change : float
        Size of its step [fraction].
    start : int
        Tick of its order [ticks].
    zero : int
        Metric time zero: the tick at which the controller is known to have the order [ticks].
    end : int
        First tick after it [ticks].
    steady : bool
        Whether it ended steady.
    reason : str
        Why it ended.
    """

    name: str
    loop: str
    kind: str
    mode: str
    change: float
    start: int
    zero: int
    end: int
    steady: bool
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class RunData:
    """A run as scoring sees it.

    Parameters
    ----------
    rig : Rig
        Rig as used.
    trial : Trial
        Trial as used.
    header : RunHeader
        First document.
    trace : dict of str to ndarray, shape (n,)
        Columns by name, with ``"tick"`` and ``"lateness"``; row k is tick k [unit of the column].
    events : tuple of Event
        Events in order.
    exchanges : tuple of (int, Exchange)
        Writes of peers, each with the tick at which it was latched [ticks].
    closing : Closing or None
        Last document.
    """

    rig: Rig
    trial: Trial
    header: RunHeader
    trace: dict[str, Floats]
    events: tuple[Event, ...]
    exchanges: tuple[tuple[int, Exchange], ...]
    closing: Closing | None

    @property
    def external(self) -> bool:
        """Return whether a controller outside the program closed the loop."""
        return not self.header.controller.startswith("builtin")

    @property
    def rows(self) -> int:
        """Return the number of rows [-]."""
        return len(self.trace["tick"])

    def shown(self, loop: Loop) -> Range:
        """Return the range of a loop's process variable in the unit shown.

        Parameters
        ----------
        loop : Loop
            The loop.
        """
        return shown_range(self.rig.transmitter(loop.process_variable))

    def process_variable(self, loop: Loop, kind: str = "true") -> Floats:
        """Return a loop's process variable over the run.

        Parameters
        ----------
        loop : Loop
            The loop.
        kind : str
            ``"true"`` or ``"value"`` (as transmitted).

        Returns
        -------
        ndarray, shape (n,)
            Fraction of span [-].
        """
        shown = self.shown(loop)
        column = self.trace[f"{loop.process_variable}.{kind}"]
        return (column - shown.lower) / shown.span

    def setpoint(self, loop: Loop) -> Floats:
        """Return a loop's setpoint over the run.

        Parameters
        ----------
        loop : Loop
            The loop.

        Returns
        -------
        ndarray, shape (n,)
            Fraction of span [-].
        """
        shown = self.shown(loop)
        return (self.trace[f"{loop.tag}.setpoint"] - shown.lower) / shown.span

    def events_of(self, kind: EventKind) -> tuple[Event, ...]:
        """Return the events of a kind.

        Parameters
        ----------
        kind : EventKind
            The kind.
        """
        return tuple(event for event in self.events if event.kind is kind)


def with_orders_as_taken(data: RunData) -> RunData:
    """Return a run with orders that did not go over the link from when the controller had them.

    Such an order is known one scan after the controller has taken it: when that scan has been
    seen. The record holds it from then on. The scan itself worked on it, which its own entry in
    the exchange log tells: the tick of the image that it had read.

    Parameters
    ----------
    data : RunData
        The run as recorded.

    Returns
    -------
    RunData
        The run with the columns of setpoint, mode and manual output moved forward by that scan.
    """
    trace = dict(data.trace)
    for event in data.events_of(EventKind.ORDER):
        if not str(event.data.get("evidence", "")).startswith("seen"):
            continue
        loop = data.rig.loop(event.subject)
        reads = [
            exchange.image_tick
            for tick, exchange in data.exchanges
            if tick == event.tick - 1 and exchange.point == loop.output
        ]
        if not reads or reads[-1] < 0 or event.tick >= data.rows:
            continue
        for kind in ("setpoint", "mode", "manual_output"):
            if event.data.get(kind) is not None:
                column = trace[f"{loop.tag}.{kind}"].copy()
                column[reads[-1] : event.tick] = column[event.tick]
                trace[f"{loop.tag}.{kind}"] = column
    return dataclasses.replace(data, trace=trace)


def phases_of(data: RunData) -> tuple[PhaseSpan, ...]:
    """Return the phases that a run got to, in order.

    Parameters
    ----------
    data : RunData
        The run.

    Returns
    -------
    tuple of PhaseSpan
        A phase that was cut off ends with the record and is not steady.

    Raises
    ------
    RecordError
        When a phase of the record is not in its trial.
    """
    trial_phases = {phase.name: phase for phase in data.trial.phases}
    zeros = {e.subject: e.tick for e in data.events_of(EventKind.ORDER_KNOWN)}
    ends = {e.subject: e for e in data.events_of(EventKind.PHASE_ENDED)}
    spans = []
    for event in data.events_of(EventKind.PHASE_STARTED):
        phase = trial_phases.get(event.subject)
        if phase is None:
            raise RecordError(
                f"run {data.header.run}: the record has a phase {event.subject!r} that its trial "
                "does not have; trial.toml and trace.sqlite are of two runs"
            )
        ended = ends.get(phase.name)
        spans.append(
            PhaseSpan(
                name=phase.name,
                loop=phase.loop,
                kind=phase.kind.value,
                mode=phase.mode.value,
                change=phase.change,
                start=event.tick,
                zero=zeros.get(phase.name, event.tick),
                end=ended.tick if ended else data.rows,
                steady=bool(ended and ended.data.get("steady")),
                reason=ended.text if ended else "cut off",
            )
        )
    return tuple(spans)
