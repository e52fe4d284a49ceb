"""Whether a recorded test can support a fit, and where its steps are."""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum
from typing import TYPE_CHECKING

import numpy as np

from harness.errors import DataError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]

_GAP = 10.0  # median spacings: beyond that a hole is told
_GAP_SHARE = 0.02  # of the record, and it must be that long too
_FEW_CHANGES = 0.1  # share of rows at which a recorded input is taken as it stands
_NOISES = 8.0  # deviations by which a step stands out of a noisy input
_PLATEAU = 5  # rows at the very extreme, at least
_PLATEAU_SHARE = 0.03  # of the rows, at least
_KINK = 1.9  # time for the last quarter over that for the third; a lag cut off at 85 % of its end has 1.9
_AT_END = 1e-3  # of a range: a value this near to its end stands at it
_LAW = (
    0.8  # share of the input's movement that a control law explains before it is taken for one
)
_LATE = 4  # rows by which an output may be recorded after its sample, less one
_ROWS_OF_LAW = 0.05  # share of rows in which a controller moves its output
_DRIFT = (
    0.1  # of the movement: a slope before the first step that adds up to more over the test
)
_SIGMAS = 4.0


class Concern(StrEnum):
    """What may be wrong with a record."""

    GAP = "gap"
    SATURATION = "saturation"
    CLOSED_LOOP = "closed_loop"
    DRIFT = "drift"
    NOISY_INPUT = "noisy_input"
    NO_LEAD = "no_lead"


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """One thing that a reader must know of a record.

    Parameters
    ----------
    concern : Concern
        What it is about.
    text : str
        Sentence for people.
    grave : bool
        Whether a fit would say something wrong, so that it must be asked for.
    """

    concern: Concern
    text: str
    grave: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Steps:
    """The input as steps.

    Parameters
    ----------
    time : ndarray, shape (m,)
        When it changes [s].
    level : ndarray, shape (m + 1,)
        Level before the first change and after each [unit of the input].
    levelled : bool
        Whether levels are means of a noisy column, and not the column itself.
    """

    time: Array
    level: Array
    levelled: bool


def find_steps(time: Array, inputs: Array) -> Steps:
    """Return the steps of an input column, taken as it stands where it moves seldom.

    Parameters
    ----------
    time, inputs : ndarray, shape (n,)
        Times [s] and input [any unit].

    Returns
    -------
    Steps
        Every change of a clean column; of a noisy one the steps that stand out of its noise, with
        the means between them as levels.

    Raises
    ------
    DataError
        When it never changes, or no step stands out of its noise.
    """
    change = np.diff(inputs)
    moved = np.flatnonzero(change)
    if moved.size == 0:
        raise DataError(f"the input stands at {inputs[0]:g} throughout; step it in manual")
    if moved.size <= max(3, _FEW_CHANGES * inputs.size):
        return Steps(
            time=time[moved + 1], level=np.concatenate([inputs[:1], inputs[moved + 1]]),
            levelled=False,
        )  # fmt: skip
    noise = 1.4826 * float(np.median(np.abs(change - np.median(change)))) / math.sqrt(2.0)
    window = max(3, inputs.size // 200)
    means = np.convolve(inputs, np.ones(window) / window, mode="valid")
    jump = means[window:] - means[:-window]  # between the windows after and before a row
    limit = max(_NOISES * noise / math.sqrt(window), 0.1 * float(np.abs(jump).max()))
    times = []
    beyond = np.abs(jump) > limit
    edges = np.flatnonzero(np.diff(np.concatenate([[False], beyond, [False]]).astype(int)))
    for start, stop in edges.reshape(-1, 2):
        best = start + int(np.argmax(np.abs(jump[start:stop])))
        times.append(float(time[min(best + window, time.size - 1)]))
    if not times:
        raise DataError(
            f"the input moves all the time by about {noise:.3g} and no step stands out of that; say "
            "when it was stepped (--step-time), or make a larger step"
        )
    return levels_between(time, inputs, np.array(times))


def levels_between(time: Array, inputs: Array, step_times: Array) -> Steps:
    """Return steps at given times, with the means of the input between them as levels.

    Parameters
    ----------
    time, inputs : ndarray, shape (n,)
        Times [s] and input [any unit].
    step_times : ndarray, shape (m,)
        When the input was stepped [s].

    Returns
    -------
    Steps
        The steps.

    Raises
    ------
    DataError
        When a time lies outside the record, or between two of them there is no row.
    """
    step_times = np.sort(step_times)
    for step in step_times:
        if not time[0] < step <= time[-1]:
            raise DataError(
                f"the step at {step:g} s is outside the record, which goes from {time[0]:g} to "
                f"{time[-1]:g} s after its first row"
            )
    edges = np.searchsorted(time, step_times, side="left")
    parts = np.split(inputs, edges)
    if any(part.size == 0 for part in parts):
        raise DataError("two steps without a row between them; give each its own time")
    level = np.array([float(part.mean()) for part in parts])
    if np.ptp(level) == 0.0:
        raise DataError("the input is the same before and after the steps that were given")
    return Steps(time=step_times, level=level, levelled=True)


def examine(
    time: Array,
    inputs: Array,
    output: Array,
    steps: Steps,
    *,
    input_range: tuple[float, float] | None = None,
    output_range: tuple[float, float] | None = None,
) -> list[Finding]:
    """Return what stands in the way of a fit.

    Parameters
    ----------
    time, inputs, output : ndarray, shape (n,)
        The record [s, unit of each column].
    steps : Steps
        Steps of the input.
    input_range, output_range : tuple of float or None
        Ends of the ranges, where they are known [unit of the column].

    Returns
    -------
    list of Finding
        In order of weight.

    Raises
    ------
    DataError
        When the output never moves.
    """
    if float(np.ptp(output)) == 0.0:
        raise DataError(
            f"the output stands at {output[0]:g} throughout; is the instrument alive?"
        )
    found = [
        _closed_loop(inputs, output),
        _saturation("output", time, output, output_range),
        _range_end("input", inputs, input_range),
        *_gaps(time, inputs),
        _lead(time, output, steps),
        _noisy_input(steps),
    ]
    return sorted(
        (finding for finding in found if finding is not None), key=lambda item: not item.grave
    )


def _closed_loop(inputs: Array, output: Array) -> Finding | None:
    """Tell an input that follows the output by a law: its moves are a sum of output moves and error."""
    rows = np.flatnonzero(np.diff(inputs)) + 1
    if rows.size < _ROWS_OF_LAW * inputs.size or rows.size < 20:  # noqa: PLR2004  a regression of three
        return None
    # A record may show an output some rows after the sample that it was computed from.
    share, gain = max(_law(inputs, output, rows[rows >= late], late) for late in range(_LATE))
    if share < _LAW:
        return None
    return Finding(
        concern=Concern.CLOSED_LOOP,
        text=(
            f"the input follows the output as a controller does ({100 * share:.0f} % of its moves; a "
            f"gain of about {gain:.3g}): the record is of a closed loop, in which cause and effect "
            "cannot be told apart; step the output in manual, and cut the record to that"
        ),
        grave=True,
    )


def _law(
    inputs: Array, output: Array, rows: NDArray[np.int64], late: int
) -> tuple[float, float]:
    """Return how much of the input's moves a law explains, and its gain."""
    # From one move to the next, for the controller may scan more slowly than the rows come; and
    # the change of the moves, in which a setpoint shows at its steps alone.
    move, rise = np.diff(inputs[rows]), np.diff(output[rows - late])
    change = np.diff(move)
    apart = np.diff(rows)
    near = apart <= 3.0 * np.median(apart)  # without stretches in manual
    ordinary = near[1:] & near[:-1]
    ordinary &= np.abs(change) <= np.quantile(np.abs(change[ordinary]), 0.95)  # and those steps
    columns = np.column_stack([np.diff(rise), rise[1:], np.ones(change.size)])[ordinary]
    wanted = change[ordinary]
    answer, *_ = np.linalg.lstsq(columns, wanted, rcond=None)
    spread = float(((wanted - wanted.mean()) ** 2).sum())
    left = float(((wanted - columns @ answer) ** 2).sum())
    return (1.0 - left / spread if spread > 0.0 else 0.0), -float(answer[0])


def _saturation(
    name: str, time: Array, values: Array, ends: tuple[float, float] | None
) -> Finding | None:
    at_end = _range_end(name, values, ends)
    if at_end is not None:
        return at_end
    for word, sign in (("highest", 1.0), ("lowest", -1.0)):
        cut = _cut_off(time, sign * values)
        if cut:
            return Finding(
                concern=Concern.SATURATION,
                text=(
                    f"the {name} runs into its {word} value {sign * float((sign * values).max()):g} "
                    f"without slowing down, and stays there for {cut} rows: it looks cut off (a limit "
                    "of the range, an overflow, an empty vessel); make a smaller step"
                ),
                grave=True,
            )
    return None


def _cut_off(time: Array, values: Array) -> int:
    """Return for how many rows a curve stands at its top, if it got there without slowing down.

    A curve that settles takes ever longer for each half of what is left; one that is cut off
    takes about as long for the last quarter as for the third.
    """
    top = float(values.max())
    rows = np.flatnonzero(values == top)
    first, last = int(rows[0]), int(rows[-1])
    enough = rows.size >= max(_PLATEAU, _PLATEAU_SHARE * values.size)
    if not enough or rows.size < 0.5 * (last - first + 1):
        return 0
    base = float(values[: first + 1].min())
    half, quarter = (
        np.flatnonzero(values[: first + 1] <= base + share * (top - base))
        for share in (0.5, 0.75)
    )
    before, after = time[quarter[-1]] - time[half[-1]], time[first] - time[quarter[-1]]
    if first - int(half[-1]) < _PLATEAU:
        return 0  # too few rows on the way up to tell
    return rows.size if after < _KINK * before else 0


def _range_end(name: str, values: Array, ends: tuple[float, float] | None) -> Finding | None:
    if ends is None:
        return None
    low, high = ends
    margin = _AT_END * (high - low)
    rows = int(np.count_nonzero((values <= low + margin) | (values >= high - margin)))
    if name == "input":
        beyond = int(np.count_nonzero((values < low - margin) | (values > high + margin)))
        rows = beyond
    if rows < max(2, _PLATEAU_SHARE * values.size):
        return None
    where = "outside its range" if name == "input" else "at an end of its range"
    return Finding(
        concern=Concern.SATURATION,
        text=(
            f"the {name} is {where} of {low:g} to {high:g} in {rows} of {values.size} rows; "
            + (
                "is the range right?"
                if name == "input"
                else "what it would have done there is lost"
            )
        ),
        grave=True,
    )


def _gaps(time: Array, inputs: Array) -> list[Finding]:
    spacing = np.diff(time)
    usual = float(np.median(spacing))
    found = []
    for row in np.flatnonzero(spacing > max(_GAP * usual, _GAP_SHARE * float(time[-1]))):
        moved = inputs[row] != inputs[row + 1]
        found.append(
            Finding(
                concern=Concern.GAP,
                text=(
                    f"a gap of {spacing[row]:.4g} s after {time[row]:.4g} s, where rows are "
                    f"{usual:.4g} s apart"
                    + (
                        ": the input changed within it, nobody knows when; say when (--step-time) or "
                        "cut the record there"
                        if moved
                        else ""
                    )
                ),
                grave=bool(moved),
            )
        )
    return found


def _lead(time: Array, output: Array, steps: Steps) -> Finding | None:
    """Look at what stands before the first step: too little, or a slope."""
    rows = int(np.searchsorted(time, steps.time[0], side="left"))
    movement = float(np.ptp(output))
    if rows < 3:  # noqa: PLR2004  a level wants more than two points
        return Finding(
            concern=Concern.NO_LEAD,
            text=(
                f"only {rows} rows before the first step: whether the process was at rest cannot be "
                "seen; record some time before it"
            ),
            grave=False,
        )
    if rows < 8:  # noqa: PLR2004  a slope wants more
        return None
    lead_time, lead = time[:rows] - time[:rows].mean(), output[:rows]
    spread = float(lead_time @ lead_time)
    slope = float(lead_time @ lead) / spread
    rest = lead - lead.mean() - slope * lead_time
    deviation = math.sqrt(float(rest @ rest) / (rows - 2) / spread)
    adds_up = abs(slope) * float(time[-1] - time[0])
    if abs(slope) < _SIGMAS * deviation or adds_up < _DRIFT * movement:
        return None
    return Finding(
        concern=Concern.DRIFT,
        text=(
            f"the output drifts before the first step, by {slope:.3g} per second, which over the "
            f"record adds up to {100 * adds_up / movement:.0f} % of all its movement; begin from rest, or "
            "have a drift fitted (--drift)"
        ),
        grave=adds_up > 3.0 * _DRIFT * movement,
    )


def _noisy_input(steps: Steps) -> Finding | None:
    if not steps.levelled:
        return None
    return Finding(
        concern=Concern.NOISY_INPUT,
        text="between its steps the input is taken at its mean",
        grave=False,
    )
