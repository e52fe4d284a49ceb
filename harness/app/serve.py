"""A live rig: links open, nobody's trial, until Ctrl-C or for a time."""

from __future__ import annotations

import json
import math
import sys
import time
from contextlib import ExitStack
from dataclasses import dataclass
from string import ascii_uppercase
from typing import TYPE_CHECKING

from rich.live import Live
from rich.text import Text

from harness.app.loading import LinkChoice, read_rig
from harness.app.output import write_output
from harness.app.run_files import make_run_folder
from harness.app.stamps import new_run_id, utc_now, versions
from harness.app.stopping import StopRequest
from harness.app.trial import say_compiling, warm_up
from harness.domain.points import points_of
from harness.domain.run import Closing, EventKind, RunEnd, RunHeader
from harness.domain.signals import PointKind, Quality
from harness.engine.engine import Engine
from harness.errors import ExitCode, InvalidRunError, UsageError
from harness.links.raw import RawView
from harness.recording.process import RecorderProcess
from harness.reporting.tables import TagLine, tag_table
from harness.reporting.terminal import make_console
from harness.reporting.words import CAUTIONS, duration, event_text
from harness.runtime.clock import PacedClock
from harness.runtime.link_process import LinkProcess
from harness.runtime.requests import NothingToCompute
from harness.runtime.session import Pacing, Session
from harness.runtime.steadiness import steady_memory, steady_threads

if TYPE_CHECKING:
    from pathlib import Path

    from rich.console import Console

    from harness.domain.rig import Rig
    from harness.domain.run import Event
    from harness.links.raw import Raw
    from harness.runtime.news import Contact

_FRAME_NS = 500_000_000  # between two tables [ns]
_NS_PER_S = 1e9
_WHOLE = (PointKind.MODE, PointKind.HEARTBEAT, PointKind.TICK)  # shown without decimals


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


def serve(options: ServeOptions) -> ExitCode:
    """Serve a rig.

    Parameters
    ----------
    options : ServeOptions
        What to serve, and how.

    Returns
    -------
    ExitCode
        PASS at the end of the set time, and at Ctrl-C where none was set, for that is how such
        a session ends; INTERRUPTED at Ctrl-C before the set time was over.

    Raises
    ------
    ConfigurationError
        With every problem of the rig.
    InvalidRunError
        When the links are lost on this side.
    LinkError
        When a link cannot be opened.
    RecordError
        When the record cannot be written.
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
        stop = stack.enter_context(StopRequest())
        points = points_of(rig, external=not options.builtin)
        links = stack.enter_context(LinkProcess(rig.links, points, rig.name))
        for name, (host, port) in links.addresses.items():
            console.print(f"link {name}: listening on {host}:{port}")
        clock = PacedClock()
        pacing = Pacing(
            clock=clock, pace=options.pace, links=links, computer=NothingToCompute()
        )
        recorder = None
        if options.out is not None:
            header = _header(options, rig, text, engine)
            folder = make_run_folder(options.out, header)
            console.print(f"recording to {folder}")
            recorder = stack.enter_context(RecorderProcess.create(folder, header))
        view = RawView(points, rig.links)
        table = stack.enter_context(_Table(console, view, live=console.is_terminal))
        session = Session(
            engine,
            recorder,
            pacing,
            external=not options.builtin,
            on_event=table.event,
            on_look=table.look,
            stop_asked=stop.asked,
        )
        stack.enter_context(steady_memory())
        stack.enter_context(steady_threads())
        stop.defer(clock.stop)
        try:
            end = _run(session, options)
        except InvalidRunError as error:
            session.event(EventKind.INVALID, "run", str(error))
            _close(session, recorder, RunEnd.INVALID, str(error))
            raise
        _close(session, recorder, end, "")
    if options.json:
        document = live_document(session, time.perf_counter_ns())
        write_output(json.dumps(document, indent=2, allow_nan=False) + "\n")
    return ExitCode.INTERRUPTED if end is RunEnd.INTERRUPTED else ExitCode.PASS


def _close(
    session: Session, recorder: RecorderProcess | None, end: RunEnd, reason: str
) -> None:
    if recorder is not None:
        recorder.close(
            Closing(end=end, reason=reason, last_tick=session.tick - 1, rows=session.rows_taken)
        )


def live_document(session: Session, now_ns: int) -> dict[str, object]:
    """Return the present values of a live session, JSON-able.

    Parameters
    ----------
    session : Session
        The session.
    now_ns : int
        Time on the clock of the arrivals [ns].

    Returns
    -------
    dict
        For each point its value, unit, current [mA], raw content, quality, and who read and
        wrote it last, over which link and how long ago [s]; null for never and for none.
    """
    view = RawView(session.points, session.rig.links)
    values = {}
    for name, (point, value, current, quality) in session.image().items():
        values[name] = {
            "value": value if math.isfinite(value) else None,
            "unit": point.range.unit,
            "current_ma": current if math.isfinite(current) else None,
            "raw": _raw_document(view.of(name, value, current, quality)),
            "quality": Quality(int(quality)).name.lower(),
            "read_by": _contact_document(session.last_reader.get(name), now_ns),
            "written_by": _contact_document(session.last_writer.get(name), now_ns),
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
    finally:
        session.hand_over()
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

    def __init__(self, console: Console, view: RawView, *, live: bool) -> None:
        self._console = console
        self._view = view
        self._live = Live(console=console, auto_refresh=False) if live else None
        self._last_ns = 0
        self._letters: dict[str, str] = {}

    def __enter__(self) -> _Table:
        if self._live is not None:
            self._live.start()
        return self

    def __exit__(self, *_: object) -> None:
        if self._live is not None:
            self._live.stop()

    def event(self, event: Event) -> None:
        if event.kind is not EventKind.ORDER:
            words = event_text(event.subject, event.kind.value, event.text)
            self._console.print(Text(f"tick {event.tick}: {words}"), soft_wrap=True)

    def look(self, session: Session) -> None:
        now_ns = time.perf_counter_ns()
        if self._live is None or now_ns - self._last_ns < _FRAME_NS:
            return
        self._last_ns = now_ns
        pace = f"pace {session.pace:g}"
        lines = [
            TagLine(
                name=name,
                value=value,
                unit=point.range.unit,
                raw=raw_text(self._view.of(name, value, current, quality), current),
                quality=Quality(int(quality)),
                read_by=self._who(session.last_reader.get(name), now_ns),
                written_by=self._who(session.last_writer.get(name), now_ns),
                whole=point.kind in _WHOLE and math.isfinite(value),
            )
            for name, (point, value, current, quality) in session.image().items()
        ]
        title = f"{session.rig.name}: plant time {duration(session.time)}, {pace}"
        peers = {letter: peer for peer, letter in self._letters.items()}
        self._live.update(tag_table(lines, title, peers, self._console.height), refresh=True)

    def _who(self, contact: Contact | None, now_ns: int) -> str:
        """Return the letter of a peer, and how long ago; empty for nobody."""
        if contact is None:
            return ""
        peer = f"{contact.peer} over {contact.link}"
        letter = self._letters.setdefault(peer, _letter(len(self._letters)))
        return f"{letter} {_ago(contact, now_ns):.1f} s ago"


def _letter(index: int) -> str:
    """Return A to Z, then A1 to Z1, and so on."""
    turn, place = divmod(index, len(ascii_uppercase))
    return ascii_uppercase[place] + (str(turn) if turn else "")


def raw_text(raw: Raw | None, current: float) -> str:
    """Return what a peer gets to see of a point, in a few characters.

    Parameters
    ----------
    raw : Raw or None
        The content on the wire.
    current : float
        Loop current; NaN where there is none [mA].
    """
    parts = []
    if raw is not None:
        number = "" if raw.number is None else f"{raw.number} = "
        where = f" at {raw.address}" if raw.address.isdigit() else ""
        parts.append(f"{number}{raw.content}{where}")
    if math.isfinite(current):
        parts.append(f"{current:.3f} mA")
    return ", ".join(parts)


def _ago(contact: Contact, now_ns: int) -> float:
    return max(0, now_ns - contact.arrival_ns) / _NS_PER_S


def _raw_document(raw: Raw | None) -> dict[str, object] | None:
    if raw is None:
        return None
    return {
        "link": raw.link,
        "address": raw.address,
        "encoding": raw.encoding,
        "content": raw.content,
        "number": raw.number,
    }


def _contact_document(contact: Contact | None, now_ns: int) -> dict[str, object] | None:
    if contact is None:
        return None
    return {
        "link": contact.link,
        "peer": contact.peer,
        "seconds_ago": round(_ago(contact, now_ns), 3),
    }
