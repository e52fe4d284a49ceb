"""Transmitters: damping, noise, resolution and the 4-20 mA signal with its limits."""

from __future__ import annotations

import math

import numpy as np

from plants.compile import kernel

# NAMUR NE 43: measurement 3.8 to 20.5 mA; failure at most 3.6 or at least 21.0 mA.
LOWEST_CURRENT_MA = 3.8
HIGHEST_CURRENT_MA = 20.5
FAILURE_LOW_MA = 3.6
FAILURE_HIGH_MA = 21.0

_SERIES_BELOW = 0.03  # of interval over damping; the closed form loses digits below it [-]

GOOD = 0.0
UNCERTAIN = 1.0
BAD = 2.0


@kernel
def damping_weights(interval: float, damping: float) -> tuple[float, float, float, float]:
    """Return the weights of a first-order lag over an interval, exact for a parabola.

    The output after the interval is ``decay * y + start * x0 + middle * xm + end * x1`` where
    x0, xm and x1 are the input at the start, the middle and the end.

    Parameters
    ----------
    interval : float
        Length of the interval [s].
    damping : float
        Time constant; 0 for none [s].

    Returns
    -------
    decay, start, middle, end : float
        Weights; they add up to 1 [-].
    """
    if damping <= 0.0:
        return 0.0, 0.0, 0.0, 1.0
    a = interval / damping
    decay = math.exp(-a)
    if a < _SERIES_BELOW:
        # The closed form below cancels; series in a, to a relative 1e-11 (own expansion).
        m1 = 0.5 - a / 6 + a**2 / 24 - a**3 / 120 + a**4 / 720
        m2 = 1.0 / 3 - a / 12 + a**2 / 60 - a**3 / 360 + a**4 / 2520
        m1 *= a
        m2 *= a
    else:
        m1 = 1.0 - (1.0 - decay) / a
        m2 = 1.0 - 2.0 * m1 / a
    # m1, m2: responses to the inputs s and s**2, with s the elapsed part of the interval.
    whole = 1.0 - decay
    return decay, whole - 3.0 * m1 + 2.0 * m2, 4.0 * m1 - 4.0 * m2, 2.0 * m2 - m1


@kernel
def quantised(fraction: float, resolution: float, inverse: float) -> float:
    """Return a value rounded to the resolution of the instrument.

    Parameters
    ----------
    fraction : float
        Value [fraction of span].
    resolution : float
        Step; 0 for none [fraction of span].
    inverse : float
        Reciprocal of the step [1/fraction of span].

    Returns
    -------
    float
        Rounded value [fraction of span].
    """
    if resolution <= 0.0:
        return fraction
    steps: float = np.floor(fraction * inverse + 0.5)
    return steps * resolution


@kernel
def loop_current(fraction: float) -> tuple[float, float]:
    """Return the loop current of a measured fraction, and the quality it stands for.

    Parameters
    ----------
    fraction : float
        Measured value [fraction of span].

    Returns
    -------
    current_ma : float
        4 + 16 f, held within 3.8 to 20.5 (NAMUR NE 43) [mA].
    quality : float
        GOOD, or UNCERTAIN when the current is at one of these limits [-].
    """
    current_ma = 4.0 + 16.0 * fraction
    if current_ma < LOWEST_CURRENT_MA:
        return LOWEST_CURRENT_MA, UNCERTAIN
    if current_ma > HIGHEST_CURRENT_MA:
        return HIGHEST_CURRENT_MA, UNCERTAIN
    return current_ma, GOOD


@kernel
def quality_of_current(current_ma: float) -> float:
    """Return what a current says of its own quality (NAMUR NE 43).

    Parameters
    ----------
    current_ma : float
        Loop current [mA].

    Returns
    -------
    float
        GOOD for a measurement, BAD for a failure, UNCERTAIN in the bands between [-].
    """
    if current_ma <= FAILURE_LOW_MA or current_ma >= FAILURE_HIGH_MA:
        return BAD
    if current_ma < LOWEST_CURRENT_MA or current_ma > HIGHEST_CURRENT_MA:
        return UNCERTAIN
    return GOOD


@kernel
def fraction_of_current(current_ma: float) -> float:
    """Return the fraction of span that a current stands for.

    Parameters
    ----------
    current_ma : float
        Loop current [mA].

    Returns
    -------
    float
        (I - 4)/16 [fraction of span].
    """
    return (current_ma - 4.0) / 16.0
