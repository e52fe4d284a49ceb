"""Does what a controller puts out arrive as it should; and what a refused request gives away."""

from __future__ import annotations

import math
import re
import struct
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from harness.analysis.signal_case import TagCheck
from harness.analysis.signal_decode import taken_as
from harness.analysis.signal_mistakes import straight_line
from harness.domain.rig import Encoding, WordOrder
from harness.domain.verdict import Outcome

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from harness.analysis.signal_case import ValvePoint

_TOLERANCE = (
    0.25  # of an output [%]; a converter of 12 bit has 0.024, a display of three digits 0.1
)
_RELATIVE = 1e-4  # where a refused number is told with few digits [-]
_WHOLE = 100.0
_FEW = 2  # points


@dataclass(frozen=True, slots=True, kw_only=True)
class _Guess:
    name: str
    text: str
    look_at: str
    predict: Callable[[float], float]


def check_valve(tag: str, points: Sequence[ValvePoint]) -> TagCheck:
    """Return whether a valve command arrives as the controller was told to put it out.

    Parameters
    ----------
    tag : str
        Tag of the valve.
    points : sequence of ValvePoint
        Test points in order.

    Returns
    -------
    TagCheck
        Invalid where nothing came and nothing says why.
    """
    heard = [(p.told, _number(tag, p)) for p in points]
    pairs = [(told, number) for told, number in heard if number is not None]
    refused = tuple(dict.fromkeys(text for p in points for text in p.refused))
    if not pairs:
        cause = refusal_cause(refused)
        if cause is not None:
            return replace(cause, tag=tag)
        return TagCheck(
            tag=tag,
            outcome=Outcome.INVALID,
            mistake="nothing received",
            evidence=f"no output came for {tag}, and no request was refused",
            look_at=f"whether the controller writes {tag} at all, and to which address",
        )
    # A constant bias is a matter for the score of a trial, not for the wiring of the signal.
    if all(_near(told, number) for told, number in pairs):
        return TagCheck(tag=tag, outcome=Outcome.PASS, evidence=f"right at {len(pairs)} points")
    told_of = _told_of(pairs)
    found = [
        guess
        for guess in _guesses(pairs)
        if all(_near(guess.predict(told), number) for told, number in pairs)
    ]
    if not found:
        return TagCheck(
            tag=tag,
            outcome=Outcome.FAIL,
            mistake="not explained",
            evidence=f"{told_of}; no single mistake of the table explains all of it",
            look_at="address, type, word order and scaling of that output, one after the other",
        )
    best = found[0]
    return TagCheck(
        tag=tag,
        outcome=Outcome.FAIL,
        mistake=best.name,
        evidence=f"the controller {best.text}: {told_of}",
        look_at=best.look_at,
    )


# What a refusal says, the name of the mistake behind it, and where to look.
_CAUSES = (
    ("is not here; the rig is unit", "wrong unit id", "the unit (slave) id in the controller"),
    (
        "is read only",
        "wrong valve register",
        "the address that the controller writes its output to",
    ),
    (
        "is not in the map",
        "address base or wrong address",
        "whether the controller counts registers from 0 or from 1, and the length of its block",
    ),
    ("half of", "half of a 32-bit value written", "the data type: it takes two registers"),
    (
        "is outside",
        "value out of range written",
        "unit, scaling and word order of what the controller writes",
    ),
    ("has no such function", "wrong function code", "the function code for that request"),
)


def refusal_cause(refused: Sequence[str]) -> TagCheck | None:
    """Return what requests that were refused give away.

    Parameters
    ----------
    refused : sequence of str
        Refusals of the rig, in words.

    Returns
    -------
    TagCheck or None
        A failed check without tag; None where no refusal tells.
    """
    for part, name, look in _CAUSES:
        for text in refused:
            if part in text:
                return TagCheck(
                    tag="",
                    outcome=Outcome.FAIL,
                    mistake=name,
                    evidence=f"the rig refused: {text}",
                    look_at=look,
                )
    return None


def _number(tag: str, point: ValvePoint) -> float | None:
    """Return what came, or what was refused because it lies outside the valve's range."""
    for text in point.refused:
        match = re.search(rf"{re.escape(tag)} = (\S+)", text)
        if match is not None:
            try:
                return float(match.group(1))
            except ValueError:
                continue
    return point.received


def _near(predicted: float, number: float) -> bool:
    if math.isnan(predicted) or math.isnan(number):
        return math.isnan(predicted) and math.isnan(number)
    few_digits = abs(number) > _WHOLE * _WHOLE and math.isclose(
        predicted, number, rel_tol=_RELATIVE
    )
    return abs(predicted - number) <= _TOLERANCE or few_digits


def _told_of(pairs: Sequence[tuple[float, float]]) -> str:
    ends = dict.fromkeys((min(pairs), max(pairs)))
    return ", ".join(
        f"{number:.5g} % arrived where {told:.4g} % was ordered" for told, number in ends
    )


def _guesses(pairs: Sequence[tuple[float, float]]) -> Iterator[_Guess]:
    scale = "the scaling of that output in the controller: the rig takes percent"
    yield _Guess(
        name="fraction for percent",
        text="sends a fraction in place of percent",
        look_at=scale,
        predict=lambda told: told / _WHOLE,
    )
    yield _Guess(
        name="inverted output",
        text="sends 100 % minus its output",
        look_at="whether the output is meant for a valve that opens without air",
        predict=lambda told: _WHOLE - told,
    )
    for order in WordOrder:
        if order is not WordOrder.ABCD:
            yield _Guess(
                name=f"word order {order.value}",
                text=f"sends its float32 with the bytes as {order.value} of the map's order",
                look_at="the word order (byte and word swap) of that output in the controller",
                predict=lambda told, order=order: taken_as(  # type: ignore[misc]
                    struct.pack(">f", told), Encoding.FLOAT32, order
                ),
            )
    values = [number for _, number in pairs]
    if len(pairs) >= _FEW and max(values) - min(values) <= _TOLERANCE:
        yield _Guess(
            name="output does not follow",
            text=f"sends {values[0]:.5g} % whatever is ordered",
            look_at="whether the block is in manual, and its output is what is sent",
            predict=lambda _: values[0],
        )
    offset = sum(number - told for told, number in pairs) / len(pairs)
    yield _Guess(
        name="output offset",
        text=f"adds {offset:+.4g} % to its output",
        look_at="bias and zero of that output in the controller",
        predict=lambda told: told + offset,
    )
    line = straight_line(list(pairs))
    if line is not None:
        low, slope = line
        yield _Guess(
            name="wrong output scale",
            text=f"sends {low:.4g} to {low + _WHOLE * slope:.4g} for 0 to 100 %",
            look_at=scale,
            predict=lambda told: low + slope * told,
        )
