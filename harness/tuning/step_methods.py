"""The direct methods on the largest step of a trace, to set beside the least-squares fit."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from harness.errors import DataError
from harness.tuning.direct import area_method, two_point_28_63, two_point_35_85

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from harness.domain.models import LagModel
    from harness.tuning.trace import Trace

    Array = NDArray[np.float64]

_TAIL = 0.1  # share of a step's record that its final value is the mean of
_SMOOTH = 0.01  # share of a step's record that is averaged over before levels are looked for
_FEWEST = 8  # rows that a slope is taken from
_METHODS: dict[str, Callable[[Array, Array, float, float], LagModel]] = {
    "two points, 28.3 and 63.2 %": two_point_28_63,
    "two points, 35.3 and 85.3 %": two_point_35_85,
    "areas": area_method,
}


def direct_methods(trace: Trace, *, integrating: bool) -> list[dict[str, object]]:
    """Return what the direct methods make of the largest step.

    Parameters
    ----------
    trace : Trace
        The trace.
    integrating : bool
        Whether the process integrates: then two slopes are compared, for there is no end to
        take levels from.

    Returns
    -------
    list of dict
        For each method its figures, or why it has none; JSON-able.
    """
    index = int(np.argmax(np.abs(trace.event_size)))
    start = float(trace.event_time[index])
    last = index + 1 == trace.event_time.size
    end = trace.duration if last else float(trace.event_time[index + 1])
    earlier = float(trace.event_time[index - 1]) if index else -1.0
    before = (trace.time > earlier) & (trace.time < start)
    after = (trace.time >= start) & (trace.time <= end)
    size = float(trace.event_size[index])
    if integrating:
        return [_two_slopes(trace, before, after, start, size)]
    return [
        _levels(name, method, trace, before, after, start, size)
        for name, method in _METHODS.items()
    ]


def _levels(
    name: str,
    method: Callable[[Array, Array, float, float], LagModel],
    trace: Trace,
    before: NDArray[np.bool_],
    after: NDArray[np.bool_],
    start: float,
    size: float,
) -> dict[str, object]:
    head: dict[str, object] = {"method": name, "step": start}
    time = trace.time[after] - start
    tail = time >= (1.0 - _TAIL) * float(time[-1]) if time.size else np.zeros(0, dtype=bool)
    if not before.any() or time.size < _FEWEST:
        return head | {"refused": "too few rows before or after the step"}
    lead = trace.output[before]
    base = float(lead[-max(1, lead.size // 2) :].mean())
    rise = trace.output[after] - base
    width = max(1, int(_SMOOTH * rise.size)) | 1
    smooth = np.convolve(
        np.pad(rise, width // 2, mode="edge"), np.ones(width) / width, mode="valid"
    )
    try:
        model = method(time, smooth, size, float(rise[tail].mean()))
    except DataError as error:
        return head | {"refused": str(error)}
    return head | {
        "gain": model.gain,
        "time_constants": list(model.time_constants),
        "dead_time": model.dead_time,
    }


def _two_slopes(
    trace: Trace,
    before: NDArray[np.bool_],
    after: NDArray[np.bool_],
    start: float,
    size: float,
) -> dict[str, object]:
    """Return gain from the change of slope, dead time from where the two lines meet."""
    head: dict[str, object] = {"method": "two slopes", "step": start}
    rows = np.flatnonzero(after)
    late = rows[rows.size // 2 :]  # by then even a long dead time is over
    if int(before.sum()) < _FEWEST or late.size < _FEWEST:
        return head | {"refused": "too few rows before or after the step"}
    first = np.polyfit(trace.time[before] - start, trace.output[before], 1)
    second = np.polyfit(trace.time[late] - start, trace.output[late], 1)
    turn = float(second[0] - first[0])
    if turn == 0.0:
        return head | {"refused": "the slope does not change"}
    dead = float(first[1] - second[1]) / turn
    return head | {"gain": turn / size, "time_constants": [], "dead_time": max(dead, 0.0)}
