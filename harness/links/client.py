"""What a controller sees of a link: read points by name, write points by name."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from harness.domain.signals import Quality


@dataclass(frozen=True, slots=True, kw_only=True)
class Reading:
    """One value as it came over a link.

    Parameters
    ----------
    value : float
        Value in the point's unit; NaN where the link had no number to show [unit].
    quality : Quality
        Trust in it, as far as the link can tell: over Modbus from the loop current
        (NAMUR NE 43) or from NaN, over OPC UA from the status code.
    """

    value: float
    quality: Quality


class FieldClient(Protocol):
    """The controller's end of a link.

    Every call raises ``LinkError`` when there is no connection or no answer in time, and
    ``PeerError`` when the other end answers with a refusal; both say which in words. After
    ``LinkError`` the same call may be made again: the client reconnects by itself.
    """

    async def connect(self) -> None:
        """Open the connection; returns when it is usable."""
        ...

    async def read(self, names: Sequence[str]) -> dict[str, Reading]:
        """Return the named points, of one tick as far as the link allows it."""
        ...

    async def write(self, values: Mapping[str, float]) -> None:
        """Write values in the points' units; returns when the other end has taken them all."""
        ...

    async def close(self) -> None:
        """Close the connection; may be called at any time and more than once."""
        ...
