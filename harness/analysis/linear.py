"""Linear prediction in sampled mode: the block's own scan, hold and delay on exact lags.

The continuous mode, and the response that the design asked for, live in
``harness.analysis.continuous`` and are offered here too, so that callers see one engine.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.analysis.continuous import (
    ContinuousResponse,
    IntegratorModel,
    design_target,
    design_target_load,
    predict_continuous,
)
from harness.controllers.block import block_scan
from harness.domain.models import ControllerSettings, LagModel, LoopModels
from harness.domain.rig import Action
from harness.errors import ModelError, UsageError
from plants.compile import kernel

__all__ = [
    "ContinuousResponse",
    "IntegratorModel",
    "ScanSchedule",
    "design_target",
    "design_target_load",
    "predict_continuous",
    "predict_sampled",
]

_TICK_FRACTION_DUST = 1e-9  # a dead time this close to a whole number of ticks counts as whole


@dataclass(frozen=True, slots=True, kw_only=True)
class ScanSchedule:
    """When the controller executes, and when its output reaches the valve.

    Parameters
    ----------
    scan_ticks : int
        Ticks from scan to scan, at least 1 [ticks].
    phase_ticks : int
        The scans are at the ticks k with k = phase modulo ``scan_ticks``, row 0 being tick 0 [ticks].
    delay_ticks : int
        Ticks from a sample to the output computed from it, at least 0 [ticks].
    """

    scan_ticks: int
    phase_ticks: int = 0
    delay_ticks: int = 0

    def __post_init__(self) -> None:
        if self.scan_ticks < 1:
            raise UsageError(
                f"scan schedule: a scan of {self.scan_ticks} ticks; it must be at least 1"
            )
        if self.delay_ticks < 0:
            raise UsageError(
                f"scan schedule: an output delay of {self.delay_ticks} ticks; it must be at least 0"
            )


def lag_propagator(time_constants: tuple[float, ...], duration: float) -> tuple[float, ...]:
    """Return the exact transition of one or two lags in series under a constant input.

    With deviations from the constant input, ``x1 <- p11 x1`` and ``x2 <- p21 x1 + p22 x2``; the
    output is x2. One lag is carried in x1 and x2 alike.

    Parameters
    ----------
    time_constants : tuple of float
        One or two, positive [s].
    duration : float
        Time over which the input is constant, at least 0 [s].

    Returns
    -------
    tuple of float
        p11, p21, p22 [-].

    Raises
    ------
    ModelError
        When there are not one or two positive time constants.
    """
    lags = sorted((tau for tau in time_constants if tau > 0.0), reverse=True)
    if not lags or len(time_constants) > 2 or min(time_constants) < 0.0:  # noqa: PLR2004  one or two lags is the model's form
        raise ModelError(
            f"model: time constants {time_constants} s; one or two positive ones are needed"
        )
    slow = math.exp(-duration / lags[0])
    if len(lags) == 1:
        return slow, slow, 0.0
    rate = duration / lags[1]
    gap = rate - duration / lags[0]  # at least 0, so that nothing overflows
    shape = -math.expm1(-gap) / gap if gap > 0.0 else 1.0
    return slow, rate * slow * shape, math.exp(-rate)


@kernel
def _run_sampled(  # noqa: PLR0917  compiled kernels take arrays by position
    propagators: NDArray[np.float64],
    gains: NDArray[np.float64],
    dead_ticks: NDArray[np.int64],
    schedule: NDArray[np.int64],
    block: NDArray[np.float64],
    start: NDArray[np.float64],
    setpoint: NDArray[np.float64],
    load: NDArray[np.float64],
    mode: NDArray[np.int64],
    manual_output: NDArray[np.float64],
    inputs: NDArray[np.float64],
    computed: NDArray[np.float64],
    process_variable: NDArray[np.float64],
) -> None:
    """Step the loop through every tick; fills inputs, computed and process_variable."""
    lags = np.zeros((2, 2))
    integral = start[0]
    output = start[1]
    held = 0
    for tick in range(setpoint.shape[0]):
        process_variable[tick] = start[2] + gains[0] * lags[0, 1] + gains[1] * lags[1, 1]
        if (tick - schedule[1]) % schedule[0] == 0:
            output, integral, held = block_scan(
                process_variable[tick],
                setpoint[tick],
                False,
                mode[tick],
                manual_output[tick],
                block[0],
                block[1],
                block[2],
                block[3],
                block[4],
                block[5],
                integral,
                output,
                held,
            )
        computed[tick] = output
        if tick >= schedule[2]:
            inputs[0, tick] = computed[tick - schedule[2]] - start[1]
        inputs[1, tick] = load[tick] - start[3]
        for path in range(2):
            newer = tick - dead_ticks[path]
            for part in range(2):
                source = newer - 1 + part
                held_input = inputs[path, source] if source >= 0 else 0.0
                upper = lags[path, 0] - held_input
                lower = lags[path, 1] - held_input
                transition = propagators[path, part]
                lags[path, 0] = held_input + transition[0] * upper
                lags[path, 1] = held_input + transition[1] * upper + transition[2] * lower


def _split_dead_time(model: LagModel, tick: float) -> tuple[int, float]:
    """Return the whole ticks and the remaining fraction of a tick of a model's dead time."""
    if not (math.isfinite(model.dead_time) and model.dead_time >= 0.0):
        raise ModelError(
            f"model: dead time {model.dead_time} s; it must be finite and at least 0"
        )
    ticks = model.dead_time / tick
    nearest = round(ticks)
    if abs(ticks - nearest) < _TICK_FRACTION_DUST:
        return nearest, 0.0
    return math.floor(ticks), ticks - math.floor(ticks)


def _sequence(name: str, values: NDArray[np.float64], rows: int) -> NDArray[np.float64]:
    sequence = np.array(values, dtype=np.float64)  # a copy: a read-only view compiles anew
    if sequence.shape != (rows,):
        raise UsageError(
            f"prediction: {name} has shape {sequence.shape}; one value per tick, ({rows},), is needed"
        )
    return sequence


def predict_sampled(  # noqa: PLR0917  the order of the loop: what is in it, when, what happens
    models: LoopModels,
    settings: ControllerSettings,
    schedule: ScanSchedule,
    tick: float,
    setpoint: NDArray[np.float64],
    load: NDArray[np.float64],
    mode: NDArray[np.int64],
    manual_output: NDArray[np.float64],
    initial_output: float,
    initial_pv: float,
    output_low: float,
    output_high: float,
    *,
    initial_load: float | None = None,
    initial_setpoint: float | None = None,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Predict a loop of linear models under the reference block, tick by tick.

    The lags are discretised exactly and the dead time is exact to the fraction of a tick: an
    output held from k T acts from k T + dead time. Order at tick k: sample, block (if it is its
    scan, on sample k), output applied from tick k + delay. Before row 0 everything is steady.

    Parameters
    ----------
    models : LoopModels
        Output and load path.
    settings : ControllerSettings
        Settings of the block.
    schedule : ScanSchedule
        Scan, phase and delay.
    tick : float
        Step of the prediction [s].
    setpoint, load : ndarray, shape (n,)
        Setpoint and output of the load valve at each tick [-].
    mode : ndarray of int, shape (n,)
        MANUAL or AUTOMATIC of ``harness.controllers.block`` [-].
    manual_output : ndarray, shape (n,)
        Output in manual [-].
    initial_output, initial_pv : float
        Steady controller output and process variable before row 0 [-].
    output_low, output_high : float
        Output limits of the block [-].
    initial_load : float or None
        Load output of that steady state; None takes ``load[0]`` [-].
    initial_setpoint : float or None
        Setpoint under which the block held the initial output; None takes ``initial_pv``.
        It matters for a P block that stands off its setpoint [-].

    Returns
    -------
    process_variable : ndarray, shape (n,)
        Samples at k T [-].
    output : ndarray, shape (n,)
        Output that acts on the valve from k T [-].

    Raises
    ------
    UsageError
        When a sequence has another length, or the tick is not positive.
    ModelError
        When a model has no positive lag or a negative dead time.
    """
    if not tick > 0.0:
        raise UsageError(f"prediction: a tick of {tick} s; it must be positive")
    rows = len(setpoint)
    paths = (models.output, models.load)
    splits = [_split_dead_time(model, tick) for model in paths]
    propagators = np.array(
        [
            [
                lag_propagator(model.time_constants, fraction * tick),
                lag_propagator(model.time_constants, (1.0 - fraction) * tick),
            ]
            for model, (_, fraction) in zip(paths, splits, strict=True)
        ]
    )
    sign = 1.0 if settings.action is Action.REVERSE else -1.0
    integral_time = math.inf if settings.integral_time is None else settings.integral_time
    standing = initial_pv if initial_setpoint is None else initial_setpoint
    bias = initial_output - settings.gain * sign * (standing - initial_pv)
    load_sequence = _sequence("load", load, rows)
    if initial_load is None:
        initial_load = float(load_sequence[0]) if rows else 0.0
    inputs = np.zeros((2, rows))
    process_variable = np.empty(rows)
    _run_sampled(
        propagators,
        np.array([model.gain for model in paths]),
        np.array([whole for whole, _ in splits], dtype=np.int64),
        np.array(
            [schedule.scan_ticks, schedule.phase_ticks, schedule.delay_ticks], dtype=np.int64
        ),
        np.array(
            [
                settings.gain,
                integral_time,
                sign,
                output_low,
                output_high,
                schedule.scan_ticks * tick,
            ]
        ),
        np.array([bias, initial_output, initial_pv, initial_load]),
        _sequence("setpoint", setpoint, rows),
        load_sequence,
        _sequence("mode", mode.astype(np.float64), rows).astype(np.int64),
        _sequence("manual output", manual_output, rows),
        inputs,
        np.empty(rows),
        process_variable,
    )
    return process_variable, inputs[0] + initial_output
