"""What several modules here need of the OPC UA library, with types that a checker accepts.

The library annotates its own number types where it takes any number, so that each plain
``NodeId(884)`` would be an error; the casts for it are all in this module.
"""

from __future__ import annotations

import logging
from typing import TYPE_CHECKING, cast

from asyncua import ua
from asyncua.ua.status_codes import StatusCodes

from harness.links.opcua.mapping import NodeType

if TYPE_CHECKING:
    import uuid
    from datetime import datetime

_VARIANT_TYPES = {
    NodeType.DOUBLE: ua.VariantType.Double,
    NodeType.INT32: ua.VariantType.Int32,
    NodeType.INT64: ua.VariantType.Int64,
}

GOOD: int = StatusCodes.Good

_PEER_FAULTS = ("sending service fault response", "Rejected active session")  # log messages


def quieten() -> None:
    """Let the library log its own faults only.

    What a client does wrong goes to the server's sink; what a server does wrong, or that it is
    gone, is raised to whoever called the client. The library would log both as errors besides.
    """
    logging.getLogger("asyncua").setLevel(logging.ERROR)
    logging.getLogger("asyncua.client").setLevel(logging.CRITICAL)
    for module in ("uaprocessor", "internal_session"):
        logging.getLogger(f"asyncua.server.{module}").addFilter(_tells_no_peer_fault)


def _tells_no_peer_fault(record: logging.LogRecord) -> bool:
    return not str(record.msg).startswith(_PEER_FAULTS)


def variant_type(data_type: NodeType) -> ua.VariantType:
    """Return the library's name of a node's data type."""
    return _VARIANT_TYPES[data_type]


def status(code: int) -> ua.StatusCode:
    """Return a status code of that number."""
    return ua.StatusCode(cast("ua.UInt32", code))


def status_name(code: int) -> str:
    """Return the standard's name of a status code, e.g. ``"BadOutOfRange"``."""
    return status(code).name


def node_id(identifier: int | str | bytes | uuid.UUID, namespace: int = 0) -> ua.NodeId:
    """Return a node id; its type follows from the identifier's."""
    return ua.NodeId(cast("ua.Int32", identifier), cast("ua.Int16", namespace))


class SharedValue(ua.DataValue):
    """A data value that nobody changes, so that a deep copy of it is the value itself.

    The library copies every value deeply for every subscriber, which was two thirds of the
    cost of publishing.
    """

    __slots__ = ()

    def __deepcopy__(self, memo: object) -> SharedValue:
        """Return the value itself: neither it nor its variant is ever changed in place."""
        return self


def data_value(
    variant: ua.Variant, code: ua.StatusCode, source_stamp: datetime, server_stamp: datetime
) -> ua.DataValue:
    """Return a value with its status and both stamps, which must be aware of their zone."""
    return SharedValue(
        variant,
        StatusCode=code,
        SourceTimestamp=cast("ua.DateTime", source_stamp),
        ServerTimestamp=cast("ua.DateTime", server_stamp),
    )
