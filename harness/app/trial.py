"""Running a trial: folder, record, links, view, script, score."""

from __future__ import annotations

import sys
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from harness.app.answering import answers_for
from harness.app.compute import ProcessComputer
from harness.app.forecast import Forecast, forecast
from harness.app.loading import LinkChoice
from harness.app.run_files import RunResult, make_run_folder, score_folder
from harness.app.stamps import new_run_id, utc_now, versions
from harness.app.stopping import StopRequest
from harness.app.trial_parts import read_parts
from harness.app.trial_view import DirectView, TrialView, ViewProcess
from harness.domain.points import points_of
from harness.domain.run import Closing, EventKind, RunEnd, RunHeader
from harness.domain.trial import ModelSource
from harness.engine.engine import Engine
from harness.errors import DryrigError, RecordError, UsageError
from harness.recording.process import RecorderProcess
from harness.recording.writer import Recorder
from harness.runtime.answers import AnyAnswers
from harness.runtime.clock import PacedClock
from harness.runtime.link_process import LinkProcess
from harness.runtime.requests import NothingToCompute
from harness.runtime.session import Pacing, Session
from harness.runtime.steadiness import steady_memory, steady_threads
from harness.runtime.trial_script import WAIT_FOR_CONTROLLER, trial_script
from plants.compile import is_compiled

if TYPE_CHECKING:
    from harness.app.trial_parts import TrialParts
    from harness.app.trial_view import ViewPort
    from harness.domain.rig import Rig
    from harness.domain.trial import Trial
    from harness.recording.port import RecordWriter
    from harness.runtime.answers import Answers
    from harness.runtime.requests import Script
    from harness.runtime.session import Computer

_VIRTUAL = "virtual"
_INTERRUPTED = "interrupted by the user"


@dataclass(frozen=True, slots=True, kw_only=True)
class TrialOptions:
    """What the command line says of a trial.

    Parameters
    ----------
    rig, trial : Path or None
        The files; None for a run that is taken up.
    clock : str
        ``"virtual"`` or ``"paced"``.
    pace : float
        Plant seconds per wall second, when paced [-].
    controller : str
        ``"builtin"`` or ``"external"``.
    controller_pace : float
        Pace at which an external controller says its clock runs [-].
    phases : tuple of str
        Phases to run; empty for all.
    out : Path
        Where the run folder goes.
    links : LinkChoice
        Changes of the links.
    json : bool
        Whether standard output is kept for the document.
    wait : float
        Longest wait for an external controller to be there, and to take an order [wall s].
    preflight : bool
        Whether an external controller is tried before the first phase.
    answers : Path or None
        File to which answers to prompts are appended; None takes them from the terminal.
    order_timeout : float or None
        Longest wait for an order by prompt or callable; None as the trial says [wall s].
    models_from : Path or None
        Folder of an earlier run whose models the trial goes by; None as the trial says.
    resume : Path or None
        Folder of an earlier run to take up after its last completed phase; None to begin anew.
    """

    rig: Path | None
    trial: Path | None
    clock: str
    pace: float
    controller: str
    controller_pace: float
    out: Path
    phases: tuple[str, ...] = ()
    links: LinkChoice = field(default_factory=LinkChoice)
    json: bool = False
    wait: float = WAIT_FOR_CONTROLLER
    preflight: bool = True
    answers: Path | None = None
    order_timeout: float | None = None
    models_from: Path | None = None
    resume: Path | None = None


def run_trial(options: TrialOptions) -> RunResult:
    """Run a trial and score it.

    Parameters
    ----------
    options : TrialOptions
        What to run, and how.

    Returns
    -------
    RunResult
        Verdict and folder.

    Raises
    ------
    ConfigurationError
        With every problem of rig and trial.
    UsageError
        When the options do not go together.
    KeyboardInterrupt
        After an interrupted run has been closed and its folder told.
    LinkError
        When a link cannot be opened; no folder is made.
    RecordError
        When the record cannot be written; what was committed until then is kept.
    """
    _check(options)
    parts = read_parts(options)
    rig = parts.rig
    external = parts.options.controller == "external"
    if external and not rig.links:
        raise UsageError(
            f"{rig.name}: an external controller needs a link, and this rig has none"
        )
    answers = answers_for(rig, parts.trial, options.answers) if external else AnyAnswers(())
    say_compiling()
    expected = forecast(rig, parts.trial)
    engine = Engine(rig, built_in=not external)
    warm_up(engine)
    if parts.earlier is not None:
        parts.earlier.put_back(engine)
    header = _header(parts, engine)
    folder, interrupted = _carry_out(parts, engine, header, expected, answers)
    if interrupted:
        print(  # noqa: T201
            f"interrupted; what was recorded is kept in {folder}, and "
            f"`dryrig score {folder}` says how far it got",
            file=sys.stderr,
        )
        raise KeyboardInterrupt
    return score_folder(folder)


def _check(options: TrialOptions) -> None:
    external = options.controller == "external"
    if external and options.clock == _VIRTUAL:
        raise UsageError(
            "trial: --clock virtual with --controller external: virtual time does not wait for a "
            "controller outside; take --clock paced, or the built-in controller"
        )
    if not options.pace > 0.0:
        raise UsageError(f"trial: a pace of {options.pace:g}; it must be above 0")
    if external and options.pace != options.controller_pace:
        raise UsageError(
            f"trial: a pace of {options.pace:g} with a controller whose clock runs at "
            f"{options.controller_pace:g}: the controller would integrate in another time than the "
            "plant. Take --pace 1, or say with --controller-pace that its clock is scaled as well"
        )


def say_compiling() -> None:
    """Say a word before the kernels are compiled for the first time."""
    if not is_compiled():
        print(  # noqa: T201
            "compiling the plant's numerical kernels, once for this version: about half a minute",
            file=sys.stderr,
            flush=True,
        )


def warm_up(engine: Engine) -> None:
    """Compile or load every kernel that a tick needs, outside every time limit.

    Parameters
    ----------
    engine : Engine
        An engine at its start; it is left as it was.
    """
    saved = engine.save()
    engine.record(2)
    engine.advance(2)
    engine.row()
    engine.restore(saved)


def _header(parts: TrialParts, engine: Engine) -> RunHeader:
    options, rig = parts.options, parts.rig
    controller = options.controller
    if controller == "external":
        controller += " over " + ", ".join(link.name for link in rig.links)
    paced = options.clock != _VIRTUAL
    return RunHeader(
        run=new_run_id(),
        started_utc=utc_now(),
        rig_name=rig.name,
        trial_name=parts.trial.name,
        rig_text=parts.rig_text,
        trial_text=parts.trial_text,
        versions=versions(),
        seed=rig.seed,
        tick=rig.tick,
        clock=options.clock,
        pace=options.pace if paced else 0.0,
        controller=controller,
        columns=engine.columns,
        extra=parts.extra,
    )


def _carry_out(
    parts: TrialParts,
    engine: Engine,
    header: RunHeader,
    expected: Forecast,
    answers: Answers,
) -> tuple[Path, bool]:
    """Run the script to its end, however that comes; return folder, and whether interrupted."""
    options, trial, earlier = parts.options, parts.trial, parts.earlier
    external = options.controller == "external"
    with ExitStack() as stack:
        stop = stack.enter_context(StopRequest())
        clock = PacedClock()
        paced = options.clock != _VIRTUAL
        pacing = _pacing(stack, options, engine.rig, trial, clock) if paced else None
        folder = make_run_folder(options.out, header)
        recorder: RecordWriter
        if paced:
            recorder = stack.enter_context(RecorderProcess.create(folder, header))
        else:
            recorder = stack.enter_context(Recorder.create(folder, header, clock.now_ns))
        view = TrialView(_view(stack, options), engine.rig.name, trial, expected)
        if paced:
            stack.enter_context(steady_memory())
            stack.enter_context(steady_threads())
        session = Session(
            engine,
            recorder,
            pacing,
            external=external,
            on_event=view.take_event,
            on_look=view.look,
            stop_asked=stop.asked,
        )
        stop.defer(clock.stop)
        if earlier is not None:
            earlier.write(recorder)
            session.rows_taken = earlier.tick
            for event in earlier.events:
                view.take_event(event)
        progress = earlier.progress if earlier is not None else None
        script = trial_script(
            session, trial, options.wait, answers, progress, preflight=options.preflight
        )
        end = _run_script(session, script, recorder)
        view.look(session)
    return folder, end is RunEnd.INTERRUPTED or stop.asked()


def _view(stack: ExitStack, options: TrialOptions) -> ViewPort:
    if options.clock == _VIRTUAL:
        return stack.enter_context(DirectView(to_stderr=options.json))
    return stack.enter_context(ViewProcess(to_stderr=options.json))


def _run_script(session: Session, script: Script, recorder: RecordWriter) -> RunEnd:
    """Run the script and close the record, which says how the run ended."""
    try:
        session.run(script)
    except KeyboardInterrupt:
        session.event(EventKind.NOTE, "run", _INTERRUPTED)
        return _close(session, recorder, RunEnd.INTERRUPTED, _INTERRUPTED)
    except RecordError:
        raise
    except DryrigError as error:
        # Whatever a trial runs into, its record is closed and says why it cannot be judged.
        session.event(EventKind.INVALID, "run", str(error))
        return _close(session, recorder, RunEnd.INVALID, str(error))
    except Exception as error:
        reason = f"the program met a defect of its own: {error!r}"
        session.event(EventKind.INVALID, "run", reason)
        _close(session, recorder, RunEnd.INVALID, reason)
        raise
    return _close(session, recorder, RunEnd.COMPLETE, "")


def _close(session: Session, recorder: RecordWriter, end: RunEnd, reason: str) -> RunEnd:
    recorder.close(
        Closing(end=end, reason=reason, last_tick=session.tick - 1, rows=session.rows_taken)
    )
    return end


def _pacing(
    stack: ExitStack, options: TrialOptions, rig: Rig, trial: Trial, clock: PacedClock
) -> Pacing:
    links = None
    if options.controller == "external":
        points = points_of(rig, external=True)
        links = stack.enter_context(LinkProcess(rig.links, points, rig.name))
        for name, (host, port) in links.addresses.items():
            print(f"link {name}: listening on {host}:{port}", file=sys.stderr, flush=True)  # noqa: T201
    computer: Computer = NothingToCompute()
    if trial.models is ModelSource.IDENTIFIED:  # only such a trial makes fits
        fits = stack.enter_context(ProcessComputer())
        fits.wait_until_warm()
        computer = fits
    return Pacing(clock=clock, pace=options.pace, links=links, computer=computer)
