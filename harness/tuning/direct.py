"""First order plus dead time straight from one step response: two-point and area methods.

Quick, and as good as the curve is clean; `harness.tuning.identification` is what decides.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from harness.domain.models import LagModel
from harness.errors import DataError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]

_ENOUGH_ROWS = 4


def two_point_28_63(time: Array, response: Array, step: float, final: float) -> LagModel:
    """Return tau = 1.5 (t63 - t28), theta = t63 - tau, from the 28.3 and 63.2 % points.

    Source: C. L. Smith, *Digital Computer Process Control*, 1972 (value from memory).

    Parameters
    ----------
    time : ndarray, shape (n,)
        Time since the step, rising from 0 [s].
    response : ndarray, shape (n,)
        Deviation from the steady state before the step [fraction of PV span].
    step : float
        Size of the step [fraction of output].
    final : float
        Deviation that the response ends at [fraction of PV span].

    Returns
    -------
    LagModel
        First order; a dead time that comes out negative is given as 0.

    Raises
    ------
    DataError
        If the response never reaches a point, or the step is zero.
    """
    early, late = _crossings(time, response, step, final, (0.283, 0.632))
    lag = 1.5 * (late - early)
    return _model(final / step, lag, late - lag)


def two_point_35_85(time: Array, response: Array, step: float, final: float) -> LagModel:
    """Return tau = 0.67 (t85 - t35), theta = 1.3 t35 - 0.29 t85.

    Source: K. R. Sundaresan and P. R. Krishnaswamy, Ind. Eng. Chem. Process Des. Dev. 17, 1978
    (value from memory, reproduced).

    Parameters
    ----------
    time : ndarray, shape (n,)
        Time since the step, rising from 0 [s].
    response : ndarray, shape (n,)
        Deviation from the steady state before the step [fraction of PV span].
    step : float
        Size of the step [fraction of output].
    final : float
        Deviation that the response ends at [fraction of PV span].

    Returns
    -------
    LagModel
        First order; a dead time that comes out negative is given as 0.

    Raises
    ------
    DataError
        If the response never reaches a point, or the step is zero.
    """
    early, late = _crossings(time, response, step, final, (0.353, 0.853))
    return _model(final / step, 0.67 * (late - early), 1.3 * early - 0.29 * late)


def area_method(time: Array, response: Array, step: float, final: float) -> LagModel:
    """Return lag and dead time from the areas above and below the response.

    The area above it, over the final value, is the residence time T_ar: the sum of all lags and
    delays. The area below it up to T_ar gives the lag T = e times that area over the final
    value, and theta = T_ar - T. Source: K. J. Astrom and T. Hagglund, *PID Controllers*, 1995
    (value from memory). Areas by the trapezoidal rule.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Time since the step, rising from 0 [s].
    response : ndarray, shape (n,)
        Deviation from the steady state before the step; it should end there
        [fraction of PV span].
    step : float
        Size of the step [fraction of output].
    final : float
        Deviation that the response ends at [fraction of PV span].

    Returns
    -------
    LagModel
        First order; a dead time that comes out negative is given as 0.

    Raises
    ------
    DataError
        If the curve is not usable, or ends before its residence time.
    """
    time, share = _normalised(time, response, step, final)
    residence = float(np.trapezoid(1.0 - share, time))
    if not 0.0 < residence < float(time[-1]):
        raise DataError(
            f"area method: residence time comes out as {residence:.4g} s on a curve of "
            f"{float(time[-1]):.4g} s; the response is not finished"
        )
    before = time < residence
    edge = float(np.interp(residence, time, share))
    below = float(
        np.trapezoid(np.append(share[before], edge), np.append(time[before], residence))
    )
    lag = math.e * below
    return _model(final / step, lag, residence - lag)


def _normalised(time: Array, response: Array, step: float, final: float) -> tuple[Array, Array]:
    """Check a curve and return it as a share of its final value."""
    time, response = np.asarray(time, np.float64), np.asarray(response, np.float64)
    if time.ndim != 1 or time.shape != response.shape or time.size < _ENOUGH_ROWS:
        raise DataError(
            f"step response: time has shape {time.shape} and response {response.shape}; "
            f"give two rows of the same length, at least {_ENOUGH_ROWS}"
        )
    if not (np.isfinite(time).all() and np.isfinite(response).all()):
        raise DataError("step response: some values are no numbers; cut or repair the record")
    if step == 0.0 or final == 0.0:
        raise DataError(
            f"step response: the step is {step:g} and the final deviation {final:g}; "
            "neither may be 0"
        )
    return time, response / final


def _crossings(
    time: Array, response: Array, step: float, final: float, levels: tuple[float, float]
) -> tuple[float, float]:
    """Return when the response first reaches two shares of its final value."""
    time, share = _normalised(time, response, step, final)
    found = []
    for level in levels:
        above = np.flatnonzero(share >= level)
        if above.size == 0 or above[0] == 0:
            where = "starts above" if above.size else "never reaches"
            raise DataError(f"step response: it {where} {level:.1%} of its final value")
        k = int(above[0])
        part = (level - share[k - 1]) / (share[k] - share[k - 1])
        found.append(float(time[k - 1] + part * (time[k] - time[k - 1])))
    return found[0], found[1]


def _model(gain: float, lag: float, dead_time: float) -> LagModel:
    """Return a first-order model; noise may make the dead time negative."""
    return LagModel(gain=gain, time_constants=(lag,), dead_time=max(dead_time, 0.0))
