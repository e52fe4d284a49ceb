"""What a fit or a tuning hands to the drawings."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from harness.reporting.figure_files import figure_element, write_figure
from harness.reporting.fit_plot import SIZE as FIT_SIZE
from harness.reporting.fit_plot import FitDrawing, draw_fit
from harness.reporting.tuning_plot import SIZE as TUNING_SIZE
from harness.reporting.tuning_plot import TuningCurves, draw_tunings, shown_first

if TYPE_CHECKING:
    from pathlib import Path

    from harness.app.fit import Fit, FitOptions
    from harness.app.tune import Tuning

_SLOWEST = 1.5  # settling times of the drawn curves that a drawing shows
_MOST_CURVES = 3  # models in the drawing of a fit


def draw_fit_file(path: Path, fit: Fit, options: FitOptions) -> None:
    """Draw a fit into a file.

    Parameters
    ----------
    path : Path
        .svg or .png.
    fit : Fit
        The fit.
    options : FitOptions
        What was asked.

    Raises
    ------
    UsageError
        When the file name says no kind of drawing.
    RecordError
        When it cannot be written.
    """
    offset, span = fit.output_scale
    models = fit.fits.models
    columns = fit.columns

    def title(name: str) -> str:
        unit = columns.units[name]
        return f"{name} [{unit}]" if unit else name

    drawing = FitDrawing(
        time=columns.time,
        output=columns.values[options.output],
        fitted_time=fit.fits.trace.time,
        fitted={
            model.kind.value.replace("_", " "): offset + span * model.fitted
            for model in models[:_MOST_CURVES]
        },
        residuals=span * models[0].residuals,
        input_time=np.concatenate([[0.0], fit.steps.time, [columns.time[-1]]]),
        input=np.concatenate([fit.steps.level, fit.steps.level[-1:]]),
        output_title=title(options.output),
        input_title=title(options.input),
    )
    write_figure(path, lambda figure: draw_fit(figure, drawing), FIT_SIZE)


def draw_tuning_file(path: Path, tuning: Tuning) -> None:
    """Draw tunings side by side into a file.

    Parameters
    ----------
    path : Path
        .svg or .png.
    tuning : Tuning
        The tuning.

    Raises
    ------
    UsageError
        When the file name says no kind of drawing.
    RecordError
        When it cannot be written.
    """
    curves, horizon = _curves(tuning)
    write_figure(path, lambda figure: draw_tunings(figure, curves, horizon), TUNING_SIZE)


def tuning_element(tuning: Tuning) -> str:
    """Return tunings side by side as one ``<svg>`` element.

    Parameters
    ----------
    tuning : Tuning
        The tuning.
    """
    curves, horizon = _curves(tuning)
    label = "Predicted responses to unit steps of setpoint and load, rule by rule"
    return figure_element(
        lambda figure: draw_tunings(figure, curves, horizon), TUNING_SIZE, label
    )


def _curves(tuning: Tuning) -> tuple[tuple[TuningCurves, ...], float]:
    stable = {name: found for name, found in tuning.evaluations.items() if found.stable}
    curves, settled = [], []
    for name in shown_first(tuple(stable)):
        found = stable[name]
        if found.setpoint_curve is None or found.load_curve is None:
            continue
        setpoint, load = (
            (curve.times, curve.process_variable, curve.output)
            for curve in (found.setpoint_curve, found.load_curve)
        )
        curves.append(TuningCurves(name=name, setpoint=setpoint, load=load))
        times = [found.setpoint.get("settling_time_2"), found.load.get("settling_time_5")]
        settled.append(
            max((time for time in times if time is not None), default=setpoint[0][-1])
        )
    horizon = _SLOWEST * float(np.median(settled)) if settled else 1.0
    return tuple(curves), horizon
