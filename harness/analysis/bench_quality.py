"""How good the bench is: the controller's period and jitter, its delay by path, who wrote what."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Sequence

    from harness.domain.signals import Exchange

_FEWEST_SCANS = 3  # for a period [-]
_HIGH = 95.0  # percentile told beside the median


@dataclass(frozen=True, slots=True, kw_only=True)
class BenchQuality:
    """How a controller scans, as its exchanges show it.

    Parameters
    ----------
    period : float
        Median time from scan to scan; not a number for less than three scans [s].
    jitter : float
        95th percentile of the distance of a period from the median [s].
    delay : float
        Median time from the image that a scan read to its output [s].
    missed : int
        Scans left out, as many as would have fitted into the gaps between scans [-].
    scans : int
        Scans seen [-].
    """

    period: float
    jitter: float
    delay: float
    missed: int
    scans: int


def bench_quality(read: Sequence[int], acted: Sequence[int], tick: float) -> BenchQuality:
    """Return how a controller scans.

    Parameters
    ----------
    read, acted : sequence of int
        Tick of the image that each scan read, and from which its output acted [ticks].
    tick : float
        Step of the rig [s].

    Returns
    -------
    BenchQuality
        Period, jitter, delay and missed scans.
    """
    if len(read) < _FEWEST_SCANS:
        nan = math.nan
        return BenchQuality(period=nan, jitter=nan, delay=nan, missed=0, scans=len(read))
    gaps = np.diff(np.asarray(read, dtype=np.float64))
    gaps = gaps[gaps > 0.0]  # several outputs of one image are one scan
    if not len(gaps):
        nan = math.nan
        return BenchQuality(period=nan, jitter=nan, delay=nan, missed=0, scans=len(read))
    median = float(np.median(gaps))
    missed = int(np.sum(np.maximum(np.round(gaps / median) - 1.0, 0.0)))
    return BenchQuality(
        period=median * tick,
        jitter=float(np.percentile(np.abs(gaps - median), _HIGH)) * tick,
        delay=float(np.median(np.asarray(acted) - np.asarray(read))) * tick,
        missed=missed,
        scans=len(read),
    )


def exchange_summary(
    exchanges: Sequence[tuple[int, Exchange]], tick: float
) -> list[dict[str, object]]:
    """Return who wrote what, how often, when, and how old the image was that it had read.

    Parameters
    ----------
    exchanges : sequence of (int, Exchange)
        Writes, each with the tick at which it was latched [ticks].
    tick : float
        Step of the rig [s].

    Returns
    -------
    list of dict
        One for each point, peer and function, in order of their first write; times in seconds of
        the run, ages from the image read last to the tick of the write.
    """
    grouped: dict[tuple[str, str, str, str], list[tuple[int, Exchange]]] = {}
    for latched, exchange in exchanges:
        key = (exchange.point, exchange.link, exchange.peer, exchange.function)
        grouped.setdefault(key, []).append((latched, exchange))
    summary: list[dict[str, object]] = []
    for (point, link, peer, function), writes in grouped.items():
        ages = [latched - one.image_tick for latched, one in writes if one.image_tick >= 0]
        summary.append(
            {
                "point": point,
                "link": link,
                "peer": peer,
                "function": function,
                "writes": len(writes),
                "first": writes[0][0] * tick,
                "last": writes[-1][0] * tick,
                "delay": float(np.median(ages)) * tick if ages else None,
                "delay_p95": float(np.percentile(ages, _HIGH)) * tick if ages else None,
            }
        )
    return summary
