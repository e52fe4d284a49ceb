"""A trial, phase by phase: what is ordered when, and when a phase is over."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from harness.analysis.linear import ScanSchedule
from harness.analysis.loop_models import linearised_models
from harness.analysis.plan import plan_phase
from harness.analysis.steady import SteadyDetector
from harness.analysis.step_record import LEAD_IN, StepRecord
from harness.analysis.valve_check import refusal_cause
from harness.controllers.block import AUTOMATIC, MANUAL
from harness.domain.models import FittedModel, LoopModels
from harness.domain.orders import OrderBy
from harness.domain.points import (
    acknowledge_point,
    manual_output_point,
    setpoint_point,
    shown_range,
)
from harness.domain.run import EventKind
from harness.domain.trial import Mode, ModelSource, Phase, PhaseKind, SettingsSource
from harness.errors import InvalidRunError
from harness.runtime.answers import AnyAnswers, PointAnswers
from harness.runtime.order_words import Order
from harness.runtime.orders import OrderDesk, Taken
from harness.runtime.preflight import preflight as preflight_of
from harness.runtime.progress import Progress
from harness.runtime.requests import Advance, Compute
from harness.runtime.session import require_controllers
from harness.runtime.trial_words import (
    PATHS,
    known_words,
    model_document,
    models_told,
    phase_words,
)
from harness.tuning.identification import fit_best
from harness.tuning.synthesis import direct_synthesis

if TYPE_CHECKING:
    from collections.abc import Generator

    from numpy.typing import NDArray

    from harness.analysis.plan import PhasePlan
    from harness.domain.models import ControllerSettings
    from harness.domain.rig import Loop
    from harness.domain.trial import Trial
    from harness.runtime.answers import Answers
    from harness.runtime.requests import Request, Script
    from harness.runtime.session import Session

    Floats = NDArray[np.float64]

WAIT_FOR_CONTROLLER = 30.0  # for a controller to be found or to take an order [wall s]
_CONFIDENCE = 0.95  # of the limits of a fit [-]


@dataclass(slots=True)
class _LoopWork:
    """What a trial knows and does of one loop."""

    loop: Loop
    linearised: LoopModels
    models: LoopModels
    settings: ControllerSettings | None = None
    automatic: bool = False
    begun: bool = False
    hold: float | None = None  # output of a run that is taken up, until it is ordered
    identified: bool = False
    recent: list[Floats] = field(default_factory=list)
    output_record: StepRecord = field(default_factory=StepRecord)
    load_record: StepRecord = field(default_factory=StepRecord)


def trial_script(
    session: Session,
    trial: Trial,
    wait: float = WAIT_FOR_CONTROLLER,
    answers: Answers | None = None,
    progress: Progress | None = None,
    *,
    preflight: bool = False,
) -> Script:
    """Return the script of a trial.

    Parameters
    ----------
    session : Session
        Who carries it out.
    trial : Trial
        The trial.
    wait : float
        Longest wait for an external controller to be there, and to take an order [wall s].
    answers : Answers or None
        Where the answers to prompts come from; None for none but the data.
    progress : Progress or None
        What an earlier run had got done, and need not be done again; None to begin anew. The
        session then stands at the end of the last phase done.
    preflight : bool
        Whether an external controller is tried first.

    Yields
    ------
    Request
        Time to pass, and computations.
    """
    runner = _TrialRunner(session, trial, wait, answers or AnyAnswers(()), progress)
    runner.preflight = preflight and session.external
    yield from runner.run()


class _TrialRunner:
    def __init__(
        self,
        session: Session,
        trial: Trial,
        wait: float,
        answers: Answers,
        progress: Progress | None,
    ) -> None:
        self._session = session
        self._trial = trial
        self._wait = wait
        self._progress = progress or Progress(run="")
        points = [
            PointAnswers(session, acknowledge_point(loop.tag)) for loop in session.rig.loops
        ]
        self._desk = OrderDesk(
            session, AnyAnswers((answers, *points)), wait, trial.order_timeout
        )
        self._columns = [column.name for column in session.engine.columns]
        self._works: dict[str, _LoopWork] = {}
        self.preflight = False
        self._held: set[str] = set()  # in manual since the pre-flight

    def run(self) -> Script:
        done = self._progress.phases
        if done:
            self._recall()
        yield from self._find_controllers()
        if self.preflight and not done:  # phases were completed with this controller
            yield from self._try_controllers()
        for index, phase in enumerate(self._trial.phases):
            work = self._work(phase.loop)
            if phase.name in done:
                continue
            if done and not work.begun:
                yield from self._take_up(phase, work)
            if phase.mode is Mode.AUTOMATIC and not work.automatic:
                yield from self._go_automatic(work)
            elif phase.mode is Mode.MANUAL and (work.automatic or not work.begun):
                yield from self._go_manual(work)
            work.begun = True
            yield from self._phase(index, phase, work)
        for work in self._works.values():
            if self._trial.models is ModelSource.IDENTIFIED and not work.identified:
                yield from self._identify(work)

    def _work(self, tag: str) -> _LoopWork:
        if tag not in self._works:
            loop = self._session.rig.loop(tag)
            linearised = linearised_models(self._session.engine, loop)
            models = self._trial.models_of(tag) or linearised
            self._works[tag] = _LoopWork(loop=loop, linearised=linearised, models=models)
        return self._works[tag]

    # What an earlier run had done.

    def _recall(self) -> None:
        """Know what the earlier run knew, and have every controller hold its output."""
        session, progress = self._session, self._progress
        for phase in self._trial.phases:
            work = self._work(phase.loop)
            done = progress.phases.get(phase.name)
            if done is not None:
                self._keep(phase, work, done.lead_in, [done.rows], done.end)
        for tag, work in self._works.items():
            work.models = progress.models.get(tag, work.models)
            work.identified = tag in progress.models
            work.settings = progress.settings.get(tag)
            # At once, for a controller that reads it here: it must not act on an old order. Where
            # the output is when the controller is found may be its own idea by then.
            work.hold = session.engine.output(work.loop.output)
            session.order(
                work.loop, mode=MANUAL, manual_output=work.hold, settings=work.settings
            )
        names = ", ".join(progress.phases)
        text = f"taken up again: {names} done in run {progress.run}"
        session.event(EventKind.NOTE, "run", text, {"run": progress.run})

    def _take_up(self, phase: Phase, work: _LoopWork) -> Generator[Request, Any, None]:
        """Have a controller that did something else meanwhile hold the output, and wait for rest."""
        work.begun = True
        yield from self._go_manual(work)
        settle = Phase(
            name=f"before {phase.name}",
            loop=phase.loop,
            kind=PhaseKind.SETTLE,
            mode=Mode.MANUAL,
            change=0.0,
            time_limit=max(each.time_limit for each in self._trial.phases),
        )
        rows = yield from self._until_steady(settle, work, self._plan(settle, work))
        work.recent = [np.concatenate(rows)]

    # The controller at the other end.

    def _find_controllers(self) -> Generator[Request, Any, None]:
        """Wait until every loop of the trial has a controller."""
        session = self._session
        if not session.external:
            return
        for tag in dict.fromkeys(phase.loop for phase in self._trial.phases):
            watch = session.watches[tag]
            output = session.rig.loop(tag).output
            if not watch.found:
                text = f"waiting up to {self._wait:g} s for a controller to write {output}"
                session.event(EventKind.NOTE, tag, text)
            waited = 0
            while not watch.found:
                if waited * session.rig.tick / session.pace > self._wait:
                    raise InvalidRunError(self._nobody(tag, output))
                yield Advance(ticks=1)
                waited += 1

    def _try_controllers(self) -> Generator[Request, Any, None]:
        """See before anything is timed whether each controller reads, writes and acts as it should."""
        for tag in dict.fromkeys(phase.loop for phase in self._trial.phases):
            yield from preflight_of(self._session, self._session.rig.loop(tag), self._desk)
            self._held.add(tag)

    def _nobody(self, tag: str, output: str) -> str:
        session = self._session
        links = ", ".join(link.name for link in session.rig.links)
        seen = "nobody is connected"
        if session.connected:
            seen = f"connected: {', '.join(session.connected.values())}"
        if session.last_refusal:
            seen += f"; last refused: {session.last_refusal}"
            cause = refusal_cause((session.last_refusal,))
            if cause is not None:
                seen += f" ({cause.mistake}: look at {cause.look_at})"
        return (
            f"loop {tag}: no controller wrote {output} over {links} within {self._wait:g} s; {seen}. "
            "Start the controller, check host, port, unit and the address that it writes to, or "
            "give it longer with --wait"
        )

    # Modes.

    def _go_manual(self, work: _LoopWork) -> Generator[Request, Any, None]:
        """Order manual at the output that stands now; at the start only to who is not shown it."""
        orders = work.loop.orders
        shown = orders.mode is OrderBy.LINK and orders.manual_output is OrderBy.LINK
        shown = shown or work.loop.tag in self._held
        if work.begun or (self._session.external and not shown):
            output = self._session.engine.output(work.loop.output)
            output, work.hold = output if work.hold is None else work.hold, None
            order = Order(loop=work.loop.tag, mode=MANUAL, manual_output=output)
            yield from self._desk.give(order)
        work.automatic = False

    def _go_automatic(self, work: _LoopWork) -> Generator[Request, Any, None]:
        """Find settings, give them in manual, then transfer at the present process variable."""
        trial = self._trial
        if not work.begun:
            yield from self._go_manual(work)
        if trial.models is ModelSource.IDENTIFIED and not work.identified:
            yield from self._identify(work)
        elif not work.identified:
            run = {"run": trial.models_run} if trial.models is ModelSource.RUN else {}
            self._tell_models(work, {}, trial.models.value, run)
            work.identified = True
        yield from self._settle_settings(work)
        setpoint = self._process_variable_now(work)
        order = Order(loop=work.loop.tag, setpoint=setpoint, mode=AUTOMATIC)
        yield from self._desk.give(order)
        work.automatic = True
        # A moment in automatic, so that a transfer that bumps shows before the first step.
        yield Advance(ticks=max(10, round(trial.closed_loop_time / self._session.rig.tick)))
        require_controllers(self._session)

    def _process_variable_now(self, work: _LoopWork) -> float:
        """Return the mean transmitted value of late, or the present one."""
        column = self._columns.index(f"{work.loop.process_variable}.value")
        if work.recent:
            return float(np.mean(np.concatenate(work.recent)[-LEAD_IN:, column]))
        return self._session.engine.measured(work.loop.process_variable)

    def _settle_settings(self, work: _LoopWork) -> Generator[Request, Any, None]:
        """Give the settings; the block may round them, and what it has then is what counts."""
        trial = self._trial
        data: dict[str, object] = {}
        if trial.settings is SettingsSource.AS_FOUND and trial.as_found is not None:
            settings = trial.as_found
            data["rule"] = "as found"
        else:
            synthesis = direct_synthesis(work.models.output, trial.law, trial.closed_loop_time)
            settings = synthesis.settings
            data |= {
                "rule": synthesis.rule,
                "closed_loop_time": synthesis.closed_loop_time,
                "reduced": model_document(synthesis.reduced),
            }
        taken = yield from self._desk.give(Order(loop=work.loop.tag, settings=settings))
        if taken.by is not OrderBy.LINK:
            work.recent += taken.rows  # minutes may have passed, and the level drifted
        work.settings = settings = taken.order.settings or settings
        data |= {
            "gain": settings.gain,
            "integral_time": settings.integral_time,
            "action": settings.action.value,
            "by": taken.by.value,
            # The block had them before it was known to, and its last scan in manual used them.
            "since": taken.asked,
        }
        ti = settings.integral_time
        text = f"gain {settings.gain:.4g} %/%, " + (f"Ti {ti:.4g} s" if ti else "no integral")
        typed = taken.order.typed
        if typed is not None:
            data["typed"] = typed.words
            text += f"; typed in: {typed.words} ({work.loop.block.form.value} form)"
        self._session.event(EventKind.SETTINGS, work.loop.tag, text, data)

    # Models.

    def _identify(self, work: _LoopWork) -> Generator[Request, Any, None]:
        """Fit both paths to what was recorded in manual."""
        fits: dict[str, FittedModel] = {}
        for path, record in (("output", work.output_record), ("load", work.load_record)):
            if not record:
                continue
            choice = yield Compute(
                function=fit_best,
                arguments=(
                    record.inputs,
                    record.outputs,
                    self._session.rig.tick,
                    _CONFIDENCE,
                ),
            )
            fits[path] = choice.best
        work.models = LoopModels(
            output=fits["output"].model if "output" in fits else work.models.output,
            load=fits["load"].model if "load" in fits else work.models.load,
        )
        work.identified = True
        # A trial cut to some of its phases may have had no steps to identify a path from.
        source = "identified" if len(fits) == len(PATHS) else "identified in part"
        self._tell_models(work, fits, source if fits else ModelSource.LINEARISED.value)

    def _tell_models(
        self,
        work: _LoopWork,
        fits: dict[str, FittedModel],
        source: str,
        more: dict[str, str] | None = None,
    ) -> None:
        text, data = models_told(work.models, work.linearised, fits, source)
        self._session.event(EventKind.MODELS, work.loop.tag, text, data | (more or {}))

    # Phases.

    def _phase(
        self, index: int, phase: Phase, work: _LoopWork
    ) -> Generator[Request, Any, None]:
        session = self._session
        plan = self._plan(phase, work)
        if phase.kind is not PhaseKind.SETTLE and not work.automatic and not work.recent:
            work.recent = [(yield Advance(ticks=LEAD_IN))]
        session.event(
            EventKind.PHASE_STARTED,
            phase.name,
            phase_words(phase),
            {
                "index": index,
                "loop": phase.loop,
                "expected": plan.duration,
                "dominant_time": plan.dominant_time,
                "effect": plan.effect,
            },
        )
        lead_in = work.recent[-1][-LEAD_IN:] if work.recent else None
        asked = session.tick
        taken = yield from self._carry_out(phase, work)
        session.event(
            EventKind.ORDER_KNOWN,
            phase.name,
            known_words(phase, (session.tick - asked) * session.rig.tick),
            taken.facts,
        )
        rows = taken.rows
        rows += yield from self._until_steady(phase, work, plan)
        self._keep(phase, work, lead_in, rows, session.tick)

    def _plan(self, phase: Phase, work: _LoopWork) -> PhasePlan:
        loop, tick = work.loop, self._session.rig.tick
        schedule = ScanSchedule(
            scan_ticks=max(1, round(loop.scan / tick)), delay_ticks=loop.output_delay
        )
        output = self._session.engine.output(loop.output)
        return plan_phase(
            phase,
            loop,
            work.models,
            work.settings,
            schedule,
            tick,
            self._trial.steady,
            (output - loop.output_low, loop.output_high - output),
        )

    def _carry_out(self, phase: Phase, work: _LoopWork) -> Generator[Request, Any, Taken]:
        """Do what a phase does to the rig, and return once it acts."""
        session, loop = self._session, work.loop
        order = Order(loop=loop.tag)
        match phase.kind:
            case PhaseKind.SETPOINT_STEP:
                shown = shown_range(session.rig.transmitter(loop.process_variable))
                setpoint = session.image()[setpoint_point(loop.tag)][1]
                order = Order(loop=loop.tag, setpoint=setpoint + phase.change * shown.span)
            case PhaseKind.OUTPUT_STEP:
                present = session.image()[manual_output_point(loop.tag)][1] / 100.0
                order = Order(loop=loop.tag, manual_output=present + phase.change)
            case PhaseKind.LOAD_STEP:
                present = session.engine.output(loop.load)
                # The load is no order to the controller: it acts at once.
                session.set_load(loop.load, present + phase.change)
            case PhaseKind.SETTLE:
                pass
        if not order.kinds:
            return Taken(order=order, asked=-1)
        return (yield from self._desk.give(order))

    def _until_steady(
        self, phase: Phase, work: _LoopWork, plan: PhasePlan
    ) -> Generator[Request, Any, list[Floats]]:
        session = self._session
        tick, rule = session.rig.tick, self._trial.steady
        true = self._columns.index(f"{work.loop.process_variable}.true")
        shown = shown_range(session.rig.transmitter(work.loop.process_variable))
        detector = SteadyDetector(rule, tick, plan.dominant_time, plan.effect)
        chunk = max(1, round(rule.thinning * plan.dominant_time / tick))
        rows: list[Floats] = []
        taken = 0
        while not detector.steady:
            if taken * tick >= phase.time_limit:
                session.event(
                    EventKind.PHASE_ENDED, phase.name, detector.reason, {"steady": False}
                )
                raise InvalidRunError(
                    f"phase {phase.name!r}: not steady within its time limit of "
                    f"{phase.time_limit:g} s ({detector.reason}), so that nothing can be judged. "
                    "See in the trace whether the loop swings; where it only needs longer, give "
                    "the phase a longer time_limit in the trial file"
                )
            block = yield Advance(ticks=chunk)
            require_controllers(session)
            rows.append(block)
            taken += len(block)
            detector.feed((block[:, true] - shown.lower) / shown.span)
        text = f"steady after {taken * tick:.5g} s"
        if phase.kind is not PhaseKind.SETTLE and detector.remaining is not None:
            text += (
                f": at most {100 * detector.remaining:.2g} % still to come "
                f"({100 * rule.confidence:g} % confidence)"
            )
        session.event(EventKind.PHASE_ENDED, phase.name, text, {"steady": True})
        return rows

    def _keep(
        self,
        phase: Phase,
        work: _LoopWork,
        lead_in: Floats | None,
        rows: list[Floats],
        end: int,
    ) -> None:
        """Keep what a fit needs: steps in manual with a moment before each."""
        work.recent = [np.concatenate(rows)] if rows else work.recent
        if phase.mode is not Mode.MANUAL or lead_in is None:
            return
        records = {
            PhaseKind.OUTPUT_STEP: (work.output_record, work.loop.output),
            PhaseKind.LOAD_STEP: (work.load_record, work.loop.load),
        }
        if phase.kind not in records:
            return
        record, valve = records[phase.kind]
        span = shown_range(self._session.rig.transmitter(work.loop.process_variable))
        kept = np.concatenate((lead_in, *rows))
        value = kept[:, self._columns.index(f"{work.loop.process_variable}.value")]
        record.add(
            end,
            kept[:, self._columns.index(f"{valve}.command")],
            (value - span.lower) / span.span,
            len(lead_in),
        )
