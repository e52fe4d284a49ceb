"""What a run sees of its record while it writes."""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol

if TYPE_CHECKING:
    from collections.abc import Sequence

    import numpy as np
    from numpy.typing import NDArray

    from harness.domain.run import Closing, Event
    from harness.domain.signals import Exchange


class RecordWriter(Protocol):
    """Takes the rows, events and exchanges of one run; every call may raise RecordError."""

    def rows(
        self,
        segment: int,
        first_tick: int,
        block: NDArray[np.float64],
        lateness: NDArray[np.float64] | None,
    ) -> None:
        """Take the rows of consecutive ticks.

        Parameters
        ----------
        segment : int
            Segment; a new one begins at every restore, freeze or change of pace [-].
        first_tick : int
            Tick of the first row [ticks].
        block : ndarray, shape (n, columns)
            One row a tick, in the order and the units of the header's columns.
        lateness : ndarray, shape (n,), or None
            By how much each tick was late; None without a wall clock [s].
        """
        ...

    def event(self, event: Event) -> None:
        """Take an event."""
        ...

    def exchanges(self, exchanges: Sequence[tuple[int, Exchange]]) -> None:
        """Take exchanges, each with the tick at which it was latched."""
        ...

    def flush(self) -> None:
        """Have everything taken so far committed."""
        ...

    def close(self, closing: Closing) -> None:
        """Write the closing document and close the record; no call may follow."""
        ...

    def abandon(self) -> None:
        """Close the record without closing document: the run counts as cut off."""
        ...
