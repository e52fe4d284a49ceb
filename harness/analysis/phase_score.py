"""The score of one phase: measured against both predictions, judged, and explained."""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.analysis.findings import phase_findings
from harness.analysis.limits import SETTLING, judge, worst
from harness.analysis.linear import design_target, predict_sampled
from harness.analysis.metrics import (
    METRIC_UNITS,
    load_metrics,
    lobe_near_band,
    setpoint_metrics,
)
from harness.analysis.nonlinear import static_balance
from harness.analysis.schedule import schedule_of
from harness.controllers.block import AUTOMATIC
from harness.domain.models import ControlLaw
from harness.domain.trial import PhaseKind
from harness.domain.verdict import Outcome, PhaseCurves, PhaseVerdict
from harness.errors import ModelError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.analysis.nonlinear import Replay
    from harness.analysis.run_data import PhaseSpan, RunData
    from harness.analysis.schedule import ScanLog
    from harness.domain.models import ControllerSettings, LagModel, LoopModels
    from harness.domain.rig import Loop

    Floats = NDArray[np.float64]

_BEFORE = 40  # rows before metric time zero that give the starting value [ticks]
_TAIL = 0.1  # part of a phase over which its end is averaged [-]
_SIGMAS = 3.0  # of what is left of noise on the true value [-]
_LOBE_SHARE = 0.25  # of the overshoot tolerance: a lobe this near the band decides nothing [-]


@dataclass(frozen=True, slots=True, kw_only=True)
class LoopScore:
    """What the phases of a loop share.

    Parameters
    ----------
    data : RunData
        The run.
    loop : Loop
        The loop.
    models : LoopModels
        Fitted (or given, or linearised) models.
    reduced : LagModel or None
        First-order model that the tuning was computed from.
    closed_loop_time : float or None
        Closed-loop time asked for [s].
    settings : ControllerSettings
        Settings ordered.
    log : ScanLog
        Scans.
    replay : Replay
        Nonlinear prediction.
    """

    data: RunData
    loop: Loop
    models: LoopModels
    reduced: LagModel | None
    closed_loop_time: float | None
    settings: ControllerSettings
    log: ScanLog
    replay: Replay

    @property
    def scan(self) -> float:
        """Return the scan period as measured, or as the rig says [s]."""
        period = self.log.period * self.data.rig.tick
        return period if math.isfinite(period) else self.loop.scan


@dataclass(frozen=True, slots=True, kw_only=True)
class _Series:
    """One of the three responses over a phase, with what its metrics are taken against."""

    process_variable: Floats
    output: Floats
    initial: float
    initial_output: float
    final: float
    offset: float | None = None


def score_phase(
    score: LoopScore, span: PhaseSpan, held: str | None = None
) -> tuple[PhaseVerdict, PhaseCurves]:
    """Score one phase in automatic.

    Parameters
    ----------
    score : LoopScore
        The loop.
    span : PhaseSpan
        The phase.
    held : str or None
        Why its outputs came too seldom to be judged.

    Returns
    -------
    PhaseVerdict
        Metrics, verdict and findings.
    PhaseCurves
        What a report draws.
    """
    data, loop = score.data, score.loop
    tick = data.rig.tick
    time = np.arange(span.end - span.zero, dtype=np.float64) * tick
    setpoint = float(data.setpoint(loop)[span.zero])
    measured = _measured(score, span, setpoint)
    nonlinear = _nonlinear(score, span, setpoint)
    linear = _linear(score, span, setpoint, nonlinear)
    metrics = [
        _metrics(span, time, series, setpoint, nonlinear)
        for series in (measured, linear, nonlinear)
    ]
    judged = judge(
        metrics[0],
        metrics[1],
        metrics[2],
        METRIC_UNITS,
        data.trial.tolerances,
        score.scan,
        _undecidable(score, span, nonlinear, measured),
    )
    outcome = worst([metric.verdict for metric in judged.values()])
    if held is not None or not span.steady:
        outcome = Outcome.INVALID
    verdict = PhaseVerdict(
        name=span.name,
        loop=span.loop,
        kind=span.kind,
        start_tick=span.start,
        zero_tick=span.zero,
        end_tick=span.end,
        metrics=judged,
        outcome=outcome,
        findings=phase_findings(score, span, judged, outcome, held),
    )
    return verdict, _curves(score, span, measured, linear, setpoint, metrics[2])


def _window(trace: Floats, span: PhaseSpan) -> tuple[Floats, float]:
    """Return a phase's part of a trace, and the mean shortly before its step."""
    before = trace[max(0, span.start - _BEFORE) : span.start]
    initial = float(np.mean(before)) if len(before) else float(trace[span.zero])
    return trace[span.zero : span.end], initial


def _fraction(score: LoopScore, column: Floats) -> Floats:
    shown = score.data.shown(score.loop)
    return (column - shown.lower) / shown.span


def _series(
    score: LoopScore, span: PhaseSpan, trace: dict[str, Floats], setpoint: float
) -> _Series:
    true = _fraction(score, trace[f"{score.loop.process_variable}.true"])
    process_variable, initial = _window(true, span)
    output, initial_output = _window(trace[f"{score.loop.output}.command"], span)
    final = setpoint
    if score.settings.law is ControlLaw.P:
        final = float(np.mean(process_variable[-max(1, int(_TAIL * len(process_variable))) :]))
    return _Series(
        process_variable=process_variable,
        output=output,
        initial=initial,
        initial_output=initial_output,
        final=final,
    )


def _measured(score: LoopScore, span: PhaseSpan, setpoint: float) -> _Series:
    return _series(score, span, score.data.trace, setpoint)


def _nonlinear(score: LoopScore, span: PhaseSpan, setpoint: float) -> _Series:
    """Return the replay over a phase; a P block's end from the static balance of the rig."""
    series = _series(score, span, score.replay.trace, setpoint)
    if score.settings.law is not ControlLaw.P:
        return series
    transfers = [tick for tick in score.replay.bias if tick <= span.zero]
    if not transfers:
        return series
    loads = {
        valve.tag: float(score.data.trace[f"{valve.tag}.command"][span.end - 1])
        for valve in score.data.rig.valves
        if valve.tag != score.loop.output
    }
    final, _ = static_balance(
        score.data,
        score.loop,
        score.settings,
        bias=score.replay.bias[max(transfers)],
        setpoint=setpoint,
        loads=loads,
    )
    # Bands and integrals are about the end that the replay itself comes to, as for the
    # measured trace; where it must come to rest in the end is the offset.
    return dataclasses.replace(series, offset=final - setpoint)


def _linear(score: LoopScore, span: PhaseSpan, setpoint: float, nonlinear: _Series) -> _Series:
    """Return the full-order linear prediction from the steady state before the phase."""
    data, loop = score.data, score.loop
    window = slice(span.zero, span.end)
    load = data.trace[f"{loop.load}.command"]
    before = max(0, span.start - 1)
    process_variable, output = predict_sampled(
        score.models,
        score.settings,
        schedule_of(score.log, loop, data.rig.tick, span.zero),
        data.rig.tick,
        data.setpoint(loop)[window],
        load[window],
        np.full(span.end - span.zero, AUTOMATIC, dtype=np.int64),
        data.trace[f"{loop.tag}.manual_output"][window],
        nonlinear.initial_output,
        nonlinear.initial,
        loop.output_low,
        loop.output_high,
        initial_load=float(load[before]),
        initial_setpoint=float(data.setpoint(loop)[before]),
    )
    final = setpoint
    if score.settings.law is ControlLaw.P:
        final = float(process_variable[-1])
    return _Series(
        process_variable=process_variable,
        output=output,
        initial=nonlinear.initial,
        initial_output=nonlinear.initial_output,
        final=final,
    )


def _metrics(
    span: PhaseSpan, time: Floats, series: _Series, setpoint: float, nonlinear: _Series
) -> dict[str, float | None]:
    tail = _TAIL * float(time[-1])
    if span.kind == PhaseKind.SETPOINT_STEP.value:
        metrics = setpoint_metrics(
            time,
            series.process_variable,
            series.output,
            setpoint=setpoint,
            initial=series.initial,
            final=series.final,
            initial_output=series.initial_output,
            tail=tail,
        )
        # A setpoint step has its overshoot; the peak past it would be the same figure again.
        del metrics["peak_deviation"]
    else:
        reference = float(np.max(np.abs(nonlinear.process_variable - nonlinear.initial)))
        metrics = load_metrics(
            time,
            series.process_variable,
            series.output,
            setpoint=setpoint,
            final=series.final,
            band_reference=reference,
            initial_output=series.initial_output,
            tail=tail,
        )
        # From the value before the step, which under a P block is not where it ends.
        deviation = series.process_variable - series.initial
        top = int(np.argmax(np.abs(deviation)))
        metrics["peak_deviation"] = float(deviation[top])
        metrics["peak_time"] = float(time[top])
    if series.offset is not None:
        metrics["offset"] = series.offset
    return metrics


def _undecidable(
    score: LoopScore, span: PhaseSpan, nonlinear: _Series, measured: _Series
) -> frozenset[str]:
    """Return the settling times that a lobe near the edge of the band leaves open."""
    error = nonlinear.process_variable - nonlinear.final
    if span.kind == PhaseKind.SETPOINT_STEP.value:
        size = abs(nonlinear.final - nonlinear.initial)
    else:
        size = float(np.max(np.abs(nonlinear.process_variable - nonlinear.initial)))
    quiet = measured.process_variable[-max(3, len(measured.process_variable) // 10) :]
    # On the true value little is left of the transmitter's noise; successive differences show it.
    left = float(np.std(np.diff(quiet))) / math.sqrt(2.0)
    noise = _SIGMAS * left + _LOBE_SHARE * score.data.trial.tolerances.overshoot * size
    bands = dict(zip(SETTLING, (0.02, 0.05), strict=True))
    return frozenset(
        name for name, band in bands.items() if lobe_near_band(error, band * size, noise)
    )


# What to draw.


def _curves(
    score: LoopScore,
    span: PhaseSpan,
    measured: _Series,
    linear: _Series,
    setpoint: float,
    predicted: dict[str, float | None],
) -> PhaseCurves:
    data, loop = score.data, score.loop
    shown = data.shown(loop)
    lead = min(span.start, max(_BEFORE, (span.end - span.zero) // 20))
    first = span.zero - lead
    window = slice(first, span.end)
    time = np.arange(first - span.zero, span.end - span.zero, dtype=np.float64) * data.rig.tick
    padded = np.concatenate(
        (np.full(span.zero - first, linear.initial), linear.process_variable)
    )
    size = abs(measured.final - measured.initial)
    if span.kind != PhaseKind.SETPOINT_STEP.value:
        size = abs(predicted.get("peak_deviation") or 0.0)
    name = f"{loop.process_variable}"
    return PhaseCurves(
        name=span.name,
        time=time,
        setpoint=data.trace[f"{loop.tag}.setpoint"][window],
        measured=data.trace[f"{name}.true"][window],
        transmitted=data.trace[f"{name}.value"][window],
        predicted_linear=shown.lower + shown.span * padded,
        predicted_nonlinear=score.replay.trace[f"{name}.true"][window],
        design_target=_design_curve(score, span, time, linear.initial, setpoint),
        output=data.trace[f"{loop.output}.command"][window],
        output_predicted=score.replay.trace[f"{loop.output}.command"][window],
        load=data.trace[f"{loop.load}.command"][window],
        band=0.02 * size * shown.span,
        unit=shown.unit,
        # Under a P block the response settles where it settles, off the setpoint.
        band_centre=shown.lower + shown.span * measured.final,
    )


def _design_curve(
    score: LoopScore, span: PhaseSpan, time: Floats, initial: float, setpoint: float
) -> Floats | None:
    """Return the transfer function asked for, on a setpoint step; shown, never scored."""
    if (
        span.kind != PhaseKind.SETPOINT_STEP.value
        or score.reduced is None
        or score.closed_loop_time is None
    ):
        return None
    shown = score.data.shown(score.loop)
    try:
        target = design_target(
            score.reduced,
            score.closed_loop_time,
            np.maximum(time, 0.0),
            step=setpoint - initial,
            law=score.settings.law,
        )
    except ModelError:
        return None
    return np.asarray(shown.lower + shown.span * (initial + target))
