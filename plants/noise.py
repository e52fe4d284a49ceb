"""Counter-based noise: a pure function of seed, tag and tick, so that nothing has to be kept."""

from __future__ import annotations

import zlib

import numpy as np

from plants.compile import kernel
from plants.quantile import FIRST_INTERVAL, INTERVAL_SHIFT, QUANTILE_TABLE

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
_WORD = 2**32
# A block of the generator serves this many ticks of one instrument.
BLOCK_TICKS = 4
_HALF = np.uint64(0x80000000)
_INTERVAL_SHIFT = np.uint64(INTERVAL_SHIFT)
_FIRST_INTERVAL = np.uint64(FIRST_INTERVAL)


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
def normal_of_word(word: np.uint64) -> float:
    """Return the standard normal number of a word of 32 bits.

    Parameters
    ----------
    word : uint64
        Word of 32 bits w [-].

    Returns
    -------
    float
        Quantile of (w + 1/2) / 2**32, to within 1e-11; at most 6.3 away from zero [-].
    """
    upper = word >= _HALF
    x = float(_LOW_32 - word if upper else word) + 0.5
    row = (np.float64(x).view(np.uint64) >> _INTERVAL_SHIFT) - _FIRST_INTERVAL
    d = x - QUANTILE_TABLE[row, 0]
    square = d * d
    low = QUANTILE_TABLE[row, 1] + d * QUANTILE_TABLE[row, 2]
    middle = QUANTILE_TABLE[row, 3] + d * QUANTILE_TABLE[row, 4]
    high = QUANTILE_TABLE[row, 5] + d * (QUANTILE_TABLE[row, 6] + d * QUANTILE_TABLE[row, 7])
    value: float = low + square * (middle + square * high)
    return -value if upper else value


@kernel
def normal_block(
    seed_low: int, seed_high: int, stream: int, block: int
) -> tuple[float, float, float, float]:
    """Return four standard normal numbers that depend on the arguments only.

    Parameters
    ----------
    seed_low, seed_high : int
        Seed of the run, as words of 32 bits [-].
    stream : int
        Stream of the instrument, 0 to 2**32 - 1, see ``stream_of`` [-].
    block : int
        Number of the block, 0 to 2**63 - 1 [-].

    Returns
    -------
    tuple of four float
        Numbers for the ticks ``4 block`` to ``4 block + 3`` [-].
    """
    counter = np.uint64(block)
    words = philox_4x32(
        counter & _LOW_32,
        counter >> _SHIFT_32,
        np.uint64(stream),
        np.uint64(0),
        np.uint64(seed_low),
        np.uint64(seed_high),
    )
    return (
        normal_of_word(words[0]),
        normal_of_word(words[1]),
        normal_of_word(words[2]),
        normal_of_word(words[3]),
    )


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
    seed_high, seed_low = seed // _WORD, seed % _WORD
    return normal_block(seed_low, seed_high, stream, tick // BLOCK_TICKS)[tick % BLOCK_TICKS]
