"""Reading a controller's law from its trace: the gain and integral time that it really has.

In its velocity form the reference block gives ``du = Kc (w dr - dy) + Kc (dt / Ti) e`` with the
setpoint weight w = 1. All its parameters follow by least squares from what the controller saw
and what it answered. An input that the controller reads too high or too low adds a constant
drift; a delay, a filter on the input and a derivative part each leave a mark of their own on the
answer to the transmitter's noise, and are tried where the plain law does not fit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.domain.rig import Action

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.domain.rig import Loop

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]

_FEWEST_SCANS = 20
_AT_LIMIT = 1e-6  # of output: closer to a limit than this the block is saturated [-]
_WELL_EXPLAINED = 0.98  # share above which the plain law is taken as it is [-]
_BETTER = 0.5  # an extended law must leave at most this part of the plain one's residual [-]
_LONGEST_DELAY = 60  # scans of delay inside the controller that are looked for [-]
# Outputs travel as 32-bit floats at best, with a resolution of 1e-7 of their range.
_ROUNDING = 1e-7
_SIGNIFICANT = 4.0  # standard errors [-]
_SHARP = 0.03  # of the gain: a setpoint weight less sure than this is not told [-]
_FLAT = 1e-12  # of the greatest singular value: a direction in which nothing moved [-]


@dataclass(frozen=True, slots=True, kw_only=True)
class ReadLaw:
    """The law of a controller as its trace shows it.

    Parameters
    ----------
    gain : float
        Kc; negative when the controller acts the wrong way [-].
    gain_doubt : float
        Standard error of the gain [-].
    integral_time : float or None
        Ti; None where no integral action shows [s].
    explained : float
        Share of the variance of the output's moves that the law explains [-].
    left_over : float
        Root mean square of the moves that it does not explain [-].
    input_offset : float or None
        By how much the controller seems to read its process variable too high, or its setpoint
        too low; None where the trace does not tell [fraction of span].
    setpoint_weight : float or None
        Part of the setpoint's change that the proportional part acts on; None where the
        setpoint did not change [-].
    delay : float
        Age of the process variable that it answers, beyond what the links explain [s].
    filter_time : float
        Time constant of a lag between process variable and output [s].
    derivative_time : float
        Td of a derivative part on the process variable [s].
    """

    gain: float
    gain_doubt: float
    integral_time: float | None
    explained: float
    left_over: float
    input_offset: float | None = None
    setpoint_weight: float | None = None
    delay: float = 0.0
    filter_time: float = 0.0
    derivative_time: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class _Scans:
    """Series of scans as the regressions need them; entry k of each belongs to scan k."""

    error: Floats
    input_moves: Floats  # of the error by the process variable alone
    setpoint_moves: Floats  # of the error by the setpoint alone
    moves: Floats  # of the output
    durations: Floats
    free: Flags  # neither this scan nor the one before at a limit


@dataclass(frozen=True, slots=True, kw_only=True)
class _Fit:
    """Coefficients of one regression with their standard errors."""

    values: dict[str, float]
    doubts: dict[str, float]
    residual: float  # sum of squares
    explained: float
    count: int

    def significant(self, name: str) -> bool:
        return abs(self.values[name]) > _SIGNIFICANT * self.doubts[name]


def read_law(
    setpoint: Floats,
    process_variable: Floats,
    output: Floats,
    durations: Floats,
    loop: Loop,
) -> ReadLaw | None:
    """Return the P or PI law behind a series of scans in automatic.

    Scans at an output limit are left out.

    Parameters
    ----------
    setpoint, process_variable : ndarray, shape (n,)
        What each scan worked on [fraction of span].
    output : ndarray, shape (n,)
        What each scan answered [-].
    durations : ndarray, shape (n,)
        Time since the scan before [s].
    loop : Loop
        The loop: action and limits.

    Returns
    -------
    ReadLaw or None
        None where the trace can show no law: too few scans, or no movement. How much of the
        moves the law explains is for the caller to weigh.
    """
    sign = 1.0 if loop.action is Action.REVERSE else -1.0
    free = (output > loop.output_low + _AT_LIMIT) & (output < loop.output_high - _AT_LIMIT)
    scans = _Scans(
        error=sign * (setpoint - process_variable),
        input_moves=-sign * np.diff(process_variable, prepend=process_variable[:1]),
        setpoint_moves=sign * np.diff(setpoint, prepend=setpoint[:1]),
        moves=np.diff(output, prepend=output[:1]),
        durations=np.asarray(durations, dtype=np.float64),
        free=free & np.concatenate(([False], free[:-1])),
    )
    quiet = scans.free & (scans.setpoint_moves == 0.0)
    if np.count_nonzero(quiet) < _FEWEST_SCANS or not np.any(scans.moves[quiet]):
        return None
    plain = _plain(scans)
    law = _law_of(plain, weight=_weight(scans, plain))
    if plain.explained < _WELL_EXPLAINED:
        candidates = (_delayed(scans), _filtered(scans), _with_derivative(scans))
        found = [each for each in candidates if each is not None]
        best = min(found, key=lambda each: each[0], default=None)
        if best is not None and best[0] < _BETTER * plain.residual / plain.count:
            law = best[1]
    return law


def _plain(scans: _Scans) -> _Fit:
    terms = {
        "gain": scans.input_moves,
        "reset": scans.durations * scans.error,
        "drift": scans.durations,  # an input off by a constant integrates to it
    }
    # A jump of the setpoint would outweigh everything that the process variable has to say.
    return _least_squares(terms, scans.moves, scans.free & (scans.setpoint_moves == 0.0))


def _weight(scans: _Scans, found: _Fit) -> float | None:
    """Return the setpoint weight, from what is left of the moves where the setpoint changes."""
    changed = scans.free & (scans.setpoint_moves != 0.0)
    gain = found.values["gain"]
    if gain == 0.0 or not np.any(changed):
        return None
    known = (
        gain * scans.input_moves
        + found.values["reset"] * scans.durations * scans.error
        + found.values["drift"] * scans.durations
    )
    steps = scans.setpoint_moves[changed]
    power = float(steps @ steps)
    if math.sqrt(found.residual / found.count / power) > _SHARP * abs(gain):
        return None
    return float(steps @ (scans.moves - known)[changed]) / power / gain


def _delayed(scans: _Scans) -> tuple[float, ReadLaw] | None:
    """Return the best law on a process variable some scans old: mean square left, and law."""
    best: tuple[float, ReadLaw] | None = None
    for age in range(1, min(_LONGEST_DELAY, len(scans.moves) // 4) + 1):
        usable = _quiet(scans, age)
        if np.count_nonzero(usable) < _FEWEST_SCANS:
            break
        terms = {
            "gain": _older(scans.input_moves, age),
            "reset": scans.durations * _older(scans.error, age),
            "drift": scans.durations,
        }
        found = _least_squares(terms, scans.moves, usable)
        left = found.residual / found.count
        if best is None or left < best[0]:
            delay = age * float(np.median(scans.durations))
            best = left, _law_of(found, delay=delay)
    return best


def _filtered(scans: _Scans) -> tuple[float, ReadLaw] | None:
    """Return the law behind a first-order lag on the process variable."""
    usable = _quiet(scans, 1)
    if np.count_nonzero(usable) < _FEWEST_SCANS:
        return None
    terms = {
        "gain": scans.input_moves,
        "reset": scans.durations * scans.error,
        "drift": scans.durations,
        "kept": _older(scans.moves, 1),
    }
    found = _least_squares(terms, scans.moves, usable)
    kept = found.values["kept"]
    if not 0.0 < kept < 1.0:
        return None
    # Backward difference, the usual form in a PLC: what is kept is tau / (tau + dt).
    time = float(np.median(scans.durations)) * kept / (1.0 - kept)
    law = _law_of(found, filter_time=time, passed=1.0 - kept)
    return found.residual / found.count, law


def _with_derivative(scans: _Scans) -> tuple[float, ReadLaw] | None:
    """Return the law with a derivative part on the process variable."""
    usable = _quiet(scans, 2)
    if np.count_nonzero(usable) < _FEWEST_SCANS:
        return None
    terms = {
        "gain": scans.input_moves,
        "reset": scans.durations * scans.error,
        "drift": scans.durations,
        "derivative": (scans.input_moves - _older(scans.input_moves, 1)) / scans.durations,
    }
    found = _least_squares(terms, scans.moves, usable)
    gain = found.values["gain"]
    if gain == 0.0:
        return None
    law = _law_of(found, derivative_time=found.values["derivative"] / gain)
    return found.residual / found.count, law


def _law_of(
    found: _Fit,
    *,
    delay: float = 0.0,
    filter_time: float = 0.0,
    derivative_time: float = 0.0,
    passed: float = 1.0,
    weight: float | None = None,
) -> ReadLaw:
    """Return a regression's coefficients as a law; a filter passes only a part of them."""
    values = found.values
    gain, reset = values["gain"] / passed, values["reset"] / passed
    integrates = found.significant("reset") and reset * gain > 0.0
    # du / dt = reset (e - offset)
    offset = -values["drift"] / passed / reset if integrates else None
    return ReadLaw(
        gain=gain,
        gain_doubt=found.doubts["gain"] / passed,
        integral_time=gain / reset if integrates else None,
        explained=found.explained,
        left_over=math.sqrt(found.residual / found.count),
        input_offset=offset,
        setpoint_weight=weight,
        delay=delay,
        filter_time=filter_time,
        derivative_time=derivative_time,
    )


def _quiet(scans: _Scans, age: int) -> Flags:
    """Return the free scans with no change of setpoint now or up to ``age`` scans ago."""
    usable = scans.free.copy()
    usable[: age + 1] = False
    for changed in np.flatnonzero(scans.setpoint_moves):
        usable[changed : changed + age + 1] = False
    return usable


def _older(series: Floats, age: int) -> Floats:
    return np.concatenate((np.full(age, series[0]), series[:-age]))


def _least_squares(terms: dict[str, Floats], moves: Floats, usable: Flags) -> _Fit:
    """Fit the moves by the terms, in directions in which the terms move at all."""
    columns = np.column_stack([series[usable] for series in terms.values()])
    target = moves[usable]
    scale = np.sqrt(np.mean(columns**2, axis=0))
    scale[scale == 0.0] = 1.0
    left, singular, right = np.linalg.svd(columns / scale, full_matrices=False)
    kept = singular > _FLAT * singular[0]
    inverse = np.where(kept, 1.0 / np.where(kept, singular, 1.0), 0.0)
    values = (right.T * inverse) @ (left.T @ target) / scale
    rest = target - columns @ values
    residual = float(rest @ rest)
    count = len(target)
    variance = max(residual / max(1, count - len(values)), _ROUNDING**2)
    doubts = np.sqrt(variance * np.sum((right.T * inverse) ** 2, axis=1)) / scale
    # Noise on the output makes pairs of moves that answer each other, as the transmitter's noise
    # does in the terms: products of neighbours count (heteroscedasticity and autocorrelation
    # consistent errors, W. K. Newey & K. D. West, Econometrica 55:703-708, 1987; from memory).
    influence = ((right.T * inverse) @ left.T).T / scale * rest[:, None]
    paired = np.sum(influence**2, axis=0) + 2.0 * np.sum(influence[1:] * influence[:-1], axis=0)
    doubts = np.maximum(doubts, np.sqrt(np.maximum(paired, 0.0)))
    # Where nothing moved there is nothing to be sure of.
    doubts[np.sum(right[~kept] ** 2, axis=0) > _FLAT] = math.inf
    total = float(target @ target)
    return _Fit(
        values=dict(zip(terms, values.tolist(), strict=True)),
        doubts=dict(zip(terms, doubts.tolist(), strict=True)),
        residual=residual,
        explained=1.0 - residual / total if total > 0.0 else 0.0,
        count=count,
    )
