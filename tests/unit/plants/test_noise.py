"""Noise: the generator's published answers, the normal quantile, independence of tags."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import special, stats

from plants.noise import (
    BLOCK_TICKS,
    normal_block,
    normal_of_word,
    philox_4x32,
    standard_normal,
    stream_of,
)
from plants.quantile import FIRST_INTERVAL, INTERVAL_SHIFT, QUANTILE_TABLE, normal_quantile

_ONES = 0xFFFFFFFF


@pytest.mark.parametrize(
    ("counter", "key", "expected"),
    [
        # Known-answer file of the Random123 library (values from memory); the third is pi.
        ((0, 0, 0, 0), (0, 0), (0x6627E8D5, 0xE169C58D, 0xBC57AC4C, 0x9B00DBD8)),
        ((_ONES,) * 4, (_ONES,) * 2, (0x408F276D, 0x41C83B0E, 0xA20BC7C6, 0x6D5451FD)),
        (
            (0x243F6A88, 0x85A308D3, 0x13198A2E, 0x03707344),
            (0xA4093822, 0x299F31D0),
            (0xD16CFE09, 0x94FDCCEB, 0x5001E420, 0x24126EA1),
        ),
    ],
)
def test_the_generator_gives_its_published_answers(counter, key, expected):
    words = philox_4x32(*(np.uint64(word) for word in (*counter, *key)))
    assert tuple(int(word) for word in words) == expected


def test_the_quantile_is_that_of_an_independent_library():
    probabilities = np.concatenate(
        [np.logspace(-300, -1, 200), np.linspace(0.05, 0.95, 181), 1 - np.logspace(-16, -1, 60)]
    )
    # AS 241 promises about one part in 1e16; the tails near 1 are as coarse as 1 - p itself
    np.testing.assert_allclose(
        normal_quantile(probabilities), special.ndtri(probabilities), rtol=2e-15, atol=2e-16
    )


def _words():
    """Words at both ends of every interval of the table, between them, and their mirrors."""
    first = np.arange(FIRST_INTERVAL, FIRST_INTERVAL + len(QUANTILE_TABLE), dtype=np.uint64)
    starts = (first << np.uint64(INTERVAL_SHIFT)).view(np.float64)
    inside = np.concatenate([starts + part * starts / 16 for part in np.linspace(0, 1, 9)])
    low = np.unique(np.clip(np.round(inside - 0.5), 0, 2**31 - 1).astype(np.uint64))
    return np.concatenate([low, np.uint64(2**32 - 1) - low])


def test_every_word_has_its_quantile():
    words = _words()
    assert len(words) > 2_000
    found = [normal_of_word(word) for word in words]
    expected = special.ndtri((words.astype(np.float64) + 0.5) / 2**32)
    np.testing.assert_allclose(found, expected, rtol=0, atol=1e-11)
    assert max(found) == -min(found) == pytest.approx(6.3, abs=0.1)


def test_a_tick_has_one_number_whichever_way_it_is_drawn():
    for tick in (0, 1, 6, 4_000_003, 2**33 + 1):
        block = normal_block(7, 0, 99, tick // BLOCK_TICKS)
        assert standard_normal(7, 99, tick) == block[tick % BLOCK_TICKS]


def test_every_argument_matters():
    base = standard_normal(1, 2, 3)
    others = [
        standard_normal(2, 2, 3), standard_normal(1, 3, 3), standard_normal(1, 2, 4),
        standard_normal(1 + 2**32, 2, 3), standard_normal(1, 2, 3 + 2**34),
    ]  # fmt: skip
    assert len({base, *others}) == 6


def _series(tag, ticks, seed=11):
    stream = stream_of(tag)
    return np.array(
        [x for block in range(ticks // 4) for x in normal_block(seed, 0, stream, block)]
    )


def test_the_numbers_are_standard_normal():
    numbers = _series("LT-1", 40_000)
    # a fixed sample: at 1e-3 a right generator fails for one seed in a thousand
    assert stats.kstest(numbers, "norm").pvalue > 1e-3
    assert abs(np.mean(numbers)) < 3.3 / np.sqrt(numbers.size)
    assert abs(np.var(numbers) - 1) < 3.3 * np.sqrt(2 / numbers.size)


def test_neighbours_in_time_and_among_tags_are_uncorrelated():
    numbers, other = _series("LT-1", 40_000), _series("LT-2", 40_000)
    bound = 3.5 / np.sqrt(numbers.size)
    for lag in range(1, 6):
        assert abs(np.mean(numbers[lag:] * numbers[:-lag])) < bound, lag
    assert abs(np.mean(numbers * other)) < bound


def test_a_stream_is_the_tags_alone():
    # CRC-32 of "123456789", the usual check value (Koopman; ITU-T V.42)
    assert stream_of("123456789") == 0xCBF43926
