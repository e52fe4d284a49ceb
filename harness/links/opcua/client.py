"""The controller's end of an OPC UA link."""

from __future__ import annotations

import asyncio
from contextlib import suppress
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, NoReturn, TypeVar

from asyncua import ua
from asyncua.client.client import Client
from asyncua.ua.attribute_ids import AttributeIds
from asyncua.ua.object_ids import ObjectIds
from asyncua.ua.status_codes import StatusCodes
from asyncua.ua.uaerrors import UaError, UaStatusCodeError

from harness.domain.signals import Quality
from harness.errors import LinkError, PeerError, UsageError
from harness.links.client import Reading
from harness.links.opcua.mapping import NAMESPACE_URI, quality_of
from harness.links.opcua.stack import GOOD, node_id, quieten, status_name

if TYPE_CHECKING:
    from collections.abc import Awaitable, Iterable, Mapping, Sequence

_Answer = TypeVar("_Answer")

_SESSION_TIMEOUT_MS = 30_000  # the server forgets a controller that went without a word

# Answers that mean that the session or channel is gone, not that the request was wrong.
_GONE = frozenset(
    {
        StatusCodes.BadSessionIdInvalid,
        StatusCodes.BadSessionClosed,
        StatusCodes.BadSessionNotActivated,
        StatusCodes.BadSecureChannelClosed,
        StatusCodes.BadSecureChannelIdInvalid,
        StatusCodes.BadConnectionClosed,
        StatusCodes.BadServerHalted,
        StatusCodes.BadShutdown,
        StatusCodes.BadTimeout,
    }
)
_FLOATS = frozenset({ua.VariantType.Float, ua.VariantType.Double})
_INTEGERS = {
    ua.VariantType.SByte: (-(2**7), 2**7 - 1),
    ua.VariantType.Byte: (0, 2**8 - 1),
    ua.VariantType.Int16: (-(2**15), 2**15 - 1),
    ua.VariantType.UInt16: (0, 2**16 - 1),
    ua.VariantType.Int32: (-(2**31), 2**31 - 1),
    ua.VariantType.UInt32: (0, 2**32 - 1),
    ua.VariantType.Int64: (-(2**63), 2**63 - 1),
    ua.VariantType.UInt64: (0, 2**64 - 1),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class _Target:
    """A node of the server, and the type that it wants."""

    node_id: ua.NodeId
    kind: ua.VariantType


class OpcUaClient:
    """A ``FieldClient`` over OPC UA.

    The nodes and their types are looked up once for each connection; then every ``read`` is one
    Read service call and every ``write`` one Write service call, so that the values of a read
    are of one tick of the rig.

    Parameters
    ----------
    endpoint : str
        URL of the server, e.g. ``"opc.tcp://127.0.0.1:4840"``.
    timeout : float
        Longest wait for an answer [s].
    """

    def __init__(self, endpoint: str, *, timeout: float = 1.0) -> None:
        self._endpoint = endpoint
        self._timeout = timeout
        self._client: Client | None = None
        self._targets: dict[str, _Target] = {}
        self._connecting = asyncio.Lock()

    async def connect(self) -> None:
        """Open a session and look the nodes up; does nothing while a session is open.

        Raises
        ------
        LinkError
            Nobody answers in time.
        PeerError
            The server refuses the session, or shows no rig.
        """
        async with self._connecting:
            if self._client is not None:
                return
            quieten()
            client = Client(self._endpoint, timeout=self._timeout)
            client.session_timeout = _SESSION_TIMEOUT_MS
            client.name = client.description = "dryrig soft PLC"
            client.application_uri = "urn:dryrig:client"
            client.product_uri = "urn:dryrig"
            try:
                await self._asked(client.connect(), "connect")
                self._targets = await self._asked(self._look_up(client), "look the nodes up")
            except BaseException:
                await _drop(client)
                raise
            self._client = client

    async def read(self, names: Sequence[str]) -> dict[str, Reading]:
        """Return the named points, all of one tick.

        Parameters
        ----------
        names : sequence of str
            Names of points.

        Returns
        -------
        dict of str to Reading
            Value and quality by name; a value that is bad is NaN.

        Raises
        ------
        LinkError
            There is no connection, or no answer in time.
        PeerError
            The server has no such node, or refuses the request.
        """
        await self.connect()
        targets = [self._target(name) for name in names]
        request = _read_request((target.node_id for target in targets), AttributeIds.Value)
        results = await self._service("read", request)
        return {name: _reading(result) for name, result in zip(names, results, strict=True)}

    async def write(self, values: Mapping[str, float]) -> None:
        """Write the named points in one request.

        Parameters
        ----------
        values : mapping of str to float
            Values in the points' units, by name.

        Raises
        ------
        LinkError
            There is no connection, or no answer in time.
        PeerError
            The server has no such node, or refuses one value or more; the others are written.
        UsageError
            An integer node cannot hold the value.
        """
        await self.connect()
        # Many PLCs refuse a write that carries a time stamp, and most a value of another type.
        items = [
            ua.WriteValue(
                NodeId=target.node_id,
                AttributeId=AttributeIds.Value,
                Value=ua.DataValue(_variant(name, value, target.kind)),
            )
            for name, value in values.items()
            for target in (self._target(name),)
        ]
        results = await self._service("write", ua.WriteParameters(NodesToWrite=items))
        refused = [
            f"{name} = {value:g}: {result.name}"
            for (name, value), result in zip(values.items(), results, strict=True)
            if not result.is_good()
        ]
        if refused:
            raise PeerError(f"{self._endpoint} refused to write {'; '.join(refused)}")

    async def close(self) -> None:
        """Close the session and the connection; may be called more than once."""
        client, self._client = self._client, None
        if client is not None:
            await _hang_up(client)

    async def _service(self, what: str, request: Any) -> Sequence[Any]:
        client = self._client
        if client is None:  # closed by another task meanwhile
            raise LinkError(f"{self._endpoint}: the connection is closed; connect again")
        session = client.uaclient.session
        call = session.read(request) if what == "read" else session.write(request)
        try:
            return await self._asked(call, what)
        except LinkError:
            if self._client is client:
                self._client = None
            await _drop(client)
            raise

    async def _asked(self, call: Awaitable[_Answer], what: str) -> _Answer:
        """Await an answer, and turn what the library raises into our errors."""
        try:
            return await call
        except TimeoutError as error:
            raise LinkError(
                f"{self._endpoint}: no answer to {what} within {self._timeout:g} s; is the server "
                "running, and is it an OPC UA server?"
            ) from error
        except OSError as error:
            raise LinkError(
                f"{self._endpoint}: cannot {what}: {error}; start the server, or correct the address"
            ) from error
        except UaStatusCodeError as error:
            self._judge(error, what)
        except UaError as error:
            raise PeerError(
                f"{self._endpoint}: cannot {what}: the server sent something that is not OPC UA: "
                f"{error}"
            ) from error

    def _judge(self, error: UaStatusCodeError, what: str) -> NoReturn:
        """Tell a lost session, which a new connection mends, from a refusal."""
        kind = LinkError if error.code in _GONE else PeerError
        raise kind(
            f"{self._endpoint}: {what} was answered with {status_name(error.code)}"
        ) from error

    async def _look_up(self, client: Client) -> dict[str, _Target]:
        """Return the nodes in the rig's folder, by browse name."""
        namespaces = await client.get_namespace_array()
        if NAMESPACE_URI not in namespaces:
            raise PeerError(
                f"{self._endpoint} shows no rig (it has no namespace {NAMESPACE_URI}); connect to a "
                "server that `dryrig serve` has opened"
            )
        namespace = namespaces.index(NAMESPACE_URI)
        found: dict[str, ua.NodeId] = {}
        for folder in await _children(client, node_id(ObjectIds.ObjectsFolder)):
            if folder.BrowseName.NamespaceIndex == namespace:
                for child in await _children(client, folder.NodeId):
                    found[child.BrowseName.Name] = child.NodeId
        types = await client.uaclient.session.read(
            _read_request(found.values(), AttributeIds.DataType)
        )
        kinds = [_numeric_kind(answer) for answer in types]
        return {
            name: _Target(node_id=one, kind=kind)
            for (name, one), kind in zip(found.items(), kinds, strict=True)
            if kind is not None
        }

    def _target(self, name: str) -> _Target:
        if name not in self._targets:
            raise PeerError(
                f"{self._endpoint} has no node {name!r}; it has {', '.join(self._targets)}"
            )
        return self._targets[name]


def _reading(result: ua.DataValue) -> Reading:
    code = GOOD if result.StatusCode is None else result.StatusCode.value
    value = None if result.Value is None else result.Value.Value
    if value is None:  # whatever the status says, there is nothing to trust
        return Reading(value=float("nan"), quality=Quality.BAD)
    return Reading(value=float(value), quality=quality_of(code))


def _read_request(node_ids: Iterable[ua.NodeId], attribute: AttributeIds) -> ua.ReadParameters:
    return ua.ReadParameters(
        TimestampsToReturn=ua.TimestampsToReturn.Neither,
        NodesToRead=[ua.ReadValueId(NodeId=one, AttributeId=attribute) for one in node_ids],
    )


def _variant(name: str, value: float, kind: ua.VariantType) -> ua.Variant:
    if kind in _FLOATS:
        return ua.Variant(float(value), kind)
    low, high = _INTEGERS[kind]
    if not low <= value <= high:  # NaN compares false with everything
        raise UsageError(f"{name} = {value:g}: its node takes {kind.name}, {low} to {high}")
    return ua.Variant(round(value), kind)


def _numeric_kind(data_type: ua.DataValue) -> ua.VariantType | None:
    """Return the number type that a DataType attribute names, or None when it is no number."""
    named = None if data_type.Value is None else data_type.Value.Value
    if not isinstance(named, ua.NodeId) or named.NamespaceIndex != 0:
        return None
    numbers = {kind.value: kind for kind in (*_FLOATS, *_INTEGERS)}
    return numbers.get(named.Identifier) if isinstance(named.Identifier, int) else None


async def _children(client: Client, parent: ua.NodeId) -> list[ua.ReferenceDescription]:
    request = ua.BrowseParameters(
        NodesToBrowse=[
            ua.BrowseDescription(
                NodeId=parent,
                BrowseDirection=ua.BrowseDirection.Forward,
                ReferenceTypeId=node_id(ObjectIds.HierarchicalReferences),
                IncludeSubtypes=True,
                ResultMask=ua.BrowseResultMask.All,
            )
        ]
    )
    (result,) = await client.uaclient.session.browse(request)
    result.StatusCode.check()
    return list(result.References)


async def _hang_up(client: Client) -> None:
    """Take leave of a server that answers."""
    with suppress(TimeoutError, OSError, UaError):
        await client.close_session()
    with suppress(TimeoutError, OSError, UaError):
        await client.close_secure_channel()
    client.disconnect_socket()


async def _drop(client: Client) -> None:
    """Give up a connection without another word, since nobody may be listening."""
    client.disconnect_socket()
    with suppress(TimeoutError, OSError, UaError):
        await (
            client.close_session()
        )  # ends the library's tasks; without a socket it sends nothing
