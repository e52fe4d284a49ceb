"""Linear prediction in sampled mode for a P, PI or PID block on any process of the family.

Beside `harness.analysis.linear`, which runs the reference block itself with limits, modes and a
load path, this one is for tuning: unlimited, one step, but any number of lags, an integrator, an
inverse response, a derivative, and a filter before the block. Process and dead time are exact.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from harness.analysis.continuous import ContinuousResponse
from harness.domain.rig import Action
from harness.errors import UsageError
from harness.tuning.process import check_settings
from harness.tuning.state_space import discretise, state_space
from plants.compile import kernel

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.tuning.process import PidSettings, ProcessModel

_MOST_ROWS = 2_000_000


# Everything the kernel calls is in this file: the compiler's cache looks no further.
@kernel
def _run(  # noqa: PLR0917  compiled kernels take arrays by position
    early_transition: NDArray[np.float64],
    early_inlet: NDArray[np.float64],
    late_transition: NDArray[np.float64],
    late_inlet: NDArray[np.float64],
    outlet: NDArray[np.float64],
    seen: NDArray[np.float64],
    whole: int,
    ticks_per_scan: int,
    delay_ticks: int,
    block: NDArray[np.float64],
    setpoint: float,
    input_step: float,
    process_variable: NDArray[np.float64],
    output: NDArray[np.float64],
) -> None:
    """Step the loop from rest through every tick; fills process_variable and output."""
    size = outlet.shape[0]
    state = np.zeros(size)
    moved = np.zeros(size)
    computed = np.zeros(output.shape[0])
    gain, reset, weight, memory, on_error = block[0], block[1], block[2], block[3], block[4]
    integral = 0.0
    derivative = 0.0
    before = 0.0
    held = 0.0
    for tick in range(output.shape[0]):
        value = 0.0
        filtered = 0.0
        for row in range(size):
            value += outlet[row] * state[row]
            filtered += seen[row] * state[row]
        process_variable[tick] = value
        if tick % ticks_per_scan == 0:
            error = setpoint - filtered
            derived = on_error * setpoint - filtered
            integral += reset * error
            derivative = memory * derivative + weight * (derived - before)
            before = derived
            held = gain * error + integral + derivative
        computed[tick] = held
        output[tick] = computed[tick - delay_ticks] if tick >= delay_ticks else 0.0
        for part in range(2):
            source = tick - whole - 1 + part
            drive = output[source] + input_step if source >= 0 else 0.0
            for row in range(size):
                total = (early_inlet[row] if part == 0 else late_inlet[row]) * drive
                for column in range(size):
                    transition = (
                        early_transition[row, column]
                        if part == 0
                        else late_transition[row, column]
                    )
                    total += transition * state[column]
                moved[row] = total
            for row in range(size):
                state[row] = moved[row]


def predict_sampled_pid(
    model: ProcessModel,
    settings: PidSettings,
    scan: float,
    duration: float,
    *,
    ticks_per_scan: int = 1,
    output_delay: float = 0.0,
    filter_time: float = 0.0,
    setpoint_step: float = 0.0,
    input_step: float = 0.0,
) -> ContinuousResponse:
    """Predict the response of a sampled, unlimited loop to steps at time 0, at which it scans.

    The block is positional with a backward-Euler integral, as the reference block, and a
    derivative behind its own lag, backward Euler too. Its output is held between scans.

    Parameters
    ----------
    model : ProcessModel
        From controller output to process variable.
    settings : PidSettings
        Settings of the ideal block.
    scan : float
        Scan period [s].
    duration : float
        Length of the prediction [s].
    ticks_per_scan : int
        Rows per scan: the response between samples is exact too [-].
    output_delay : float
        Time from a sample to the output computed from it, a whole number of ticks [s].
    filter_time : float
        First-order filter between process variable and block [s].
    setpoint_step : float
        Step of the setpoint [-].
    input_step : float
        Step added to the controller output at the plant input [-].

    Returns
    -------
    ContinuousResponse
        Deviations from the initial steady state; the process variable is the one before the
        filter, the output the one that is held from each row.

    Raises
    ------
    UsageError
        When scan, duration or ticks are not usable, or the rows would be too many.
    ModelError
        When process or settings are not usable.
    """
    check_settings(model, settings)
    if not (math.isfinite(scan) and scan > 0.0 and duration > 0.0 and ticks_per_scan >= 1):
        raise UsageError(
            f"prediction: scan {scan:g} s over {duration:g} s in {ticks_per_scan} ticks a scan; "
            "all must be above 0"
        )
    tick = scan / ticks_per_scan
    rows = math.ceil(duration / tick) + 1
    if rows > _MOST_ROWS:
        raise UsageError(
            f"prediction: {duration:g} s at a tick of {tick:g} s are {rows} rows, more than "
            f"{_MOST_ROWS}; is the scan in seconds?"
        )
    system = state_space(model, filter_time)
    step = discretise(system, tick)
    sign = 1.0 if settings.action is Action.REVERSE else -1.0
    gain, lag = sign * settings.gain, settings.derivative_filter
    derived = settings.derivative_time > 0.0
    block = np.array(
        [
            gain,
            0.0 if settings.integral_time is None else gain * scan / settings.integral_time,
            gain * settings.derivative_time / (lag + scan) if derived else 0.0,
            lag / (lag + scan) if derived else 0.0,
            float(settings.derivative_on_error),
        ]
    )
    process_variable, output = np.empty(rows), np.empty(rows)
    _run(
        np.ascontiguousarray(step.early[0]),
        np.ascontiguousarray(step.early[1]),
        np.ascontiguousarray(step.late[0]),
        np.ascontiguousarray(step.late[1]),
        system.outlet,
        system.seen,
        step.whole,
        ticks_per_scan,
        round(output_delay / tick),
        block,
        setpoint_step,
        input_step,
        process_variable,
        output,
    )
    return ContinuousResponse(
        times=tick * np.arange(rows, dtype=np.float64),
        process_variable=process_variable,
        output=output,
    )
