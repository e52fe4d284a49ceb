"""Marks that an output's trace bears where it follows no law: still, stepped, limited, rate-limited."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.analysis.schedule import ScanLog
    from harness.domain.rig import Loop

    Floats = NDArray[np.float64]

_STILL = 1e-5  # of output: less movement than this is none; links resolve it [-]
_SAME = 1e-3  # of a move: moves this equal are of one size [-]
_OFTEN = 0.2  # share of scans from which a limit is one [-]
_MOSTLY = 0.5  # share of scans from which an output that stands still stands out [-]
_RESOLVED = 1e-3  # of output: steps finer than this are what converters do [-]
_FEWEST_SCANS = 3


def output_marks(log: ScanLog, loop: Loop) -> list[str]:
    """Return what the outputs of a phase betray of limits and steps of the controller's own.

    Parameters
    ----------
    log : ScanLog
        Scans of the phase.
    loop : Loop
        The loop, for its limits.

    Returns
    -------
    list of str
        Sentences; empty where nothing stands out.
    """
    outputs = log.outputs
    if len(outputs) < _FEWEST_SCANS:
        return []
    if float(np.ptp(outputs)) < _STILL:
        return [
            f"The output stood still at {100 * outputs[-1]:.4g} % throughout: look whether the "
            "controller is in automatic, whether its output reaches the rig, and for a limit of "
            "its own."
        ]
    moves = np.diff(outputs)
    marks = [_own_limit(outputs, loop), _steps(moves), _rate(moves, log.durations[1:])]
    return [mark for mark in marks if mark is not None]


def _own_limit(outputs: Floats, loop: Loop) -> str | None:
    """Return a sentence on a limit that is not the loop's."""
    for edge, limit in (
        (float(np.max(outputs)), loop.output_high),
        (float(np.min(outputs)), loop.output_low),
    ):
        at_edge = np.abs(outputs - edge) < _STILL
        share = float(np.mean(at_edge))
        # A stepped output stands at every value it takes; a limit is met again and again.
        others = outputs[~at_edge]
        stepped = len(np.unique(np.round(others / _STILL))) < len(others) / 2
        if share > _OFTEN and abs(edge - limit) > _RESOLVED and not stepped:
            return (
                f"The output stood at {100 * edge:.4g} % for {100 * share:.0f} % of the phase and "
                f"went no further: a limit of the controller's own, where "
                f"{100 * limit:g} % was meant."
            )
    return None


def _steps(moves: Floats) -> str | None:
    """Return a sentence on an output that moves seldom and by steps."""
    made = np.abs(moves[np.abs(moves) > _STILL])
    still = 1.0 - len(made) / len(moves)
    if still < _MOSTLY or not len(made) or float(np.median(made)) < _RESOLVED:
        return None
    return (
        f"The output stood still in {100 * still:.0f} % of the scans and then moved by about "
        f"{100 * float(np.median(made)):.2g} %: look for a dead band or a coarse resolution "
        "of the output."
    )


def _rate(moves: Floats, durations: Floats) -> str | None:
    """Return a sentence on an output that keeps moving at one speed."""
    speeds = np.abs(moves) / durations
    top = float(np.max(speeds))
    share = float(np.mean(speeds > top * (1.0 - _SAME)))
    if share < _OFTEN or float(np.mean(speeds < _STILL)) > _MOSTLY:
        return None
    return (
        f"The output moved at the same {100 * top:.2g} %/s in {100 * share:.0f} % of the scans: "
        "its rate of change is limited."
    )
