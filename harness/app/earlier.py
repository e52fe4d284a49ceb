"""What a trial takes from an earlier run: its models, or all that it had got done."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.analysis.nonlinear import settings_of
from harness.analysis.run_data import PhaseSpan, phases_of
from harness.analysis.step_record import LEAD_IN
from harness.app.run_files import read_run
from harness.domain.models import LagModel, LoopModels
from harness.domain.points import shown_range
from harness.domain.run import EventKind, RunEnd
from harness.domain.trial import ModelSource
from harness.engine.engine import Engine
from harness.errors import UsageError
from harness.recording.reader import RunFolder
from harness.runtime.progress import DonePhase, Progress

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import NDArray

    from harness.analysis.run_data import RunData
    from harness.domain.rig import Loop, Rig
    from harness.domain.run import Event
    from harness.domain.signals import Exchange
    from harness.domain.trial import Trial
    from harness.recording.port import RecordWriter

    Floats = NDArray[np.float64]

MODELS_FROM = "models_from"  # keys of the header's extra facts
RESUMED = "resumed"
RESUMED_AT = "resumed_at"
_SAME = 1e-9  # of a column: more than this, and the plant is not the one recorded [unit]
_BLOCK = 4096  # rows handed to a recorder at once [-]


def with_models_of(trial: Trial, rig: Rig, folder: Path) -> Trial:
    """Return a trial that goes by the models of an earlier run.

    Parameters
    ----------
    trial : Trial
        The trial.
    rig : Rig
        Its rig.
    folder : Path
        Folder of the earlier run.

    Returns
    -------
    Trial
        With the models of every loop that it has phases of.

    Raises
    ------
    UsageError
        When the run has no models of a loop, or its loop was another one.
    """
    data = read_run(folder)
    found = {}
    for tag in dict.fromkeys(phase.loop for phase in trial.phases):
        models = _models(data.events, tag)
        if models is None:
            raise UsageError(
                f"{folder}: this run has no models of {tag}; take one that got as far as "
                "identifying them, or whose trial says where they are from"
            )
        _require_same(data.rig, rig, rig.loop(tag), folder)
        found[tag] = models
    return dataclasses.replace(
        trial, models=ModelSource.RUN, models_run=data.header.run, run_models=found
    )


def _require_same(old: Rig, rig: Rig, loop: Loop, folder: Path) -> None:
    """Refuse models whose gains are fractions of other ranges, or of other valves."""
    before = next((each for each in old.loops if each.tag == loop.tag), None)
    parts = ("process_variable", "output", "load")
    same = before is not None and all(
        getattr(before, part) == getattr(loop, part) for part in parts
    )
    if same and shown_range(old.transmitter(loop.process_variable)) == shown_range(
        rig.transmitter(loop.process_variable)
    ):
        return
    raise UsageError(
        f"{folder}: {loop.tag} had another process variable, range, output or load in that run; "
        "its models do not fit this rig"
    )


def _models(events: tuple[Event, ...], tag: str) -> LoopModels | None:
    for event in reversed(events):
        if event.kind is EventKind.MODELS and event.subject == tag:
            return LoopModels(
                output=_model(event.data["output"]), load=_model(event.data["load"])
            )
    return None


def _model(document: object) -> LagModel:
    if not isinstance(document, dict):
        raise UsageError(f"the record holds {document!r} where a model should be")
    return LagModel(
        gain=float(document["gain"]),
        time_constants=tuple(float(time) for time in document["time_constants"]),
        dead_time=float(document["dead_time"]),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Earlier:
    """An earlier run to be taken up.

    Parameters
    ----------
    data : RunData
        The run.
    tick : int
        First tick that is done again [ticks].
    rows : ndarray, shape (tick, n_columns)
        The rows until then, in the order of the engine's columns [unit of the column].
    lateness : ndarray, shape (tick,)
        Lateness of each [s].
    progress : Progress
        What need not be done again.
    """

    data: RunData
    tick: int
    rows: Floats
    lateness: Floats
    progress: Progress

    @property
    def extra(self) -> dict[str, str]:
        """Return what the header of the new run says of the old one."""
        kept = dict(self.data.header.extra)
        return kept | {RESUMED: self.data.header.run, RESUMED_AT: str(self.tick)}

    @property
    def events(self) -> tuple[Event, ...]:
        """Return the events that are kept."""
        return _kept(self.data.events, self.tick)

    def write(self, recorder: RecordWriter) -> None:
        """Write what is kept of the old run into the record of the new one.

        Parameters
        ----------
        recorder : RecordWriter
            The record, still empty.
        """
        for first in range(0, self.tick, _BLOCK):
            last = min(first + _BLOCK, self.tick)
            recorder.rows(0, first, self.rows[first:last], self.lateness[first:last])
        exchanges: list[tuple[int, Exchange]] = [
            each for each in self.data.exchanges if each[0] < self.tick
        ]
        if exchanges:
            recorder.exchanges(exchanges)
        for event in self.events:
            recorder.event(event)

    def put_back(self, engine: Engine) -> None:
        """Bring an engine at its start to where the old run is taken up.

        The state of the plant is no part of a record. It follows from what is: the same engine
        under the same outputs, with the same noise, comes to the same place.

        Parameters
        ----------
        engine : Engine
            The engine; for a controller outside.

        Raises
        ------
        UsageError
            When it comes elsewhere.
        """
        columns = [column.name for column in engine.columns]
        valves = [
            (valve.tag, columns.index(f"{valve.tag}.command")) for valve in engine.rig.valves
        ]
        commands = self.rows[:, [place for _, place in valves]]
        changed = np.flatnonzero(np.any(np.diff(commands, axis=0) != 0.0, axis=1)) + 1
        ticks = [0, *(int(tick) for tick in changed)]
        again = np.empty_like(self.rows)
        for tick, following in zip(ticks, [*ticks[1:], self.tick], strict=True):
            for (tag, _), command in zip(valves, commands[tick], strict=True):
                engine.set_output(tag, float(command))
            again[tick:following] = engine.record(following - tick)
        for loop in engine.rig.loops:
            setpoint = self.rows[-1, columns.index(f"{loop.tag}.setpoint")]
            engine.set_setpoint(loop.tag, float(setpoint))
        # What was transmitted may have been forced in between, for a check before the trial.
        plant = [i for i, name in enumerate(columns) if name.endswith(".true")]
        off = np.nanmax(np.abs(again[:, plant] - self.rows[:, plant]))
        if not off <= _SAME:
            raise UsageError(
                f"run {self.data.header.run}: with its own outputs the plant comes {off:.3g} away "
                "from what was recorded; it was made by another version of this program, and "
                "cannot be taken up. Start the trial anew"
            )


def read_earlier(folder: Path) -> Earlier:
    """Read a run that is to be taken up after its last completed phase.

    Parameters
    ----------
    folder : Path
        The run folder.

    Returns
    -------
    Earlier
        The run.

    Raises
    ------
    UsageError
        When there is nothing to take up, or no sense in it.
    """
    data = read_run(folder)
    if not data.external:
        raise UsageError(
            f"{folder}: its controller was the built-in one, which nobody can type wrong; run the "
            "trial again"
        )
    if data.closing is not None and data.closing.end is RunEnd.COMPLETE:
        raise UsageError(f"{folder}: this run is complete; there is nothing to take up")
    done = _done(data)
    if not done:
        raise UsageError(f"{folder}: no phase of this run was completed; start the trial anew")
    tick = done[-1].end
    trace = RunFolder.open(folder).trace()  # as recorded, not as scored
    names = [column.name for column in data.header.columns]
    rows = np.column_stack([trace[name][:tick] for name in names])
    events = _kept(data.events, tick)
    kept = dataclasses.replace(data, events=events)
    tags = dict.fromkeys(phase.loop for phase in data.trial.phases)
    models = {tag: found for tag in tags if (found := _models(events, tag)) is not None}
    settings = {
        tag: given[max(given)]
        for tag in tags
        if (given := settings_of(kept, data.rig.loop(tag)))
    }
    return Earlier(
        data=data,
        tick=tick,
        rows=rows,
        lateness=trace["lateness"][:tick],
        progress=Progress(
            run=data.header.run,
            phases={span.name: _phase(span, rows) for span in done},
            models=models,
            settings=settings,
        ),
    )


def _done(data: RunData) -> list[PhaseSpan]:
    """Return the phases that were completed one after the other from the first on."""
    done = []
    for phase, span in zip(data.trial.phases, phases_of(data), strict=False):
        if span.name != phase.name or not span.steady:
            break
        done.append(span)
    return done


def _phase(span: PhaseSpan, rows: Floats) -> DonePhase:
    return DonePhase(
        lead_in=rows[max(0, span.start - LEAD_IN) : span.start],
        rows=rows[span.start : span.end],
        end=span.end,
    )


def _kept(events: tuple[Event, ...], tick: int) -> tuple[Event, ...]:
    """Return the events up to the end of the last completed phase, which lies at the tick."""
    ends = [
        number
        for number, event in enumerate(events)
        if event.kind is EventKind.PHASE_ENDED and event.tick == tick
    ]
    return events[: ends[-1] + 1]
