"""The curves of a phase as one drawing in SVG, the same bytes for the same data."""

from __future__ import annotations

import io
import re
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.domain.verdict import PhaseCurves

# Colours that stay apart for the colour-blind: M. Okabe & K. Ito, Color universal design, 2008;
# the styles keep them apart in grey print.
INK = "#1c2530"
FAINT = "#8a949e"
STYLES: dict[str, dict[str, Any]] = {
    "setpoint": {"color": INK, "linewidth": 0.9, "linestyle": (0, (1, 1.2))},
    "transmitted": {"color": "#c3c9cf", "linewidth": 0.6, "linestyle": "solid"},
    "measured": {"color": INK, "linewidth": 1.9, "linestyle": "solid"},
    "predicted_nonlinear": {"color": "#d55e00", "linewidth": 1.6, "linestyle": (0, (5, 1.6))},
    "predicted_linear": {
        "color": "#0072b2",
        "linewidth": 1.2,
        "linestyle": (0, (5, 1.4, 1, 1.4)),
    },
    "design_target": {"color": FAINT, "linewidth": 0.9, "linestyle": (0, (7, 3))},
    "load": {"color": "#009e73", "linewidth": 1.1, "linestyle": (0, (8, 1.5, 2, 1.5))},
}
ORDER = ("transmitted", "design_target", "predicted_linear", "measured", "predicted_nonlinear")
BAND_COLOUR = "#e4ebe6"
MOST_POINTS = 1200  # of a curve; more than the pixels it is printed with
LATE = 0.8  # of the time drawn; a word on the right of what is later would not fit
WIDTH, HEIGHT = 7.1, 3.75  # [inch]; the printable width of A4
# Where the axes stand; a layout that is worked out instead doubles the time of a drawing.
PLACE = {"left": 0.085, "right": 0.985, "top": 0.985, "bottom": 0.115, "hspace": 0.07}
SETTINGS: dict[Any, Any] = {
    "svg.fonttype": "none",  # text stays text: it can be searched and read aloud
    "font.family": "sans-serif",
    "font.size": 8.5,
    "axes.edgecolor": FAINT,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "xtick.color": FAINT,
    "ytick.color": FAINT,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "text.color": INK,
    "path.simplify": True,
}


def phase_drawing(
    curves: PhaseCurves,
    settled: float | None = None,
    *,
    process_variable: str = "Process variable",
) -> str:
    """Return the drawing of one phase: process variable above, outputs beneath.

    Parameters
    ----------
    curves : PhaseCurves
        Curves; those without any finite value are left out.
    settled : float or None
        Measured settling time into the band drawn, to be marked [s].
    process_variable : str
        What to write at its axis.

    Returns
    -------
    str
        One ``<svg>`` element.
    """
    # matplotlib takes a third of a second to load, and most commands draw nothing.
    from matplotlib import rc_context  # noqa: PLC0415
    from matplotlib.figure import Figure  # noqa: PLC0415

    with rc_context({**SETTINGS, "svg.hashsalt": f"phase {curves.name}"}):
        figure = Figure(figsize=(WIDTH, HEIGHT))
        grid = {"height_ratios": [2.5, 1.0], **PLACE}
        upper, lower = figure.subplots(2, 1, sharex=True, gridspec_kw=grid)
        _draw_process_variable(upper, curves, settled)
        _draw_outputs(lower, curves)
        upper.set_ylabel(f"{process_variable} [{curves.unit}]")
        lower.set_ylabel("Valves [%]")
        figure.align_ylabels((upper, lower))
        for axes in (upper, lower):
            frame_axes(axes, curves.time)
        buffer = io.StringIO()
        figure.savefig(
            buffer, format="svg", transparent=True, metadata={"Date": None, "Creator": None}
        )
    return inline_svg(buffer.getvalue(), f"Curves of the phase {curves.name}")


def line_sample(name: str) -> str:
    """Return a short sample of a curve's line as an ``<svg>`` element, for a legend."""
    style = STYLES[name]
    dashes = style["linestyle"]
    pattern = ""
    if not isinstance(dashes, str):
        lengths = " ".join(f"{length * style['linewidth']:.2f}" for length in dashes[1])
        pattern = f' stroke-dasharray="{lengths}"'
    return (
        '<svg class="sample" viewBox="0 0 34 8" width="34" height="8" aria-hidden="true">'
        f'<path d="M0 4H34" stroke="{style["color"]}" '
        f'stroke-width="{style["linewidth"]}"{pattern}/></svg>'
    )


def has_values(values: NDArray[np.float64] | None) -> bool:
    """Return whether a curve has anything to draw, in whatever unit."""
    return values is not None and bool(np.isfinite(values).any())


def thinned(
    time: NDArray[np.float64], values: NDArray[np.float64], most: int = MOST_POINTS
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return at most about ``most`` points that keep every peak: least and greatest of each bin.

    Parameters
    ----------
    time, values : ndarray, shape (n,)
        A curve [s, any unit].
    most : int
        Points wanted [-].

    Returns
    -------
    time, values : ndarray, shape (m,)
        Points of the curve, in order and in the same units.
    """
    count = time.size
    size = -(-2 * count // most)
    if size <= 2:  # noqa: PLR2004  least and greatest of two are both
        return time, values
    bins = -(-count // size)
    padded = np.full(bins * size, np.nan)
    padded[:count] = values
    table = padded.reshape(bins, size)
    known = np.isfinite(table)
    starts = size * np.flatnonzero(known.any(axis=1))
    least = np.where(known, table, np.inf).argmin(axis=1)[known.any(axis=1)]
    greatest = np.where(known, table, -np.inf).argmax(axis=1)[known.any(axis=1)]
    order = np.unique(np.concatenate((starts + least, starts + greatest, [0, count - 1])))
    return time[order], values[order]


def _draw_process_variable(axes: Any, curves: PhaseCurves, settled: float | None) -> None:
    after = curves.time >= 0
    if after.any() and curves.band > 0:
        centre = curves.band_centre
        final = float(curves.setpoint[-1]) if centre is None else centre
        axes.fill_between(
            [0.0, float(curves.time[-1])],
            final - curves.band,
            final + curves.band,
            color=BAND_COLOUR,
            linewidth=0,
            zorder=0,
        )
        for edge in (final - curves.band, final + curves.band):
            axes.plot(
                [0.0, float(curves.time[-1])], [edge, edge], color="#9db3a5", linewidth=0.6
            )
    for name in ORDER:
        values = getattr(curves, name)
        if has_values(values):
            axes.plot(*thinned(curves.time, values), **STYLES[name])
    axes.plot(curves.time, curves.setpoint, drawstyle="steps-post", **STYLES["setpoint"])
    if settled is not None and 0 <= settled <= curves.time[-1]:
        axes.axvline(settled, color=FAINT, linewidth=0.7, zorder=1)
        late = settled > LATE * curves.time[-1]
        axes.annotate(
            f"settled at {settled:.1f} s",
            (settled, 1.0),
            xycoords=("data", "axes fraction"),
            xytext=(-3 if late else 3, -9),
            textcoords="offset points",
            horizontalalignment="right" if late else "left",
            fontsize=7.5,
            color="#56616c",
        )


def _draw_outputs(axes: Any, curves: PhaseCurves) -> None:
    drawn = {
        "measured": curves.output,
        "predicted_nonlinear": curves.output_predicted,
        "load": curves.load,
    }
    for name, values in drawn.items():
        if has_values(values):
            axes.plot(*thinned(curves.time, 100.0 * values), **STYLES[name])
    axes.set_xlabel("Time since metric time zero [s]")


def frame_axes(axes: Any, time: NDArray[np.float64]) -> None:
    """Give axes over a time the look of all drawings.

    Parameters
    ----------
    axes : matplotlib axes
        Axes.
    time : ndarray, shape (n,)
        Times drawn [s].
    """
    axes.set_xlim(float(time[0]), float(time[-1]))
    axes.grid(visible=True, color="#e3e6e9", linewidth=0.5)
    axes.set_axisbelow(True)
    axes.axvline(0.0, color=FAINT, linewidth=0.7)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    axes.margins(y=0.08)


def inline_svg(document: str, label: str) -> str:
    """Return the svg element alone, as wide as its place, without ids that nothing refers to.

    Parameters
    ----------
    document : str
        What matplotlib wrote.
    label : str
        What the drawing shows, for those who hear it.
    """
    element = document[document.index("<svg") :].strip()
    element = re.sub(r'<g id="[^"]*"', "<g", element)
    element = re.sub(r'(<svg[^>]*?) width="[^"]*"', r"\1", element, count=1)
    element = re.sub(r'(<svg[^>]*?) height="[^"]*"', r"\1", element, count=1)
    element = re.sub(r"<metadata>.*?</metadata>\s*", "", element, flags=re.DOTALL)
    # Its style names every element of the page; the report's own style has it for drawings only.
    element = re.sub(r"<defs>\s*<style.*?</style>\s*</defs>\s*", "", element, flags=re.DOTALL)
    element = re.sub(r"<!--.*?-->\s*", "", element, flags=re.DOTALL)
    escaped = label.replace("&", "&amp;").replace("<", "&lt;").replace('"', "&quot;")
    return element.replace("<svg", f'<svg role="img" aria-label="{escaped}"', 1)
