"""The check of every signal between rig and controller, as a command."""

from __future__ import annotations

import json
import sys
from contextlib import ExitStack
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from harness.app.loading import LinkChoice, read_rig
from harness.app.loop_facts import loop_facts
from harness.app.output import write_output
from harness.app.printing import print_signals
from harness.app.run_files import make_run_folder
from harness.app.stamps import new_run_id, utc_now, versions
from harness.app.stopping import StopRequest
from harness.app.trial import say_compiling, warm_up
from harness.domain.points import points_of
from harness.domain.run import Closing, EventKind, RunEnd, RunHeader
from harness.domain.verdict import Outcome
from harness.engine.engine import Engine
from harness.errors import DryrigError, ExitCode, InvalidRunError, UsageError
from harness.recording.export import write_file
from harness.recording.process import RecorderProcess
from harness.reporting.signals_report import render_signals, signals_junit
from harness.runtime.answers import AnyAnswers, FileAnswers, TerminalAnswers
from harness.runtime.clock import PacedClock
from harness.runtime.controller_checks import check_document
from harness.runtime.link_process import LinkProcess
from harness.runtime.orders import OrderDesk
from harness.runtime.requests import NothingToCompute
from harness.runtime.session import Pacing, Session
from harness.runtime.signal_test import SignalPlan, SignalReport, signal_test
from harness.runtime.steadiness import steady_memory, steady_threads
from harness.runtime.trial_script import WAIT_FOR_CONTROLLER

if TYPE_CHECKING:
    import argparse
    from collections.abc import Generator
    from pathlib import Path
    from typing import Any

    from harness.domain.rig import Rig
    from harness.domain.run import Event
    from harness.runtime.answers import Answers
    from harness.runtime.requests import Request

SIGNALS = "signals"  # stands where the trial's name would
_QUIET = (EventKind.ORDER, EventKind.ORDER_KNOWN)  # too many for a terminal


@dataclass(frozen=True, slots=True, kw_only=True)
class SignalOptions:
    """What the command line says of a check of signals.

    Parameters
    ----------
    rig : Path
        The rig file.
    pace : float
        Plant seconds per wall second [-].
    links : LinkChoice
        Changes of the links.
    out : Path
        Where the run folder goes.
    json : bool
        Whether standard output is kept for the document.
    wait : float
        Longest wait for a controller [wall s].
    answers : Path or None
        File to which answers are appended; None takes them from the terminal.
    """

    rig: Path
    pace: float
    out: Path
    links: LinkChoice = field(default_factory=LinkChoice)
    json: bool = False
    wait: float = WAIT_FOR_CONTROLLER
    answers: Path | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class SignalResult:
    """What a check of signals found, on disk.

    Parameters
    ----------
    folder : Path
        The run folder.
    text : str
        The document as JSON.
    document : dict
        The document.
    outcome : Outcome
        Its verdict.
    """

    folder: Path
    text: str
    document: dict[str, object]
    outcome: Outcome

    @property
    def exit_code(self) -> ExitCode:
        """Return what the command returns for this verdict."""
        codes = {Outcome.PASS: ExitCode.PASS, Outcome.FAIL: ExitCode.FAIL}
        return codes.get(self.outcome, ExitCode.INVALID)


def signals_command(options: argparse.Namespace, links: LinkChoice) -> int:
    """Run the command ``dryrig signals``.

    Parameters
    ----------
    options : Namespace
        Of the command line.
    links : LinkChoice
        Changes of the links.

    Returns
    -------
    int
        Exit code [-].
    """
    result = signals(
        SignalOptions(
            rig=options.rig,
            pace=options.pace,
            out=options.out,
            links=links,
            json=options.json,
            wait=options.wait,
            answers=options.answers,
        )
    )
    if options.json:
        write_output(result.text)
    else:
        print_signals(result.document)
    return result.exit_code


def signals(options: SignalOptions) -> SignalResult:
    """Serve a rig and check every signal of it.

    Parameters
    ----------
    options : SignalOptions
        What to check, and how.

    Returns
    -------
    SignalResult
        Verdict and folder.

    Raises
    ------
    ConfigurationError
        With every problem of the rig.
    UsageError
        When the rig has no link or no loop.
    LinkError
        When a link cannot be opened; no folder is made.
    KeyboardInterrupt
        After an interrupted run has been closed.
    """
    rig, text = read_rig(options.rig, options.links)
    if not rig.links or not rig.loops:
        what = "no loop" if rig.links else "no link"
        raise UsageError(
            f"{options.rig}: a check of signals needs both, and this rig has {what}"
        )
    say_compiling()
    engine = Engine(rig, built_in=False)
    warm_up(engine)
    header = _header(options, rig, text, engine)
    folder, report, reason = _carry_out(options, engine, header)
    document = _document(header, rig, report, reason)
    document["folder"] = str(folder)
    told = json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"
    write_file(folder / "signals.json", told)
    write_file(folder / "junit.xml", signals_junit(document))
    write_file(folder / "report.html", render_signals(document, header))
    outcome = Outcome(str(document["verdict"]))
    return SignalResult(folder=folder, text=told, document=document, outcome=outcome)


def _header(options: SignalOptions, rig: Rig, text: str, engine: Engine) -> RunHeader:
    return RunHeader(
        run=new_run_id(),
        started_utc=utc_now(),
        rig_name=rig.name,
        trial_name=SIGNALS,
        rig_text=text,
        trial_text="",
        versions=versions(),
        seed=rig.seed,
        tick=rig.tick,
        clock="paced",
        pace=options.pace,
        controller="external over " + ", ".join(link.name for link in rig.links),
        columns=engine.columns,
    )


def _carry_out(
    options: SignalOptions, engine: Engine, header: RunHeader
) -> tuple[Path, SignalReport, str]:
    """Return the folder, what was found, and why it ended early if it did."""
    rig = engine.rig
    with ExitStack() as stack:
        stop = stack.enter_context(StopRequest())
        links = stack.enter_context(
            LinkProcess(rig.links, points_of(rig, external=True), rig.name)
        )
        for name, (host, port) in links.addresses.items():
            _say(f"link {name}: listening on {host}:{port}")
        folder = make_run_folder(options.out, header)
        recorder = stack.enter_context(RecorderProcess.create(folder, header))
        stack.enter_context(steady_memory())
        stack.enter_context(steady_threads())
        clock = PacedClock()
        session = Session(
            engine,
            recorder,
            Pacing(clock=clock, pace=options.pace, links=links, computer=NothingToCompute()),
            external=True,
            on_event=_Telling(rig.tick).event,
            stop_asked=stop.asked,
        )
        stop.defer(clock.stop)
        kept = _Kept(session, options)
        try:
            session.run(kept.script())
        except KeyboardInterrupt:
            _close(session, recorder, RunEnd.INTERRUPTED, "interrupted by the user")
            raise
        except DryrigError as error:
            session.event(EventKind.INVALID, "run", str(error))
            _close(session, recorder, RunEnd.INVALID, str(error))
            if not isinstance(error, InvalidRunError):
                raise
            return folder, kept.report, str(error)
        _close(session, recorder, RunEnd.COMPLETE, "")
    return folder, kept.report, ""


class _Kept:
    """The script, and what it returns."""

    def __init__(self, session: Session, options: SignalOptions) -> None:
        self.report = SignalReport()
        self._session = session
        answers = _answers(options)
        self._plan = SignalPlan(
            answers=answers,
            desk=OrderDesk(session, answers, options.wait),
            wait=options.wait,
        )

    def script(self) -> Generator[Request, Any, None]:
        yield from signal_test(self._session, self._plan, self.report)


def _answers(options: SignalOptions) -> Answers:
    places: list[Answers] = []
    if options.answers is not None:
        places.append(FileAnswers(options.answers))
    elif sys.stdin.isatty():
        places.append(TerminalAnswers(sys.stdin.fileno()))
    return AnyAnswers(places)


def _close(session: Session, recorder: RecorderProcess, end: RunEnd, reason: str) -> None:
    session.hand_over()
    recorder.close(
        Closing(end=end, reason=reason, last_tick=session.tick - 1, rows=session.rows_taken)
    )


def _document(
    header: RunHeader, rig: Rig, report: SignalReport, reason: str
) -> dict[str, object]:
    outcome = report.outcome
    if reason and outcome is Outcome.PASS:
        outcome = Outcome.INVALID
    return {
        "schema": 1,
        "run": header.run,
        "rig": header.rig_name,
        "kind": SIGNALS,
        "verdict": outcome.value,
        "reasons": [reason] if reason else [],
        "conditions": {
            "started_utc": header.started_utc,
            "controller": header.controller,
            "clock": header.clock,
            "pace": header.pace,
            "tick": header.tick,
            "versions": dict(header.versions),
        },
        "loops": loop_facts(rig),
        "controllers": report.controllers,
        "checks": [check_document(check) for check in report.checks],
        "points": report.points,
    }


class _Telling:
    """Says events as lines."""

    def __init__(self, tick: float) -> None:
        self._tick = tick

    def event(self, event: Event) -> None:
        if event.kind not in _QUIET:
            what = "" if event.kind is EventKind.PROMPT else f"{event.kind.value}: "
            _say(f"[{event.tick * self._tick:.0f} s] {event.subject}, {what}{event.text}")


def _say(text: str) -> None:
    print(text, file=sys.stderr, flush=True)  # noqa: T201
