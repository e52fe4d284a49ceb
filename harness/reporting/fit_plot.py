"""A fit as one drawing: data and models, residuals, input."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from harness.reporting.plots import FAINT, INK, frame_axes, thinned

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]

SIZE = (7.1, 5.4)  # [inch]; the printable width of A4
# Colours that stay apart for the colour-blind: M. Okabe & K. Ito, Color universal design, 2008.
LINES: tuple[dict[str, Any], ...] = (
    {"color": "#d55e00", "linewidth": 1.7, "linestyle": "solid"},
    {"color": "#0072b2", "linewidth": 1.4, "linestyle": (0, (5, 1.6))},
    {"color": "#009e73", "linewidth": 1.4, "linestyle": (0, (5, 1.4, 1, 1.4))},
    {"color": "#cc79a7", "linewidth": 1.4, "linestyle": (0, (2, 1.4))},
    {"color": "#e69f00", "linewidth": 1.4, "linestyle": (0, (8, 1.5, 2, 1.5))},
    {"color": "#56b4e9", "linewidth": 1.4, "linestyle": (0, (1, 1.2))},
)


@dataclass(frozen=True, slots=True, kw_only=True)
class FitDrawing:
    """What a drawing of a fit shows.

    Parameters
    ----------
    time, output : ndarray, shape (n,)
        The data [s, unit of the output].
    fitted_time : ndarray, shape (m,)
        Times of the models' curves [s].
    fitted : dict of str to ndarray
        Models' curves by name, best first, each of shape (m,) [unit of the output].
    residuals : ndarray, shape (m,)
        Residuals of the best [unit of the output].
    input_time, input : ndarray, shape (k,)
        The input as fitted, a level from each time on [s, unit of the input].
    output_title, input_title : str
        Titles of the columns.
    """

    time: Array
    output: Array
    fitted_time: Array
    fitted: dict[str, Array]
    residuals: Array
    input_time: Array
    input: Array
    output_title: str
    input_title: str


def draw_fit(figure: Any, drawing: FitDrawing) -> None:
    """Draw a fit into a figure.

    Parameters
    ----------
    figure : matplotlib figure
        Figure.
    drawing : FitDrawing
        What to show.
    """
    grid = {"height_ratios": [3.0, 1.0, 1.0], "hspace": 0.03}
    upper, middle, lower = figure.subplots(3, 1, sharex=True, gridspec_kw=grid)
    upper.plot(
        *thinned(drawing.time, drawing.output), color="#b5bcc3", linewidth=0.9, label="data"
    )
    for (name, values), style in zip(drawing.fitted.items(), LINES, strict=False):
        upper.plot(*thinned(drawing.fitted_time, values), label=name, **style)
    upper.set_ylabel(drawing.output_title)
    upper.legend(frameon=False, fontsize=8, loc="best")
    middle.plot(*thinned(drawing.fitted_time, drawing.residuals), color=INK, linewidth=0.7)
    middle.axhline(0.0, color=FAINT, linewidth=0.7)
    middle.set_ylabel("residual\n" + next(iter(drawing.fitted), ""))
    lower.step(drawing.input_time, drawing.input, where="post", color=INK, linewidth=1.2)
    lower.set_ylabel(drawing.input_title)
    lower.set_xlabel("Time since the first row [s]")
    for axes in (upper, middle, lower):
        frame_axes(axes, drawing.time)
