"""Whether a test step would drive the output into a limit, or faster than the valve can move."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.analysis.continuous import ContinuousResponse

    Array = NDArray[np.float64]

_TOUCH = 1e-3  # of output; to reach a limit by so little is to stand at it, not beyond
_NOTICED = 0.005  # of output; below it nobody sees a valve lag behind


@dataclass(frozen=True, slots=True, kw_only=True)
class StepTest:
    """A test that is to come, in fractions of the ranges.

    Parameters
    ----------
    setpoint_step, load_step : float
        Steps of setpoint, and of a load at the process input, each made up and down
        [fraction of PV span, fraction of output].
    output : float or None
        Output before the step; None when it is not known [fraction of output].
    output_low, output_high : float
        Limits of the output [fraction of output].
    stroke_time : float
        Time of the valve for its whole travel; 0 when it is not known [s].
    """

    setpoint_step: float
    load_step: float
    output: float | None
    output_low: float = 0.0
    output_high: float = 1.0
    stroke_time: float = 0.0


def step_findings(
    setpoint: ContinuousResponse, load: ContinuousResponse, test: StepTest
) -> list[str]:
    """Say what a test would run into, before it is made.

    Parameters
    ----------
    setpoint, load : ContinuousResponse
        Predicted responses to unit steps, unlimited.
    test : StepTest
        The test.

    Returns
    -------
    list of str
        Sentences; empty when the test stays within the limits.
    """
    found = []
    for what, curve, size in (
        ("setpoint", setpoint, test.setpoint_step),
        ("load", load, test.load_step),
    ):
        if size == 0.0:
            continue
        found += _limit_findings(what, curve, abs(size), test)
        name = f"{what} step of {100.0 * abs(size):.3g} %"
        found += _rate_findings(name, curve, abs(size), test)
    return found


def _limit_findings(
    what: str, curve: ContinuousResponse, size: float, test: StepTest
) -> list[str]:
    """Say whether the step meets a limit; one sentence where it does so up and down alike."""
    ways = [_limit_words(curve, signed, test) for signed in (size, -size)]
    if all(ways):
        return [f"{what} step of {100.0 * size:.3g} %, up or down: {ways[0]}"]
    return [
        f"{what} step of {100.0 * signed:+.3g} %: {words}"
        for words, signed in zip(ways, (size, -size), strict=True)
        if words
    ]


def _limit_words(curve: ContinuousResponse, size: float, test: StepTest) -> str:
    if test.output is None:
        return ""
    wanted = test.output + size * curve.output
    final = float(wanted[-1])
    high, low = test.output_high + _TOUCH, test.output_low - _TOUCH
    for limit, beyond, worst in (
        (test.output_high, wanted > high, float(wanted.max())),
        (test.output_low, wanted < low, float(wanted.min())),
    ):
        if not beyond.any():
            continue
        if not low <= final <= high:
            return (
                f"in the end it needs an output of {100.0 * final:.4g} %, beyond the limit of "
                f"{100.0 * limit:g} %; it cannot be held there: make the step smaller, or start "
                "elsewhere"
            )
        spent = float(np.sum(np.diff(curve.times)[beyond[:-1]]))
        reach = worst - test.output
        largest = math.floor(1000.0 * abs(size * (limit - test.output) / reach)) / 10.0
        return (
            f"the output would go to {100.0 * worst:.4g} %, and stand at its limit of "
            f"{100.0 * limit:g} % for about {spent:.3g} s; the prediction is without limits: make "
            f"the step at most {largest:g} %"
        )
    return ""


def _rate_findings(
    name: str, curve: ContinuousResponse, size: float, test: StepTest
) -> list[str]:
    if test.stroke_time <= 0.0:
        return []
    behind, longest = _lag_behind(curve.times, size * curve.output, 1.0 / test.stroke_time)
    if behind <= _NOTICED:
        return []
    return [
        f"{name}: the output moves faster than the valve, which takes {test.stroke_time:g} s for its "
        f"travel: it is up to {100.0 * behind:.3g} % of travel behind, and needs {longest:.3g} s to "
        "catch up; the prediction is without that"
    ]


def _lag_behind(times: Array, wanted: Array, rate: float) -> tuple[float, float]:
    """Return how far a rate-limited valve falls behind, and for how long at a stretch."""
    position, worst, since, longest = 0.0, 0.0, None, 0.0
    steps = np.diff(times, prepend=times[0])
    for time, step, target in zip(times.tolist(), steps.tolist(), wanted.tolist(), strict=True):
        room = rate * step
        position += min(max(target - position, -room), room)
        gap = abs(target - position)
        worst = max(worst, gap)
        if gap > _NOTICED:
            since = time if since is None else since
        elif since is not None:
            longest, since = max(longest, time - since), None
    return worst, longest
