"""What a view of a running trial shows, as plain data."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from harness.domain.signals import Quality


class PhaseState(StrEnum):
    """Where a phase stands."""

    WAITING = "waiting"
    RUNNING = "running"
    DONE = "done"
    INVALID = "invalid"


@dataclass(frozen=True, slots=True, kw_only=True)
class PhaseView:
    """One phase in the list.

    Parameters
    ----------
    name : str
        Name.
    state : PhaseState
        Where it stands.
    elapsed, expected : float
        Plant time since its start, and how long it should take; 0 for not known [s].
    note : str
        A word, e.g. what is waited for; may be empty.
    """

    name: str
    state: PhaseState
    elapsed: float
    expected: float
    note: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class EventLine:
    """An event as a view tells it.

    Parameters
    ----------
    time : float
        Plant time [s].
    text : str
        One line.
    of_phase : bool
        Whether it only says that a phase began or ended, which the list of phases shows too.
    """

    time: float
    text: str
    of_phase: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class LoopView:
    """What a loop does now.

    Parameters
    ----------
    tag : str
        Tag of the loop.
    unit : str
        Unit of setpoint and process variable.
    setpoint, process_variable : float
        Now [unit].
    output, load : float
        Now [fraction].
    mode : str
        ``"manual"`` or ``"automatic"``.
    quality : Quality
        Of the process variable.
    recent_setpoint, recent_process_variable : tuple of float
        Recent values at equal distances, oldest first; what is not finite is a gap [unit].
    recent_span : float
        Time that they cover; 0 for not known [s].
    """

    tag: str
    unit: str
    setpoint: float
    process_variable: float
    output: float
    load: float
    mode: str
    quality: Quality
    recent_setpoint: tuple[float, ...] = ()
    recent_process_variable: tuple[float, ...] = ()
    recent_span: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class ViewState:
    """All that a view shows of a run.

    Parameters
    ----------
    rig, trial : str
        Names; the trial's is empty for a live session.
    pace : float
        Plant seconds per wall second; 0 for as fast as it goes [-].
    elapsed, expected : float
        Plant time since the start, and of the whole run as expected by now; 0 for not known [s].
    phases : tuple of PhaseView
        All phases, in order.
    loops : tuple of LoopView
        The loops to show.
    events : tuple of EventLine
        All events so far or the latest of them, newest last.
    events_before : int
        Events that came before the first of ``events`` [-].
    prompt : str
        What somebody is asked to do at the controller now; empty for nothing.
    """

    rig: str
    trial: str
    pace: float
    elapsed: float
    expected: float
    phases: tuple[PhaseView, ...] = ()
    loops: tuple[LoopView, ...] = ()
    events: tuple[EventLine, ...] = ()
    events_before: int = 0
    prompt: str = ""
