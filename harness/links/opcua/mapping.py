"""From the points of a rig to a plan of an address space, without any OPC UA library."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from typing import TYPE_CHECKING

from harness.domain.signals import Point, PointKind, Quality, Range
from harness.errors import LinkError

if TYPE_CHECKING:
    from collections.abc import Sequence

NAMESPACE_URI = "urn:dryrig:points"
UNITS_NAMESPACE = "http://www.opcfoundation.org/UA/units/un/cefact"  # OPC 10000-8, 5.6.3

_INT32 = (-(2**31), 2**31 - 1)
_EXACT_INTEGER = 2**53  # a float64 holds every integer up to here

_STATUS_OF_QUALITY = {  # OPC 10000-6, annex A (status codes)
    Quality.GOOD: 0x00000000,  # Good
    Quality.UNCERTAIN: 0x40940000,  # UncertainEngineeringUnitsExceeded
    Quality.BAD: 0x808C0000,  # BadSensorFailure
}


class NodeType(StrEnum):
    """Data type of a node; the name is the one of the standard's built-in type."""

    DOUBLE = "Double"
    INT32 = "Int32"
    INT64 = "Int64"


@dataclass(frozen=True, slots=True, kw_only=True)
class UnitInformation:
    """What the EngineeringUnits property of a node says.

    Parameters
    ----------
    code : str
        Common code of UNECE Recommendation 20, e.g. ``"MTR"``.
    symbol : str
        Symbol shown to people.
    description : str
        Full name.
    """

    code: str
    symbol: str
    description: str

    @property
    def unit_id(self) -> int:
        """Return the code's characters packed big-endian, the standard's unitId [-]."""
        return unit_id(self.code)


_UNITS = {  # codes: UNECE Recommendation 20
    "m": UnitInformation(code="MTR", symbol="m", description="metre"),
    "mm": UnitInformation(code="MMT", symbol="mm", description="millimetre"),
    "m3": UnitInformation(code="MTQ", symbol="m³", description="cubic metre"),
    "m3/h": UnitInformation(code="MQH", symbol="m³/h", description="cubic metre per hour"),
    "m3/s": UnitInformation(code="MQS", symbol="m³/s", description="cubic metre per second"),
    "s": UnitInformation(code="SEC", symbol="s", description="second [unit of time]"),
    "mA": UnitInformation(code="4K", symbol="mA", description="milliampere"),
    "bar": UnitInformation(code="BAR", symbol="bar", description="bar [unit of pressure]"),
    "kPa": UnitInformation(code="KPA", symbol="kPa", description="kilopascal"),
    "degC": UnitInformation(code="CEL", symbol="°C", description="degree Celsius"),
    "%": UnitInformation(code="P1", symbol="%", description="percent"),
    "%/%": UnitInformation(code="C62", symbol="%/%", description="one"),  # a controller gain
    "": UnitInformation(code="C62", symbol="1", description="one"),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class NodePlan:
    """One variable of the address space.

    Parameters
    ----------
    index : int
        Place of the point in the rig's image [-].
    name : str
        Name of the point: browse name, display name and string identifier of the node.
    data_type : NodeType
        Data type.
    range : Range
        Range; writes outside it are refused, and an analog node shows it as EURange.
    units : UnitInformation or None
        Engineering units of an analog node; None for a mode or a counter, which is no
        physical quantity and has neither units nor EURange.
    writable : bool
        Whether a client may write the value.
    description : str
        One line for people.
    """

    index: int
    name: str
    data_type: NodeType
    range: Range
    units: UnitInformation | None
    writable: bool
    description: str


def unit_id(code: str) -> int:
    """Return the unitId of a UNECE common code: its characters packed big-endian.

    Source: OPC 10000-8, 5.6.3.3.

    Parameters
    ----------
    code : str
        One to four ASCII characters.

    Returns
    -------
    int
        The unitId [-].

    Raises
    ------
    ValueError
        The code is empty, longer than four characters, or not ASCII.
    """
    if not 1 <= len(code) <= 4 or not code.isascii():  # noqa: PLR2004  an Int32 holds four characters
        raise ValueError(f"UNECE code {code!r}: must be one to four ASCII characters")
    return int.from_bytes(code.encode("ascii"), "big")


def status_of(quality: Quality) -> int:
    """Return the numeric status code that shows a quality [-]."""
    return _STATUS_OF_QUALITY[quality]


def quality_of(status: int) -> Quality:
    """Return the quality that a numeric status code stands for.

    The two topmost bits are the severity: 00 good, 01 uncertain, 10 bad, and 11, which is
    reserved, counts as bad (OPC 10000-4, 7.39).

    Parameters
    ----------
    status : int
        Status code, 32 bits unsigned [-].

    Returns
    -------
    Quality
        The quality.
    """
    return (Quality.GOOD, Quality.UNCERTAIN, Quality.BAD, Quality.BAD)[status >> 30 & 3]


def plan_address_space(
    points: Sequence[Point], shown: Sequence[str] = (), *, link: str
) -> tuple[NodePlan, ...]:
    """Plan one variable for each point that the link shows.

    Parameters
    ----------
    points : sequence of Point
        Every point of the rig, in the order of its image.
    shown : sequence of str
        Names of the points to show; empty for all.
    link : str
        Name of the link, for messages.

    Returns
    -------
    tuple of NodePlan
        In the order of ``shown``, or of the image.

    Raises
    ------
    LinkError
        A name is unknown or there twice, a range is crossed, or a unit has no code here.
    """
    index_of = {point.name: index for index, point in enumerate(points)}
    if len(index_of) != len(points):
        raise _refusal(link, "two points of the rig have the same name", "rename one of them")
    names = tuple(shown) or tuple(index_of)
    unknown = [name for name in names if name not in index_of]
    if unknown:
        raise _refusal(
            link,
            f"points {', '.join(unknown)} are not points of this rig",
            f"use some of {', '.join(index_of)}",
        )
    if len(set(names)) != len(names):
        raise _refusal(link, "a point is listed twice", "list each point once")
    return tuple(_plan(index_of[name], points[index_of[name]], link) for name in names)


def _plan(index: int, point: Point, link: str) -> NodePlan:
    if not point.range.lower < point.range.upper:
        raise _refusal(
            link,
            f"range of {point.name} is {point.range.lower:g} to {point.range.upper:g}",
            "the upper range value must be above the lower one",
        )
    data_type = _data_type(point)
    return NodePlan(
        index=index,
        name=point.name,
        data_type=data_type,
        range=point.range,
        units=_units(point, link) if data_type is NodeType.DOUBLE else None,
        writable=point.writable,
        description=point.description,
    )


def _data_type(point: Point) -> NodeType:
    match point.kind:
        case PointKind.TICK:
            return NodeType.INT64
        case PointKind.MODE | PointKind.HEARTBEAT:
            fits = _INT32[0] <= point.range.lower and point.range.upper <= _INT32[1]
            return NodeType.INT32 if fits else NodeType.INT64
        case _:
            return NodeType.DOUBLE


def _units(point: Point, link: str) -> UnitInformation:
    if point.range.unit not in _UNITS:
        known = ", ".join(repr(unit) for unit in _UNITS)
        raise _refusal(
            link,
            f"unit {point.range.unit!r} of {point.name} has no UNECE code here",
            f"use one of {known}",
        )
    return _UNITS[point.range.unit]


def representable(data_type: NodeType, value: float) -> bool:
    """Return whether a node of this type can show the value without loss of its whole part.

    Parameters
    ----------
    data_type : NodeType
        Type of the node.
    value : float
        Value in the point's unit.

    Returns
    -------
    bool
        False for NaN and infinity, and for integers that the type does not hold.
    """
    match data_type:
        case NodeType.DOUBLE:
            return abs(value) < float("inf")
        case NodeType.INT32:
            return _INT32[0] <= value <= _INT32[1]
        case NodeType.INT64:
            return abs(value) <= _EXACT_INTEGER


def _refusal(link: str, what: str, fix: str) -> LinkError:
    return LinkError(f"link {link!r} (OPC UA): {what}; {fix}")
