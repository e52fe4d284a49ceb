"""One frame of the live view: head, phases, values, trend, events."""

from __future__ import annotations

from dataclasses import dataclass

from rich.console import Console, Group, RenderableType
from rich.rule import Rule
from rich.table import Table
from rich.text import Text

from harness.reporting.tables import QUALITY_STYLES
from harness.reporting.trend import REFERENCE_STYLE, trend
from harness.reporting.view_state import EventLine, LoopView, PhaseState, PhaseView, ViewState
from harness.reporting.words import duration, figure

OTHER_LINES = 5  # [lines]; head, rule, heading of the events and its empty one, the cursor
LOOP_LINES = 3  # [lines]; of a loop, beside its trend
BAR_WIDTH = 12  # [characters]
STATE_WIDTH, TIMES_WIDTH = 7, 20  # [characters]; never cut, whatever the notes say
VALUE_WIDTH = 7  # [characters]
NARROW, USUAL, WIDE = 60, 80, 110  # [characters]; below the usual width the bars go
LOW = 28  # [lines]; below, trend and events are shorter


@dataclass(frozen=True, slots=True, kw_only=True)
class _Layout:
    """What fits the terminal: width and lines for each part, and whether it knows Unicode."""

    width: int
    phases: int
    trend: int
    events: int
    unicode: bool


def frame(state: ViewState, console: Console) -> RenderableType:
    """Return one frame of the live view, no larger than the terminal from 60 by 20 upwards.

    Parameters
    ----------
    state : ViewState
        What to show.
    console : Console
        Decides width, height and characters.
    """
    told = [event for event in state.events if not event.of_phase]
    layout = _layout(console, len(state.loops), len(told), _prompt_words(state))
    phases = _around_running(state.phases, layout.phases)
    pieces: list[RenderableType] = [*_head(state, layout), _phase_list(phases, layout)]
    if state.prompt:
        # Never cut: it is to be typed to the digit.
        pieces += [Text(""), Text(_prompt_words(state), style="bold reverse")]
    for loop in state.loops:
        pieces += [Text(""), _loop_values(loop, layout)]
        drawn = trend(
            loop.recent_process_variable,
            loop.recent_setpoint,
            width=layout.width,
            height=layout.trend,
            braille=layout.unicode,
        )
        pieces.append(drawn)
    told = told[-layout.events :]
    if told:
        pieces += [Text(""), Text("Latest events", style="bold")]
        pieces += [
            Text(f"  {event_words(event)}", no_wrap=True, overflow="ellipsis") for event in told
        ]
    return Group(*pieces)


def _prompt_words(state: ViewState) -> str:
    return f"To do now: {state.prompt}" if state.prompt else ""


def _layout(console: Console, loops: int, told: int, prompt: str) -> _Layout:
    trend_height, most = (4, 2) if console.height < LOW else (7, 4)
    events = max(1, min(most, told))
    taken = OTHER_LINES + events + (LOOP_LINES + trend_height) * loops
    if prompt:
        taken += 2 + len(prompt) // max(NARROW, console.width)
    return _Layout(
        width=max(NARROW, min(console.width, WIDE)),
        phases=max(3, console.height - taken),
        trend=trend_height,
        events=events,
        unicode=console.encoding.startswith("utf"),
    )


def pace_words(state: ViewState) -> str:
    """Return the pace in words."""
    return f"pace {state.pace:g}" if state.pace > 0 else "virtual time"


def time_words(state: ViewState, *, at_start: bool = False) -> str:
    """Return the plant time so far, and how long it should take, in words."""
    if at_start and state.expected > 0:
        return f"about {duration(state.expected)} of plant time"
    words = f"plant time {duration(state.elapsed)}"
    if state.elapsed < state.expected:
        words += f" of about {duration(state.expected)}"
    return words


def left_words(state: ViewState) -> str:
    """Return how long the run should still take by the clock on the wall; empty if not known."""
    left = state.expected - state.elapsed
    return f"about {duration(left / state.pace)} to go" if state.pace > 0 and left > 0 else ""


def event_words(event: EventLine) -> str:
    """Return an event in one line, with its plant time."""
    return f"[{duration(event.time)}] {event.text}"


def _head(state: ViewState, layout: _Layout) -> list[RenderableType]:
    names = Text.assemble((state.rig, "bold"), "  ", state.trial or "live session")
    names.no_wrap, names.overflow = True, "ellipsis"
    words = "   ".join(
        item for item in (time_words(state), pace_words(state), left_words(state)) if item
    )
    rule = Rule(
        Text(words), align="left", characters="─" if layout.unicode else "-", style="dim"
    )
    return [names, rule]


def _phase_list(phases: tuple[PhaseView, ...], layout: _Layout) -> Table:
    grid = Table.grid(padding=(0, 2, 0, 0))
    bars = layout.width >= USUAL
    names = max((len(phase.name) for phase in phases), default=0)
    taken = names + STATE_WIDTH + TIMES_WIDTH + 8 + (BAR_WIDTH + 2 if bars else 0)
    for least in (0, STATE_WIDTH, *([BAR_WIDTH] if bars else []), TIMES_WIDTH):
        grid.add_column(no_wrap=True, min_width=least)
    grid.add_column(no_wrap=True, overflow="ellipsis", max_width=max(8, layout.width - taken))
    for phase in phases:
        style = {PhaseState.RUNNING: "bold", PhaseState.INVALID: "bold magenta"}.get(
            phase.state, "" if phase.state is PhaseState.DONE else "dim"
        )
        cells = [Text(phase.name, style=style), Text(phase.state.value, style=style)]
        if bars:
            cells.append(_bar(phase, unicode=layout.unicode))
        cells += [Text(_phase_times(phase), style=style), Text(phase.note, style=style)]
        grid.add_row(*cells)
    return grid


def _phase_times(phase: PhaseView) -> str:
    expected = f"about {duration(phase.expected)}" if phase.expected > 0 else ""
    if phase.state is PhaseState.WAITING:
        return expected
    elapsed = duration(phase.elapsed)
    return (
        f"{elapsed} of {expected}"
        if phase.state is PhaseState.RUNNING and expected
        else elapsed
    )


def _bar(phase: PhaseView, *, unicode: bool) -> Text:
    """Return the progress of a phase; one that takes longer than expected stays just short."""
    full, empty = ("━", "┄") if unicode else ("=", ".")
    if phase.state is PhaseState.DONE:
        part = 1.0
    elif phase.state is PhaseState.WAITING or phase.expected <= 0:
        part = 0.0
    else:
        part = min(phase.elapsed / phase.expected, 1.0 - 1.0 / BAR_WIDTH)
    done = int(part * BAR_WIDTH)
    return Text.assemble((full * done, "bold"), (empty * (BAR_WIDTH - done), "dim"))


def _loop_values(loop: LoopView, layout: _Layout) -> Table:
    """Return the present values of a loop, each under its name."""
    marks = ("╌", "─") if layout.unicode else ("-", "*")
    cells = {
        loop.tag: Text(loop.mode, style="bold"),
        f"setpoint {marks[0]}": Text(
            f"{figure(loop.setpoint, 'none')} {loop.unit}", style=REFERENCE_STYLE
        ),
        f"measured {marks[1]}": Text(
            f"{figure(loop.process_variable, 'none')} {loop.unit}", style="bold"
        ),
        "quality": Text(loop.quality.name.lower(), style=QUALITY_STYLES[loop.quality]),
        "output": Text(f"{100 * loop.output:.1f} %"),
        "load": Text(f"{100 * loop.load:.1f} %"),
    }
    if loop.recent_span > 0 and layout.width >= USUAL:
        cells["trend over"] = Text(duration(loop.recent_span), style="dim")
    grid = Table.grid(padding=(0, 2 if layout.width >= USUAL else 1, 0, 0))
    for _ in cells:
        grid.add_column(no_wrap=True, min_width=VALUE_WIDTH)
    names = [Text(name, style="bold" if name == loop.tag else "dim") for name in cells]
    grid.add_row(*names)
    grid.add_row(*cells.values())
    return grid


def _around_running(phases: tuple[PhaseView, ...], room: int) -> tuple[PhaseView, ...]:
    """Return the part of the list that fits, with the running phase in it."""
    if len(phases) <= room:
        return phases
    running = [i for i, phase in enumerate(phases) if phase.state is not PhaseState.DONE]
    first = max(0, min((running[0] if running else len(phases)) - 1, len(phases) - room))
    return phases[first : first + room]
