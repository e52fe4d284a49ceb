"""A live rig: links open, nobody's trial, until Ctrl-C or for a time."""

from __future__ import annotations

import json
import sys
import time
from contextlib import ExitStack
from dataclasses import dataclass
from typing import TYPE_CHECKING

from rich.live import Live

from harness.app.compute import ProcessComputer
from harness.app.loading import LinkChoice, read_rig
from harness.app.stamps import new_run_id, utc_now, versions
from harness.app.trial import say_compiling, warm_up
from harness.domain.points import points_of
from harness.domain.rig import ModbusServerLink
from harness.domain.run import Closing, EventKind, RunEnd, RunHeader
from harness.domain.signals import Quality
from harness.engine.engine import Engine
from harness.errors import UsageError
from harness.links.register_map import describe_map
from harness.recording.folder import create_run_folder
from harness.recording.process import RecorderProcess
from harness.reporting.tables import TagLine, tag_table
from harness.reporting.terminal import make_console
from harness.reporting.words import CAUTIONS
from harness.runtime.clock import PacedClock
from harness.runtime.link_process import LinkProcess
from harness.runtime.session import Pacing, Session

if TYPE_CHECKING:
    from pathlib import Path

    from rich.console import Console

    from harness.domain.rig import Rig
    from harness.domain.run import Event

_FRAME_NS = 500_000_000  # between two tables [ns]
_NS_PER_S = 1e9


@dataclass(frozen=True, slots=True, kw_only=True)
class ServeOptions:
    """What the command line says of a live session.

    Parameters
    ----------
    rig : Path
        The rig file.
    pace : float
        Plant seconds per wall second [-].
    duration : float or None
        Wall time to serve for; None until Ctrl-C [s].
    links : LinkChoice
        Changes of the links.
    builtin : bool
        Whether the built-in block closes the loops and peers only look on.
    out : Path or None
        Where a run folder goes; None records nothing.
    json : bool
        Whether the last state goes to standard output as a document.
    """

    rig: Path
    pace: float
    duration: float | None
    links: LinkChoice
    builtin: bool
    out: Path | None
    json: bool


def serve(options: ServeOptions) -> None:
    """Serve a rig.

    Parameters
    ----------
    options : ServeOptions
        What to serve, and how.

    Raises
    ------
    ConfigurationError
        With every problem of the rig.
    LinkError
        When a link cannot be opened.
    UsageError
        When the rig has no link, or the pace is not positive.
    """
    rig, text = read_rig(options.rig, options.links)
    if not rig.links:
        raise UsageError(f"{options.rig}: this rig has no link to serve")
    if not options.pace > 0.0:
        raise UsageError(f"serve: a pace of {options.pace:g}; it must be above 0")
    say_compiling()
    engine = Engine(rig, built_in=options.builtin)
    warm_up(engine)
    console = make_console(sys.stderr if options.json else None)
    for caution in CAUTIONS:
        console.print(f"Caution: {caution}")
    with ExitStack() as stack:
        points = points_of(rig, external=not options.builtin)
        links = stack.enter_context(LinkProcess(rig.links, points, rig.name))
        for name, (host, port) in links.addresses.items():
            console.print(f"link {name}: listening on {host}:{port}")
        computer = stack.enter_context(ProcessComputer())
        pacing = Pacing(clock=PacedClock(), pace=options.pace, links=links, computer=computer)
        recorder = None
        if options.out is not None:
            header = _header(options, rig, text, engine)
            folder = create_run_folder(options.out, header)
            console.print(f"recording to {folder}")
            recorder = stack.enter_context(RecorderProcess.create(folder, header))
        table = stack.enter_context(_Table(console, rig, live=console.is_terminal))
        session = Session(
            engine,
            recorder,
            pacing,
            external=not options.builtin,
            on_event=table.event,
            on_look=table.look,
        )
        end = _run(session, options)
        session.hand_over()
        if recorder is not None:
            recorder.close(
                Closing(
                    end=end,
                    reason="",
                    last_tick=session.tick - 1,
                    rows=session.rows_taken,
                )
            )
    if options.json:
        print(json.dumps(live_document(session), indent=2, allow_nan=False))  # noqa: T201


def live_document(session: Session) -> dict[str, object]:
    """Return the present values of a live session, JSON-able.

    Parameters
    ----------
    session : Session
        The session.
    """
    values = {}
    for name, (point, value, current, quality) in session.image().items():
        values[name] = {
            "value": value,
            "unit": point.range.unit,
            "current_ma": current if current == current else None,  # noqa: PLR0124  not a number
            "quality": Quality(int(quality)).name.lower(),
            "written_by": session.last_writer.get(name),
        }
    return {
        "schema": 1,
        "rig": session.rig.name,
        "time": session.time,
        "tick": session.tick,
        "values": values,
        "controllers": {tag: watch.peer for tag, watch in session.watches.items()},
    }


def _run(session: Session, options: ServeOptions) -> RunEnd:
    """Advance until the time is over; Ctrl-C is the usual end of a live session."""
    left = None
    if options.duration is not None:
        left = max(1, round(options.duration * options.pace / session.rig.tick))
    try:
        while left is None or left > 0:
            session.advance(1)
            left = None if left is None else left - 1
    except KeyboardInterrupt:
        session.event(EventKind.NOTE, "run", "ended by the user")
        # Without a set length Ctrl-C is how a live session is meant to end.
        return RunEnd.COMPLETE if options.duration is None else RunEnd.INTERRUPTED
    return RunEnd.COMPLETE


def _header(options: ServeOptions, rig: Rig, text: str, engine: Engine) -> RunHeader:
    links = ", ".join(link.name for link in rig.links)
    return RunHeader(
        run=new_run_id(),
        started_utc=utc_now(),
        rig_name=rig.name,
        trial_name="",
        rig_text=text,
        trial_text="",
        versions=versions(),
        seed=rig.seed,
        tick=rig.tick,
        clock="paced",
        pace=options.pace,
        controller="builtin" if options.builtin else f"external over {links}",
        columns=engine.columns,
    )


class _Table:
    """The table of tags on a terminal; events as lines where output is piped."""

    def __init__(self, console: Console, rig: Rig, *, live: bool) -> None:
        self._console = console
        self._rig = rig
        self._live = Live(console=console, auto_refresh=False) if live else None
        self._last_ns = 0
        self._addresses = _addresses(rig)

    def __enter__(self) -> _Table:
        if self._live is not None:
            self._live.start()
        return self

    def __exit__(self, *_: object) -> None:
        if self._live is not None:
            self._live.stop()

    def event(self, event: Event) -> None:
        if event.kind is not EventKind.ORDER:
            self._console.print(
                f"tick {event.tick}: {event.kind.value}: {event.subject}: {event.text}"
            )

    def look(self, session: Session) -> None:
        now_ns = time.perf_counter_ns()
        if self._live is None or now_ns - self._last_ns < _FRAME_NS:
            return
        self._last_ns = now_ns
        readers = "; ".join(
            f"{activity.peer} {(now_ns - activity.arrival_ns) / _NS_PER_S:.1f} s ago"
            for activity in session.last_reader.values()
        )
        lines = [
            TagLine(
                name=name,
                value=value,
                unit=point.range.unit,
                raw=_raw(current, self._addresses.get(name, "")),
                quality=Quality(int(quality)),
                read_by=readers,
                written_by=session.last_writer.get(name, ""),
            )
            for name, (point, value, current, quality) in session.image().items()
        ]
        title = f"{session.rig.name}: {session.time:.0f} s"
        self._live.update(tag_table(lines, title), refresh=True)


def _raw(current: float, address: str) -> str:
    return f"{current:.3f} mA" if current == current else address  # noqa: PLR0124  not a number


def _addresses(rig: Rig) -> dict[str, str]:
    """Return where each point lies on the first Modbus link that shows it."""
    found: dict[str, str] = {}
    points = points_of(rig, external=True)
    for link in rig.links:
        if isinstance(link, ModbusServerLink):
            for row in describe_map(points, link.items):
                found.setdefault(row.point, f"register {row.address}")
    return found
