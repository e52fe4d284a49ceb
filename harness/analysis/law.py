"""Reading a controller's law from its trace: the gain and integral time that it really has."""

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

_FEWEST_SCANS = 20
_AT_LIMIT = 1e-6  # of output: closer to a limit than this the block is saturated [-]
_LEAST_EXPLAINED = 0.5  # share of the output's movement that a law must explain [-]


@dataclass(frozen=True, slots=True, kw_only=True)
class ReadLaw:
    """The law of a controller as its trace shows it.

    Parameters
    ----------
    gain : float
        Kc; negative when the controller acts the wrong way [-].
    integral_time : float or None
        Ti; None where no integral action shows [s].
    explained : float
        Share of the variance of the output's moves that the law explains [-].
    """

    gain: float
    integral_time: float | None
    explained: float


def read_law(
    setpoint: Floats,
    process_variable: Floats,
    output: Floats,
    scan: float,
    loop: Loop,
) -> ReadLaw | None:
    """Return the P or PI law behind a series of scans in automatic.

    In its velocity form the reference block gives du = Kc de + (Kc Ts / Ti) e; gain and integral
    time follow by least squares from what the controller saw and what it answered. Scans at an
    output limit are left out.

    Parameters
    ----------
    setpoint, process_variable : ndarray, shape (n,)
        What each scan worked on [fraction of span].
    output : ndarray, shape (n,)
        What each scan answered [-].
    scan : float
        Scan period [s].
    loop : Loop
        The loop: action and limits.

    Returns
    -------
    ReadLaw or None
        None where the trace shows no law: too few scans, no movement, or moves that error and
        its change do not explain.
    """
    sign = 1.0 if loop.action is Action.REVERSE else -1.0
    error = sign * (setpoint - process_variable)
    free = (output > loop.output_low + _AT_LIMIT) & (output < loop.output_high - _AT_LIMIT)
    usable = free[1:] & free[:-1]
    moves = np.diff(output)[usable]
    if len(moves) < _FEWEST_SCANS or not np.any(moves):
        return None
    terms = np.column_stack((np.diff(error), scan * error[1:]))[usable]
    (gain, reset), *_ = np.linalg.lstsq(terms, moves, rcond=None)
    left = moves - terms @ np.array([gain, reset])
    explained = 1.0 - float(left @ left) / float(moves @ moves)
    if explained < _LEAST_EXPLAINED:
        return None
    # The reset rate stands out only where its part of the moves exceeds what is left over.
    doubt = math.sqrt(float(left @ left) / len(moves))
    part = abs(reset) * float(np.max(np.abs(terms[:, 1])))
    integral_time = float(gain / reset) if reset != 0.0 and part > doubt * 1e-3 else None
    if integral_time is not None and integral_time <= 0.0:
        integral_time = None
    return ReadLaw(gain=float(gain), integral_time=integral_time, explained=explained)
