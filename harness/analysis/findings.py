"""What a phase's figures and its controller's trace say, as sentences for people."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from harness.analysis.law import read_law
from harness.analysis.marks import output_marks
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
_NOISY_STEP = 10.0  # standard deviations of the noise: a smaller step is lost in it [-]
_LAW_TOLERANCE = 0.10  # difference between ordered and read settings worth a finding [-]
_NO_LAW = (
    "look at the tag or register it reads, at the range it takes that to have, at its mode, and at "
    "what else writes the output"
)
_SCANS_BEFORE = 2  # a phase, so that the first difference is of the phase [-]
_LEAST_EXPLAINED = 0.5  # share of the moves of the output that make a law [-]
_WELL_EXPLAINED = 0.9  # share of the moves of the output that a law leaves no doubt with [-]
_ANSWERS = 0.1  # of the gain ordered: below it the output does not answer at all [-]
_DOUBTS = 2.0  # standard errors given away before a gain counts as wrong [-]
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
    # From before the order on: the scan that answers a new setpoint is what tells its weight.
    return _law_between(score, span.start - _SCANS_BEFORE * score.log.ticks, span.end)


def _law_between(score: LoopScore, first: int, last: int) -> ReadLaw | None:
    log = score.log.within(first, last)
    transmitted = score.data.process_variable(score.loop, "value")
    return read_law(
        score.data.setpoint(score.loop)[log.read],
        transmitted[log.read],
        log.outputs,
        log.durations,
        score.loop,
    )


def phase_findings(
    score: LoopScore,
    span: PhaseSpan,
    judged: dict[str, Metric],
    outcome: Outcome,
    held: str | None = None,
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
    held : str or None
        Why its outputs came too seldom to be judged.

    Returns
    -------
    tuple of str
        Sentences, what speaks against the controller first.
    """
    findings = []
    if not span.steady:
        findings.append(f"The phase did not end steady: {span.reason}.")
    if held is not None:
        findings.append(f"{held[0].upper()}{held[1:]}.")
    if outcome is not Outcome.PASS:
        found = _law_findings(score, span)
        findings += found if found or held is not None else _elsewhere(score, span)
    for name, metric in judged.items():
        if metric.verdict is Outcome.NOT_DECIDABLE:
            findings.append(
                f"{_words(name).capitalize()} cannot be decided: the predicted response turns "
                "back so close to the edge of the band that noise decides which crossing is last."
            )
    # An irregular scan parts the two predictions as well: one only has a regular one.
    gap = _prediction_gap(score, span, judged) if outcome is not Outcome.INVALID else None
    if gap:
        findings.append(gap)
    return tuple(findings)


def _law_findings(score: LoopScore, span: PhaseSpan) -> list[str]:
    law = phase_law(score, span)
    if law is None or law.explained < _WELL_EXPLAINED:
        marks = _at_limit(score, span) or output_marks(
            score.log.within(span.start, span.end), score.loop
        )
        if marks:
            return marks
    if law is None:
        return []
    if law.explained < _LEAST_EXPLAINED:
        return [
            "The controller's output does not follow a P or PI law of the process variable it was "
            f"given: moves of {100 * law.left_over:.2g} % rms from scan to scan are no answer to "
            f"it. Look for noise on the output or on the controller's input; {_NO_LAW}."
        ]
    findings = _gain_findings(score, law)
    if law.gain > _ANSWERS * score.settings.gain:
        findings += _integral_findings(law, score.settings)
        findings += _input_findings(score, law)
    return findings


def _gain_findings(score: LoopScore, law: ReadLaw) -> list[str]:
    """Return what there is to say on the proportional part."""
    ordered = score.settings.gain
    ratio = law.gain / ordered
    doubt = _DOUBTS * law.gain_doubt / ordered
    if abs(ratio) < max(_ANSWERS, doubt):
        return [
            "The output does not answer the process variable: look whether the controller's input "
            "is frozen, and which tag or register it reads."
        ]
    if ratio < 0.0:
        return [
            f"The controller acts the wrong way: {score.loop.action.value} action was ordered, and "
            "its output moves as with the other. Look at its action setting and at the sign of its "
            "error."
        ]
    if abs(ratio - 1.0) > _LAW_TOLERANCE + doubt:
        return [
            f"The controller acts with a gain of {law.gain:.3g} %/%, {ratio:.2f} times the "
            f"{ordered:.3g} %/% ordered: look at the unit of its gain and at its ranges."
        ]
    return []


def _input_findings(score: LoopScore, law: ReadLaw) -> list[str]:
    """Return what there is to say on what the controller makes of its inputs."""
    findings = []
    offset = law.input_offset
    if offset is not None and abs(offset) > score.data.trial.tolerances.offset:
        findings.append(
            f"The controller works as if its process variable were {100 * abs(offset):.2g} % of "
            f"span {'higher' if offset > 0.0 else 'lower'} than transmitted (or its setpoint "
            f"{'lower' if offset > 0.0 else 'higher'} than ordered): look at zero and range of its "
            "input."
        )
    weight = law.setpoint_weight
    if weight is not None and abs(weight - 1.0) > _LAW_TOLERANCE:
        findings.append(
            f"Its proportional part acts on {round(weight, 2) + 0.0:.2f} of a change of setpoint, not on the whole: "
            "look for a setpoint weight, filter or ramp."
        )
    if law.delay > 0.0:
        findings.append(
            f"The output answers a process variable {law.delay:.3g} s old, beyond what the link "
            "explains: look for a delay or a slower task between input, block and output."
        )
    if law.filter_time > 0.0:
        findings.append(
            f"A lag of about {law.filter_time:.3g} s lies between process variable and output: "
            "look for a filter on the input or on the output."
        )
    if law.derivative_time > 0.0:
        findings.append(
            f"The controller has a derivative part of about {law.derivative_time:.3g} s, though "
            "none was ordered."
        )
    return findings


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
    manual = np.flatnonzero(score.data.trace[f"{loop.tag}.mode"][: span.end] == 0.0)
    since = _law_between(score, int(manual[-1]) + 1 if len(manual) else 0, span.end)
    gain = 0.0 if since is None else since.gain / score.settings.gain
    if gain > -_ANSWERS:
        before = ", and it did act the right way before" if gain > _ANSWERS else ""
        return [
            f"{words}, though the error asks for the opposite{before}: look for a frozen input, "
            "for a windup, and at its action setting."
        ]
    return [
        f"{words}, and the error asks for the opposite: the controller acts the wrong way. "
        f"{loop.action.value.capitalize()} action was ordered; look at its action setting and at "
        "the sign of its error."
    ]


def _elsewhere(score: LoopScore, span: PhaseSpan) -> list[str]:
    """Return where to look when the law is the ordered one and the response still is not."""
    law = phase_law(score, span)
    if law is None:
        return [f"No law can be read from the controller's output: {_NO_LAW}."]
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
    return [
        f"The controller follows the law and the settings ordered ({seen}), so the cause lies "
        f"elsewhere: look at its scan and delay{timing}, at limits and rate limits of its output, "
        "at a bias or filter of its own, and at what else moved the plant."
    ]


def _integral_findings(law: ReadLaw, ordered: ControllerSettings) -> list[str]:
    if ordered.integral_time is None:
        if law.integral_time is not None:
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


def _prediction_gap(score: LoopScore, span: PhaseSpan, judged: dict[str, Metric]) -> str | None:
    """Return a finding on the size of the step where the two predictions differ."""
    iae = judged.get("iae")
    if iae is None or not iae.predicted_linear or not iae.predicted_nonlinear:
        return None
    gap = iae.predicted_nonlinear / iae.predicted_linear - 1.0
    if abs(gap) < _GAP:
        return None
    noise = score.data.rig.transmitter(score.loop.process_variable).noise
    cause = "the step is large for this plant, or its models are of another operating point"
    if abs(span.change) < _NOISY_STEP * noise:
        cause = (
            f"the step is small beside the transmitter's noise of {100 * noise:.2g} % of span"
        )
    return (
        f"The nonlinear prediction of the IAE is {100 * abs(gap):.0f} % "
        f"{'above' if gap > 0 else 'below'} the linear one: {cause}."
    )


def _words(name: str) -> str:
    return {
        "settling_time_2": "settling time (2 %)",
        "settling_time_5": "settling time (5 %)",
    }.get(name, name.replace("_", " "))
