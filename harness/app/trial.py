"""Running a trial: folder, record, links, view, script, score."""

from __future__ import annotations

import sys
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from harness.app.compute import ProcessComputer
from harness.app.forecast import forecast
from harness.app.loading import LinkChoice, read_rig, read_trial
from harness.app.run_files import RunResult, phases_extra, score_folder
from harness.app.stamps import new_run_id, utc_now, versions
from harness.app.trial_view import DirectView, TrialView, ViewProcess
from harness.domain.points import points_of
from harness.domain.run import Closing, EventKind, RunEnd, RunHeader
from harness.engine.engine import Engine
from harness.errors import DryrigError, RecordError, UsageError
from harness.recording.folder import create_run_folder
from harness.recording.process import RecorderProcess
from harness.recording.writer import Recorder
from harness.runtime.clock import PacedClock
from harness.runtime.link_process import LinkProcess
from harness.runtime.session import Pacing, Session
from harness.runtime.trial_script import trial_script
from plants.compile import is_compiled

if TYPE_CHECKING:
    from harness.app.trial_view import ViewPort
    from harness.domain.rig import Rig
    from harness.domain.trial import Trial
    from harness.recording.port import RecordWriter

_VIRTUAL = "virtual"


@dataclass(frozen=True, slots=True, kw_only=True)
class TrialOptions:
    """What the command line says of a trial.

    Parameters
    ----------
    rig, trial : Path
        The files.
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
    """

    rig: Path
    trial: Path
    clock: str
    pace: float
    controller: str
    controller_pace: float
    out: Path
    phases: tuple[str, ...] = ()
    links: LinkChoice = field(default_factory=LinkChoice)
    json: bool = False


def run_trial(options: TrialOptions) -> RunResult:
    """Run a trial and score it.

    Parameters
    ----------
    options : TrialOptions
        What to run, and how.

    Returns
    -------
    RunResult
        Verdict and folder; an interrupted run is scored as far as it got and raises.

    Raises
    ------
    ConfigurationError
        With every problem of rig and trial.
    UsageError
        When the options do not go together.
    KeyboardInterrupt
        After an interrupted run has been closed and its folder told.
    """
    _check(options)
    rig, rig_text = read_rig(options.rig, options.links)
    trial, trial_text = read_trial(options.trial, rig, options.phases)
    external = options.controller == "external"
    if external and not rig.links:
        raise UsageError(
            f"{options.rig}: an external controller needs a link, and this rig has none"
        )
    say_compiling()
    expected = {name: plan.duration for name, plan in forecast(rig, trial).phases.items()}
    engine = Engine(rig, built_in=not external)
    warm_up(engine)
    header = _header(options, rig, rig_text, trial, trial_text, engine)
    folder = create_run_folder(options.out, header)
    interrupted = _carry_out(options, rig, trial, engine, header, folder, expected)
    if interrupted:
        print(f"interrupted; what was recorded is in {folder}", file=sys.stderr)  # noqa: T201
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


def _header(
    options: TrialOptions,
    rig: Rig,
    rig_text: str,
    trial: Trial,
    trial_text: str,
    engine: Engine,
) -> RunHeader:
    controller = options.controller
    if controller == "external":
        controller += " over " + ", ".join(link.name for link in rig.links)
    paced = options.clock != _VIRTUAL
    return RunHeader(
        run=new_run_id(),
        started_utc=utc_now(),
        rig_name=rig.name,
        trial_name=trial.name,
        rig_text=rig_text,
        trial_text=trial_text,
        versions=versions(),
        seed=rig.seed,
        tick=rig.tick,
        clock=options.clock,
        pace=options.pace if paced else 0.0,
        controller=controller,
        columns=engine.columns,
        extra=phases_extra(options.phases),
    )


def _carry_out(
    options: TrialOptions,
    rig: Rig,
    trial: Trial,
    engine: Engine,
    header: RunHeader,
    folder: Path,
    expected: dict[str, float],
) -> bool:
    """Run the script to its end, however that comes; return whether it was interrupted."""
    paced = options.clock != _VIRTUAL
    external = options.controller == "external"
    with ExitStack() as stack:
        pacing = _pacing(stack, options, rig, external=external) if paced else None
        recorder: RecordWriter
        if paced:
            recorder = stack.enter_context(RecorderProcess.create(folder, header))
        else:
            now_ns = PacedClock().now_ns
            recorder = stack.enter_context(Recorder.create(folder, header, now_ns))
        port: ViewPort = (
            stack.enter_context(ViewProcess(to_stderr=options.json))
            if paced
            else stack.enter_context(DirectView(to_stderr=options.json))
        )
        view = TrialView(port, rig.name, trial, expected)
        session = Session(
            engine,
            recorder,
            pacing,
            external=external,
            on_event=view.take_event,
            on_look=view.look,
        )
        end = _run_script(session, trial)
        view.look(session)
        recorder.close(
            Closing(
                end=end[0], reason=end[1], last_tick=session.tick - 1, rows=session.rows_taken
            )
        )
    return end[0] is RunEnd.INTERRUPTED


def _run_script(session: Session, trial: Trial) -> tuple[RunEnd, str]:
    try:
        session.run(trial_script(session, trial))
    except KeyboardInterrupt:
        session.event(EventKind.NOTE, "run", "interrupted by the user")
        return RunEnd.INTERRUPTED, "interrupted by the user"
    except RecordError:
        raise
    except DryrigError as error:
        # Whatever a trial runs into, its record is closed and says why it cannot be judged.
        session.event(EventKind.INVALID, "run", str(error))
        return RunEnd.INVALID, str(error)
    return RunEnd.COMPLETE, ""


def _pacing(stack: ExitStack, options: TrialOptions, rig: Rig, *, external: bool) -> Pacing:
    links = None
    if external:
        points = points_of(rig, external)
        links = stack.enter_context(LinkProcess(rig.links, points, rig.name))
        for name, (host, port) in links.addresses.items():
            print(f"link {name}: listening on {host}:{port}", file=sys.stderr, flush=True)  # noqa: T201
    computer = stack.enter_context(ProcessComputer())
    computer.wait_until_warm()
    return Pacing(clock=PacedClock(), pace=options.pace, links=links, computer=computer)
