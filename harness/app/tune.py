"""Tuning: settings by rule, what they do, and what to type into the block."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from harness.analysis.metrics import METRIC_UNITS
from harness.analysis.step_limits import StepTest, step_findings
from harness.analysis.tuning_study import Evaluation, LoopConditions, evaluate
from harness.errors import ModelError, UsageError
from harness.tuning.entered import BlockFormat, GainUnit, entered, gain_factor
from harness.tuning.forms import Form, IdealForm, ideal_to_parallel, ideal_to_series
from harness.tuning.process import action_for, reduce_process
from harness.tuning.rule_settings import ideal_settings
from harness.tuning.rules import default_closed_loop_time, rules_named

if TYPE_CHECKING:
    from harness.app.tune_source import TuningSource
    from harness.tuning.margins import Margins
    from harness.tuning.process import PidSettings, ProcessModel
    from harness.tuning.rules import Rule

Document = dict[str, object]

_MINUTE = 60.0  # [s]


@dataclass(frozen=True, slots=True, kw_only=True)
class TuneOptions:
    """What is asked of a tuning.

    Parameters
    ----------
    rules : tuple of str
        Names of rules or families; empty for all.
    closed_loop_times : tuple of float
        Closed-loop time constants; empty for one that follows from the process [s].
    scan : float or None
        Scan period; None takes the source's [s].
    filter_time : float
        Filter between process variable and block [s].
    spread : float
        Spread of the plant that the settings must bear [-].
    continuous : bool
        Whether the prediction is of a continuous block even if there is a scan.
    derivative_filter : float or None
        Lag on the derivative; None for a tenth of the derivative time [s].
    derivative_on_error : bool
        Whether the derivative sees the setpoint.
    form : Form or None
        Form in which gain and times are given; None for the form each rule is published in.
    block : BlockFormat or None
        How the block takes its settings; None leaves them as they are.
    setpoint_step, load_step : float
        Test that is to come [fraction of PV span, fraction of output].
    output : float or None
        Output before the test; None takes the source's [fraction of output].
    limits : tuple of float or None
        Output limits; None takes the source's [fraction of output].
    stroke_time : float or None
        Travel time of the valve; None takes the source's [s].
    """

    rules: tuple[str, ...] = ()
    closed_loop_times: tuple[float, ...] = ()
    scan: float | None = None
    filter_time: float = 0.0
    spread: float = 0.2
    continuous: bool = False
    derivative_filter: float | None = None
    derivative_on_error: bool = False
    form: Form | None = None
    block: BlockFormat | None = None
    setpoint_step: float = 0.05
    load_step: float = 0.05
    output: float | None = None
    limits: tuple[float, float] | None = None
    stroke_time: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Tuning:
    """A tuning, with the curves behind it.

    Parameters
    ----------
    document : dict
        JSON-able.
    evaluations : dict of str to Evaluation
        By the key of each rule in the document.
    """

    document: Document
    evaluations: dict[str, Evaluation] = field(default_factory=dict)


def tune(source: TuningSource, options: TuneOptions) -> Tuning:
    """Tune a process by every rule asked for, and predict what each does.

    Parameters
    ----------
    source : TuningSource
        Process and what is known around it.
    options : TuneOptions
        What is asked.

    Returns
    -------
    Tuning
        Document and curves.

    Raises
    ------
    ModelError
        When the process is not usable, or no rule covers it; with every reason.
    UsageError
        When a rule is not known or an option makes no sense.
    """
    rules = rules_named(options.rules)
    scan = source.scan if options.scan is None else options.scan
    _check_times(options, scan)
    conditions = LoopConditions(
        scan=scan,
        output_delay=source.output_delay,
        filter_time=options.filter_time,
        spread=options.spread,
    )
    first = reduce_process(source.process, 1, conditions.counted_delay)
    times = options.closed_loop_times or (default_closed_loop_time(first),)
    study = _Study(source=source, options=options, conditions=conditions)
    results: dict[str, object] = {}
    refused: dict[str, str] = {}
    evaluations: dict[str, Evaluation] = {}
    for rule in rules:
        for time in times if rule.takes_closed_loop_time else times[:1]:
            key = rule.name
            if len(times) > 1 and rule.takes_closed_loop_time:
                key = f"{rule.name} at {time:g} s"
            try:
                results[key], evaluations[key] = study.result(rule, time)
            except ModelError as error:
                refused[key] = str(error)
    if not results:
        reasons = "\n".join(f"  {key}: {reason}" for key, reason in refused.items())
        raise ModelError(f"tune: none of the rules covers this process\n{reasons}")
    document = study.head() | {
        "closed_loop_times": list(times),
        "closed_loop_time_chosen": not options.closed_loop_times,
        "rules": results,
        "refused": refused,
        "metric_units": METRIC_UNITS | {"output_peak": "1"},
        "findings": list(source.notes),
    }
    return Tuning(document=document, evaluations=evaluations)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Study:
    """One source under one set of options."""

    source: TuningSource
    options: TuneOptions
    conditions: LoopConditions

    @property
    def predicted(self) -> LoopConditions:
        """Return the conditions that the prediction sees; continuous counts half a scan as delay."""
        if not (self.options.continuous and self.conditions.scan > 0.0):
            return self.conditions
        return LoopConditions(
            output_delay=self.conditions.output_delay + 0.5 * self.conditions.scan,
            filter_time=self.conditions.filter_time,
            spread=self.conditions.spread,
        )

    def head(self) -> Document:
        source, conditions = self.source, self.conditions
        action = action_for(source.process)
        return {
            "schema": 1,
            "source": source.name,
            "process": _process(source.process, source),
            "gain_unit": source.gain_unit,
            "conditions": {
                "scan": conditions.scan,
                "output_delay": conditions.output_delay,
                "filter": conditions.filter_time,
                "counted_as_dead_time": conditions.counted_delay,
                "prediction": "sampled" if self.predicted.scan > 0.0 else "continuous",
                "spread": conditions.spread,
                "derivative_on": "error"
                if self.options.derivative_on_error
                else "process variable",
            },
            "action": action.value,
            "action_reason": _action_words(source.process),
        }

    def result(self, rule: Rule, time: float) -> tuple[Document, Evaluation]:
        source, options = self.source, self.options
        reduced = reduce_process(source.process, rule.order, self.conditions.counted_delay)
        found = rule.settle(reduced, time)
        settings = ideal_settings(
            found,
            action_for(source.process),
            options.derivative_filter,
            derivative_on_error=options.derivative_on_error,
        )
        form = options.form or found.form
        evaluation = evaluate(source.process, settings, self.predicted)
        result: Document = {
            "title": rule.title,
            "law": settings.law,
            "aim": rule.aim,
            "source": rule.source,
            "closed_loop_time": time if rule.takes_closed_loop_time else None,
            "reduced": _process(reduced, source),
            **_in_form(settings, form),
            "derivative_filter": settings.derivative_filter or None,
            "action": settings.action.value,
            "settings": self._settings(settings),
            **_figures(evaluation),
        }
        findings = self._findings(rule, evaluation)
        if options.block is not None:
            result["entered"] = self._entered(options.block, settings, evaluation)
        result["findings"] = findings
        return result, evaluation

    def _settings(self, settings: PidSettings) -> Document:
        """Return the settings in every form and unit that is known."""
        gains: Document = {}
        if self.source.in_fractions or self.source.spans.pv is not None:
            gains["proportional_band"] = 100.0 / settings.gain
        for unit in (GainUnit.ENGINEERING, GainUnit.COUNTS):
            try:
                factor, name = gain_factor(unit, self.source.spans)
            except UsageError:
                continue
            gains[unit.value] = {"value": settings.gain * factor, "unit": name}
        integral = settings.integral_time
        document: Document = {"gains": gains, "ideal": _in_form(settings, Form.IDEAL)}
        if integral is not None:
            document["integral"] = {
                "s": integral,
                "min": integral / _MINUTE,
                "repeats/min": _MINUTE / integral,
                "1/s": 1.0 / integral,
            }
        try:
            document["series"] = _in_form(settings, Form.SERIES)
        except ModelError as error:
            document["series"], document["series_refused"] = None, str(error)
        document["parallel"] = _in_form(settings, Form.PARALLEL)
        return document

    def _entered(
        self, block: BlockFormat, settings: PidSettings, before: Evaluation
    ) -> Document:
        """Return what to type in, and what the rounding does."""
        typed = entered(settings, block, self.source.spans)
        after = evaluate(self.source.process, typed.settings, self.predicted)
        return {
            "form": block.form.value,
            "values": typed.values,
            "units": typed.units,
            "comes_to": _in_form(typed.settings, Form.IDEAL),
            "effect": {
                "gain": typed.settings.gain / settings.gain - 1.0,
                "stable": after.stable,
                "maximum_sensitivity": [
                    before.margins.maximum_sensitivity,
                    after.margins.maximum_sensitivity,
                ],
                "overshoot": [
                    before.setpoint.get("overshoot"),
                    after.setpoint.get("overshoot"),
                ],
                "load_iae": [before.load.get("iae"), after.load.get("iae")],
            },
        }

    def _findings(self, rule: Rule, evaluation: Evaluation) -> list[str]:
        if not evaluation.stable:
            return [
                f"{rule.name}: predicted unstable on this process; do not use it: "
                + (
                    "ask for a longer closed-loop time, or a shorter scan"
                    if rule.takes_closed_loop_time
                    else "take another rule"
                )
            ]
        found = []
        robust = evaluation.robustness
        if robust.unstable:
            found.append(
                f"{rule.name}: unstable on {robust.unstable} of {robust.plants} plants within "
                f"{100.0 * robust.spread:g} % of the model"
            )
        source, options = self.source, self.options
        low, high = options.limits or (source.output_low, source.output_high)
        stroke = source.stroke_time if options.stroke_time is None else options.stroke_time
        if (
            source.in_fractions
            and evaluation.setpoint_curve is not None
            and evaluation.load_curve is not None
        ):
            test = StepTest(
                setpoint_step=options.setpoint_step,
                load_step=options.load_step,
                output=source.output if options.output is None else options.output,
                output_low=low,
                output_high=high,
                stroke_time=stroke,
            )
            found += step_findings(evaluation.setpoint_curve, evaluation.load_curve, test)
        return found


def _check_times(options: TuneOptions, scan: float) -> None:
    for name, value in (
        *(("closed-loop time", time) for time in options.closed_loop_times),
        ("scan", scan),
        ("filter", options.filter_time),
        ("derivative filter", options.derivative_filter or 0.0),
    ):
        least = "above 0" if name == "closed-loop time" else "0 or more"
        good = value > 0.0 if name == "closed-loop time" else value >= 0.0
        if not (math.isfinite(value) and good):
            raise UsageError(f"tune: {name} is {value:g} s; it must be {least}")


def _process(process: ProcessModel, source: TuningSource) -> Document:
    spans = source.spans
    engineering = None
    if source.in_fractions and spans.pv is not None and spans.output is not None:
        engineering = process.gain * spans.pv.span / spans.output.span
    return {
        "kind": _kind(process),
        "gain": process.gain,
        "gain_engineering": engineering,
        "time_constants": list(process.time_constants),
        "dead_time": process.dead_time,
        "numerator_times": list(process.numerator_times),
        "integrating": process.integrating,
    }


def _kind(process: ProcessModel) -> str:
    if process.integrating:
        return "integrating"
    if process.inverse_response > 0.0:
        return "inverse_response"
    names = {1: "first_order", 2: "second_order"}
    return names.get(len(process.time_constants), "higher_order")


def _action_words(process: ProcessModel) -> str:
    rises = process.gain > 0.0
    return (
        f"The process gain is {'positive' if rises else 'negative'}: a higher output makes the "
        f"process variable {'rise' if rises else 'fall'}. When it rises above the setpoint the "
        f"output must therefore {'fall: reverse' if rises else 'rise: direct'} action."
    )


def _in_form(settings: PidSettings, form: Form) -> Document:
    """Return settings in a form; without derivative ideal and series are the same."""
    integral, derivative = settings.integral_time, settings.derivative_time
    ideal = IdealForm(
        gain=settings.gain,
        integral_time=math.inf if integral is None else integral,
        derivative_time=derivative,
    )
    if form is Form.PARALLEL:
        parallel = ideal_to_parallel(ideal)
        return {
            "form": form.value,
            "gain": parallel.proportional,
            "integral": parallel.integral,
            "derivative": parallel.derivative,
            "integral_time": integral,
            "derivative_time": derivative,
        }
    gain = settings.gain
    if form is Form.SERIES and derivative > 0.0:
        series = ideal_to_series(ideal)
        gain, derivative = series.gain, series.derivative_time
        integral = None if integral is None else series.integral_time
    return {
        "form": form.value,
        "gain": gain,
        "integral_time": integral,
        "derivative_time": derivative,
    }


def _figures(evaluation: Evaluation) -> Document:
    robust = evaluation.robustness
    return {
        "stable": evaluation.stable,
        "margins": _margins(evaluation.margins),
        "metrics": {"setpoint": evaluation.setpoint, "load": evaluation.load},
        "robustness": {
            "spread": robust.spread,
            "plants": robust.plants,
            "unstable": robust.unstable,
            "worst_maximum_sensitivity": robust.worst_sensitivity,
            "worst_overshoot": robust.worst_overshoot,
            "worst_plant": robust.worst_plant,
        },
    }


def _margins(margins: Margins) -> Document:
    phase = margins.phase_margin
    return {
        "gain_margin": margins.gain_margin,
        "phase_margin": phase,
        "phase_margin_degrees": None if phase is None else math.degrees(phase),
        "delay_margin": margins.delay_margin,
        "maximum_sensitivity": margins.maximum_sensitivity,
        "gain_crossover": margins.gain_crossover,
        "phase_crossover": margins.phase_crossover,
    }
