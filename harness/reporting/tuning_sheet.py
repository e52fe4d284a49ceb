"""The tuning sheet: what to type in, what it does, and where it comes from; one HTML file."""

from __future__ import annotations

from importlib.resources import files
from typing import TYPE_CHECKING

from harness.reporting.document import named_parts, number, numbers, part, text, texts
from harness.reporting.markup import Markup, element, escaped, joined, table
from harness.reporting.tuning_tables import comparison_figures, entered_words, process_words
from harness.reporting.words import CAUTIONS, figure, humanised

if TYPE_CHECKING:
    from collections.abc import Mapping

SIGNATURES = ("Computed by", "Entered by")
METHOD = (
    "Each rule is applied to the process after the half rule (S. Skogestad, 2003), with half the "
    "scan, the filter and the output delay counted as dead time. The predictions and margins are of "
    "the whole process with its exact dead time, unlimited, under the block as it runs: sampled and "
    "held where a scan is given. Steps are of one: overshoot is a share of the step, the peak after a "
    "load is per unit of controller output, integrals are in seconds per unit."
)
COLUMNS = (
    "Rule", "Kc", "Ti, s", "Td, s", "Ms", "Gain margin", "Phase margin, °", "Delay margin, s",
    "Over-shoot, %", "Settled 2 %, s", "IAE set-point", "Load peak", "IAE load", "Worst Ms",
)  # fmt: skip


def render_sheet(document: Mapping[str, object], drawing: str) -> str:
    """Return the tuning sheet as one HTML document; the same input gives the same bytes.

    Parameters
    ----------
    document : dict
        From ``harness.app.tune.tune``.
    drawing : str
        The responses as an ``<svg>`` element.
    """
    style = files("harness.reporting").joinpath("report.css").read_text(encoding="utf-8")
    title = f"Tuning sheet: {text(document, 'source')}"
    head = element(
        "header",
        element(
            "div",
            element("p", "Controller tuning sheet", css="kind"),
            element("h1", text(document, "source")),
            element("p", process_words(document), css="trial"),
        ),
    )
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{escaped(title)}</title>\n<style>\n{style}</style>\n</head>\n"
        f"<body>\n<main>\n{head}\n{tuning_sections(document, drawing)}"
        f"{_section('Cautions', _list(CAUTIONS, 'cautions'))}"
        f"{_section('Signatures', _signatures())}</main>\n</body>\n</html>\n"
    )


def tuning_sections(document: Mapping[str, object], drawing: str) -> Markup:
    """Return the sections of a tuning, for its own sheet or as part of a report.

    Parameters
    ----------
    document : dict
        From ``harness.app.tune.tune``.
    drawing : str
        The responses as an ``<svg>`` element.
    """
    return joined(
        (
            _section("Process and conditions", _conditions(document)),
            _section("Side by side", _comparison(document)),
            _section("Responses", Markup(f'<div class="plot">{drawing}</div>')),
            _section("Before the test", _findings(document)),
            _section("Settings, rule by rule", _rules(document)),
            _section("How it was computed", element("p", METHOD)),
        )
    )


def _section(title: str, content: Markup) -> Markup:
    return Markup(f"<section>{element('h2', title)}{content}</section>\n")


def _conditions(document: Mapping[str, object]) -> Markup:
    conditions, process = part(document, "conditions"), part(document, "process")
    seconds = [
        ("Closed-loop time constant", numbers(document, "closed_loop_times")),
        ("Scan", [number(conditions, "scan") or 0.0]),
        ("Filter before the block", [number(conditions, "filter") or 0.0]),
        ("Output delay", [number(conditions, "output_delay") or 0.0]),
        ("Counted as dead time beside the process", [number(conditions, "counted_as_dead_time") or 0.0]),
    ]  # fmt: skip
    rows: list[tuple[object, ...]] = [
        ("Process gain", f"{figure(number(process, 'gain'))} {text(document, 'gain_unit')}")
    ]
    engineering = number(process, "gain_engineering")
    if engineering is not None:
        rows.append(("Process gain, engineering units", figure(engineering)))
    rows += [
        (name, ", ".join(f"{figure(value)} s" for value in values)) for name, values in seconds
    ]
    spread = 100.0 * (number(conditions, "spread") or 0.0)
    rows += [
        ("Prediction", text(conditions, "prediction")),
        ("Derivative acts on", text(conditions, "derivative_on")),
        ("Spread of the plant", f"{spread:g} % either way on gain, lags and dead time"),
        ("Action", text(document, "action")),
    ]
    facts = table((), rows, css="facts")
    return joined((facts, element("p", text(document, "action_reason"), css="note")))


def _comparison(document: Mapping[str, object]) -> Markup:
    rows = [
        [name, *comparison_figures(rule)]
        for name, rule in named_parts(document, "rules").items()
    ]
    spread = 100.0 * (number(part(document, "conditions"), "spread") or 0.0)
    note = (
        f"Ms is the largest amplification of a disturbance; worst Ms is over a plant {spread:g} % off "
        "in gain, lags and dead time. Kc, Ti and Td are in the form that the rule is published in, or "
        "that was asked for; see below."
    )
    return joined((table(COLUMNS, rows, css="tunings"), element("p", note, css="note")))


def _findings(document: Mapping[str, object]) -> Markup:
    found = texts(document, "findings")
    for rule, result in named_parts(document, "rules").items():
        told = texts(result, "findings")
        found += [item if item.startswith(rule) else f"{rule}: {item}" for item in told]
    if not found:
        return element("p", "Nothing is expected to limit the test.")
    return _list(tuple(found), "findings")


def _rules(document: Mapping[str, object]) -> Markup:
    pieces = [_rule(name, rule) for name, rule in named_parts(document, "rules").items()]
    refused = part(document, "refused")
    if refused:
        items = tuple(f"{name}: {reason}" for name, reason in refused.items())
        pieces.append(joined((element("h3", "Not given"), _list(items, "findings"))))
    return joined(pieces)


def _rule(name: str, rule: Mapping[str, object]) -> Markup:
    settings = part(rule, "settings")
    reduced = part(rule, "reduced")
    lags = " and ".join(figure(value) for value in numbers(reduced, "time_constants"))
    after = f"time constants {lags} s, " if lags else ""
    words = (
        f"For {text(rule, 'aim')}. Applied to {humanised(text(reduced, 'kind')).lower()}: gain "
        f"{figure(number(reduced, 'gain'))}, {after}dead time {figure(number(reduced, 'dead_time'))} s. "
        f"Source: {text(rule, 'source')}."
    )
    forms = [
        _form_row(form, part(settings, form))
        for form in ("ideal", "series", "parallel")
        if part(settings, form)
    ]
    titles = ("Form", "Gain", "Integral", "Derivative")
    pieces = [
        element("h3", f"{text(rule, 'title')} ({name})"),
        element("p", words, css="note"),
        table(titles, forms, css="forms"),
        element("p", _units(settings), css="note"),
    ]
    typed = part(rule, "entered")
    if typed:
        pieces.append(element("p", element("b", f"Type in {entered_words(typed)}.")))
    if settings.get("series_refused"):
        pieces.append(element("p", text(settings, "series_refused"), css="note"))
    return Markup(f'<div class="together">{joined(pieces)}</div>')


def _form_row(form: str, values: Mapping[str, object]) -> list[object]:
    if form == "parallel":
        return [
            "parallel: Kp, Ki, Kd",
            figure(number(values, "gain")),
            f"{figure(number(values, 'integral'))} 1/s",
            f"{figure(number(values, 'derivative'))} s",
        ]
    integral = number(values, "integral_time")
    derivative = number(values, "derivative_time") or 0.0
    return [
        f"{form}: Kc, Ti, Td",
        figure(number(values, "gain")),
        "none" if integral is None else f"{figure(integral)} s",
        f"{figure(derivative)} s" if derivative else "none",
    ]


def _units(settings: Mapping[str, object]) -> str:
    """Return the ideal form's settings in the other units, in one sentence."""
    gains, integral = part(settings, "gains"), part(settings, "integral")
    words = []
    band = number(gains, "proportional_band")
    if band is not None:
        words.append(f"proportional band {figure(band)} %")
    for name in ("engineering", "counts"):
        value = part(gains, name)
        if value:
            words.append(f"gain {figure(number(value, 'value'))} {text(value, 'unit')}")
    if integral:
        words += [
            f"integral {figure(number(integral, 'min'))} min",
            f"{figure(number(integral, 'repeats/min'))} repeats/min",
            f"{figure(number(integral, '1/s'))} 1/s",
        ]
    return f"Ideal form in other units: {', '.join(words)}." if words else ""


def _list(items: tuple[str, ...], css: str) -> Markup:
    return Markup(f'<ul class="{css}">{joined(element("li", item) for item in items)}</ul>')


def _signatures() -> Markup:
    rows = [(who, "", "") for who in SIGNATURES]
    return table(("", "Name, signature", "Date"), rows, css="signatures")
