"""Fits and tunings as people read them in a terminal."""

from __future__ import annotations

from typing import TYPE_CHECKING

from rich.console import Group
from rich.table import Table
from rich.text import Text

from harness.reporting.document import named_parts, number, numbers, part, parts, text, texts
from harness.reporting.words import figure, humanised

if TYPE_CHECKING:
    from collections.abc import Mapping

    from rich.console import RenderableType

DIGITS = 3  # significant, in a terminal


def short(value: float | None, missing: str = "-") -> str:
    """Return a number with three significant digits.

    Parameters
    ----------
    value : float or None
        The number [any unit].
    missing : str
        What stands for None.
    """
    return missing if value is None else f"{value:.{DIGITS}g}"


def fit_view(document: Mapping[str, object]) -> RenderableType:
    """Return a fit for the terminal.

    Parameters
    ----------
    document : dict
        From ``harness.app.fit.fit``.
    """
    models = parts(document, "models")
    level = 95.0
    table = Table(title=f"{text(document, 'file')}: models, the best first")
    for title in ("model", "figure", "value", "limits", ""):
        table.add_column(title, justify="right" if title in {"value", "limits"} else "left")
    for model in models:
        _model_rows(table, model, document)
        table.add_section()
    limits = named_parts(models[0], "limits") if models else {}
    for limit in limits.values():
        level = 100.0 * (number(limit, "level") or 0.95)
        break
    pieces: list[RenderableType] = [table, Text(f"limits at {level:g} %", style="dim")]
    pieces += [Text(_direct_words(item), style="dim") for item in parts(document, "direct")]
    pieces += [
        Text(f"{humanised(kind).lower()}: not fitted: {reason}", style="dim")
        for kind, reason in part(document, "refused").items()
    ]
    pieces += [Text(f"! {finding}") for finding in texts(document, "findings")]
    return Group(*pieces)


def _model_rows(
    table: Table, model: Mapping[str, object], document: Mapping[str, object]
) -> None:
    limits = named_parts(model, "limits")
    rows: list[tuple[str, str, float | None, str]] = [
        ("gain", "gain", number(model, "gain"), text(model, "gain_unit"))
    ]
    if document.get("input_range") is not None:
        unit = text(document, "gain_engineering_unit")
        rows.append(("", "gain, engineering", number(model, "gain_engineering"), unit))
    if not model.get("integrating"):
        rows.append(("total_lag", "lags and delays", number(model, "total_lag"), "s"))
    rows += [
        (f"time_constant_{place}", f"time constant {place}", lag, "s")
        for place, lag in enumerate(numbers(model, "time_constants"), start=1)
    ]
    rows.append(("dead_time", "dead time", number(model, "dead_time"), "s"))
    if number(model, "inverse_response") is not None:
        rows.append(
            ("inverse_response", "inverse response", number(model, "inverse_response"), "s")
        )
    residual = part(model, "residual")
    rows.append(("", "residual, rms", number(residual, "rms"), _residual_words(residual)))
    name = humanised(text(model, "kind"))
    for key, title, value, unit in rows:
        limit = limits.get(key, {})
        bounds = (
            f"{figure(number(limit, 'low'))} to {figure(number(limit, 'high'))}"
            if limit
            else ""
        )
        table.add_row(name, title, figure(value), bounds, unit)
        name = ""


def _residual_words(residual: Mapping[str, object]) -> str:
    white = part(residual, "whiteness").get("white")
    independent = part(residual, "input_correlation").get("independent")
    return (
        f"{'white' if white else 'not white'}, "
        f"{'independent of the input' if independent else 'follows the input'}"
    )


def _direct_words(method: Mapping[str, object]) -> str:
    name = text(method, "method")
    if "refused" in method:
        return f"{name}: {text(method, 'refused')}"
    lags = " and ".join(figure(value) for value in numbers(method, "time_constants"))
    lag = f"time constant {lags} s, " if lags else ""
    return (
        f"{name}: gain {figure(number(method, 'gain'))}, {lag}"
        f"dead time {figure(number(method, 'dead_time'))} s"
    )


def tuning_view(document: Mapping[str, object]) -> RenderableType:
    """Return a tuning for the terminal.

    Parameters
    ----------
    document : dict
        From ``harness.app.tune.tune``.
    """
    pieces: list[RenderableType] = [
        Text(f"{text(document, 'source')}: {process_words(document)}"),
        Text(text(document, "action_reason")),
        _comparison(document),
    ]
    for name, rule in named_parts(document, "rules").items():
        typed = part(rule, "entered")
        if typed:
            pieces.append(Text(f"{name}: type in {entered_words(typed)}"))
        pieces += [Text(f"! {finding}") for finding in texts(rule, "findings")]
    for name, reason in part(document, "refused").items():
        pieces.append(Text(f"{name}: not given: {reason}", style="dim"))
    pieces += [Text(f"! {finding}") for finding in texts(document, "findings")]
    return Group(*pieces)


def _comparison(document: Mapping[str, object]) -> Table:
    conditions = part(document, "conditions")
    times = ", ".join(short(value) for value in numbers(document, "closed_loop_times"))
    title = (
        f"closed-loop time {times} s; {text(conditions, 'prediction')} prediction; unit steps; times "
        "in seconds"
    )
    table = Table(title=title, title_justify="left")
    titles = (
        "rule", "form", "Kc", "Ti", "Td", "Ms", "GM", "PM °", "DM", "over-\nshoot %", "settled\n2 %",
        "IAE\nsetpoint", "load\npeak", "IAE\nload", "worst\nMs",
    )  # fmt: skip
    for heading in titles:
        table.add_column(
            heading, justify="left" if heading in {"rule", "form"} else "right", no_wrap=True
        )
    for name, rule in named_parts(document, "rules").items():
        table.add_row(name, text(rule, "form"), *comparison_figures(rule))
    return table


def comparison_figures(rule: Mapping[str, object]) -> list[str]:
    """Return a row of the table that compares tunings, behind name and form.

    Parameters
    ----------
    rule : dict
        One rule of the document.
    """
    margins, metrics = part(rule, "margins"), part(rule, "metrics")
    setpoint, load = part(metrics, "setpoint"), part(metrics, "load")
    overshoot = number(setpoint, "overshoot")
    robust = part(rule, "robustness")
    worst = number(robust, "worst_maximum_sensitivity")
    return [
        short(number(rule, "gain")),
        short(number(rule, "integral_time")),
        short(number(rule, "derivative_time") or None),
        short(number(margins, "maximum_sensitivity")),
        short(number(margins, "gain_margin"), "∞"),
        short(number(margins, "phase_margin_degrees"), "∞"),
        short(number(margins, "delay_margin"), "∞"),
        short(None if overshoot is None else 100.0 * overshoot, "unstable"),
        short(number(setpoint, "settling_time_2")),
        short(number(setpoint, "iae")),
        short(number(load, "peak_deviation")),
        short(number(load, "iae")),
        short(worst, "unstable"),
    ]


def process_words(document: Mapping[str, object]) -> str:
    """Return the process that was tuned, in one sentence.

    Parameters
    ----------
    document : dict
        From ``harness.app.tune.tune``.
    """
    process, conditions = part(document, "process"), part(document, "conditions")
    lags = " and ".join(figure(value) for value in numbers(process, "time_constants"))
    inverse = -sum(value for value in numbers(process, "numerator_times") if value < 0.0)
    words = [
        humanised(text(process, "kind")),
        f"gain {figure(number(process, 'gain'))}{' per s' if process.get('integrating') else ''}"
        f" [{text(document, 'gain_unit')}]",
        f"time constants {lags} s" if lags else "",
        f"dead time {figure(number(process, 'dead_time'))} s",
        f"inverse response {figure(inverse)} s" if inverse else "",
    ]
    counted = number(conditions, "counted_as_dead_time") or 0.0
    if counted:
        words.append(f"scan and filter counted as {figure(counted)} s of dead time more")
    return ", ".join(word for word in words if word) + "."


def entered_words(typed: Mapping[str, object]) -> str:
    """Return what to type into a block, and what its rounding does.

    Parameters
    ----------
    typed : dict
        The part ``entered`` of a rule.
    """
    units = part(typed, "units")
    values = ", ".join(
        f"{name} {number(part(typed, 'values'), name):.6g} {units.get(name, '')}"
        for name in part(typed, "values")
    )
    effect = part(typed, "effect")
    change = 100.0 * (number(effect, "gain") or 0.0)
    before, after = [*numbers(effect, "maximum_sensitivity"), 0.0, 0.0][:2]
    stable = "" if effect.get("stable") else ", and makes the loop UNSTABLE"
    return (
        f"{values} ({text(typed, 'form')} form); rounding changes the gain by {change:+.2g} % and Ms "
        f"from {before:.3g} to {after:.3g}{stable}"
    )
