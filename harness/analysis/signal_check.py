"""Is a signal right at both ends, and if not, which mistake explains what was seen.

Every mistake of `signal_mistakes.MISTAKES` predicts what the controller would say at each test
point. The one that explains all of them is named: predictions to the last digit before those
within the tolerance, without free parameters before fitted ones. Whatever explains the points as
well is told, so that nobody mends the wrong thing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.analysis.signal_case import (
    MEASUREMENT_HIGH_MA,
    MEASUREMENT_LOW_MA,
    TagCheck,
    fraction_of,
)
from harness.analysis.signal_mistakes import MISTAKES, right_readings
from harness.domain.verdict import Outcome

if TYPE_CHECKING:
    from collections.abc import Sequence

    from harness.analysis.signal_case import Said, TransmitterCase
    from harness.analysis.signal_mistakes import Hypothesis

_EXACT = 1e-4  # relative; a float32 holds seven digits, a display often five [-]
_MOST_OTHERS = 3  # rivals told of [-]
_CLAMPED = "clamped ends"


@dataclass(frozen=True, slots=True, kw_only=True)
class _Fit:
    hypothesis: Hypothesis
    digits: bool  # to the last digit, at every point

    @property
    def rank(self) -> tuple[bool, bool, int]:
        """Return the order of preference: exact digits of registers, few parameters."""
        exact = self.digits and self.hypothesis.exact
        return not exact, not self.digits, self.hypothesis.fitted


def check_transmitter(case: TransmitterCase) -> TagCheck:
    """Return whether a controller reads a transmitter right, and what is wrong if not.

    Parameters
    ----------
    case : TransmitterCase
        Test points, map and range.

    Returns
    -------
    TagCheck
        Invalid where the controller said nothing.
    """
    tag = case.point.name
    spoken = [said for said in case.measured if said.said is not None]
    if not spoken:
        return TagCheck(
            tag=tag,
            outcome=Outcome.INVALID,
            mistake="nothing said",
            evidence="the controller told no value of this tag at any test point",
            look_at=f"whether it writes {tag}.RB (what it reads) in every scan, or answer the prompt",
        )
    readings = [
        reading
        for reading in right_readings(case)
        if all(_matches(reading, said, case) for said in spoken)
    ]
    if readings:
        return _clipped(case, readings, spoken) or _failures(case, readings)
    fits = _fits(case, spoken)
    if not fits:
        return TagCheck(
            tag=tag,
            outcome=Outcome.FAIL,
            mistake="not explained",
            evidence=f"{_heard(case, spoken)}; no single mistake of the table explains all of it",
            look_at="address, type, word order and range of that tag, one after the other",
        )
    best = fits[0].hypothesis
    rivals = dict.fromkeys(
        fit.hypothesis.name
        for fit in fits[1:]
        if fit.rank == fits[0].rank and fit.hypothesis.name != best.name
    )
    return TagCheck(
        tag=tag,
        outcome=Outcome.FAIL,
        mistake=best.name,
        evidence=f"the controller {best.text}: {_heard(case, spoken)}",
        look_at=best.look_at,
        others=tuple(rivals)[:_MOST_OTHERS],
    )


def _clipped(
    case: TransmitterCase, readings: Sequence[Hypothesis], spoken: Sequence[Said]
) -> TagCheck | None:
    """Return the finding that the ends are cut off though the map shows them; else None."""
    limits = case.point.range
    whole = next(right_readings(case))
    if all(_matches(whole, said, case) for said in spoken):
        return None
    shows_all = any(
        all(
            abs(reading.predict(said) - limits.from_fraction(said.fraction))
            <= case.tolerance * limits.span
            for said in spoken
        )
        for reading in right_readings(case)
        if reading.exact
    )
    if not shows_all:
        return None
    cut = readings[0]
    return TagCheck(
        tag=case.point.name,
        outcome=Outcome.FAIL,
        mistake=_CLAMPED,
        evidence=f"the controller stops at the ends of the range: {_heard(case, spoken)}",
        look_at="the limits of the input's scaling, or the register that it reads: a measurement "
        "reaches from -1.25 to 103.125 % (NAMUR NE 43)",
        others=(f"{cut.text}, whose type ends there",),
    )


def _fits(case: TransmitterCase, spoken: Sequence[Said]) -> list[_Fit]:
    """Return the hypotheses that explain every point, the best first."""
    found = []
    for mistake in MISTAKES:
        for hypothesis in mistake(case):
            if all(_matches(hypothesis, said, case) for said in spoken):
                digits = all(_same_digits(hypothesis.predict(s), s.number) for s in spoken)
                found.append(_Fit(hypothesis=hypothesis, digits=digits))
    # A fitted line explains whatever a simpler one does; only a better rank stands before it.
    return sorted(found, key=lambda fit: fit.rank)


def _matches(hypothesis: Hypothesis, said: Said, case: TransmitterCase) -> bool:
    """Return whether a prediction is what was said, within the tolerance."""
    predicted, heard = hypothesis.predict(said), said.number
    if math.isnan(predicted) or math.isnan(heard):
        # A mistake that ends in no number at all explains a controller that says it has none.
        return math.isnan(predicted) and math.isnan(heard) and bool(hypothesis.name)
    span = case.point.range.span
    limits = case.point.range
    own = max(abs(limits.lower), abs(limits.upper), span)
    # In another unit the tolerance is of the span in that unit.
    scale = max(1.0, abs(predicted) / own) if own > 0.0 else 1.0
    small = abs(predicted) < case.tolerance * span
    room = case.tolerance * span * (scale if not small else 1.0)
    return abs(predicted - heard) <= room or _same_digits(predicted, heard)


def _same_digits(predicted: float, heard: float) -> bool:
    if math.isnan(predicted):
        return math.isnan(heard)
    return math.isclose(predicted, heard, rel_tol=_EXACT, abs_tol=1e-300)


def _failures(case: TransmitterCase, readings: Sequence[Hypothesis]) -> TagCheck:
    """Judge what is said outside the band of measurements, where all within it is right."""
    tag, limits = case.point.name, case.point.range
    notes: list[str] = []
    wrong: list[str] = []
    last = math.nan  # said at the last point that was no failure
    for said in case.points:
        last = last if said.band.failed else said.number
        told = f"{said.number:.4g} {limits.unit}" if math.isfinite(said.number) else "no value"
        where = f"at {said.current_ma:g} mA"
        if said.band.undefined:
            notes.append(
                f"{where} ({said.band.value}: neither a measurement nor a failure) it says {told}"
            )
        if not said.band.failed or not math.isfinite(said.number):
            continue
        if any(_hides(reading, said, case) for reading in readings):
            notes.append(f"{where} the register's type cannot show that the transmitter failed")
        elif said.number == last:
            notes.append(f"{where} it holds the value that it had before")
        else:
            wrong.append(f"{told} ({100 * limits.to_fraction(said.number):.4g} %) {where}")
    if wrong:
        return TagCheck(
            tag=tag,
            outcome=Outcome.FAIL,
            mistake="failure current not recognised",
            evidence=f"the controller says {' and '.join(wrong)}; at most 3.6 and at least 21.0 mA "
            "a transmitter has failed (NAMUR NE 43), and there is no value",
            look_at="what the controller does on a broken wire: limits, substitute value, hold",
            notes=tuple(notes),
        )
    if not any(said.band.failed for said in case.points):
        notes.append("failure currents were not tried")
    return TagCheck(
        tag=tag,
        outcome=Outcome.PASS,
        evidence=f"right at {len(case.measured)} points",
        notes=tuple(notes),
    )


def _hides(reading: Hypothesis, said: Said, case: TransmitterCase) -> bool:
    """Return whether the registers show a failure as a measurement, as it was said."""
    shown = case.point.range.to_fraction(reading.predict(said))
    low, high = fraction_of(MEASUREMENT_LOW_MA), fraction_of(MEASUREMENT_HIGH_MA)
    return reading.exact and low <= shown <= high and _matches(reading, said, case)


def _heard(case: TransmitterCase, spoken: Sequence[Said]) -> str:
    """Say what was forced and what was heard, at the two points furthest apart."""
    limits = case.point.range
    ends = (
        min(spoken, key=lambda said: said.current_ma),
        max(spoken, key=lambda said: said.current_ma),
    )
    told = []
    for said in dict.fromkeys(id(end) for end in ends):
        end = next(each for each in ends if id(each) == said)
        value = limits.from_fraction(end.fraction)
        told.append(
            f"says {end.number:.5g} where {value:.4g} {limits.unit} ({100 * end.fraction:.4g} %) "
            "is transmitted"
        )
    return ", ".join(told)
