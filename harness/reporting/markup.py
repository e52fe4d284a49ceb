"""Small pieces of HTML: escaped text, tables, and the gauge of a metric in its limits."""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

from harness.domain.verdict import Outcome
from harness.reporting.words import SIGNS, outcome_of

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

GAUGE_WIDTH, GAUGE_HEIGHT = 92.0, 14.0  # [px at 96 dpi]
GAUGE_LOW, GAUGE_HIGH = (
    18.0,
    74.0,
)  # where the limits stand; outside is room for what missed [px]


class Markup(str):
    """Text that is HTML already and is not escaped again."""

    __slots__ = ()


def escaped(value: object) -> Markup:
    """Return a value as HTML text; what is Markup already stays as it is."""
    return value if isinstance(value, Markup) else Markup(escape(str(value)))


def element(name: str, *content: object, css: str = "") -> Markup:
    """Return an element with escaped content."""
    attribute = f' class="{escape(css)}"' if css else ""
    return Markup(f"<{name}{attribute}>{''.join(escaped(item) for item in content)}</{name}>")


def joined(pieces: Iterable[object]) -> Markup:
    """Return the pieces one after the other."""
    return Markup("".join(escaped(piece) for piece in pieces))


def table(
    titles: Sequence[object],
    rows: Iterable[Sequence[object]],
    css: str = "",
    row_css: Sequence[str] = (),
) -> Markup:
    """Return a table; its first column names the row.

    Parameters
    ----------
    titles : sequence
        Titles of the columns; empty for a table without a head.
    rows : iterable of sequence
        Cells, text or Markup.
    css : str
        Class of the table.
    row_css : sequence of str
        Class of each row, where given.
    """
    head = ""
    if titles:
        cells = joined(Markup(f'<th scope="col">{escaped(title)}</th>') for title in titles)
        head = f"<thead><tr>{cells}</tr></thead>"
    body = []
    for index, (first, *others) in enumerate(rows):
        name = Markup(f'<th scope="row">{escaped(first)}</th>')
        cells = joined(element("td", cell) for cell in others)
        kind = row_css[index] if index < len(row_css) else ""
        body.append(element("tr", name, cells, css=kind))
    return Markup(f'<table class="{escape(css)}">{head}<tbody>{joined(body)}</tbody></table>')


def badge(outcome: Outcome | str, css: str = "") -> Markup:
    """Return a verdict as sign and word, readable without colour."""
    known = outcome if isinstance(outcome, Outcome) else outcome_of(outcome)
    kind = known.value.replace(" ", "-")
    sign = element("span", SIGNS[known], css="sign")
    return element("span", sign, known.value, css=f"badge {kind} {css}".strip())


def gauge(
    measured: float | None, predicted: float | None, low: float | None, high: float | None
) -> Markup:
    """Return a small drawing of where a figure lies between its limits.

    The bar is what is allowed, the upright stroke the prediction, the dot the measurement; a
    dot outside the bar is a miss, drawn at the edge when it is far out.

    Parameters
    ----------
    measured, predicted, low, high : float or None
        In one unit [any unit]; a missing low limit counts as 0.
    """
    if high is None or measured is None:
        return Markup("")
    low = 0.0 if low is None else low
    if high <= low:
        return Markup("")

    def place(value: float) -> float:
        at = GAUGE_LOW + (value - low) / (high - low) * (GAUGE_HIGH - GAUGE_LOW)
        return min(max(at, 5.0), GAUGE_WIDTH - 5.0)

    middle = GAUGE_HEIGHT / 2
    stroke = ""
    if predicted is not None:
        at = place(predicted)
        stroke = f'<path d="M{at:.1f} 1.5V12.5" class="predicted"/>'
    kind = "inside" if low <= measured <= high else "outside"
    return Markup(
        f'<svg class="gauge" viewBox="0 0 {GAUGE_WIDTH:g} {GAUGE_HEIGHT:g}" '
        f'width="{GAUGE_WIDTH:g}" height="{GAUGE_HEIGHT:g}" aria-hidden="true">'
        f'<path d="M1 {middle:g}H{GAUGE_WIDTH - 1:g}" class="axis"/>'
        f'<rect x="{GAUGE_LOW:g}" y="4.5" width="{GAUGE_HIGH - GAUGE_LOW:g}" height="5" '
        f'class="allowed"/>{stroke}'
        f'<circle cx="{place(measured):.1f}" cy="{middle:g}" r="3.1" class="{kind}"/></svg>'
    )
