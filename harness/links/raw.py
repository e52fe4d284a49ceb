"""What a peer gets to see of a point, as it goes over the wire: for people who compare both ends."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.domain.rig import Encoding, ModbusServerLink
from harness.domain.signals import Quality
from harness.links.codecs import INTEGER_TYPES, ItemCodec
from harness.links.opcua.mapping import (
    NodePlan,
    NodeType,
    plan_address_space,
    representable,
    status_of,
)

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from harness.domain.rig import OpcUaServerLink, RegisterItem
    from harness.domain.signals import Point

_HALF_ON = 0.5  # from here up a bit is on, as in the register bank [-]


@dataclass(frozen=True, slots=True, kw_only=True)
class Raw:
    """A point on the wire.

    Parameters
    ----------
    link : str
        Name of the link.
    address : str
        First register or bit, counted from 0, or the node's identifier.
    encoding : str
        Type on the wire, e.g. ``"float32"``, ``"Double"``.
    content : str
        Registers as hexadecimal text, a bit as 0 or 1; a node's value, or its status if bad.
    number : int or None
        The content of an integer register as a number; None for others [-].
    """

    link: str
    address: str
    encoding: str
    content: str
    number: int | None = None


class RawView:
    """Tells the raw content of each point: on the first Modbus link that shows it, else a node.

    Parameters
    ----------
    points : sequence of Point
        Every point of the rig.
    links : sequence of ModbusServerLink or OpcUaServerLink
        Its links, as checked.
    """

    def __init__(
        self, points: Sequence[Point], links: Sequence[ModbusServerLink | OpcUaServerLink]
    ) -> None:
        self._readers: dict[str, Callable[[float, float, float], Raw]] = {}
        by_name = {point.name: point for point in points}
        # Modbus links first, each in the order of the file.
        for link in sorted(links, key=lambda each: not isinstance(each, ModbusServerLink)):
            if isinstance(link, ModbusServerLink):
                for item in link.items:
                    reader = _register_reader(link.name, by_name[item.point], item)
                    self._readers.setdefault(item.point, reader)
            else:
                for plan in plan_address_space(points, link.points, link=link.name):
                    self._readers.setdefault(plan.name, _node_reader(link.name, plan))

    def of(self, name: str, value: float, current: float, quality: float) -> Raw | None:
        """Return what a peer gets to see of a point.

        Parameters
        ----------
        name : str
            Name of the point.
        value : float
            Value in the point's unit [unit].
        current : float
            Loop current; NaN where there is none [mA].
        quality : float
            ``Quality`` number [-].

        Returns
        -------
        Raw or None
            None where no link shows the point.
        """
        reader = self._readers.get(name)
        return None if reader is None else reader(value, current, quality)


def register_content(
    codec: ItemCodec | None, item: RegisterItem, value: float, current: float, quality: float
) -> tuple[str, int | None]:
    """Return the content of a point's registers.

    Parameters
    ----------
    codec : ItemCodec or None
        How it stands in registers; None for a bit.
    item : RegisterItem
        Where it stands.
    value : float
        Value in the point's unit [unit].
    current : float
        Loop current; NaN where there is none [mA].
    quality : float
        ``Quality`` number [-].

    Returns
    -------
    content : str
        Registers in wire order as hexadecimal text, or ``"0"`` or ``"1"`` for a bit.
    number : int or None
        The number in a 16-bit register, signed where its type is; None for others [-].
    """
    if codec is None:
        return str(int(value >= _HALF_ON)), None
    data = codec.encode(value, current, int(quality))
    kind = INTEGER_TYPES.get(item.encoding)
    words = " ".join(data[i : i + 2].hex().upper() for i in range(0, len(data), 2))
    if kind is None or " " in words:  # a number in two registers depends on the word order
        return words, None
    return words, int.from_bytes(data, "big", signed=kind.low < 0)


def node_content(plan: NodePlan, value: float, quality: float) -> str:
    """Return the value of a point's node as text, or its status code where that is bad.

    Parameters
    ----------
    plan : NodePlan
        The node.
    value : float
        Value in the point's unit [unit].
    quality : float
        ``Quality`` number [-].

    Returns
    -------
    str
        E.g. ``"0.7525"``, ``"0x808C0000"``.
    """
    if int(quality) == Quality.BAD or not representable(plan.data_type, value):
        return f"0x{status_of(Quality.BAD):08X}"
    return f"{value:.17g}" if plan.data_type is NodeType.DOUBLE else str(round(value))


def _register_reader(
    link: str, point: Point, item: RegisterItem
) -> Callable[[float, float, float], Raw]:
    codec = None if item.encoding is Encoding.BIT else ItemCodec(point, item)

    def read(value: float, current: float, quality: float) -> Raw:
        content, number = register_content(codec, item, value, current, quality)
        return Raw(
            link=link,
            address=str(item.address),
            encoding=item.encoding.value,
            content=content,
            number=number,
        )

    return read


def _node_reader(link: str, plan: NodePlan) -> Callable[[float, float, float], Raw]:
    def read(value: float, _: float, quality: float) -> Raw:
        return Raw(
            link=link,
            address=plan.name,
            encoding=plan.data_type.value,
            content=node_content(plan, value, quality),
        )

    return read
