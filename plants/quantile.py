"""Quantile of the normal distribution, and a table of it for words of 32 bits.

The noise needs a normal number for every instrument and tick, without a branch that the
processor would mispredict: hence a table of polynomials beside the exact routine.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# Algorithm AS 241, routine PPND16: M. J. Wichura, The percentage points of the normal
# distribution, Applied Statistics 37(3):477-484, 1988 (coefficients from memory; held against
# an independent library in the tests). Numerators and denominators, highest power first.
_CENTRAL = 0.425
_NEAR_TAIL = 5.0
_CENTRE = (
    (
        2509.0809287301226727, 33430.575583588128105, 67265.770927008700853,
        45921.953931549871457, 13731.693765509461125, 1971.5909503065514427,
        133.14166789178437745, 3.387132872796366608,
    ),
    (
        5226.495278852545925, 28729.085735721942674, 39307.89580009271061,
        21213.794301586595867, 5394.1960214247511077, 687.1870074920579083,
        42.313330701600911252, 1.0,
    ),
)  # fmt: skip
_TAIL = (
    (
        7.7454501427834140764e-4, 0.0227238449892691845833, 0.24178072517745061177,
        1.27045825245236838258, 3.64784832476320460504, 5.7694972214606914055,
        4.6303378461565452959, 1.42343711074968357734,
    ),
    (
        1.05075007164441684324e-9, 5.475938084995344946e-4, 0.0151986665636164571966,
        0.14810397642748007459, 0.68976733498510000455, 1.6763848301838038494,
        2.05319162663775882187, 1.0,
    ),
)  # fmt: skip
_FAR_TAIL = (
    (
        2.01033439929228813265e-7, 2.71155556874348757815e-5, 0.0012426609473880784386,
        0.026532189526576123093, 0.29656057182850489123, 1.7848265399172913358,
        5.4637849111641143699, 6.6579046435011037772,
    ),
    (
        2.04426310338993978564e-15, 1.4215117583164458887e-7, 1.8463183175100546818e-5,
        7.868691311456132591e-4, 0.0148753612908506148525, 0.13692988092273580531,
        0.59983220655588793769, 1.0,
    ),
)  # fmt: skip


def normal_quantile(probability: Floats) -> Floats:
    """Return quantiles of the standard normal distribution.

    Parameters
    ----------
    probability : ndarray
        Between 0 and 1, both excluded [-].

    Returns
    -------
    ndarray
        The quantiles; relative accuracy about 1e-16 [-].
    """
    p = np.asarray(probability, dtype=np.float64)
    q = p - 0.5
    r = 0.180625 - q * q
    centre = q * _ratio(_CENTRE, r)
    root = np.sqrt(-np.log(np.where(q < 0.0, p, 1.0 - p)))
    tail = np.where(
        root <= _NEAR_TAIL, _ratio(_TAIL, root - 1.6), _ratio(_FAR_TAIL, root - 5.0)
    )
    return np.where(np.abs(q) <= _CENTRAL, centre, np.copysign(tail, q))


def _ratio(coefficients: tuple[tuple[float, ...], tuple[float, ...]], r: Floats) -> Floats:
    above, below = coefficients
    return np.asarray(np.polyval(above, r) / np.polyval(below, r))


# A word w below 2**31 stands for x = w + 1/2. The leading bits of x as a float, its exponent
# and four bits of its mantissa, number the intervals, from x = 1/2 to x = 2**31.
INTERVAL_SHIFT = 48
FIRST_INTERVAL = 0x3FE0
_AN_OCTAVE = 16
_OCTAVES = 31 + 1
_COEFFICIENTS = 7


def _quantile_table() -> Floats:
    """Return for each interval its middle and a polynomial in the distance from it.

    Interpolated at Chebyshev's nodes; the tests say how near it comes.
    """
    starts = np.repeat(2.0 ** np.arange(-1, 31), _AN_OCTAVE)
    half_widths = starts / _AN_OCTAVE / 2
    edges = starts * (1 + np.tile(np.arange(_AN_OCTAVE), _OCTAVES) / _AN_OCTAVE)
    middles = edges + half_widths
    nodes = np.cos(np.pi * (np.arange(_COEFFICIENTS) + 0.5) / _COEFFICIENTS)
    values = normal_quantile((middles[:, None] + half_widths[:, None] * nodes) * 2.0**-32)
    powers = np.arange(_COEFFICIENTS)
    polynomials = np.linalg.solve(nodes[:, None] ** powers, values.T).T
    scaled = polynomials / half_widths[:, None] ** powers
    return np.ascontiguousarray(np.column_stack([middles, scaled]))


QUANTILE_TABLE = _quantile_table()
