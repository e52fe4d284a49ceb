"""How far a loop is from its limit: gain, phase and delay margin, maximum sensitivity."""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.domain.models import ControllerSettings, LagModel
from harness.domain.rig import Action
from harness.errors import ModelError
from harness.tuning.response import check_model, held_step

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    Array = NDArray[np.float64]
    Response = Callable[[Array], NDArray[np.complex128]]

_LOWEST = 1e-4  # lowest frequency looked at, over the slowest time of the loop [rad]
_TURN = 0.02  # spacing of frequencies where a delay turns the phase [rad]
_PER_DECADE = 200
_ZOOMS = 6


@dataclass(frozen=True, slots=True, kw_only=True)
class Margins:
    """Distances of a loop from its limit of stability; None where there is no such limit.

    Parameters
    ----------
    gain_margin : float or None
        Factor on the gain that brings the loop to its limit; below 1 it is past it [-].
    phase_margin : float or None
        Phase above -180 degrees at the gain crossover; negative past the limit [rad].
    delay_margin : float or None
        Extra delay that brings the loop to its limit; negative past it [s].
    gain_crossover : float or None
        Frequency at which the loop gain is one [rad/s].
    phase_crossover : float or None
        Lowest frequency at which the loop's phase is -180 degrees [rad/s].
    maximum_sensitivity : float
        Ms, the largest value of 1/|1 + L|; its inverse is the distance to -1 [-].
    """

    gain_margin: float | None
    phase_margin: float | None
    delay_margin: float | None
    gain_crossover: float | None
    phase_crossover: float | None
    maximum_sensitivity: float

    @property
    def stable(self) -> bool:
        """Return whether the closed loop is stable: neither margin is used up."""
        gain_left = self.gain_margin is None or self.gain_margin > 1.0
        return gain_left and (self.phase_margin is None or self.phase_margin > 0.0)


def continuous_margins(model: LagModel, settings: ControllerSettings) -> Margins:
    """Return the margins of a continuous ideal P or PI block on a model, exact dead time.

    Parameters
    ----------
    model : LagModel
        From controller output to process variable.
    settings : ControllerSettings
        Settings of the block.

    Returns
    -------
    Margins
        Margins.

    Raises
    ------
    ModelError
        If the model is not usable, or the action makes positive feedback.
    """
    check_loop(model, settings)

    def loop(frequency: Array) -> NDArray[np.complex128]:
        s = 1j * frequency
        value = abs(model.gain) * settings.gain * np.exp(-s * model.dead_time)
        for lag in model.time_constants:
            value = value / (lag * s + 1.0)
        if settings.integral_time is not None:
            value = value * (1.0 + 1.0 / (settings.integral_time * s))
        return np.asarray(value, np.complex128)

    slowest = max(*model.time_constants, model.dead_time, settings.integral_time or 0.0)
    fastest = min(lag for lag in model.time_constants if lag > 0.0)
    # Above this frequency the loop gain is below one, and the dead time has turned at least once.
    highest = (1.0 + abs(model.gain) * settings.gain) * (
        100.0 / fastest + 1.0 / (settings.integral_time or slowest)
    )
    grid = frequency_grid(_LOWEST / slowest, highest, model.dead_time)
    crossover = gain_crossover(loop, grid)
    phase = None if crossover is None else _phase_margin(loop, crossover)
    delay = None if crossover is None or phase is None else phase / crossover
    return margins_at(loop, grid, crossover, phase, delay)


def sampled_margins(
    model: LagModel, settings: ControllerSettings, scan: float, output_delay: float = 0.0
) -> Margins:
    """Return the margins of the block as it runs: sampled, held, backward-Euler integral.

    The delay margin is exact: the extra delay of a held output at which the sampled loop is at
    its limit, not the phase margin over the crossover frequency.

    Parameters
    ----------
    model : LagModel
        From controller output to process variable.
    settings : ControllerSettings
        Settings of the block.
    scan : float
        Scan period [s].
    output_delay : float
        Time from a sample to the output computed from it [s].

    Returns
    -------
    Margins
        Margins; frequencies end at pi over the scan.

    Raises
    ------
    ModelError
        If the model or the scan is not usable, or the action makes positive feedback.
    """
    check_loop(model, settings)
    if not (math.isfinite(scan) and scan > 0.0 and output_delay >= 0.0):
        raise ModelError(
            f"sampled margins: scan {scan:g} s and output delay {output_delay:g} s; the scan "
            "must be above 0 and the delay 0 or more"
        )
    dead = model.dead_time + output_delay
    slowest = max(*model.time_constants, dead, scan, settings.integral_time or 0.0)
    grid = frequency_grid(_LOWEST / slowest, math.pi / scan, dead + scan)

    def margin(extra: float) -> tuple[Response, float | None, float | None]:
        loop = _sampled_loop(model, settings, scan, dead + extra)
        crossover = gain_crossover(loop, grid)
        return loop, crossover, None if crossover is None else _phase_margin(loop, crossover)

    loop, crossover, phase = margin(0.0)
    delay = None
    if crossover is not None and phase is not None:
        delay = phase / crossover
        for _ in range(30):  # phase falls by about the crossover frequency for each second
            _, crossing, left = margin(max(delay, -dead))
            if crossing is None or left is None or delay < 0.0:
                break
            delay += left / crossing
            if abs(left) < 1e-12:  # noqa: PLR2004  rounding
                break
    return margins_at(loop, grid, crossover, phase, delay)


def check_loop(model: LagModel, settings: ControllerSettings) -> None:
    """Refuse a loop that is no control loop.

    Parameters
    ----------
    model : LagModel
        From controller output to process variable.
    settings : ControllerSettings
        Settings of the block.

    Raises
    ------
    ModelError
        If a gain is zero, the integral time is not above zero, or the feedback is positive.
    """
    check_model(model)
    if model.gain == 0.0 or not settings.gain > 0.0:
        raise ModelError(
            f"margins: model gain {model.gain:g}, controller gain {settings.gain:g}; the first "
            "must not be 0, the second must be above 0"
        )
    if settings.integral_time is not None and not settings.integral_time > 0.0:
        raise ModelError(
            f"margins: integral time {settings.integral_time:g} s must be above 0; "
            "give None for a P block"
        )
    wanted = Action.REVERSE if model.gain > 0.0 else Action.DIRECT
    if settings.action is not wanted:
        raise ModelError(
            f"margins: {settings.action} action on a model gain of {model.gain:g} is positive "
            f"feedback; it must be {wanted}"
        )


def _sampled_loop(
    model: LagModel, settings: ControllerSettings, scan: float, dead_time: float
) -> Response:
    """Return the loop transfer function on the unit circle as a function of frequency."""
    held = LagModel(gain=1.0, time_constants=model.time_constants, dead_time=dead_time)
    step = held_step(held, scan)

    def loop(frequency: Array) -> NDArray[np.complex128]:
        z = np.exp(1j * frequency * scan)
        delayed = z ** (-step.whole)
        first = delayed * (step.b1[0] + step.b1[1] / z) / (z - step.a1)
        second = delayed * (step.b2[0] + step.b2[1] / z)
        plant = (step.c * first + second) / (z - step.a2)
        block: NDArray[np.complex128] | float = settings.gain
        if settings.integral_time is not None:
            block = settings.gain * (1.0 + scan / settings.integral_time / (1.0 - 1.0 / z))
        return np.asarray(abs(model.gain) * plant * block, np.complex128)

    return loop


def frequency_grid(lowest: float, highest: float, delay: float) -> Array:
    """Return frequencies, spaced so that no turn of the phase is missed where it matters.

    Parameters
    ----------
    lowest, highest : float
        Ends [rad/s].
    delay : float
        Dead time of the loop [s].

    Returns
    -------
    ndarray, shape (n,)
        Frequencies, rising [rad/s].
    """
    count = math.ceil(_PER_DECADE * max(math.log10(highest / lowest), 1.0))
    grid = np.geomspace(lowest, highest, count)
    if delay > 0.0:
        turns = min(highest, 4.0 * math.pi / delay)
        grid = np.union1d(grid, np.arange(lowest, turns, _TURN / delay))
    return grid


def gain_crossover(loop: Response, grid: Array) -> float | None:
    """Return the highest frequency at which the loop gain falls through one.

    Parameters
    ----------
    loop : callable
        Loop as a function of frequency [rad/s].
    grid : ndarray, shape (n,)
        Frequencies to look at [rad/s].

    Returns
    -------
    float or None
        Frequency; None where the gain never falls through one [rad/s].
    """
    size = np.abs(loop(grid))
    falls = np.flatnonzero((size[:-1] > 1.0) & (size[1:] <= 1.0))
    if falls.size == 0:
        return None
    k = int(falls[-1])
    return _root(lambda w: math.log(abs(_at(loop, w))), float(grid[k]), float(grid[k + 1]))


def _phase_margin(loop: Response, crossover: float) -> float:
    """Return the phase of minus the loop at the crossover [rad]."""
    return cmath.phase(-_at(loop, crossover))


def margins_at(
    loop: Response,
    grid: Array,
    gain_crossover: float | None,
    phase_margin: float | None,
    delay_margin: float | None,
) -> Margins:
    """Complete the margins with what the grid tells.

    Parameters
    ----------
    loop : callable
        Loop as a function of frequency [rad/s].
    grid : ndarray, shape (n,)
        Frequencies to look at [rad/s].
    gain_crossover, phase_margin, delay_margin : float or None
        What is known already [rad/s, rad, s].

    Returns
    -------
    Margins
        Margins.
    """
    value = loop(grid)
    angle = np.angle(-value)
    near = np.abs(angle) < 0.5 * math.pi
    falls = np.flatnonzero((angle[:-1] > 0.0) & (angle[1:] <= 0.0) & near[:-1] & near[1:])
    phase_crossover, gain_margin = None, None
    if falls.size:
        k = int(falls[0])
        phase_crossover = _root(
            lambda w: cmath.phase(-_at(loop, w)), float(grid[k]), float(grid[k + 1])
        )
        gain_margin = 1.0 / abs(_at(loop, phase_crossover))
    return Margins(
        gain_margin=gain_margin,
        phase_margin=phase_margin,
        delay_margin=delay_margin,
        gain_crossover=gain_crossover,
        phase_crossover=phase_crossover,
        # One is what it comes to where the loop gain has died away.
        maximum_sensitivity=max(_peak(lambda w: 1.0 / np.abs(1.0 + loop(w)), grid), 1.0),
    )


def _at(loop: Response, frequency: float) -> complex:
    """Return the loop at one frequency."""
    return complex(loop(np.array([frequency]))[0])


def _root(function: Callable[[float], float], low: float, high: float) -> float:
    """Return where a falling function crosses zero, by halving."""
    for _ in range(60):
        middle = 0.5 * (low + high)
        if function(middle) > 0.0:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)


def _peak(function: Callable[[Array], Array], grid: Array) -> float:
    """Return the maximum of a function, by looking closer around the best point."""
    values = function(grid)
    for _ in range(_ZOOMS):
        k = int(np.argmax(values))
        low, high = grid[max(k - 1, 0)], grid[min(k + 1, grid.size - 1)]
        grid = np.linspace(low, high, 21)
        values = function(grid)
    return float(np.max(values))
