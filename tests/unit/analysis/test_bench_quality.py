"""Period, jitter, delay and missed scans of exchanges that are known."""

import math

import pytest

from harness.analysis.bench_quality import bench_quality, exchange_summary
from harness.domain.signals import Exchange

TICK = 0.5


def write(point, image_tick, peer="10.0.0.5:4711"):
    return Exchange(
        link="modbus",
        arrival_ns=0,
        peer=peer,
        connection=1,
        function="FC16",
        address="40",
        point=point,
        value=50.0,
        raw="",
        image_tick=image_tick,
    )


def test_a_regular_controller():
    read = list(range(0, 400, 4))
    quality = bench_quality(read, [tick + 3 for tick in read], TICK)
    assert (quality.period, quality.jitter, quality.delay) == (2.0, 0.0, 1.5)
    assert (quality.missed, quality.scans) == (0, 100)


def test_scans_left_out_are_counted_by_the_gap():
    read = [tick for tick in range(0, 400, 4) if tick not in {40, 80, 84, 88}]
    quality = bench_quality(read, [tick + 1 for tick in read], TICK)
    assert quality.missed == 4
    assert quality.period == 2.0


def test_jitter_is_the_distance_from_the_median():
    read, tick = [], 0
    for scan in range(200):
        tick += 6 if scan % 10 == 0 else 4
        read.append(tick)
    assert bench_quality(read, read, TICK).jitter == pytest.approx(1.0)


def test_too_few_scans_tell_nothing():
    for read in ([], [4], [4, 8], [4, 4, 4]):
        assert math.isnan(bench_quality(read, read, TICK).period)


def test_who_wrote_what_and_how_old_its_image_was():
    exchanges = [
        (10, write("FV-1", 8)),
        (14, write("FV-1", 12)),
        (14, write("LIC-1.HB", -1, peer="10.0.0.9:1")),
        (18, write("FV-1", 12)),
    ]
    valve, beat = exchange_summary(exchanges, TICK)
    assert (valve["point"], valve["writes"], valve["first"], valve["last"]) == (
        "FV-1",
        3,
        5.0,
        9.0,
    )
    assert valve["delay"] == 1.0  # 2, 2 and 6 ticks
    assert beat["peer"] == "10.0.0.9:1"
    assert beat["delay"] is None
