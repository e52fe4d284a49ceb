"""Counter-based noise: a pure function of seed, tag and tick, so that nothing has to be kept."""

from __future__ import annotations

import math
import zlib

import numpy as np

from plants.compile import kernel

_LOW_32 = np.uint64(0xFFFFFFFF)
_SHIFT_32 = np.uint64(32)
_SHIFT_11 = np.uint64(11)
# Philox-2x32 multiplier and Weyl increment: J. K. Salmon, M. A. Moraes, R. O. Dror & D. E. Shaw,
# Parallel random numbers: as easy as 1, 2, 3, Proc. SC11, 2011 (values from memory; held against
# the published known answers in the tests).
_MULTIPLIER = np.uint64(0xD256D193)
_WEYL = np.uint64(0x9E3779B9)
_ROUNDS = 10
# Limits of the three regions of algorithm AS 241.
_CENTRAL = 0.425
_FAR_TAIL = 5.0


def stream_of(tag: str) -> int:
    """Return the noise stream of a tag: stable across runs, machines and rig edits.

    Parameters
    ----------
    tag : str
        Tag of the instrument.

    Returns
    -------
    int
        A number of 32 bits [-].
    """
    return zlib.crc32(tag.encode())


@kernel
def philox_2x32(
    counter_low: np.uint64, counter_high: np.uint64, key: np.uint64
) -> tuple[np.uint64, np.uint64]:
    """Return 64 random bits of a counter and a key, as two words of 32 bits.

    Parameters
    ----------
    counter_low, counter_high, key : uint64
        Words of 32 bits [-].

    Returns
    -------
    tuple of two uint64
        Words of 32 bits [-]; ten rounds of Philox-2x32 (Salmon et al., SC11, 2011).
    """
    low = counter_low
    high = counter_high
    for _ in range(_ROUNDS):
        product = low * _MULTIPLIER
        low = (product >> _SHIFT_32) ^ key ^ high
        high = product & _LOW_32
        key = (key + _WEYL) & _LOW_32
    return low, high


@kernel
def normal_quantile(probability: float) -> float:
    """Return the quantile of the standard normal distribution.

    Algorithm AS 241, routine PPND16: M. J. Wichura, The percentage points of the normal
    distribution, Applied Statistics 37(3):477-484, 1988 (coefficients from memory; held
    against an independent library in the tests). Relative accuracy about 1e-16.

    Parameters
    ----------
    probability : float
        Between 0 and 1, both excluded [-].

    Returns
    -------
    float
        The quantile [-].
    """
    q = probability - 0.5
    if abs(q) <= _CENTRAL:
        r = 0.180625 - q * q
        return (
            q
            * (((((((2509.0809287301226727 * r + 33430.575583588128105) * r
                    + 67265.770927008700853) * r + 45921.953931549871457) * r
                  + 13731.693765509461125) * r + 1971.5909503065514427) * r
                + 133.14166789178437745) * r + 3.387132872796366608)
            / (((((((5226.495278852545925 * r + 28729.085735721942674) * r
                    + 39307.89580009271061) * r + 21213.794301586595867) * r
                  + 5394.1960214247511077) * r + 687.1870074920579083) * r
                + 42.313330701600911252) * r + 1.0)
        )  # fmt: skip
    r = math.sqrt(-math.log(probability if q < 0.0 else 1.0 - probability))
    if r <= _FAR_TAIL:
        r -= 1.6
        value = (
            (((((((7.7454501427834140764e-4 * r + 0.0227238449892691845833) * r
                  + 0.24178072517745061177) * r + 1.27045825245236838258) * r
                + 3.64784832476320460504) * r + 5.7694972214606914055) * r
              + 4.6303378461565452959) * r + 1.42343711074968357734)
            / (((((((1.05075007164441684324e-9 * r + 5.475938084995344946e-4) * r
                    + 0.0151986665636164571966) * r + 0.14810397642748007459) * r
                  + 0.68976733498510000455) * r + 1.6763848301838038494) * r
                + 2.05319162663775882187) * r + 1.0)
        )  # fmt: skip
    else:
        r -= 5.0
        value = (
            (((((((2.01033439929228813265e-7 * r + 2.71155556874348757815e-5) * r
                  + 0.0012426609473880784386) * r + 0.026532189526576123093) * r
                + 0.29656057182850489123) * r + 1.7848265399172913358) * r
              + 5.4637849111641143699) * r + 6.6579046435011037772)
            / (((((((2.04426310338993978564e-15 * r + 1.4215117583164458887e-7) * r
                    + 1.8463183175100546818e-5) * r + 7.868691311456132591e-4) * r
                  + 0.0148753612908506148525) * r + 0.13692988092273580531) * r
                + 0.59983220655588793769) * r + 1.0)
        )  # fmt: skip
    return -value if q < 0.0 else value


@kernel
def standard_normal(seed: int, stream: int, tick: int) -> float:
    """Return a standard normal number that depends on its three arguments only.

    Parameters
    ----------
    seed : int
        Seed of the run, 0 to 2**32 - 1 [-].
    stream : int
        Stream of the instrument, see ``stream_of`` [-].
    tick : int
        Tick, 0 to 2**32 - 1 [ticks].

    Returns
    -------
    float
        The number [-].
    """
    high, low = philox_2x32(np.uint64(tick) & _LOW_32, np.uint64(stream), np.uint64(seed))
    bits = ((high << _SHIFT_32) | low) >> _SHIFT_11  # 53 bits
    return normal_quantile((float(bits) + 0.5) * 1.1102230246251565e-16)  # 2**-53
