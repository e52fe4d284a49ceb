"""The score of a run, from its record alone; the same code scores a stored run."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.analysis.document import RunScore, verdict_document
from harness.analysis.findings import phase_findings
from harness.analysis.limits import worst
from harness.analysis.nonlinear import replay, settings_of
from harness.analysis.phase_score import LoopScore, score_phase
from harness.analysis.run_data import phases_of
from harness.analysis.schedule import scan_log
from harness.domain.models import LagModel, LoopModels
from harness.domain.run import EventKind, RunEnd
from harness.domain.trial import Mode, ModelSource, PhaseKind
from harness.domain.verdict import Outcome, PhaseVerdict
from harness.errors import RecordError
from harness.tuning.margins import sampled_margins

if TYPE_CHECKING:
    from harness.analysis.run_data import PhaseSpan, RunData
    from harness.domain.rig import Loop
    from harness.domain.verdict import PhaseCurves
    from harness.tuning.margins import Margins

_LATE_SHARE = 0.005  # of the ticks that may be later than half a scan [-]
_HOLD_SHARE = 0.1  # of the delay margin for which an output may be held [-]


@dataclass(frozen=True, slots=True, kw_only=True)
class Scored:
    """A scored run.

    Parameters
    ----------
    document : dict
        The verdict as JSON-able document.
    curves : tuple of PhaseCurves
        What a report draws, a set for each scored phase.
    outcome : Outcome
        Verdict of the run.
    """

    document: dict[str, object]
    curves: tuple[PhaseCurves, ...]
    outcome: Outcome


def score_run(data: RunData) -> Scored:
    """Score a run.

    Parameters
    ----------
    data : RunData
        The run.

    Returns
    -------
    Scored
        Verdict and curves.

    Raises
    ------
    RecordError
        When the record does not fit its trial.
    """
    spans = phases_of(data)
    reasons = _end_reasons(data) + _lateness_reasons(data)
    verdicts: list[PhaseVerdict] = []
    curves: list[PhaseCurves] = []
    loops: dict[str, LoopScore] = {}
    margins: dict[str, Margins] = {}
    noted: set[str] = set()
    for span in spans:
        short = span.end - span.zero < 2  # noqa: PLR2004  nothing to measure
        if span.loop not in loops and not short and _needs_law(span):
            loops[span.loop] = _loop_score(data, data.rig.loop(span.loop))
            margins[span.loop] = _margins(loops[span.loop])
        if short or not _scored(span):
            verdicts.append(_unscored(span, None if short else loops.get(span.loop)))
            continue
        held = _held(loops[span.loop], margins[span.loop], span)
        if held is not None:
            reasons.append(f"phase {span.name!r}: {held}")
        verdict, drawn = score_phase(loops[span.loop], span, held)
        if span.loop not in noted:
            noted.add(span.loop)
            notes = _model_notes(data, span.loop)
            verdict = dataclasses.replace(verdict, findings=verdict.findings + notes)
        verdicts.append(verdict)
        curves.append(drawn)
    missing = [p.name for p in data.trial.phases if p.name not in {s.name for s in spans}]
    if missing:
        reasons.append(f"not run: {', '.join(missing)}")
    outcome = worst([verdict.outcome for verdict in verdicts])
    if reasons:
        outcome = Outcome.INVALID
    run = RunScore(
        data=data,
        loops=loops,
        margins=margins,
        verdicts=tuple(verdicts),
        outcome=outcome,
        reasons=tuple(reasons),
    )
    return Scored(document=verdict_document(run), curves=tuple(curves), outcome=outcome)


def _scored(span: PhaseSpan) -> bool:
    return span.mode == Mode.AUTOMATIC.value and span.kind != PhaseKind.SETTLE.value


def _needs_law(span: PhaseSpan) -> bool:
    """Return whether the controller's settings matter to what is said of a phase."""
    return _scored(span) or (span.mode == Mode.AUTOMATIC.value and not span.steady)


def _unscored(span: PhaseSpan, score: LoopScore | None) -> PhaseVerdict:
    findings: tuple[str, ...] = ()
    if not span.steady:
        findings = (f"The phase did not end steady: {span.reason}.",)
        if score is not None and span.mode == Mode.AUTOMATIC.value:
            findings = phase_findings(score, span, {}, Outcome.INVALID)
    return PhaseVerdict(
        name=span.name,
        loop=span.loop,
        kind=span.kind,
        start_tick=span.start,
        zero_tick=span.zero,
        end_tick=span.end,
        metrics={},
        outcome=Outcome.SHOWN if span.steady else Outcome.INVALID,
        findings=findings,
    )


def _loop_score(data: RunData, loop: Loop) -> LoopScore:
    settings = settings_of(data, loop)
    if not settings:
        raise RecordError(
            f"run {data.header.run}: no settings of {loop.tag} are in the record, so there is "
            "nothing to predict its automatic phases from; the run was cut off, or the record is "
            "not this program's"
        )
    log = scan_log(data, loop)
    ordered = settings[max(settings)]
    event = next(
        e for e in reversed(data.events_of(EventKind.SETTINGS)) if e.subject == loop.tag
    )
    reduced = event.data.get("reduced")
    asked = event.data.get("closed_loop_time")
    return LoopScore(
        data=data,
        loop=loop,
        models=_models(data, loop),
        reduced=_model(reduced) if isinstance(reduced, dict) else None,
        closed_loop_time=None if asked is None else float(str(asked)),
        settings=ordered,
        log=log,
        replay=replay(data, loop, log, settings),
    )


def _models(data: RunData, loop: Loop) -> LoopModels:
    for event in reversed(data.events_of(EventKind.MODELS)):
        if event.subject == loop.tag:
            return LoopModels(
                output=_model(event.data["output"]), load=_model(event.data["load"])
            )
    raise RecordError(f"run {data.header.run}: no models of {loop.tag} are in the record")


def _model_notes(data: RunData, tag: str) -> tuple[str, ...]:
    """Return which paths were to be identified and were not."""
    if data.trial.models is not ModelSource.IDENTIFIED:
        return ()
    told = next(e.data for e in reversed(data.events_of(EventKind.MODELS)) if e.subject == tag)
    missing = [
        path
        for path in ("output", "load")
        if isinstance(model := told[path], dict)
        and model.get("source") == ModelSource.LINEARISED.value
    ]
    if not missing:
        return ()
    return (
        f"The model of the {' and the '.join(missing)} path is the rig's own, linearised, and not "
        "identified as the trial has it: the manual steps it wants were not run. Settings and "
        "linear prediction rest on it.",
    )


def _model(document: object) -> LagModel:
    if not isinstance(document, dict):
        raise RecordError(f"the record holds {document!r} where a model should be")
    return LagModel(
        gain=float(document["gain"]),
        time_constants=tuple(float(t) for t in document["time_constants"]),
        dead_time=float(document["dead_time"]),
    )


def _margins(score: LoopScore) -> Margins:
    delay = score.log.delay * score.data.rig.tick
    return sampled_margins(
        score.models.output,
        score.settings,
        score.scan,
        delay if np.isfinite(delay) else 0.0,
    )


# What makes a run invalid rather than failed.


def _end_reasons(data: RunData) -> list[str]:
    if data.closing is None:
        return ["the record has no closing document: the run was cut off"]
    if data.closing.end is not RunEnd.COMPLETE:
        return [data.closing.reason or data.closing.end.value]
    return []


def _lateness_reasons(data: RunData) -> list[str]:
    lateness = data.trace["lateness"]
    if data.header.pace <= 0.0 or not np.isfinite(lateness).any():
        return []
    shortest = min(loop.scan for loop in data.rig.loops) if data.rig.loops else data.rig.tick
    allowed = shortest / data.header.pace / 2.0
    share = float(np.mean(lateness[np.isfinite(lateness)] > allowed))
    if share <= _LATE_SHARE:
        return []
    return [
        f"{100 * share:.2f} % of the ticks were later than half a scan ({1e3 * allowed:.3g} ms); "
        f"at most {100 * _LATE_SHARE:g} % may be. Run at a lower pace, or on a quieter machine"
    ]


def _held(score: LoopScore, margins: Margins, span: PhaseSpan) -> str | None:
    """Return why the controller's outputs came too seldom in a phase for a judgement."""
    if not score.data.external or margins.delay_margin is None or margins.delay_margin <= 0.0:
        return None
    tick = score.data.rig.tick
    allowed = max(_HOLD_SHARE * margins.delay_margin, 2.0 * score.loop.scan)
    held = score.log.longest_hold_within(span.zero, span.end) * tick
    delay = score.log.within(span.zero, span.end).delay * tick
    if held > allowed:
        what = f"an output of {score.loop.output} was held for {held:.3g} s"
    elif delay > allowed:
        what = f"{score.loop.output} answered what the controller read {delay:.3g} s before"
    else:
        return None
    return (
        f"{what}; {allowed:.3g} s at most may be (a tenth of the delay "
        "margin, at least two scans). Look at the link and at the controller's scan"
    )
