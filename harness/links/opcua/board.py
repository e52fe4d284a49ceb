"""The values that the nodes show, how they get there, and which writes are taken."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from asyncua import ua
from asyncua.ua.attribute_ids import AttributeIds
from asyncua.ua.status_codes import StatusCodes

from harness.domain.signals import Quality
from harness.errors import LinkError
from harness.links.opcua.mapping import NodePlan, NodeType, representable, status_of
from harness.links.opcua.stack import GOOD, data_value, status, variant_type

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence
    from datetime import datetime

    from asyncua.server.address_space import AddressSpace

    from harness.links.port import ImageSource

# A write that arrives during a tick is latched at the next and is in the image after that one.
_TICKS_UNTIL_SEEN = 2

_STATUSES = {quality: status(status_of(quality)) for quality in Quality}


class Board:
    """What the nodes of one link show.

    Publishing and showing a written value write every node without waiting in between, so that
    on one event loop no client's Read comes between two nodes of one tick.

    Parameters
    ----------
    plans : sequence of NodePlan
        The variables.
    node_ids : sequence of NodeId
        Their nodes, in the same order.
    image : ImageSource
        Where the values come from.
    address_space : AddressSpace
        The server's address space, with the nodes in it.
    utc : callable
        Returns the present time, aware, for the stamps on the wire.
    """

    def __init__(
        self,
        *,
        plans: Sequence[NodePlan],
        node_ids: Sequence[ua.NodeId],
        image: ImageSource,
        address_space: AddressSpace,
        utc: Callable[[], datetime],
    ) -> None:
        self._plans = tuple(plans)
        self._node_ids = tuple(node_ids)
        self._places = {node_id: place for place, node_id in enumerate(node_ids)}
        self._indices = np.array([plan.index for plan in plans], dtype=np.intp)
        self._image = image
        self._address_space = address_space
        self._utc = utc
        self._shown_values = np.full(len(plans), np.nan)
        self._shown_qualities = np.full(len(plans), -1, dtype=np.int64)  # -1: nothing yet
        self._held_until: dict[int, int] = {}
        self._tick = -1

    @property
    def tick(self) -> int:
        """Return the tick of the image that the nodes show; -1 before the first [ticks]."""
        return self._tick

    def shows(self, node_id: ua.NodeId) -> bool:
        """Return whether a node is one of this board's variables."""
        return node_id in self._places

    def plan(self, node_id: ua.NodeId) -> NodePlan:
        """Return the plan of a node; raises KeyError when it is none of this board's."""
        return self._plans[self._places[node_id]]

    async def publish(self) -> None:
        """Write what changed since the last call, if the image has a new tick.

        Raises
        ------
        LinkError
            The address space does not take a value: its node is of another type, or gone.
        """
        if self._image.tick() == self._tick:
            return
        snapshot = self._image.read()
        if snapshot.tick < self._tick:  # a restored rig starts anew: nothing is on its way
            self._held_until.clear()
        self._tick = snapshot.tick
        values = snapshot.values[self._indices]
        qualities = snapshot.qualities[self._indices]
        same = (values == self._shown_values) | (
            np.isnan(values) & np.isnan(self._shown_values)
        )
        changed = np.flatnonzero(~(same & (qualities == self._shown_qualities)))
        if not changed.size:
            return
        stamp = self._utc()
        for place in changed.tolist():
            if not self._is_held(place):
                value, quality = float(values[place]), Quality(int(qualities[place]))
                await self._put(place, self._data_value(place, value, quality, stamp))
                self._shown_values[place], self._shown_qualities[place] = value, quality

    def judge(self, item: ua.WriteValue) -> int:
        """Return the status of one item of a Write, without carrying it out.

        Parameters
        ----------
        item : WriteValue
            The item.

        Returns
        -------
        int
            Good when the value may be taken, else the standard's reason to refuse it
            (OPC 10000-4, 5.11.4) [-].
        """
        place = self._places.get(item.NodeId)
        if place is None:
            known = item.NodeId in self._address_space
            return StatusCodes.BadNotWritable if known else StatusCodes.BadNodeIdUnknown
        plan = self._plans[place]
        if item.AttributeId != AttributeIds.Value or not plan.writable:
            return StatusCodes.BadNotWritable
        if item.IndexRange or not _is_good(item.Value.StatusCode):
            return StatusCodes.BadWriteNotSupported  # a part of a scalar, or a status
        return _judge_value(plan, item.Value.Value)

    async def take(self, item: ua.WriteValue) -> None:
        """Show a written value until the image has caught up with it.

        Parameters
        ----------
        item : WriteValue
            An item that ``judge`` found good.
        """
        place = self._places[item.NodeId]
        now = self._utc()
        variant = item.Value.Value
        shown = data_value(
            variant, _STATUSES[Quality.GOOD], item.Value.SourceTimestamp or now, now
        )
        await self._put(place, shown)
        self._shown_values[place] = variant.Value
        self._shown_qualities[place] = Quality.GOOD
        self._held_until[place] = self._image.tick() + _TICKS_UNTIL_SEEN

    def _is_held(self, place: int) -> bool:
        """Return whether a written value still stands before the image's, and let go when not."""
        if place not in self._held_until:
            return False
        if self._tick < self._held_until[place]:
            return True
        del self._held_until[place]
        return False

    def _data_value(
        self, place: int, value: float, quality: Quality, stamp: datetime
    ) -> ua.DataValue:
        data_type = self._plans[place].data_type
        if not representable(data_type, value):
            quality, value = Quality.BAD, 0.0  # with a bad status the library sends no value
        number = value if data_type is NodeType.DOUBLE else round(value)
        return data_value(
            ua.Variant(number, variant_type(data_type)), _STATUSES[quality], stamp, stamp
        )

    async def _put(self, place: int, data_value: ua.DataValue) -> None:
        # The server's own method of this name drops the status, and with it any mistake.
        answer = await self._address_space.write_attribute_value(
            self._node_ids[place], AttributeIds.Value, data_value
        )
        if not answer.is_good():
            raise LinkError(
                f"OPC UA node of {self._plans[place].name}: {data_value.Value} was refused by the "
                f"address space with {answer.name}; this is a fault of dryrig, please report it"
            )


def _is_good(code: ua.StatusCode | None) -> bool:
    return code is None or code.value == GOOD


def _judge_value(plan: NodePlan, variant: ua.Variant | None) -> int:
    if (
        variant is None
        or variant.is_array
        or variant.VariantType != variant_type(plan.data_type)
        or variant.Value is None
    ):
        return StatusCodes.BadTypeMismatch
    # NaN compares false with everything, and infinity lies outside every range.
    if not plan.range.lower <= variant.Value <= plan.range.upper:
        return StatusCodes.BadOutOfRange
    return GOOD
