"""The verdict as a document: what goes into verdict.json, and out by ``--json``."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.analysis.bench_quality import bench_quality, exchange_summary
from harness.domain.points import shown_range
from harness.domain.run import EventKind
from harness.tuning.forms import gain_engineering, proportional_band, repeats_per_minute

if TYPE_CHECKING:
    from harness.analysis.phase_score import LoopScore
    from harness.analysis.run_data import RunData
    from harness.domain.rig import Loop
    from harness.domain.verdict import Metric, Outcome, PhaseVerdict
    from harness.tuning.margins import Margins

SCHEMA = 1
_PERCENTILES = (50.0, 99.0, 99.9)


@dataclass(frozen=True, slots=True, kw_only=True)
class RunScore:
    """All that a verdict is made of.

    Parameters
    ----------
    data : RunData
        The run.
    loops : dict of str to LoopScore
        Scored loops.
    margins : dict of str to Margins
        Margins of each scored loop with its models.
    verdicts : tuple of PhaseVerdict
        Phases in order.
    outcome : Outcome
        Verdict of the run.
    reasons : tuple of str
        Why it is invalid.
    """

    data: RunData
    loops: dict[str, LoopScore]
    margins: dict[str, Margins]
    verdicts: tuple[PhaseVerdict, ...]
    outcome: Outcome
    reasons: tuple[str, ...]


def verdict_document(run: RunScore) -> dict[str, object]:
    """Return the verdict of a run.

    Parameters
    ----------
    run : RunScore
        The scored run.

    Returns
    -------
    dict
        JSON-able; fractions rather than percent, null for what was not reached.
    """
    data = run.data
    return {
        "schema": SCHEMA,
        "run": data.header.run,
        "rig": data.header.rig_name,
        "trial": data.header.trial_name,
        "verdict": run.outcome.value,
        "reasons": list(run.reasons),
        "conditions": _conditions(data),
        "loops": {tag: _loop(run, tag) for tag in _loops_told(data)},
        "phases": [_phase(data, verdict) for verdict in run.verdicts],
        "lateness": _lateness(data),
        "preflight": _preflight(data),
        "exchanges": exchange_summary(data.exchanges, data.rig.tick),
    }


def _preflight(data: RunData) -> dict[str, object]:
    """Return what was found out about each loop's controller before the first phase."""
    return {
        event.subject: {"tick": event.tick, "text": event.text} | event.data
        for event in data.events_of(EventKind.PREFLIGHT)
    }


def _conditions(data: RunData) -> dict[str, object]:
    header = data.header
    closing = data.closing
    return {
        "started_utc": header.started_utc,
        "controller": header.controller,
        "clock": header.clock,
        "pace": header.pace if header.pace > 0.0 else None,
        "tick": header.tick,
        "seed": header.seed,
        "rows": data.rows,
        "duration": data.rows * header.tick,
        "end": closing.end.value if closing else "cut off",
        "versions": dict(header.versions),
    }


def _loops_told(data: RunData) -> list[str]:
    told = [event.subject for event in data.events_of(EventKind.MODELS)]
    return list(dict.fromkeys(told))


def _loop(run: RunScore, tag: str) -> dict[str, object]:
    data = run.data
    loop = data.rig.loop(tag)
    models = next(
        e.data for e in reversed(data.events_of(EventKind.MODELS)) if e.subject == tag
    )
    paths = {
        path: _engineering(data, loop, dict(model))
        for path in ("output", "load")
        if isinstance(model := models.get(path), dict)
    }
    shown = shown_range(data.rig.transmitter(loop.process_variable))
    document: dict[str, object] = {
        "process_variable": loop.process_variable,
        "output": loop.output,
        "load": loop.load,
        "range": {"low": shown.lower, "high": shown.upper, "unit": shown.unit},
        "scan": loop.scan,
        "models": paths,
        "tuning": _tuning(run, loop),
    }
    if tag in run.loops:
        score = run.loops[tag]
        quality = bench_quality(
            score.log.read.tolist(), score.log.acted.tolist(), data.rig.tick
        )
        document["controller"] = {
            "period": _number(score.log.period * data.rig.tick),
            "jitter_p95": _number(quality.jitter),
            "delay": _number(score.log.delay * data.rig.tick),
            "missed_scans": quality.missed,
            "scans": len(score.log.read),
            "longest_hold": score.log.longest_hold * data.rig.tick,
        }
    return document


def _engineering(data: RunData, loop: Loop, model: dict[str, object]) -> dict[str, object]:
    """Add the gain in the process variable's unit per percent of output."""
    shown = shown_range(data.rig.transmitter(loop.process_variable))
    model["gain_engineering"] = float(str(model["gain"])) * shown.span / 100.0
    model["gain_engineering_unit"] = f"{shown.unit}/%"
    linearised = model.get("linearised")
    if isinstance(linearised, dict):
        linear = dict(linearised)
        linear["gain_engineering"] = float(str(linear["gain"])) * shown.span / 100.0
        model["linearised"] = linear
    return model


def _tuning(run: RunScore, loop: Loop) -> dict[str, object] | None:
    data = run.data
    told = [e for e in data.events_of(EventKind.SETTINGS) if e.subject == loop.tag]
    if not told:
        return None
    ordered = told[-1].data
    gain = float(str(ordered["gain"]))
    integral_time = ordered.get("integral_time")
    shown = shown_range(data.rig.transmitter(loop.process_variable))
    seconds = None if integral_time is None else float(str(integral_time))
    tuning: dict[str, object] = {
        "law": "P" if seconds is None else "PI",
        "form": "ideal",
        "gain": gain,
        "gain_engineering": gain_engineering(gain, shown.span, 100.0),
        "gain_engineering_unit": f"%/{shown.unit}",
        "proportional_band": proportional_band(gain) / 100.0,
        "integral_time": seconds,
        "repeats_per_minute": None if seconds is None else repeats_per_minute(seconds),
        "action": ordered["action"],
        "closed_loop_time": ordered.get("closed_loop_time"),
        "rule": ordered.get("rule"),
        "reduced": ordered.get("reduced"),
    }
    if loop.tag in run.margins:
        tuning["margins"] = _margins(run.margins[loop.tag])
    return tuning


def _margins(margins: Margins) -> dict[str, object]:
    phase = margins.phase_margin
    return {
        "gain_margin": _number(margins.gain_margin),
        "phase_margin_deg": None if phase is None else math.degrees(phase),
        "delay_margin": _number(margins.delay_margin),
        "ms": _number(margins.maximum_sensitivity),
    }


def _phase(data: RunData, verdict: PhaseVerdict) -> dict[str, object]:
    tick = data.rig.tick
    phase = next(phase for phase in data.trial.phases if phase.name == verdict.name)
    return {
        "name": verdict.name,
        "loop": verdict.loop,
        "kind": verdict.kind,
        "mode": phase.mode.value,
        "change": phase.change,
        "start": verdict.start_tick * tick,
        "zero": verdict.zero_tick * tick,
        "end": verdict.end_tick * tick,
        "scored": bool(verdict.metrics),
        "metrics": {name: _metric(metric) for name, metric in verdict.metrics.items()},
        "verdict": verdict.outcome.value,
        "findings": list(verdict.findings),
    }


def _metric(metric: Metric) -> dict[str, object]:
    limit = metric.limit
    return {
        "unit": metric.unit,
        "measured": _number(metric.measured),
        "predicted_linear": _number(metric.predicted_linear),
        "predicted_nonlinear": _number(metric.predicted_nonlinear),
        "limit": None
        if limit is None
        else {"low": _number(limit.low), "high": _number(limit.high), "basis": limit.basis},
        "verdict": metric.verdict.value,
    }


def _lateness(data: RunData) -> dict[str, object] | None:
    lateness = data.trace["lateness"]
    lateness = lateness[np.isfinite(lateness)]
    if data.header.pace <= 0.0 or not len(lateness):
        return None
    p50, p99, p999 = (float(x) for x in np.percentile(lateness, _PERCENTILES))
    scans = [loop.scan for loop in data.rig.loops] or [data.rig.tick]
    allowed = min(scans) / data.header.pace / 2.0
    return {
        "p50": p50,
        "p99": p99,
        "p999": p999,
        "max": float(np.max(lateness)),
        "allowed": allowed,
        "late_fraction": float(np.mean(lateness > allowed)),
    }


def _number(value: float | None) -> float | None:
    return value if value is not None and math.isfinite(value) else None
