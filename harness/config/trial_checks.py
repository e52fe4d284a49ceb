"""Checks of a trial against its rig and in itself: phases, changes, models and settings."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.config.findings import not_one_of, show
from harness.config.trial_tables import RunTable
from harness.domain.points import GAIN
from harness.domain.rig import Action

if TYPE_CHECKING:
    from harness.config.findings import Entry
    from harness.config.trial_draft import TrialDraft
    from harness.domain.rig import Loop, Rig

_ROUNDING = 1e-9  # fraction: sums of decimal percentages


def check_trial(draft: TrialDraft, rig: Rig) -> None:
    """Note every problem of a trial.

    Parameters
    ----------
    draft : TrialDraft
        The file; its findings take the problems.
    rig : Rig
        The rig that it is for.
    """
    if not draft.phases:
        draft.findings.add("phase", "is missing; a trial has at least one [[phase]]")
    _names(draft)
    loops = [loop.tag for loop in rig.loops]
    for phase in draft.phases:
        tag = phase.text("loop")
        if tag and tag not in loops:
            phase.problem("loop", not_one_of(tag, loops, "the rig", "loop"))
        _kind_and_mode(phase)
        _change(phase)
    for loop in rig.loops:
        phases = tuple(phase for phase in draft.phases if phase.text("loop") == loop.tag)
        _excursions(phases, loop, rig)
        _identification(phases, draft)
    _models(draft, rig)
    _settings(draft, rig)


def _names(draft: TrialDraft) -> None:
    seen: dict[str, str] = {}
    for phase in draft.phases:
        name = phase.text("name")
        if name and seen.setdefault(name, phase.path) != phase.path:
            phase.problem("name", f'"{name}" is already the name of {seen[name]}')


def _kind_and_mode(phase: Entry) -> None:
    kind, mode = phase.text("kind"), phase.text("mode")
    if kind == "output_step" and mode == "automatic":
        phase.problem(
            "mode", '"automatic" gives the output to the controller; must be "manual"'
        )
    if kind == "setpoint_step" and mode == "manual":
        phase.problem("mode", '"manual" does not follow a setpoint; must be "automatic"')


def _change(phase: Entry) -> None:
    kind, change = phase.text("kind"), phase.number("change")
    if kind == "settle" and "change" in phase.raw:
        phase.problem("change", f"{phase.shown('change')} has no meaning for a settle phase")
    elif kind not in {None, "settle"} and "change" not in phase.raw:
        phase.problem("change", 'is missing; a step has a size, e.g. change = "5 %"')
    elif kind not in {None, "settle"} and change == 0.0:
        phase.problem("change", f"{phase.shown('change')} is no step; it must not be 0")


def _excursions(phases: tuple[Entry, ...], loop: Loop, rig: Rig) -> None:
    """Follow output, load and setpoint through the trial; none may leave its range."""
    output: float | None = rig.valve(loop.output).initial_output
    load = rig.valve(loop.load).initial_output
    measured = rig.transmitter(loop.process_variable).range
    initial = loop.initial_setpoint
    setpoint = measured.to_fraction(initial) if initial is not None else None
    for phase in phases:
        kind, change = phase.text("kind"), phase.number("change") or 0.0
        if phase.text("mode") == "automatic":
            output = None  # from here on the controller decides
        if kind == "output_step" and output is not None:
            output += change
            _within(phase, "output", output, loop.output_low, loop.output_high)
        elif kind == "load_step":
            load += change
            _within(phase, "load", load, 0.0, 1.0)
        elif kind == "setpoint_step" and setpoint is not None:
            setpoint += change
            _within(phase, "setpoint", setpoint, 0.0, 1.0)


def _within(phase: Entry, what: str, value: float, low: float, high: float) -> None:
    if not low - _ROUNDING <= value <= high + _ROUNDING:
        phase.problem(
            "change",
            f"{phase.shown('change')} takes the {what} to {value * 100:g} %;"
            f" it must stay within {low * 100:g} to {high * 100:g} %",
        )


def _identification(phases: tuple[Entry, ...], draft: TrialDraft) -> None:
    """Note a scored step that comes before the manual steps that identify the models."""
    if draft.trial.text("models") != "identified":
        return
    wanted = {"output_step", "load_step"}
    for phase in phases:
        kind = phase.text("kind")
        if phase.text("mode") == "manual" and kind in wanted:
            wanted.remove(kind)
        elif phase.text("mode") == "automatic" and kind != "settle" and wanted:
            missing = " and ".join(sorted(wanted))
            phase.problem(
                "mode",
                f'"automatic" comes before a manual {missing}; models = "identified" wants both'
                " first",
            )
            return


def _models(draft: TrialDraft, rig: Rig) -> None:
    models = draft.trial.text("models")
    if models == "given" and draft.given is None:
        draft.trial.problem(
            "models", '"given" wants the models in [given.output] and [given.load]'
        )
    if draft.given is None:
        return
    if models not in {None, "given"}:
        draft.given.problem("", f'is not used with models = "{models}"; take it out')
    elif isinstance(draft.trial.get("models"), RunTable):
        draft.given.problem("", "is not used with the models of a run; take it out")
    for name in ("output", "load"):
        model = draft.given.get(name)
        if model is None:
            continue
        if model.gain == 0.0:
            draft.given.problem(f"{name}.gain", "0 moves nothing; a gain is not 0")
        constants = model.time_constants
        if sorted(constants, reverse=True) != constants:
            draft.given.problem(
                f"{name}.time_constants",
                f"{show(draft.given.raw[name]['time_constants'])} is crossed; the larger comes first",
            )
    _direction(draft, rig)


def _direction(draft: TrialDraft, rig: Rig) -> None:
    """Note a given gain whose sign contradicts the action of the loop under trial."""
    model = draft.given.get("output") if draft.given else None
    tested = {phase.text("loop") for phase in draft.phases}
    for loop in rig.loops:
        if model is None or draft.given is None or loop.tag not in tested:
            continue
        if model.gain * _sign(loop.action) < 0.0:
            draft.given.problem(
                "output.gain",
                f"{model.gain:g} does not go with the {loop.action} action of {loop.tag};"
                " reverse action wants a gain above 0, direct action below 0",
            )


def _sign(action: Action) -> float:
    return 1.0 if action is Action.REVERSE else -1.0


def _settings(draft: TrialDraft, rig: Rig) -> None:
    settings, law = draft.trial.text("settings"), draft.trial.text("law")
    if settings == "as found" and draft.as_found is None:
        draft.trial.problem("settings", '"as found" wants the settings in [as_found]')
    if draft.as_found is None:
        return
    if settings == "computed":
        draft.as_found.problem("", 'is not used with settings = "computed"; take it out')
    block = draft.as_found.text("units") == "block"
    key, other = ("integral", "integral_time") if block else ("integral_time", "integral")
    if other in draft.as_found.raw:
        where = "the block's own units" if block else "units of %/% and seconds"
        draft.as_found.problem(other, f"has no place with {where}; write {key}")
        return
    if law == "P" and key in draft.as_found.raw:
        draft.as_found.problem(key, 'has no place with law = "P"; take it out')
    if law == "PI" and key not in draft.as_found.raw:
        draft.as_found.problem(key, 'is missing; law = "PI" wants one')
    gain = draft.as_found.number("gain")
    if not block and gain is not None and gain > GAIN.upper:
        draft.as_found.problem(
            "gain", f"{draft.as_found.shown('gain')} must be at most {GAIN.upper:g}"
        )
    if block and len({rig.loop(tag).block for tag in _tested(draft, rig)}) > 1:
        draft.as_found.problem(
            "units", "the loops of this trial have blocks in different units; write them in %/%"
        )


def _tested(draft: TrialDraft, rig: Rig) -> list[str]:
    """Return the loops that a trial has phases of."""
    named = {phase.text("loop") for phase in draft.phases}
    return [loop.tag for loop in rig.loops if loop.tag in named]
