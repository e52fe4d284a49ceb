"""Counter-based noise: a pure function of seed, tag and tick, so that nothing has to be kept."""

from __future__ import annotations

import math
import zlib

import numpy as np

from plants.compile import kernel

_LOW_32 = np.uint64(0xFFFFFFFF)
_SHIFT_32 = np.uint64(32)
# Philox-4x32 multipliers and Weyl increments: J. K. Salmon, M. A. Moraes, R. O. Dror &
# D. E. Shaw, Parallel random numbers: as easy as 1, 2, 3, Proc. SC11, 2011 (values from memory;
# held against the published known answers in the tests).
_MULTIPLIER_0 = np.uint64(0xD2511F53)
_MULTIPLIER_1 = np.uint64(0xCD9E8D57)
_WEYL_0 = np.uint64(0x9E3779B9)
_WEYL_1 = np.uint64(0xBB67AE85)
_ROUNDS = 10
# A block of the generator serves this many ticks of one instrument.
BLOCK_TICKS = 4
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
def philox_4x32(
    counter_0: np.uint64,
    counter_1: np.uint64,
    counter_2: np.uint64,
    counter_3: np.uint64,
    key_0: np.uint64,
    key_1: np.uint64,
) -> tuple[np.uint64, np.uint64, np.uint64, np.uint64]:
    """Return 128 random bits of a counter and a key, as four words of 32 bits.

    Parameters
    ----------
    counter_0, counter_1, counter_2, counter_3, key_0, key_1 : uint64
        Words of 32 bits [-].

    Returns
    -------
    tuple of four uint64
        Words of 32 bits [-]; ten rounds of Philox-4x32 (Salmon et al., SC11, 2011).
    """
    for _ in range(_ROUNDS):
        even = counter_0 * _MULTIPLIER_0
        odd = counter_2 * _MULTIPLIER_1
        counter_0 = (odd >> _SHIFT_32) ^ counter_1 ^ key_0
        counter_1 = odd & _LOW_32
        counter_2 = (even >> _SHIFT_32) ^ counter_3 ^ key_1
        counter_3 = even & _LOW_32
        key_0 = (key_0 + _WEYL_0) & _LOW_32
        key_1 = (key_1 + _WEYL_1) & _LOW_32
    return counter_0, counter_1, counter_2, counter_3


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
def _normal_of_word(word: np.uint64) -> float:
    """Return the normal number of a word of 32 bits; at most 6.3 away from zero."""
    return normal_quantile((float(word) + 0.5) * 2.3283064365386963e-10)  # 2**-32


@kernel
def normal_block(seed: int, stream: int, block: int) -> tuple[float, float, float, float]:
    """Return four standard normal numbers that depend on the three arguments only.

    Parameters
    ----------
    seed : int
        Seed of the run, 0 to 2**63 - 1 [-].
    stream : int
        Stream of the instrument, 0 to 2**32 - 1, see ``stream_of`` [-].
    block : int
        Number of the block, 0 to 2**63 - 1 [-].

    Returns
    -------
    tuple of four float
        Numbers for the ticks ``4 block`` to ``4 block + 3`` [-].
    """
    counter, key = np.uint64(block), np.uint64(seed)
    words = philox_4x32(
        counter & _LOW_32,
        counter >> _SHIFT_32,
        np.uint64(stream),
        np.uint64(0),
        key & _LOW_32,
        key >> _SHIFT_32,
    )
    return (
        _normal_of_word(words[0]),
        _normal_of_word(words[1]),
        _normal_of_word(words[2]),
        _normal_of_word(words[3]),
    )


@kernel
def standard_normal(seed: int, stream: int, tick: int) -> float:
    """Return the standard normal number of a tick.

    Parameters
    ----------
    seed : int
        Seed of the run, 0 to 2**63 - 1 [-].
    stream : int
        Stream of the instrument, see ``stream_of`` [-].
    tick : int
        Tick, from 0 [ticks].

    Returns
    -------
    float
        The number [-].
    """
    return normal_block(seed, stream, tick // BLOCK_TICKS)[tick % BLOCK_TICKS]
