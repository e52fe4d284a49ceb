"""Models from a recorded step test."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.errors import DataError, UsageError
from harness.recording.table_file import TableColumns, parse_time, read_columns
from harness.tuning.step_methods import direct_methods
from harness.tuning.trace import Kind, Trace
from harness.tuning.trace_checks import (
    Concern,
    Finding,
    Steps,
    examine,
    find_steps,
    levels_between,
)
from harness.tuning.trace_fit import CRITERION, TraceFits, TraceModel, fit_trace

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import NDArray

    Array = NDArray[np.float64]

Document = dict[str, object]

FRACTIONS = "fraction of PV range per fraction of output range"
_ALIKE = 2.0  # difference of the criterion below which two models are about as good: A. E. Raftery, 1995 (value from memory)


@dataclass(frozen=True, slots=True, kw_only=True)
class FitOptions:
    """What is asked of a fit.

    Parameters
    ----------
    path : Path
        The file.
    time, input, output : str
        Titles of the columns.
    step_times : tuple of str
        When the input was stepped, as the time column has it; empty to find the steps.
    input_range, output_range : tuple of float or None
        Ranges; the gain is then a fraction of them [unit of the column].
    kinds : tuple of Kind
        Kinds of model to fit.
    confidence : float
        Level of the limits [-].
    drift : bool
        Whether a linear drift is fitted beside the model.
    force : bool
        Whether to fit what the data do not support.
    skip_bad : bool
        Whether rows with text or nothing in them are left out.
    """

    path: Path
    time: str
    input: str
    output: str
    step_times: tuple[str, ...] = ()
    input_range: tuple[float, float] | None = None
    output_range: tuple[float, float] | None = None
    kinds: tuple[Kind, ...] = tuple(Kind)
    confidence: float = 0.95
    drift: bool = False
    force: bool = False
    skip_bad: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Fit:
    """A fit, with the curves behind it.

    Parameters
    ----------
    document : dict
        JSON-able.
    fits : TraceFits
        Models and their curves, in the fit's own unit.
    columns : TableColumns
        The data.
    steps : Steps
        The input as fitted [unit of the column].
    output_scale : tuple of float
        Offset and span from the fit's unit to the column's [unit of the column].
    """

    document: Document
    fits: TraceFits
    columns: TableColumns
    steps: Steps
    output_scale: tuple[float, float]


def fit(options: FitOptions) -> Fit:
    """Fit models to a recorded step test.

    Parameters
    ----------
    options : FitOptions
        What is asked.

    Returns
    -------
    Fit
        Document and curves.

    Raises
    ------
    UsageError
        When the file or a column is not there, or an option makes no sense.
    DataError
        When the file is garbled, or its data do not support any model.
    """
    _check(options)
    columns = read_columns(
        options.path, options.time, (options.input, options.output), skip_bad=options.skip_bad
    )
    inputs, output = columns.values[options.input], columns.values[options.output]
    try:
        steps = _steps(columns, inputs, options)
        found = examine(
            columns.time, inputs, output, steps,
            input_range=options.input_range, output_range=options.output_range,
        )  # fmt: skip
        kinds, refused = _kinds(options, found)
        low_in, span_in = _scale(options.input_range)
        low_out, span_out = _scale(options.output_range)
        levels = (steps.level - low_in) / span_in
        trace = Trace(
            time=columns.time,
            output=(output - low_out) / span_out,
            event_time=steps.time,
            event_size=np.diff(levels),
        )
        fits = fit_trace(
            trace, kinds, options.confidence, drift=options.drift, unfinished=options.force
        )
    except DataError as error:
        raise DataError(f"{options.path}: {error}") from error
    refused |= fits.refused
    document = _head(options, columns, steps) | {
        "models": [_model(model, options, columns) for model in fits.models],
        "refused": {kind.value: reason for kind, reason in refused.items()},
        "choice": {"rule": CRITERION, "effective_samples": fits.models[0].effective_samples},
        "direct": direct_methods(trace, integrating=fits.models[0].process.integrating),
        "findings": [finding.text for finding in found] + _judgements(fits, columns, options),
    }
    return Fit(
        document=document,
        fits=fits,
        columns=columns,
        steps=steps,
        output_scale=(low_out, span_out),
    )


def _check(options: FitOptions) -> None:
    for name, ends in (
        ("--input-range", options.input_range),
        ("--output-range", options.output_range),
    ):
        if ends is not None and not (all(map(math.isfinite, ends)) and ends[0] < ends[1]):
            raise UsageError(
                f"{name}: {ends[0]:g} to {ends[1]:g}; the first must be below the second"
            )
    if (options.input_range is None) != (options.output_range is None):
        raise UsageError(
            "fit: one range is given and the other not; the gain is a fraction of both, or in the "
            "data's own units with neither"
        )
    if not 0.5 <= options.confidence < 1.0:  # noqa: PLR2004  half is no confidence
        raise UsageError(
            f"fit: a confidence of {100 * options.confidence:g} %; give 50 to below 100"
        )


def _steps(columns: TableColumns, inputs: Array, options: FitOptions) -> Steps:
    if not options.step_times:
        return find_steps(columns.time, inputs)
    times = []
    for text in options.step_times:
        value = parse_time(text, columns.time_scale)
        if value is None:
            raise UsageError(
                f'--step-time: "{text}" is no time; give it as the time column does'
            )
        times.append(value - columns.start)
    if float(np.ptp(inputs)) == 0.0:
        raise DataError(f"the input stands at {inputs[0]:g} throughout; step it in manual")
    return levels_between(columns.time, inputs, np.array(times))


def _kinds(
    options: FitOptions, found: list[Finding]
) -> tuple[tuple[Kind, ...], dict[Kind, str]]:
    """Return what may be fitted; raise where nothing may."""
    grave = [finding for finding in found if finding.grave]
    if options.force or not grave:
        return options.kinds, {}
    other = [finding for finding in grave if finding.concern is not Concern.DRIFT]
    if other:
        texts = "\n".join(f"  {finding.text}" for finding in other)
        raise DataError(f"the data do not support a fit\n{texts}\n  --force fits all the same")
    if options.drift:
        return options.kinds, {}
    # A process that integrates drifts whenever it is not in balance, and its fit knows that.
    refused: dict[Kind, str] = {
        kind: grave[0].text for kind in options.kinds if kind is not Kind.INTEGRATING
    }
    if Kind.INTEGRATING not in options.kinds:
        raise DataError(f"the data do not support a fit\n  {grave[0].text}")
    return (Kind.INTEGRATING,), refused


def _scale(ends: tuple[float, float] | None) -> tuple[float, float]:
    return (0.0, 1.0) if ends is None else (ends[0], ends[1] - ends[0])


def _gain_unit(options: FitOptions, columns: TableColumns) -> str:
    if options.input_range is not None:
        return FRACTIONS
    return _engineering(options, columns)


def _engineering(options: FitOptions, columns: TableColumns) -> str:
    words = []
    for name in (options.output, options.input):
        unit = columns.units[name]
        words.append(f"{unit} of {name}" if unit else f"units of {name}")
    return f"{words[0]} per {words[1]}"


def _head(options: FitOptions, columns: TableColumns, steps: Steps) -> Document:
    def ends(pair: tuple[float, float] | None, name: str) -> Document | None:
        if pair is None:
            return None
        return {"low": pair[0], "high": pair[1], "unit": columns.units[name]}

    spacing = np.diff(columns.time)
    usual = float(np.median(spacing))
    return {
        "schema": 1,
        "file": str(options.path),
        "rows": int(columns.time.size),
        "rows_left_out": columns.skipped,
        "duration": float(columns.time[-1]),
        "spacing": usual,
        "regular": bool(np.all(np.abs(spacing - usual) <= 0.01 * usual)),
        "columns": {"time": options.time, "input": options.input, "output": options.output},
        "units": {
            "input": columns.units[options.input],
            "output": columns.units[options.output],
        },
        "input_range": ends(options.input_range, options.input),
        "output_range": ends(options.output_range, options.output),
        "gain_unit": _gain_unit(options, columns),
        "gain_engineering_unit": _engineering(options, columns),
        "drift_fitted": options.drift,
        "steps": [
            {"time": float(time), "from": float(before), "to": float(after)}
            for time, before, after in zip(
                steps.time[:50], steps.level[:-1], steps.level[1:], strict=False
            )
        ],
        "changes_of_input": int(steps.time.size),
    }


def _model(model: TraceModel, options: FitOptions, columns: TableColumns) -> Document:
    process = model.process
    to_engineering = _scale(options.output_range)[1] / _scale(options.input_range)[1]
    rms = model.residual_rms * _scale(options.output_range)[1]
    per = " per s" if process.integrating else ""
    return {
        "kind": model.kind.value,
        "gain": process.gain,
        "gain_unit": _gain_unit(options, columns) + per,
        "gain_engineering": process.gain * to_engineering,
        "time_constants": list(process.time_constants),
        "dead_time": process.dead_time,
        "numerator_times": list(process.numerator_times),
        "inverse_response": process.inverse_response or None,
        "integrating": process.integrating,
        "total_lag": process.dead_time if process.integrating else process.total_lag,
        "limits": {
            name: {"low": limit.low, "high": limit.high, "level": limit.level}
            for name, limit in model.limits.items()
        },
        "drift": model.drift,
        "residual": {
            "rms": model.residual_rms,
            "rms_engineering": rms,
            "explained": model.explained,
            "samples": model.samples,
            "effective_samples": model.effective_samples,
            "parameters": model.parameters,
            "whiteness": {
                "test": "Ljung-Box",
                "statistic": model.whiteness.statistic,
                "lags": model.whiteness.lags,
                "p_value": model.whiteness.p_value,
                "white": model.whiteness.white,
            },
            "input_correlation": {
                "largest": model.input_correlation.largest,
                "lag": model.input_correlation.lag,
                "limit": model.input_correlation.limit,
                "independent": model.input_correlation.independent,
            },
        },
        "criterion": model.criterion,
    }


def _judgements(fits: TraceFits, columns: TableColumns, options: FitOptions) -> list[str]:
    found = []
    best = fits.models[0]
    if columns.skipped:
        found.append(f"{columns.skipped} rows with text or nothing in them were left out")
    if options.input_range is None:
        found.append(
            "no ranges were given: the gain is in the data's own units; for a controller gain in "
            "%/% give --input-range and --output-range"
        )
    close = [
        model.kind.value
        for model in fits.models[1:]
        if model.criterion - best.criterion < _ALIKE
    ]
    if close:
        found.append(
            f"{best.kind} is not clearly better than {', '.join(close)}: the record does not tell "
            "them apart"
        )
    if not best.whiteness.white:
        found.append(
            f"the residuals of {best.kind} are not white: the model leaves something out (curvature, "
            "another disturbance) or the noise is coloured; the limits allow for it by counting "
            f"{best.effective_samples:.0f} independent samples instead of {best.samples}"
        )
    if not best.input_correlation.independent:
        found.append(
            f"the residuals of {best.kind} follow the input ({best.input_correlation.largest:+.2f} at "
            f"{best.input_correlation.lag} rows): there is more in the response than this model has"
        )
    return found
