"""Margins of a P, PI or PID block on any process of the family, continuous and sampled."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from scipy.linalg import schur

from harness.errors import ModelError
from harness.tuning.margins import Margins, frequency_grid, gain_crossover, margins_at
from harness.tuning.process import check_settings
from harness.tuning.state_space import discretise, state_space

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from harness.tuning.process import PidSettings, ProcessModel

    Array = NDArray[np.float64]
    Complex = NDArray[np.complex128]
    Response = Callable[[Array], Complex]

_LOWEST = 1e-4  # lowest frequency looked at, over the slowest time of the loop [rad]
_ROUNDS = 40
_ROUNDING = 1e-12  # [rad]


def loop_margins(
    model: ProcessModel,
    settings: PidSettings,
    *,
    scan: float = 0.0,
    output_delay: float = 0.0,
    filter_time: float = 0.0,
) -> Margins:
    """Return the margins of a loop; the delay margin is exact in either mode.

    Parameters
    ----------
    model : ProcessModel
        From controller output to process variable.
    settings : PidSettings
        Settings of the ideal block.
    scan : float
        Scan period; 0 for a continuous block [s].
    output_delay : float
        Time from a sample to the output computed from it [s].
    filter_time : float
        First-order filter between process variable and block [s].

    Returns
    -------
    Margins
        Margins; ``stable`` of them is the plain reading, `is_stable` counts encirclements.

    Raises
    ------
    ModelError
        If process or settings are not usable, or a time is negative.
    """
    response, grid = loop_response(
        model, settings, scan=scan, output_delay=output_delay, filter_time=filter_time
    )
    crossover = gain_crossover(response, grid)
    phase, delay = None, None
    if crossover is not None:
        phase = float(np.angle(-response(np.array([crossover]))[0]))
        delay = phase / crossover
        if scan > 0.0:
            delay = _sampled_delay_margin(
                model, settings, (scan, output_delay, filter_time), crossover, delay
            )
    return margins_at(response, grid, crossover, phase, delay)


def loop_response(
    model: ProcessModel,
    settings: PidSettings,
    *,
    scan: float = 0.0,
    output_delay: float = 0.0,
    filter_time: float = 0.0,
) -> tuple[Response, Array]:
    """Return the loop as a function of frequency, and the frequencies to look at.

    Parameters
    ----------
    model : ProcessModel
        From controller output to process variable.
    settings : PidSettings
        Settings of the ideal block.
    scan, output_delay, filter_time : float
        As for `loop_margins` [s].

    Returns
    -------
    response : callable
        From frequencies [rad/s] to the loop, controller times process.
    grid : ndarray, shape (n,)
        Frequencies [rad/s].

    Raises
    ------
    ModelError
        If process or settings are not usable, or a time is negative.
    """
    check_settings(model, settings)
    for name, value in (
        ("scan", scan),
        ("output delay", output_delay),
        ("filter", filter_time),
    ):
        if not (math.isfinite(value) and value >= 0.0):
            raise ModelError(f"margins: {name} is {value:g} s; it must be 0 or more")
    delay = model.dead_time + output_delay
    times = [
        value
        for value in (
            *model.time_constants, *map(abs, model.numerator_times), delay, filter_time, scan,
            settings.integral_time or 0.0, settings.derivative_time, settings.derivative_filter,
        )
        if value > 0.0
    ]  # fmt: skip
    slowest, fastest = max(times, default=1.0), min(times, default=1.0)
    lowest = _LOWEST / slowest
    if model.integrating:
        lowest = min(lowest, 1e-4 * abs(model.gain) * settings.gain)
    if scan > 0.0:
        return (
            _sampled(model, settings, scan, output_delay, filter_time),
            frequency_grid(lowest, math.pi / scan, delay + scan),
        )
    # Far enough up that the loop gain is well below one, whatever comes in between.
    slope = abs(model.gain) * settings.gain * (1.0 if model.integrating else 1.0 / fastest)
    derivative = settings.derivative_time / (settings.derivative_filter or 1.0)
    highest = max(100.0 / fastest, 30.0 * slope * (1.0 + derivative))
    return _continuous(model, settings, output_delay, filter_time), frequency_grid(
        lowest, highest, delay
    )


def stability_and_sensitivity(
    model: ProcessModel,
    settings: PidSettings,
    *,
    scan: float = 0.0,
    output_delay: float = 0.0,
    filter_time: float = 0.0,
) -> tuple[bool, float]:
    """Return whether a loop is stable, and its Ms: what a look at many plants needs.

    Parameters
    ----------
    model : ProcessModel
        From controller output to process variable.
    settings : PidSettings
        Settings of the ideal block.
    scan, output_delay, filter_time : float
        As for `loop_margins` [s].

    Returns
    -------
    stable : bool
        Whether the closed loop is stable.
    maximum_sensitivity : float
        Ms, as the grid shows it: within 1e-3 [-].
    """
    response, grid = loop_response(
        model, settings, scan=scan, output_delay=output_delay, filter_time=filter_time
    )
    difference = 1.0 + response(grid)
    stable = _poles_outside(difference, poles_at_zero(model, settings)) == 0
    return stable, max(float(1.0 / np.abs(difference).min()), 1.0)


def is_stable(response: Response, grid: Array, poles_at_zero: int) -> bool:
    """Return whether the closed loop is stable, by counting encirclements.

    The number of closed-loop poles on the wrong side is (m pi/2 - change of the phase of 1 + L
    from just above zero to the top frequency)/pi, with m open-loop poles at zero and none on the
    wrong side (H. Nyquist, Bell Syst. Tech. J. 11:126, 1932).

    Parameters
    ----------
    response : callable
        Loop as a function of frequency [rad/s].
    grid : ndarray, shape (n,)
        Frequencies, from where the poles at zero rule to where the loop has died away, or to
        half the sampling frequency [rad/s].
    poles_at_zero : int
        m: integrator of the process, and of the block [-].
    """
    return _poles_outside(1.0 + response(grid), poles_at_zero) == 0


def poles_at_zero(model: ProcessModel, settings: PidSettings) -> int:
    """Return how many open-loop poles lie at zero [-].

    Parameters
    ----------
    model : ProcessModel
        Process.
    settings : PidSettings
        Settings.
    """
    return int(model.integrating) + int(settings.integral_time is not None)


def _poles_outside(difference: Complex, poles_at_zero: int) -> int:
    """Return how many closed-loop poles lie on the wrong side, from 1 + L along the grid."""
    turn = float(np.sum(np.angle(difference[1:] / difference[:-1])))
    return round((0.5 * math.pi * poles_at_zero - turn) / math.pi)


def _continuous(
    model: ProcessModel, settings: PidSettings, output_delay: float, filter_time: float
) -> Response:
    def loop(frequency: Array) -> Complex:
        s = 1j * frequency
        value = abs(model.gain) * np.exp(-s * (model.dead_time + output_delay))
        for lead in model.numerator_times:
            value = value * (lead * s + 1.0)
        for lag in (*model.time_constants, filter_time):
            value = value / (lag * s + 1.0)
        if model.integrating:
            value = value / s
        block = np.ones_like(s)
        if settings.integral_time is not None:
            block = block + 1.0 / (settings.integral_time * s)
        if settings.derivative_time > 0.0:
            block = block + settings.derivative_time * s / (
                settings.derivative_filter * s + 1.0
            )
        return np.asarray(settings.gain * block * value, np.complex128)

    return loop


def _sampled(
    model: ProcessModel,
    settings: PidSettings,
    scan: float,
    output_delay: float,
    filter_time: float,
) -> Response:
    """Return the loop on the unit circle: held output, backward-Euler integral and derivative."""
    system = state_space(model, filter_time)
    step = discretise(system, scan, output_delay)
    sign = math.copysign(1.0, model.gain)
    # In triangular form the states follow one after the other, for all frequencies at once.
    triangle, turn = (np.asarray(part) for part in schur(step.transition, output="complex"))
    new, old, seen = (
        turn.conj().T @ step.late[1],
        turn.conj().T @ step.old_inlet,
        system.seen @ turn,
    )

    def loop(frequency: Array) -> Complex:
        z = np.exp(1j * frequency * scan)
        states = np.zeros((seen.size, z.size), np.complex128)
        for row in reversed(range(seen.size)):
            driven = new[row] + old[row] / z + triangle[row, row + 1 :] @ states[row + 1 :]
            states[row] = driven / (z - triangle[row, row])
        plant = sign * (seen @ states) * z ** (-step.whole)
        block = np.ones_like(z)
        if settings.integral_time is not None:
            block = block + scan / settings.integral_time / (1.0 - 1.0 / z)
        if settings.derivative_time > 0.0:
            lag = settings.derivative_filter
            block = block + settings.derivative_time * (1.0 - 1.0 / z) / (lag + scan - lag / z)
        return np.asarray(settings.gain * block * plant, np.complex128)

    return loop


def _sampled_delay_margin(
    model: ProcessModel,
    settings: PidSettings,
    times: tuple[float, float, float],
    crossing: float,
    first_guess: float,
) -> float:
    """Return the extra delay of a held output at which the sampled loop is at its limit."""
    scan, output_delay, filter_time = times
    margin = first_guess
    for _ in range(_ROUNDS):  # phase falls by about the crossover frequency for each second
        extra = max(margin, -(model.dead_time + output_delay))
        response = _sampled(model, settings, scan, output_delay + extra, filter_time)
        # A delay that is no whole number of scans moves the crossover a little.
        crossing = _crossing_near(response, crossing)
        left = float(np.angle(-response(np.array([crossing]))[0]))
        margin += left / crossing
        if abs(left) < _ROUNDING or margin < 0.0:
            break
    return margin


def _crossing_near(response: Response, guess: float) -> float:
    """Return where the loop gain is one, by secants from a frequency near by."""
    last, here = 1.001 * guess, guess
    last_size = math.log(abs(complex(response(np.array([last]))[0])))
    for _ in range(_ROUNDS):
        size = math.log(abs(complex(response(np.array([here]))[0])))
        if abs(size) < _ROUNDING or size == last_size:
            break
        last, here, last_size = here, here - size * (here - last) / (size - last_size), size
    return here
