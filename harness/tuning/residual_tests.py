"""Whether residuals are what a good model leaves: noise that knows neither itself nor the input."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import chdtrc, ndtri

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.tuning.trace import Trace

    Array = NDArray[np.float64]

_LAGS = 20  # common practice
_LEVEL = 0.01  # chance of a false alarm of each test


@dataclass(frozen=True, slots=True, kw_only=True)
class Whiteness:
    """The Ljung-Box test.

    Parameters
    ----------
    statistic : float
        Q = n (n + 2) sum r_k^2/(n - k) [-].
    lags : int
        Lags summed over [-].
    p_value : float
        Chance of so much or more from white residuals [-].
    white : bool
        Whether it is above one in a hundred.
    """

    statistic: float
    lags: int
    p_value: float
    white: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class InputCorrelation:
    """The residuals against the input some rows before.

    Parameters
    ----------
    largest : float
        Correlation of the largest size [-].
    lag : int
        Rows by which the input is ahead of it [rows].
    limit : float
        Size that one record in a hundred would reach by chance [-].
    independent : bool
        Whether it stays below.
    """

    largest: float
    lag: int
    limit: float
    independent: bool


def whiteness(residuals: Array, fitted: int) -> Whiteness:
    """Test residuals for white noise.

    Source: G. M. Ljung and G. E. P. Box, Biometrika 65:297, 1978 (value from memory).

    Parameters
    ----------
    residuals : ndarray, shape (n,)
        Residuals in order of time [any unit].
    fitted : int
        Parameters fitted, which take degrees of freedom [-].

    Returns
    -------
    Whiteness
        The test; residuals of zero count as white.
    """
    n = residuals.size
    lags = max(fitted + 1, min(_LAGS, n // 5))
    centred = residuals - residuals.mean()
    energy = float(centred @ centred)
    if energy == 0.0:
        return Whiteness(statistic=0.0, lags=lags, p_value=1.0, white=True)
    terms = [
        (float(centred[k:] @ centred[:-k]) / energy) ** 2 / (n - k) for k in range(1, lags + 1)
    ]
    statistic = n * (n + 2.0) * math.fsum(terms)
    p_value = float(chdtrc(lags - fitted, statistic))
    return Whiteness(statistic=statistic, lags=lags, p_value=p_value, white=p_value > _LEVEL)


def input_correlation(residuals: Array, trace: Trace) -> InputCorrelation:
    """Test residuals for what the input explains and the model does not.

    With white residuals that are independent of it, the correlation with any input is normal
    with a variance of 1/n, whatever the input's own colour (L. Ljung, *System Identification*,
    ch. 16, value from memory); the limit allows for the number of lags looked at.

    Parameters
    ----------
    residuals : ndarray, shape (n,)
        Residuals at the rows of the trace [any unit].
    trace : Trace
        The trace that was fitted.

    Returns
    -------
    InputCorrelation
        The test.
    """
    n = residuals.size
    level = np.concatenate([[0.0], np.cumsum(trace.event_size)])
    inputs = level[np.searchsorted(trace.event_time, trace.time, side="right")]
    lags = max(1, min(_LAGS, n // 5))
    centred = inputs - inputs.mean()
    scale = math.sqrt(float(centred @ centred) * float(residuals @ residuals))
    limit = float(ndtri(1.0 - 0.5 * _LEVEL / (lags + 1))) / math.sqrt(n)
    if scale == 0.0:
        return InputCorrelation(largest=0.0, lag=0, limit=limit, independent=True)
    values = [float(residuals[k:] @ centred[: n - k]) / scale for k in range(lags + 1)]
    lag = int(np.argmax(np.abs(values)))
    return InputCorrelation(
        largest=values[lag], lag=lag, limit=limit, independent=abs(values[lag]) <= limit
    )
