"""What a phase will look like, before it is run: its response, its time constant, its length."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.analysis.linear import predict_sampled
from harness.analysis.steady import tail_time_constant
from harness.controllers.block import AUTOMATIC, MANUAL
from harness.domain.models import ControllerSettings
from harness.domain.trial import Mode, PhaseKind
from harness.errors import DataError, ModelError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.analysis.linear import ScanSchedule
    from harness.domain.models import LoopModels
    from harness.domain.rig import Loop
    from harness.domain.trial import Phase, SteadyRule

    Floats = NDArray[np.float64]

_HORIZON = 12.0  # of the total lag, doubled until the response has died out [-]
_DOUBLINGS = 5
_TYPICAL_CHANGE = 0.05  # of output or span, where a phase changes nothing [-]
_LOOK_DELAY = 1.2  # dominant time constants from the first right moment to the verdict [-]
_AT_REST = 1e-3  # of its range: a response that moves less over its last third is at rest [-]
# An exponential is within a hundredth after 4.6 time constants; the dwell of five ends no sooner.
_TIMES_TO_BOUND = 5.0
FREE = (2.0, 2.0)  # beyond every output: no limit is met [-]
_MID = 0.5  # of output or span: where a linear prediction stands does not matter [-]


@dataclass(frozen=True, slots=True, kw_only=True)
class PhasePlan:
    """Expectation of a phase.

    Parameters
    ----------
    dominant_time : float
        Time constant of the tail of its response [s].
    effect : float
        Lasting change of the process variable that its step asks for, or would make without a
        controller [fraction of span].
    duration : float
        Expected time until it counts as steady [s].
    """

    dominant_time: float
    effect: float
    duration: float


def predict_phase(
    phase: Phase,
    loop: Loop,
    models: LoopModels,
    settings: ControllerSettings | None,
    schedule: ScanSchedule,
    tick: float,
    rows: int,
    room: tuple[float, float] = FREE,
) -> tuple[Floats, Floats]:
    """Predict a phase with linear models, from a steady state at mid range.

    Parameters
    ----------
    phase : Phase
        The phase.
    loop : Loop
        The loop.
    models : LoopModels
        Models.
    settings : ControllerSettings or None
        Settings; needed in automatic.
    schedule : ScanSchedule
        Scans of the block.
    tick : float
        Step [s].
    rows : int
        Length [ticks].
    room : tuple of float
        How far the controller may move its output down and up from where it stands [-].

    Returns
    -------
    process_variable : ndarray, shape (rows,)
        Deviation from its start [fraction of span].
    output : ndarray, shape (rows,)
        Deviation of the output from its start [-].
    """
    size = phase.change
    automatic = phase.mode is Mode.AUTOMATIC
    setpoint = np.full(rows, _MID)
    load = np.full(rows, _MID)
    manual = np.full(rows, _MID)
    if phase.kind is PhaseKind.SETPOINT_STEP:
        setpoint += size
    elif phase.kind is PhaseKind.LOAD_STEP:
        load += size
    elif phase.kind is PhaseKind.OUTPUT_STEP:
        manual += size
    block = settings or ControllerSettings(gain=0.0, integral_time=None, action=loop.action)
    process_variable, output = predict_sampled(
        models,
        block,
        schedule,
        tick,
        setpoint,
        load,
        np.full(rows, AUTOMATIC if automatic else MANUAL, dtype=np.int64),
        manual,
        _MID,
        _MID,
        _MID - room[0],
        _MID + room[1],
        initial_load=_MID,
    )
    return process_variable - _MID, output - _MID


def plan_phase(
    phase: Phase,
    loop: Loop,
    models: LoopModels,
    settings: ControllerSettings | None,
    schedule: ScanSchedule,
    tick: float,
    rule: SteadyRule,
    room: tuple[float, float] = FREE,
) -> PhasePlan:
    """Return the expectation of a phase.

    Parameters
    ----------
    phase : Phase
        The phase; one that changes nothing is taken to settle from a typical step.
    loop : Loop
        The loop.
    models : LoopModels
        Models.
    settings : ControllerSettings or None
        Settings; needed in automatic.
    schedule : ScanSchedule
        Scans of the block.
    tick : float
        Step [s].
    rule : SteadyRule
        When a phase counts as steady.
    room : tuple of float
        How far the controller may move its output down and up from where it stands: one that
        comes to a limit leaves the plant to its own, slower, time constants [-].

    Returns
    -------
    PhasePlan
        The expectation.

    Raises
    ------
    ModelError
        When the predicted loop does not come to rest.
    """
    stand_in = _stand_in(phase)
    effect = _effect(stand_in, models)
    horizon = _HORIZON * max(models.output.total_lag, models.load.total_lag)
    for _ in range(_DOUBLINGS):
        rows = max(10, round(horizon / tick))
        response, _ = predict_phase(
            stand_in, loop, models, settings, schedule, tick, rows, room
        )
        time = np.arange(rows, dtype=np.float64) * tick
        dominant, reached = _tail(time, response, rule.remaining * effect)
        if dominant is not None:
            last = 0.0 if phase.kind is PhaseKind.SETTLE else reached
            duration = max(rule.dwell * dominant, last + _LOOK_DELAY * dominant)
            return PhasePlan(dominant_time=dominant, effect=effect, duration=duration)
        horizon *= 2
    raise ModelError(
        f"phase {phase.name!r}: the predicted loop does not come to rest within {horizon:.0f} s; "
        "it is unstable or nearly so. Take a longer closed-loop time, or check the settings"
    )


def _stand_in(phase: Phase) -> Phase:
    """Return the phase itself, or a typical step for one that only settles."""
    if phase.kind is not PhaseKind.SETTLE:
        return phase
    automatic = phase.mode is Mode.AUTOMATIC
    kind = PhaseKind.SETPOINT_STEP if automatic else PhaseKind.OUTPUT_STEP
    return dataclasses.replace(phase, kind=kind, change=_TYPICAL_CHANGE)


def _effect(phase: Phase, models: LoopModels) -> float:
    """Return the lasting change of the process variable that a step asks for or would make alone."""
    match phase.kind:
        case PhaseKind.OUTPUT_STEP:
            return abs(models.output.gain * phase.change)
        case PhaseKind.LOAD_STEP:
            return abs(models.load.gain * phase.change)
        case _:
            return abs(phase.change)


def _tail(time: Floats, response: Floats, bound: float) -> tuple[float | None, float]:
    """Return the dominant time of a response that has died out, and when it is within a bound."""
    error = np.asarray(response - response[-1], dtype=np.float64)
    # A response that has not come to rest betrays itself by moving over the last third.
    still = np.ptp(response[-len(response) // 3 :]) <= _AT_REST * np.ptp(response)
    if not (np.isfinite(response).all() and still):
        return None, 0.0
    left = np.flatnonzero(np.abs(error) > bound)
    reached = float(time[left[-1]]) if len(left) else float(time[1])
    try:
        tail = tail_time_constant(time, error)
    except DataError:
        return None, 0.0
    # A lobe can stretch the tail's own measure beyond what the whole response allows.
    return min(tail, reached / _TIMES_TO_BOUND), reached
