"""What a link sees of the rig: an image to answer from, and a sink for what peers do."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

if TYPE_CHECKING:
    from collections.abc import Sequence

    import numpy as np
    from numpy.typing import NDArray

    from harness.domain.signals import Exchange


@dataclass(frozen=True, slots=True, kw_only=True)
class Snapshot:
    """Every point of the rig at one tick; never torn between two.

    Parameters
    ----------
    tick : int
        Tick of the image [ticks].
    values : ndarray, shape (n_points,)
        Values in each point's unit.
    currents : ndarray, shape (n_points,)
        Loop currents; NaN where the point is no 4-20 mA signal [mA].
    qualities : ndarray, shape (n_points,)
        ``Quality`` numbers [-].
    """

    tick: int
    values: NDArray[np.float64]
    currents: NDArray[np.float64]
    qualities: NDArray[np.float64]


class ImageSource(Protocol):
    """Where a link reads the rig."""

    def tick(self) -> int:
        """Return the tick of the latest image, cheaply; -1 before the first [ticks]."""
        ...

    def read(self) -> Snapshot:
        """Return the latest image."""
        ...


class ExchangeSink(Protocol):
    """Where a link tells what its peers do; calls never block and never raise."""

    def writes(self, exchanges: Sequence[Exchange]) -> None:
        """Take the writes of one request; they are latched in one tick or not at all."""
        ...

    def activity(
        self,
        link: str,
        connection: int,
        peer: str,
        image_tick: int,
        arrival_ns: int,
        points: tuple[str, ...] = (),
    ) -> None:
        """Take note that a valid request (read or write) came on a connection.

        ``points`` names what the peer got to read by it. The same names as in an earlier call
        should be the same tuple, for this is called tens of thousands of times a second.
        """
        ...

    def connection(self, link: str, connection: int, peer: str, connected: bool) -> None:
        """Take note that a peer connected or went."""
        ...

    def refused(self, link: str, connection: int, peer: str, text: str) -> None:
        """Take note of a refused write or a broken request, in words."""
        ...
