"""When the controller read, and when its outputs acted: from the record, or as the rig says."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.analysis.linear import ScanSchedule

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.analysis.run_data import RunData
    from harness.domain.rig import Loop

    Ticks = NDArray[np.int64]
    Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class ScanLog:
    """Every scan of a controller that had an effect.

    Parameters
    ----------
    read : ndarray of int, shape (n,)
        Tick of the image that the scan worked on [ticks].
    acted : ndarray of int, shape (n,)
        Tick from which its output acted [ticks].
    outputs : ndarray, shape (n,)
        The outputs [-].
    durations : ndarray, shape (n,)
        Time over which an ideal block integrates at that scan: that since the scan before [s].
    """

    read: Ticks
    acted: Ticks
    outputs: Floats
    durations: Floats

    @property
    def period(self) -> float:
        """Return the mean period [ticks]; not a number for less than two scans."""
        if len(self.read) < 2:  # noqa: PLR2004  a period needs two scans
            return float("nan")
        return float(self.read[-1] - self.read[0]) / (len(self.read) - 1)

    @property
    def ticks(self) -> int:
        """Return the mean period in whole ticks; 1 for less than two scans [ticks]."""
        return max(1, round(self.period)) if len(self.read) > 1 else 1

    @property
    def delay(self) -> float:
        """Return the median delay from sample to output [ticks]."""
        return float(np.median(self.acted - self.read)) if len(self.read) else float("nan")

    @property
    def longest_hold(self) -> int:
        """Return the longest time without a new output [ticks]."""
        return int(np.max(np.diff(self.acted))) if len(self.acted) > 1 else 0

    def longest_hold_within(self, first: int, last: int) -> int:
        """Return the longest time without a new output in a range of ticks [ticks].

        An output that is never followed by another counts as held to the end of the range.

        Parameters
        ----------
        first, last : int
            First tick, and first tick after the last [ticks].
        """
        acted = self.within(first, last).acted
        return int(np.max(np.diff(np.concatenate(([first], acted, [last])))))

    def within(self, first: int, last: int) -> ScanLog:
        """Return the scans whose output acted in a range of ticks.

        Parameters
        ----------
        first, last : int
            First tick, and first tick after the last [ticks].
        """
        chosen = (self.acted >= first) & (self.acted < last)
        return ScanLog(
            read=self.read[chosen],
            acted=self.acted[chosen],
            outputs=self.outputs[chosen],
            durations=self.durations[chosen],
        )


def scan_log(data: RunData, loop: Loop) -> ScanLog:
    """Return the scans of a run's controller.

    Parameters
    ----------
    data : RunData
        The run.
    loop : Loop
        The loop.

    Returns
    -------
    ScanLog
        For a controller outside, from the exchange log; several writes of one tick count as
        the last, and of several answers to one image the last. For the built-in block, as the
        rig says.
    """
    if data.external:
        by_tick: dict[int, tuple[int, float]] = {}
        for tick, exchange in data.exchanges:
            if exchange.point == loop.output and exchange.image_tick >= 0:
                by_tick[tick] = (exchange.image_tick, exchange.value / 100.0)
        by_read = {by_tick[tick][0]: tick for tick in sorted(by_tick)}
        acted = np.array(sorted(by_read.values()), dtype=np.int64)
        read = np.array([by_tick[tick][0] for tick in acted], dtype=np.int64)
        return ScanLog(
            read=read,
            acted=acted,
            outputs=np.array([by_tick[tick][1] for tick in acted]),
            # Counted from its own reads: a controller that scans at another period than the
            # rig says, or misses a scan, is to integrate over the time that has passed.
            durations=np.diff(read, prepend=read[:1] - round(loop.scan / data.rig.tick))
            * data.rig.tick,
        )
    ticks = max(1, round(loop.scan / data.rig.tick))
    first = loop.scan_phase % ticks
    read = np.arange(first, data.rows, ticks, dtype=np.int64)
    acted = read + loop.output_delay
    acted = acted[acted < data.rows]
    read = read[: len(acted)]
    return ScanLog(
        read=read,
        acted=acted,
        outputs=data.trace[f"{loop.output}.command"][acted],
        durations=np.full(len(read), loop.scan),
    )


def schedule_of(log: ScanLog, loop: Loop, tick: float, start: int = 0) -> ScanSchedule:
    """Return the regular schedule nearest to the scans of a log, for the linear prediction.

    Parameters
    ----------
    log : ScanLog
        The scans.
    loop : Loop
        The loop, for a log with too few scans to tell.
    tick : float
        Step of the rig [s].
    start : int
        Tick of the prediction's first row [ticks].

    Returns
    -------
    ScanSchedule
        In whole ticks, its phase counted from the prediction's first row.
    """
    if len(log.read) < 2:  # noqa: PLR2004  a period needs two scans
        ticks = max(1, round(loop.scan / tick))
        return ScanSchedule(
            scan_ticks=ticks,
            phase_ticks=(loop.scan_phase - start) % ticks,
            delay_ticks=loop.output_delay,
        )
    return ScanSchedule(
        scan_ticks=log.ticks,
        phase_ticks=int(np.bincount((log.read - start) % log.ticks).argmax()),
        delay_ticks=max(0, round(log.delay)),
    )
