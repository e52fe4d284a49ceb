"""The image of the rig in memory shared by two processes: one writes, many read.

Two buffers take turns. Each carries a sequence number and a checksum over everything in it, so
that a reader which was overtaken in the middle of its copy knows, and reads again: what comes
out is one tick's image or none, whatever the processor does with the order of stores.
"""

from __future__ import annotations

import sys
import weakref
import zlib
from multiprocessing import resource_tracker, shared_memory
from typing import TYPE_CHECKING

import numpy as np

from harness.domain.signals import Quality
from harness.errors import LinkError
from harness.links.port import Snapshot

if TYPE_CHECKING:
    from types import TracebackType

    from numpy.typing import NDArray

# The segment in 8-byte words: header, then two buffers.
_WORD = 8
_LATEST = 0  # sequence number of the newest whole image; 0 before the first
_TICK = 1  # its tick
_POINTS = 2  # number of points
_NEWS = 3  # messages that the reader's side has sent; it writes this word and the next
_AWAKE = 4  # wake-up calls that it has taken
_HEADER = 8
# A buffer: checksum, sequence, tick, then values, currents, qualities.
_BUFFER_HEAD = 3
_TRIES = 10_000  # an overtaken copy is read again; this often in a row means a broken segment


def _buffer_words(points: int) -> int:
    return _BUFFER_HEAD + 3 * points


def _attach(name: str) -> shared_memory.SharedMemory:
    """Open the segment of another process without becoming answerable for its removal.

    Up to Python 3.12 the resource tracker takes down every segment that a process opens, not
    only those it makes, and at the end warns about it and removes it (cpython issue 82300,
    mended in 3.13 by ``track=False``). The owner is on the tracker's list already.
    """
    if sys.version_info >= (3, 13):
        return shared_memory.SharedMemory(name=name, track=False)
    register = resource_tracker.register
    resource_tracker.register = _untracked
    try:
        return shared_memory.SharedMemory(name=name)
    finally:
        resource_tracker.register = register


def _untracked(name: object, rtype: str) -> None:
    """Stand in for the tracker's register."""


def _buffer(memory: shared_memory.SharedMemory) -> memoryview:
    if memory.buf is None:
        raise LinkError(f"image {memory.name}: the shared memory is closed already")
    return memory.buf


def _remove(words: memoryview[int], memory: shared_memory.SharedMemory) -> None:
    words.release()
    memory.close()
    memory.unlink()


class ImageWriter:
    """The side that owns the image and publishes it.

    Parameters
    ----------
    points : int
        Number of points [-].
    """

    def __init__(self, points: int) -> None:
        words = _buffer_words(points)
        self._points = points
        self._memory = shared_memory.SharedMemory(
            create=True, size=_WORD * (_HEADER + 2 * words)
        )
        self._buffer = _buffer(self._memory)
        self._words = self._buffer.cast("q")
        self._words[_TICK] = -1
        self._words[_POINTS] = points
        # An image is put together here and copied in one go.
        self._floats = np.zeros(words)
        self._integers = self._floats.view(np.int64)
        self._bytes = self._floats.data.cast("B")
        self._payload = self._floats[_BUFFER_HEAD:].reshape(3, points)
        self._sequence = 0
        # Removed once: by `close`, or at the end of a program that came to grief before it.
        self._remove = weakref.finalize(self, _remove, self._words, self._memory)

    @property
    def name(self) -> str:
        """Return the name by which a reader opens the image."""
        return self._memory.name

    def publish(
        self,
        tick: int,
        values: NDArray[np.float64],
        currents: NDArray[np.float64],
        qualities: NDArray[np.float64],
    ) -> None:
        """Make an image the latest.

        Parameters
        ----------
        tick : int
            Its tick [ticks].
        values : ndarray, shape (n_points,)
            Values in each point's unit.
        currents : ndarray, shape (n_points,)
            Loop currents; NaN where there is none [mA].
        qualities : ndarray, shape (n_points,)
            ``Quality`` numbers [-].
        """
        sequence = self._sequence = self._sequence + 1
        payload = self._payload
        payload[0] = values
        payload[1] = currents
        payload[2] = qualities
        integers = self._integers
        integers[1] = sequence
        integers[2] = tick
        integers[0] = zlib.crc32(self._bytes[_WORD:])
        size = len(self._bytes)
        start = _WORD * _HEADER + (sequence & 1) * size
        self._buffer[start : start + size] = self._bytes
        self._words[_LATEST] = sequence
        self._words[_TICK] = tick

    def news(self) -> int:
        """Return how many messages the reader's side says it has sent [-]."""
        return self._words[_NEWS]

    def awake(self) -> int:
        """Return how many wake-up calls the reader's side says it has taken [-]."""
        return self._words[_AWAKE]

    def close(self) -> None:
        """Let go of the segment and remove it; a second call does nothing."""
        self._remove()

    def __enter__(self) -> ImageWriter:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()


class ImageReader:
    """The side that answers from the image (an `ImageSource`).

    Parameters
    ----------
    name : str
        Name of the image, as the writer gives it.
    """

    def __init__(self, name: str) -> None:
        self._memory = _attach(name)
        self._buffer = _buffer(self._memory)
        self._words = self._buffer.cast("q")
        self._points = self._words[_POINTS]
        self._size = _WORD * _buffer_words(self._points)
        self._sequence = 0
        self._snapshot = self._nothing()
        self._closed = False

    def tick(self) -> int:
        """Return the tick of the latest image; -1 before the first [ticks]."""
        return self._words[_TICK]

    def read(self) -> Snapshot:
        """Return the latest image; before the first, NaN of bad quality.

        Raises
        ------
        LinkError
            When no whole image can be had: the segment was written over.
        """
        for _ in range(_TRIES):
            sequence = self._words[_LATEST]
            if sequence == self._sequence:
                return self._snapshot
            snapshot = self._copy(sequence)
            if snapshot is not None:
                self._sequence = sequence
                self._snapshot = snapshot
                return snapshot
        raise LinkError(
            f"image {self._memory.name}: no whole image in {_TRIES} tries; the shared memory "
            "was written over by another program, restart the rig"
        )

    def tell_news(self, messages: int) -> None:
        """Tell the writer's side how many messages were sent.

        Parameters
        ----------
        messages : int
            Messages since the start [-].
        """
        self._words[_NEWS] = messages

    def tell_awake(self, calls: int) -> None:
        """Tell the writer's side how many wake-up calls were taken.

        Parameters
        ----------
        calls : int
            Calls since the start [-].
        """
        self._words[_AWAKE] = calls

    def close(self) -> None:
        """Let go of the segment, which stays; a second call does nothing."""
        if self._closed:
            return
        self._closed = True
        self._words.release()
        self._memory.close()

    def _copy(self, sequence: int) -> Snapshot | None:
        """Return the image of a sequence number, or None when it was overtaken or torn."""
        start = _WORD * _HEADER + (sequence & 1) * self._size
        copy = bytes(self._buffer[start : start + self._size])
        checksum, found, tick = np.frombuffer(copy, np.int64, _BUFFER_HEAD).tolist()
        if found != sequence or checksum != zlib.crc32(memoryview(copy)[_WORD:]):
            return None
        payload = np.frombuffer(copy, np.float64, 3 * self._points, _WORD * _BUFFER_HEAD)
        values, currents, qualities = payload.reshape(3, self._points)
        return Snapshot(tick=tick, values=values, currents=currents, qualities=qualities)

    def _nothing(self) -> Snapshot:
        empty = np.full(self._points, np.nan)
        return Snapshot(
            tick=-1,
            values=empty,
            currents=empty,
            qualities=np.full(self._points, float(Quality.BAD)),
        )
