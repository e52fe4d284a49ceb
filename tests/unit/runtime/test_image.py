"""The shared image: whole or nothing, whoever writes in between."""

from __future__ import annotations

import threading
from typing import TYPE_CHECKING

import numpy as np
import pytest

from harness.domain.signals import Quality
from harness.errors import LinkError
from harness.runtime.image import ImageReader, ImageWriter

if TYPE_CHECKING:
    from collections.abc import Iterator

POINTS = 5


@pytest.fixture
def writer() -> Iterator[ImageWriter]:
    with ImageWriter(POINTS) as made:
        yield made


@pytest.fixture
def reader(writer: ImageWriter) -> Iterator[ImageReader]:
    made = ImageReader(writer.name)
    yield made
    made.close()


def publish(writer: ImageWriter, tick: int) -> None:
    """Publish an image whose every number tells its tick."""
    writer.publish(tick, np.full(POINTS, tick), np.full(POINTS, tick + 0.5), np.zeros(POINTS))


def test_before_the_first_image_everything_is_bad(reader: ImageReader) -> None:
    assert reader.tick() == -1
    snapshot = reader.read()
    assert snapshot.tick == -1
    assert np.isnan(snapshot.values).all()
    assert (snapshot.qualities == Quality.BAD).all()


def test_what_is_published_is_read(writer: ImageWriter, reader: ImageReader) -> None:
    values = np.array([1.0, -2.5, 1e300, np.nan, 0.0])
    currents = np.array([4.0, np.nan, 20.0, 3.6, 21.0])
    qualities = np.array([0.0, 1.0, 2.0, 0.0, 1.0])
    writer.publish(41, values, currents, qualities)
    snapshot = reader.read()
    assert (reader.tick(), snapshot.tick) == (41, 41)
    np.testing.assert_array_equal(snapshot.values, values)
    np.testing.assert_array_equal(snapshot.currents, currents)
    np.testing.assert_array_equal(snapshot.qualities, qualities)


def test_a_snapshot_stays_as_it_was_and_cannot_be_written(
    writer: ImageWriter, reader: ImageReader
) -> None:
    publish(writer, 1)
    first = reader.read()
    for tick in (2, 3, 4):
        publish(writer, tick)
    assert (first.values == 1).all()
    with pytest.raises(ValueError, match="read-only"):
        first.values[0] = 9.0


def test_ticks_may_go_back_after_a_restore(writer: ImageWriter, reader: ImageReader) -> None:
    publish(writer, 900)
    assert reader.read().tick == 900
    publish(writer, 12)
    assert reader.read().tick == 12


def test_readers_see_the_same_image(writer: ImageWriter, reader: ImageReader) -> None:
    other = ImageReader(writer.name)
    publish(writer, 3)
    assert other.read().tick == reader.read().tick == 3
    other.close()


def test_the_counts_of_messages_and_calls_go_the_other_way(
    writer: ImageWriter, reader: ImageReader
) -> None:
    assert (writer.news(), writer.awake()) == (0, 0)
    reader.tell_news(17)
    reader.tell_awake(4)
    assert (writer.news(), writer.awake()) == (17, 4)
    publish(writer, 1)
    assert (writer.news(), writer.awake(), reader.read().tick) == (17, 4, 1)


@pytest.mark.parametrize("byte", range(3 * 8, 8 * (3 + 3 * POINTS), 7))
def test_one_bit_out_of_place_is_seen_and_healed_by_the_next_image(
    writer: ImageWriter, reader: ImageReader, byte: int
) -> None:
    publish(writer, 1)
    publish(writer, 2)
    reader.read()
    publish(writer, 3)
    start = 8 * 8 + 8 * (3 + 3 * POINTS)  # sequence 3 is in the second buffer
    reader._buffer[start + byte] ^= 0x10
    with pytest.raises(LinkError, match="written over"):
        reader.read()
    publish(writer, 4)
    assert reader.read().tick == 4


def test_no_torn_image_reaches_a_reader_beside_a_writer_at_full_speed() -> None:
    points = 400  # long enough for the threads to be switched within a copy
    with ImageWriter(points) as writer:
        stop = threading.Event()

        def write() -> None:
            tick = 0
            while not stop.is_set():
                tick += 1
                full = np.full(points, float(tick))
                writer.publish(tick, full, full, full)

        thread = threading.Thread(target=write)
        thread.start()
        reader = ImageReader(writer.name)
        try:
            seen: set[int] = set()
            while len(seen) < 40:
                snapshot = reader.read()
                if snapshot.tick < 0:
                    continue
                assert (snapshot.values == snapshot.tick).all()
                assert (snapshot.currents == snapshot.tick).all()
                assert (snapshot.qualities == snapshot.tick).all()
                seen.add(snapshot.tick)
        finally:
            stop.set()
            thread.join()
            reader.close()


def test_an_overtaken_reader_reads_again(
    writer: ImageWriter, reader: ImageReader, monkeypatch: pytest.MonkeyPatch
) -> None:
    publish(writer, 1)
    copy = reader._copy
    overtaken: list[int] = []

    def overtake_once(sequence: int) -> object:
        if not overtaken:
            overtaken.append(sequence)
            publish(writer, 2)
            publish(writer, 3)  # into the buffer that is about to be copied
        return copy(sequence)

    monkeypatch.setattr(reader, "_copy", overtake_once)
    assert reader.read().tick == 3
    assert overtaken == [1]


def test_the_segment_is_removed_once_and_readers_may_outlive_it() -> None:
    writer = ImageWriter(POINTS)
    reader = ImageReader(writer.name)
    publish(writer, 8)
    writer.close()
    writer.close()
    assert reader.read().tick == 8
    reader.close()
    reader.close()
    with pytest.raises(FileNotFoundError):
        ImageReader(writer.name)
