"""Tunings side by side in one drawing: after a setpoint step, and after a load step."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from harness.reporting.fit_plot import LINES
from harness.reporting.plots import FAINT, frame_axes, thinned

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]

SIZE = (7.1, 5.2)  # [inch]; the printable width of A4
MOST = len(LINES)  # curves that an eye can follow


@dataclass(frozen=True, slots=True, kw_only=True)
class TuningCurves:
    """Predicted responses of one tuning to unit steps.

    Parameters
    ----------
    name : str
        Name of the tuning.
    setpoint, load : tuple of ndarray
        Times, process variable and output, each of shape (n,) [s, per unit of the step].
    """

    name: str
    setpoint: tuple[Array, Array, Array]
    load: tuple[Array, Array, Array]


def draw_tunings(figure: Any, curves: tuple[TuningCurves, ...], horizon: float) -> None:
    """Draw tunings into a figure.

    Parameters
    ----------
    figure : matplotlib figure
        Figure.
    curves : tuple of TuningCurves
        At most as many as there are lines.
    horizon : float
        Time shown [s].
    """
    rows = figure.subplots(2, 2, sharex=True, gridspec_kw={"height_ratios": [1.6, 1.0]})
    titles = ("Setpoint step of 1", "Load step of 1 at the process input")
    for column, (which, title) in enumerate(zip(("setpoint", "load"), titles, strict=True)):
        upper, lower = rows[0][column], rows[1][column]
        upper.set_title(title, fontsize=9)
        for curve, style in zip(curves, LINES, strict=False):
            time, variable, output = getattr(curve, which)
            shown = time <= horizon
            upper.plot(*thinned(time[shown], variable[shown]), label=curve.name, **style)
            lower.plot(*thinned(time[shown], output[shown]), **style)
        upper.axhline(1.0 if which == "setpoint" else 0.0, color=FAINT, linewidth=0.7)
        lower.axhline(0.0, color=FAINT, linewidth=0.7)
        lower.set_xlabel("Time since the step [s]")
        for axes in (upper, lower):
            frame_axes(axes, np.array([0.0, horizon]))
    rows[0][0].set_ylabel("Process variable")
    rows[1][0].set_ylabel("Controller output")
    figure.legend(
        *rows[0][0].get_legend_handles_labels(), frameon=False, fontsize=8, ncols=3,
        loc="outside lower center",
    )  # fmt: skip


def shown_first(names: tuple[str, ...]) -> tuple[str, ...]:
    """Return the names to draw where there are more than an eye can follow.

    Parameters
    ----------
    names : tuple of str
        Names of tunings, as ``"simc-pi"`` or ``"simc-pi at 20 s"``.
    """
    if len(names) <= MOST:
        return names
    wanted = (
        "simc-pi",
        "ds-pi",
        "load-pi",
        "simc-pid",
        "imc-pid",
        "zn-pi",
        "load-pid",
        "ds-pid",
    )
    chosen = [name for rule in wanted for name in names if name.partition(" ")[0] == rule]
    rest = [name for name in names if name not in chosen]
    return tuple(sorted((chosen + rest)[:MOST], key=names.index))
