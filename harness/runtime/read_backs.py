"""What the controller says it has: values, setpoint and mode as they came back from it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from harness.domain.signals import Exchange


@dataclass(frozen=True, slots=True, kw_only=True)
class ReadBack:
    """The last write to a read-back point.

    Parameters
    ----------
    value : float
        What the controller says it has, in the point's unit [unit].
    tick : int
        Tick at which it was latched [ticks].
    image_tick : int
        Tick of the image that the writing connection had read last; -1 when none [ticks].
    arrival_ns : int
        ``perf_counter_ns`` when the last byte of the request was there [ns].
    """

    value: float
    tick: int
    image_tick: int
    arrival_ns: int


def read_back_of(exchange: Exchange, tick: int) -> ReadBack:
    """Return what a write to a read-back point says.

    Parameters
    ----------
    exchange : Exchange
        The write.
    tick : int
        Tick at which it is latched [ticks].

    Returns
    -------
    ReadBack
        The value with its time.
    """
    return ReadBack(
        value=exchange.value,
        tick=tick,
        image_tick=exchange.image_tick,
        arrival_ns=exchange.arrival_ns,
    )
