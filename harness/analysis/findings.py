"""What a phase's figures and its controller's trace say, as sentences for people."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from harness.analysis.law import read_law
from harness.domain.models import ControlLaw
from harness.domain.rig import Action
from harness.domain.verdict import Outcome

if TYPE_CHECKING:
    from harness.analysis.law import ReadLaw
    from harness.analysis.phase_score import LoopScore
    from harness.analysis.run_data import PhaseSpan
    from harness.domain.models import ControllerSettings
    from harness.domain.verdict import Metric

_GAP = 0.25  # difference of the predictions worth a finding [-]
_LAW_TOLERANCE = 0.10  # difference between ordered and read settings worth a finding [-]
_LIMIT_REACHED = 1e-3  # of output: a register may hold a limit no finer than this [-]
_MOSTLY = 0.5  # of a phase [-]


def phase_law(score: LoopScore, span: PhaseSpan) -> ReadLaw | None:
    """Return the law that the controller showed in a phase.

    Parameters
    ----------
    score : LoopScore
        The loop.
    span : PhaseSpan
        The phase.
    """
    log = score.log.within(span.zero, span.end)
    transmitted = score.data.process_variable(score.loop, "value")
    return read_law(
        score.data.setpoint(score.loop)[log.read],
        transmitted[log.read],
        log.outputs,
        score.loop.scan,
        score.loop,
    )


def phase_findings(
    score: LoopScore, span: PhaseSpan, judged: dict[str, Metric], outcome: Outcome
) -> tuple[str, ...]:
    """Return what there is to say about a phase.

    Parameters
    ----------
    score : LoopScore
        The loop.
    span : PhaseSpan
        The phase.
    judged : dict of str to Metric
        Its metrics, judged.
    outcome : Outcome
        Its verdict.

    Returns
    -------
    tuple of str
        Sentences, what speaks against the controller first.
    """
    findings = []
    if not span.steady:
        findings.append(f"The phase did not end steady: {span.reason}.")
    if outcome is not Outcome.PASS:
        findings += _law_findings(score, span)
    for name, metric in judged.items():
        if metric.verdict is Outcome.NOT_DECIDABLE:
            findings.append(
                f"{_words(name).capitalize()} cannot be decided: the predicted response turns "
                "back so close to the edge of the band that noise decides which crossing is last."
            )
    gap = _prediction_gap(judged)
    if gap:
        findings.append(gap)
    return tuple(findings)


def _law_findings(score: LoopScore, span: PhaseSpan) -> list[str]:
    law = phase_law(score, span)
    ordered = score.settings
    if law is None:
        return _at_limit(score, span) or [
            "The controller's output does not follow a P or PI law of the process variable it was "
            "given: look at the tag or register it reads, at the range it takes that to have, at "
            "its mode, and at what else writes the output."
        ]
    findings = []
    ratio = law.gain / ordered.gain
    if ratio < 0.0:
        findings.append(
            f"The controller acts the wrong way: {score.loop.action.value} action was ordered, and "
            "its output moves as with the other. Look at its action setting and at the sign of its "
            "error."
        )
    elif abs(ratio - 1.0) > _LAW_TOLERANCE:
        findings.append(
            f"The controller acts with a gain of {law.gain:.3g} %/%, {ratio:.2f} times the "
            f"{ordered.gain:.3g} %/% ordered: look at the unit of its gain and at its ranges."
        )
    findings += _integral_findings(law, ordered)
    return findings or [_elsewhere(score, law)]


def _at_limit(score: LoopScore, span: PhaseSpan) -> list[str]:
    """Return what an output that stood at a limit says, where no law can be read from it."""
    loop = score.loop
    outputs = score.log.within(span.zero, span.end).outputs
    if not len(outputs):
        return []
    high = float(np.mean(outputs >= loop.output_high - _LIMIT_REACHED))
    low = float(np.mean(outputs <= loop.output_low + _LIMIT_REACHED))
    share, limit = max((high, loop.output_high), (low, loop.output_low))
    if share < _MOSTLY:
        return []
    words = f"The output stood at its limit of {100 * limit:g} % for {100 * share:.0f} % of the phase"
    error = float(
        np.mean(score.data.setpoint(loop)[span.zero : span.end])
        - np.mean(score.data.process_variable(loop)[span.zero : span.end])
    )
    wanted_more = (error > 0.0) is (loop.action is Action.REVERSE)
    if wanted_more is (limit == loop.output_high):
        return [
            f"{words}, on the side the error asks for: more than the valve can give was wanted. "
            "Look at the range the controller takes its input to have, and for a windup."
        ]
    return [
        f"{words}, and the error asks for the opposite: the controller acts the wrong way. "
        f"{loop.action.value.capitalize()} action was ordered; look at its action setting and at "
        "the sign of its error."
    ]


def _elsewhere(score: LoopScore, law: ReadLaw) -> str:
    """Return where to look when the law is the ordered one and the response still is not."""
    tick = score.data.rig.tick
    seen = f"gain {law.gain:.3g} %/%"
    if law.integral_time is not None and score.settings.law is ControlLaw.PI:
        seen += f", Ti {law.integral_time:.3g} s"
    timing = ""
    if math.isfinite(score.log.period) and math.isfinite(score.log.delay):
        timing = (
            f" (period {score.log.period * tick:.3g} s, delay {score.log.delay * tick:.3g} s as "
            "measured)"
        )
    return (
        f"The controller follows the law and the settings ordered ({seen}), so the cause lies "
        f"elsewhere: look at its scan and delay{timing}, at limits and rate limits of its output, "
        "at a bias or filter of its own, and at what else moved the plant."
    )


def _integral_findings(law: ReadLaw, ordered: ControllerSettings) -> list[str]:
    if ordered.integral_time is None:
        if law.integral_time is not None and law.integral_time < 10_000.0:  # noqa: PLR2004  hours
            return [
                f"The controller integrates (Ti of about {law.integral_time:.3g} s), though a "
                "proportional block was ordered."
            ]
        return []
    if law.integral_time is None:
        return ["No integral action shows in the output, though one was ordered."]
    ratio = law.integral_time / ordered.integral_time
    if abs(ratio - 1.0) <= _LAW_TOLERANCE:
        return []
    return [
        f"The controller integrates with Ti of about {law.integral_time:.3g} s, {ratio:.2f} times "
        f"the {ordered.integral_time:.3g} s ordered: look at the unit (minutes, repeats) and at "
        "its scan period."
    ]


def _prediction_gap(judged: dict[str, Metric]) -> str | None:
    """Return a finding on the size of the step where the two predictions differ."""
    iae = judged.get("iae")
    if iae is None or not iae.predicted_linear or not iae.predicted_nonlinear:
        return None
    gap = iae.predicted_nonlinear / iae.predicted_linear - 1.0
    if abs(gap) < _GAP:
        return None
    return (
        f"The nonlinear prediction of the IAE is {100 * abs(gap):.0f} % "
        f"{'above' if gap > 0 else 'below'} the linear one: the step is large for this plant."
    )


def _words(name: str) -> str:
    return {
        "settling_time_2": "settling time (2 %)",
        "settling_time_5": "settling time (5 %)",
    }.get(name, name.replace("_", " "))
