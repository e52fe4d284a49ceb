"""The mistakes that a signal can suffer, each as a prediction of what the controller would say.

A mistake is a hypothesis: given a test point it predicts the number. `MISTAKES` is the table;
a new one is a function and a line in it. A hypothesis with free parameters (another range, an
offset) is fitted to the points first, and counts as dearer than one without.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from harness.analysis.signal_case import LIVE_ZERO_MA, SPAN_MA, Said
from harness.analysis.signal_decode import registers_at, scaled, words_of
from harness.domain.rig import Encoding, RegisterItem, Scaling, WordOrder
from harness.domain.signals import PointKind

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

    from harness.analysis.signal_case import TransmitterCase

_FULL_MA = LIVE_ZERO_MA + SPAN_MA
_SIGN_TWINS = {
    Encoding.UINT16: Encoding.INT16,
    Encoding.INT16: Encoding.UINT16,
    Encoding.UINT32: Encoding.INT32,
    Encoding.INT32: Encoding.UINT32,
}
# Units that are taken for one another, as factors on the rig's unit (SI brochure; the foot and the
# gallon by the international agreement of 1959, values from memory).
_UNITS = {
    "m": (("mm", 1000.0), ("cm", 100.0), ("ft", 1 / 0.3048), ("in", 1 / 0.0254)),
    "m3/h": (
        ("l/s", 1 / 3.6),
        ("l/min", 1000 / 60),
        ("l/h", 1000.0),
        ("m3/min", 1 / 60),
        ("m3/s", 1 / 3600),
        ("US gpm", 1 / 0.2271247),
    ),
}
_DECIMALS = (10.0, 100.0, 1000.0, 0.1, 0.01, 0.001)
_FEWEST_TO_FIT = 3  # points that a straight line must explain, or it explains nothing [-]


@dataclass(frozen=True, slots=True, kw_only=True)
class Hypothesis:
    """What would be said, if it were so.

    Parameters
    ----------
    name : str
        Name of the mistake, short; the same name for variants of one mistake.
    text : str
        What the controller does, in a sentence without a full stop.
    look_at : str
        What to look at.
    predict : callable
        Gives what would be said at a test point; not a number where it cannot tell [unit].
    exact : bool
        Whether it predicts to the last digit, from the very registers.
    fitted : int
        Free parameters [-].
    """

    name: str
    text: str
    look_at: str
    predict: Callable[[Said], float]
    exact: bool = False
    fitted: int = 0


def right(case: TransmitterCase) -> Hypothesis:
    """Return the hypothesis that nothing is wrong.

    Parameters
    ----------
    case : TransmitterCase
        The transmitter.
    """
    limits = case.point.range
    return Hypothesis(
        name="",
        text="says what was forced",
        look_at="",
        predict=lambda said: limits.from_fraction(said.fraction),
    )


def right_readings(case: TransmitterCase) -> Iterator[Hypothesis]:
    """Yield every right way to read the tag: its value, and each of its items after the map.

    An integer cannot show every current: a uint16 on 0 to 65535 ends at 0 and 100 %. What the
    registers themselves cannot say, the controller need not.

    Parameters
    ----------
    case : TransmitterCase
        The transmitter.
    """
    yield right(case)
    for item in case.items:
        if item.encoding is not Encoding.BIT:
            yield _register_reading(
                case,
                item,
                name="",
                text=f"reads {item.encoding.value} at {item.address}",
                look_at="",
            )


def _word_order(case: TransmitterCase) -> Iterator[Hypothesis]:
    for item in case.items:
        if words_of(item.encoding) == 1:
            continue
        for order in WordOrder:
            if order is item.word_order:
                continue
            yield _register_reading(
                case,
                replace(item, word_order=order),
                name=f"word order {order.value}",
                text=f"takes the {item.encoding.value} at {item.address} in the order "
                f"{order.value}; the map says {item.word_order.value}",
                look_at="the word order (byte and word swap) of that value in the controller",
            )


def _address_base(case: TransmitterCase) -> Iterator[Hypothesis]:
    for item in case.items:
        for shift in (1, -1):
            moved = replace(item, address=item.address + shift)
            yield _register_reading(
                case,
                moved,
                name="address base, off by one",
                text=f"reads from {moved.address} where the map says {item.address} "
                "(counted from 0)",
                look_at="whether the controller counts registers from 0 or from 1",
            )


def _swapped(case: TransmitterCase) -> Iterator[Hypothesis]:
    limits = case.point.range
    for point, item in case.neighbours:
        own = point.name == case.point.name or item.encoding is Encoding.BIT
        if own or point.kind is PointKind.READ_BACK:
            continue
        # Scaled with the range of the tag it was taken for, or with its own.
        for scale in (limits, point.range):
            yield _register_reading(
                case,
                item,
                name=f"swapped tags: {point.name} for {case.point.name}",
                text=f"reads {point.name} (at {item.address}) in place of {case.point.name}",
                look_at="the address that the tag is linked to in the controller",
                scale=scale,
            )
    names = sorted({name for said in case.points for name in said.others})
    for name in names:
        if name != case.point.name:
            yield Hypothesis(
                name=f"swapped tags: {name} for {case.point.name}",
                text=f"says the value of {name} in place of {case.point.name}",
                look_at="the tag or node that the value is linked to in the controller",
                predict=lambda said, name=name: said.others.get(name, math.nan),  # type: ignore[misc]
            )


def _signedness(case: TransmitterCase) -> Iterator[Hypothesis]:
    for item in case.items:
        twin = _SIGN_TWINS.get(item.encoding)
        if twin is not None:
            signed = twin in {Encoding.INT16, Encoding.INT32}
            yield _register_reading(
                case,
                replace(item, encoding=twin),
                name="signed for unsigned" if signed else "unsigned for signed",
                text=f"takes the {item.encoding.value} at {item.address} as {twin.value}",
                look_at="the data type of that register in the controller",
            )


def _half_value(case: TransmitterCase) -> Iterator[Hypothesis]:
    """Take one of the two registers of a 32-bit value for the whole of it."""
    for item in case.items:
        if words_of(item.encoding) == 1:
            continue
        for offset, half in enumerate(("first", "second")):
            for kind in (Encoding.UINT16, Encoding.INT16):
                alone = replace(item, address=item.address + offset, encoding=kind)
                yield _register_reading(
                    case,
                    alone,
                    name="half of a 32-bit value",
                    text=f"takes the {half} register of the {item.encoding.value} at "
                    f"{item.address} alone, as {kind.value}",
                    look_at="the data type: it must take two registers",
                )


def _whole_for_float(case: TransmitterCase) -> Iterator[Hypothesis]:
    for item in case.items:
        if item.encoding is not Encoding.FLOAT32:
            continue
        for kind in (Encoding.UINT32, Encoding.INT32):
            yield _register_reading(
                case,
                replace(item, encoding=kind),
                name="integer for float",
                text=f"takes the float32 at {item.address} as {kind.value}",
                look_at="the data type of that value in the controller",
            )


def _raw_for_value(case: TransmitterCase) -> Iterator[Hypothesis]:
    """Take the number in the register for the value: counts, microamperes, a scaled integer."""
    for item in case.items:
        if item.encoding is Encoding.FLOAT32:
            continue
        what = {
            Scaling.COUNTS: f"counts {item.counts_low} to {item.counts_high}",
            Scaling.CURRENT: "microamperes",
            Scaling.ENGINEERING: f"value times {item.factor:g}",
        }[item.scaling]
        if item.scaling is Scaling.ENGINEERING and item.factor == 1.0:
            continue
        yield _register_reading(
            case,
            replace(item, scaling=Scaling.ENGINEERING, factor=1.0),
            name="counts for engineering units",
            text=f"takes the number at {item.address} ({what}) for a value in {case.unit}",
            look_at="the scaling of that input in the controller",
        )


def _percent(case: TransmitterCase) -> Iterator[Hypothesis]:
    look = "the unit and the scaling of that input in the controller"
    for factor, unit in ((100.0, "percent"), (1.0, "fraction")):
        yield Hypothesis(
            name=f"{unit} for engineering units",
            text=f"says the {unit} of span in place of {case.unit}",
            look_at=look,
            predict=lambda said, factor=factor: factor * said.fraction,  # type: ignore[misc]
        )
    for item in case.items:
        if item.scaling is Scaling.COUNTS:
            yield _register_reading(
                case,
                replace(item, counts_low=0, counts_high=100),
                name="percent for counts",
                text=f"takes the counts at {item.address} for percent of span",
                look_at=look,
            )


def _live_zero(case: TransmitterCase) -> Iterator[Hypothesis]:
    limits = case.point.range
    look = "whether the input is scaled as 4-20 mA or as 0-20 mA"
    yield Hypothesis(
        name="scaled 0-20 mA for 4-20 mA",
        text=f"takes 0 to 20 mA for {limits.lower:g} to {limits.upper:g} {limits.unit}",
        look_at=look,
        predict=lambda said: limits.from_fraction(said.current_ma / _FULL_MA),
    )
    yield Hypothesis(
        name="scaled 4-20 mA for 0-20 mA",
        text="takes off a live zero of 4 mA that the number does not have any more",
        look_at=look,
        predict=lambda said: limits.from_fraction(
            (said.fraction * _FULL_MA - LIVE_ZERO_MA) / SPAN_MA
        ),
    )


def _inverted(case: TransmitterCase) -> Iterator[Hypothesis]:
    limits = case.point.range
    yield Hypothesis(
        name="inverted signal",
        text=f"takes 4 mA for {limits.upper:g} and 20 mA for {limits.lower:g} {limits.unit}",
        look_at="the ends of the range in the controller: they are exchanged",
        predict=lambda said: limits.from_fraction(1.0 - said.fraction),
    )


def _units(case: TransmitterCase) -> Iterator[Hypothesis]:
    limits = case.point.range
    for unit, factor in _UNITS.get(case.unit, ()):
        yield Hypothesis(
            name=f"unit {unit} for {case.unit}",
            text=f"says the value in {unit}; the rig's unit is {case.unit}",
            look_at="the engineering unit of that tag in the controller",
            predict=lambda said, factor=factor: factor * limits.from_fraction(said.fraction),  # type: ignore[misc]
        )


def _decimals(case: TransmitterCase) -> Iterator[Hypothesis]:
    limits = case.point.range
    for factor in _DECIMALS:
        yield Hypothesis(
            name=f"decimal factor {factor:g}",
            text=f"says {factor:g} times the value",
            look_at="the decimal places or the multiplier of that tag in the controller",
            predict=lambda said, factor=factor: factor * limits.from_fraction(said.fraction),  # type: ignore[misc]
        )


def _clamped(case: TransmitterCase) -> Iterator[Hypothesis]:
    limits = case.point.range
    yield Hypothesis(
        name="clamped ends",
        text=f"stops at {limits.lower:g} and {limits.upper:g} {limits.unit}: no under-range and no "
        "over-range is seen",
        look_at="the limits of the input's scaling: a measurement reaches from -1.25 to 103.125 % "
        "(NAMUR NE 43)",
        predict=lambda said: limits.from_fraction(min(max(said.fraction, 0.0), 1.0)),
    )


def _stale(case: TransmitterCase) -> Iterator[Hypothesis]:
    spoken = [said.number for said in case.measured if math.isfinite(said.number)]
    if spoken:
        value = spoken[0]
        yield Hypothesis(
            name="stale value",
            text=f"says {value:.6g} whatever is forced",
            look_at="whether the controller reads that register in every scan, and copies it on",
            predict=lambda _: value,
            fitted=1,
        )


def _lagging(case: TransmitterCase) -> Iterator[Hypothesis]:
    limits = case.point.range
    previous = {
        id(said): before for before, said in zip(case.points, case.points[1:], strict=False)
    }
    if len(case.measured) < _FEWEST_TO_FIT:
        return

    def predict(said: Said) -> float:
        before = previous.get(id(said))
        return said.number if before is None else limits.from_fraction(before.fraction)

    yield Hypothesis(
        name="late value",
        text="says what was forced a test point before",
        look_at="how often the controller reads that register, and filters it",
        predict=predict,
        fitted=1,
    )


def _offset(case: TransmitterCase) -> Iterator[Hypothesis]:
    limits = case.point.range
    gaps = [said.number - limits.from_fraction(said.fraction) for said in case.measured]
    gaps = [gap for gap in gaps if math.isfinite(gap)]
    if not gaps:
        return
    offset = sum(gaps) / len(gaps)
    yield Hypothesis(
        name="offset",
        text=f"adds {offset:+.5g} {limits.unit} to the value",
        look_at="the zero, or the offset of a unit, of that tag in the controller",
        predict=lambda said: limits.from_fraction(said.fraction) + offset,
        fitted=1,
    )


def _other_range(case: TransmitterCase) -> Iterator[Hypothesis]:
    pairs = [(s.fraction, s.number) for s in case.measured if math.isfinite(s.number)]
    line = straight_line(pairs)
    if line is None:
        return
    low, span = line
    limits = case.point.range
    yield Hypothesis(
        name="wrong range",
        text=f"takes 4 to 20 mA for {low:.4g} to {low + span:.4g} {limits.unit}; the transmitter's "
        f"range is {limits.lower:g} to {limits.upper:g} {limits.unit}",
        look_at="the range of that tag in the controller",
        predict=lambda said: low + span * said.fraction,
        fitted=2,
    )


MISTAKES: tuple[Callable[[TransmitterCase], Iterator[Hypothesis]], ...] = (
    _word_order,
    _swapped,
    _address_base,
    _signedness,
    _half_value,
    _whole_for_float,
    _raw_for_value,
    _percent,
    _live_zero,
    _inverted,
    _units,
    _decimals,
    _clamped,
    _stale,
    _lagging,
    _offset,
    _other_range,
)


def straight_line(pairs: list[tuple[float, float]]) -> tuple[float, float] | None:
    """Return value at 0 and slope of the least-squares line; None where there is none.

    Parameters
    ----------
    pairs : list of (float, float)
        Abscissa and ordinate of each point, in any units.
    """
    xs = {x for x, _ in pairs}
    if len(xs) < _FEWEST_TO_FIT - 1:
        return None
    n = len(pairs)
    mean_x = sum(x for x, _ in pairs) / n
    mean_y = sum(y for _, y in pairs) / n
    square = sum((x - mean_x) ** 2 for x, _ in pairs)
    slope = sum((x - mean_x) * (y - mean_y) for x, y in pairs) / square
    return mean_y - slope * mean_x, slope


def _register_reading(
    case: TransmitterCase,
    item: RegisterItem,
    *,
    name: str,
    text: str,
    look_at: str,
    scale: object = None,
) -> Hypothesis:
    """Return the hypothesis that the controller takes its value from these registers."""
    limits = case.point.range if scale is None else scale

    def predict(said: Said) -> float:
        number = registers_at(said.registers, item.address, item.encoding, item.word_order)
        return scaled(number, item, limits)  # type: ignore[arg-type]

    return Hypothesis(name=name, text=text, look_at=look_at, predict=predict, exact=True)
