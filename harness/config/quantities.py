"""Quantities as text, ``"250 mm"``, to SI numbers; the only place that knows pint."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING, Annotated, Any

from pydantic import BeforeValidator

if TYPE_CHECKING:
    from pint import UnitRegistry

_NUMBER_AND_UNIT = re.compile(
    r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*(.*?)\s*", re.DOTALL
)
_POWER = r"(?:%|[A-Za-z]+[23]?(?:\^-?\d)?)"  # "m", "m3", "m^3", "s^-1"
_UNIT = re.compile(rf"{_POWER}(?:\s*[*/]\s*{_POWER})*")

# The library's own table of units takes 0.3 s to read; these are the ones of a skid. A unit
# that is not here is refused, which also catches a slip such as "mn" for "mm".
_DEFINITIONS = (
    "milli- = 1e-3 = m-",
    "centi- = 1e-2 = c-",
    "kilo- = 1e3 = k-",
    "micro- = 1e-6 = u-",
    "meter = [length] = m",
    "second = [time] = s",
    "gram = [mass] = g",
    "ampere = [current] = A",
    "percent = 0.01 = %",
    "minute = 60 * second = min",
    "hour = 60 * minute = h",
    "inch = 0.0254 * meter = in",
    "foot = 12 * inch = ft",
    "square_meter = meter ** 2 = m2",
    "cubic_meter = meter ** 3 = m3",
    "square_second = second ** 2 = s2",
    "liter = 1e-3 * meter ** 3 = L = l",
    "pascal = kilogram / meter / second ** 2 = Pa",
    "bar = 1e5 * pascal",
    "psi = 6894.757293168361 * pascal",  # 0.45359237 kg x 9.80665 m/s2 / (0.0254 m)^2
)

# The units of nearly every file, so that it is read without the library's 0.3 s of loading; a
# test holds each of these to the library.
_USUAL = {
    ("m", "m"): 1.0,
    ("mm", "m"): 1e-3,
    ("s", "s"): 1.0,
    ("bar", "Pa"): 1e5,
    ("kg/m3", "kg/m3"): 1.0,
    ("m/s2", "m/s2"): 1.0,
    ("m3/h", "m3/h"): 1.0,
    ("m3/h", "m3/s"): 1.0 / 3600.0,
    ("%", ""): 1e-2,
    ("mA", "mA"): 1.0,
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Quantity:
    """A kind of quantity that a file may state.

    Parameters
    ----------
    name : str
        Name as in a message, with its article, e.g. ``"a length"``.
    unit : str
        Unit that the number is converted to, e.g. ``"m"``.
    example : str
        How to write one, e.g. ``"250 mm"``.
    only : str
        The one unit allowed, or empty for any of the same dimension.
    """

    name: str
    unit: str
    example: str
    only: str = ""


LENGTH = Quantity(name="a length", unit="m", example="250 mm")
TIME = Quantity(name="a time", unit="s", example="90 s")
PRESSURE = Quantity(name="a pressure", unit="Pa", example="3 bar")
DENSITY = Quantity(name="a density", unit="kg/m3", example="998.2 kg/m3")
ACCELERATION = Quantity(name="an acceleration", unit="m/s2", example="9.80665 m/s2")
FLOW = Quantity(name="a volume flow", unit="m3/s", example="6 m3/h")
SHOWN_FLOW = Quantity(name="a volume flow", unit="m3/h", example="0.01 m3/h")
PART = Quantity(name="a percentage", unit="", example="5 %")
CURRENT = Quantity(name="a current", unit="mA", example="3.6 mA")
# Kv is the flow in m3/h at a pressure drop of 1 bar (IEC 60534-2-1), not a flow to convert:
# the same valve has a Cv of 1.156 Kv, which no conversion of units gives.
KV = Quantity(name="a Kv", unit="m3/h", example="6.3 m3/h", only="m3/h")


@cache
def _registry() -> UnitRegistry[Any]:
    """Return the one registry, made when the first quantity is read."""
    from pint import UnitRegistry  # noqa: PLC0415  0.3 s that `--help` need not wait for

    registry: UnitRegistry[Any] = UnitRegistry(None)
    for definition in _DEFINITIONS:
        registry.define(definition)
    return registry


@cache
def _factor(unit: str, target: str) -> float | str:
    """Return the factor between units, or in words why there is none."""
    from pint import DimensionalityError, PintError  # noqa: PLC0415  as above

    registry = _registry()
    if not _UNIT.fullmatch(unit):
        return f'"{unit}" is not a unit'
    try:
        return float(registry.Quantity(1.0, unit).to(target or "dimensionless").magnitude)
    except DimensionalityError:
        return f'"{unit}" is of another kind'
    except PintError:
        return f'"{unit}" is not a unit known here'


def parse_quantity(value: object, quantity: Quantity) -> float:
    """Return a quantity in its SI unit (a percentage as fraction, a current in mA).

    Parameters
    ----------
    value : object
        What stands in the file; right is a text with number and unit.
    quantity : Quantity
        What is wanted.

    Returns
    -------
    float
        The number, in ``quantity.unit``.

    Raises
    ------
    ValueError
        When it is no such quantity; the text says the rule, with an example.
    """
    rule = f'write {quantity.name} with its unit, e.g. "{quantity.example}"'
    if isinstance(value, bool) or not isinstance(value, (str, int, float)):
        raise ValueError(f"is not {quantity.name}; {rule}")  # noqa: TRY004  pydantic gathers only these
    if not isinstance(value, str):
        raise ValueError(f"is a bare number; {rule}")  # noqa: TRY004  as above
    parts = _NUMBER_AND_UNIT.fullmatch(value)
    if parts is None:
        raise ValueError(f"does not start with a number; {rule}")
    number, unit = float(parts[1]), parts[2]
    if not unit:
        raise ValueError(f"has no unit; {rule}")
    if quantity.only and unit != quantity.only:
        raise ValueError(
            f"must be in {quantity.only} at 1 bar, as IEC 60534 defines Kv"
            f" (Kv = Cv / 1.156); {rule}"
        )
    factor = _USUAL.get((unit, quantity.unit)) or _factor(unit, quantity.unit)
    if isinstance(factor, str):
        raise ValueError(f"is not {quantity.name}: {factor}; {rule}")  # noqa: TRY004  as above
    result = number * factor if factor >= 1.0 else number / (1.0 / factor)
    if not math.isfinite(result):
        raise ValueError("is too large to be a number")
    return result


def _checked(
    quantity: Quantity,
    above: float | None = None,
    at_least: float | None = None,
    at_most: float | None = None,
) -> BeforeValidator:
    """Return a validator of a quantity between bounds, which are in its unit."""

    def shown(bound: float) -> str:
        return f"{bound * 100:g} %" if quantity is PART else f"{bound:g} {quantity.unit}"

    def validate(value: object) -> float:
        number = parse_quantity(value, quantity)
        if above is not None and not number > above:
            raise ValueError(f"must be above {shown(above)}")
        if at_least is not None and not number >= at_least:
            raise ValueError(f"must be at least {shown(at_least)}")
        if at_most is not None and not number <= at_most:
            raise ValueError(f"must be at most {shown(at_most)}")
        return number

    return BeforeValidator(validate)


Length = Annotated[float, _checked(LENGTH)]
PositiveLength = Annotated[float, _checked(LENGTH, above=0.0)]
NonNegativeLength = Annotated[float, _checked(LENGTH, at_least=0.0)]
PositiveTime = Annotated[float, _checked(TIME, above=0.0)]
NonNegativeTime = Annotated[float, _checked(TIME, at_least=0.0)]
PositivePressure = Annotated[float, _checked(PRESSURE, above=0.0)]
PositiveDensity = Annotated[float, _checked(DENSITY, above=0.0)]
PositiveAcceleration = Annotated[float, _checked(ACCELERATION, above=0.0)]
PositiveKv = Annotated[float, _checked(KV, above=0.0)]
Percentage = Annotated[float, _checked(PART, at_least=0.0, at_most=1.0)]
SmallPercentage = Annotated[float, _checked(PART, at_least=0.0, at_most=0.1)]
Change = Annotated[float, _checked(PART, at_least=-1.0, at_most=1.0)]
OpenPercentage = Annotated[float, _checked(PART, above=0.0, at_most=1.0)]
LoopCurrent = Annotated[float, _checked(CURRENT, at_least=0.0, at_most=23.0)]
