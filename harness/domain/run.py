"""The documents of a run, in the order in which they are written: header, rows, events, closing."""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import StrEnum

SCHEMA_VERSION = 1  # of the record; raised when a reader of the old form would go wrong


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    """One column of the trace.

    Parameters
    ----------
    name : str
        E.g. ``"LT-102.true"``, ``"LT-102.value"``, ``"FV-101.position"``.
    unit : str
        Unit of the numbers, ``""`` for none [-].
    """

    name: str
    unit: str


@dataclass(frozen=True, slots=True, kw_only=True)
class RunHeader:
    """The first document of a run.

    Parameters
    ----------
    run : str
        Id of the run.
    started_utc : str
        ISO 8601 time stamp, a label only.
    rig_name, trial_name : str
        Names; the trial's is empty for a live session.
    rig_text, trial_text : str
        The files as used.
    versions : dict of str to str
        Versions of the program, of Python and of the libraries.
    seed : int
        Seed of the noise [-].
    tick : float
        Step of the rig [s].
    clock : str
        ``"virtual"`` or ``"paced"``.
    pace : float
        Plant seconds per wall second; 0 for virtual time [-].
    controller : str
        ``"builtin"`` or ``"external"``, with link.
    columns : tuple of Column
        Columns of a row.
    extra : dict of str to str
        Whatever else identifies the run.
    """

    run: str
    started_utc: str
    rig_name: str
    trial_name: str
    rig_text: str
    trial_text: str
    versions: dict[str, str]
    seed: int
    tick: float
    clock: str
    pace: float
    controller: str
    columns: tuple[Column, ...]
    extra: dict[str, str] = field(default_factory=dict)


class EventKind(StrEnum):
    """Kinds of event in the record."""

    PHASE_STARTED = "phase started"
    PHASE_ENDED = "phase ended"
    ORDER = "order"
    ORDER_KNOWN = "order known"
    PROMPT = "prompt"
    MODELS = "models"
    SETTINGS = "settings"
    CONTROLLER_FOUND = "controller found"
    CONTROLLER_SILENT = "controller silent"
    CONTROLLER_BACK = "controller back"
    PEER_CONNECTED = "peer connected"
    PEER_GONE = "peer gone"
    REFUSED = "refused"
    PREFLIGHT = "pre-flight"
    NOTE = "note"
    INVALID = "invalid"


@dataclass(frozen=True, slots=True, kw_only=True)
class Event:
    """Something that happened at a tick.

    Parameters
    ----------
    tick : int
        Tick [ticks].
    kind : EventKind
        Kind.
    subject : str
        Tag, phase, link or peer.
    text : str
        One line for people.
    data : dict of str to object
        JSON-able facts for programs.
    """

    tick: int
    kind: EventKind
    subject: str
    text: str
    data: dict[str, object] = field(default_factory=dict)


class RunEnd(StrEnum):
    """How a run ended."""

    COMPLETE = "complete"
    INVALID = "invalid"
    INTERRUPTED = "interrupted"


@dataclass(frozen=True, slots=True, kw_only=True)
class Closing:
    """The last document; a record without it is of a run that was cut off.

    Parameters
    ----------
    end : RunEnd
        How the run ended.
    reason : str
        Why, for an invalid or interrupted run.
    last_tick : int
        Last tick recorded [ticks].
    rows : int
        Rows written [-].
    """

    end: RunEnd
    reason: str
    last_tick: int
    rows: int
