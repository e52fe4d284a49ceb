"""Sessions of the OPC UA server: who may come in, what they may do, and who hears of it."""

from __future__ import annotations

import asyncio
import itertools
import secrets
import uuid
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from asyncua import ua
from asyncua.common.utils import ServiceError
from asyncua.crypto.permission_rules import User, UserRole
from asyncua.server.internal_server import InternalServer
from asyncua.server.internal_session import InternalSession, SessionState
from asyncua.server.user_managers import UserManager
from asyncua.ua.attribute_ids import AttributeIds
from asyncua.ua.status_codes import StatusCodes

from harness.domain.signals import Exchange
from harness.links.opcua.stack import GOOD, node_id, status, status_name
from harness.links.opcua.subscribed import SubscribedPoints

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Iterator, Sequence

    from harness.links.opcua.board import Board
    from harness.links.port import ExchangeSink

_NOBODY = User(role=UserRole.Anonymous)
_TOKEN_BYTES = 32  # 256 random bits, as the standard asks of a nonce (OPC 10000-4, 5.7.2)
_SHORTEST_PUBLISHING_MS = 10.0  # the shortest tick of a rig; 0 would send a tick in pieces
_TEXT_LENGTH = 400  # of a refusal, so that no peer fills the record [characters]


class LoopbackUsers(UserManager):
    """Let anonymous clients in, and nobody by name: the server listens on loopback only.

    The library's own user manager gives every right to a user called admin, whatever the
    password.
    """

    def get_user(
        self,
        iserver: InternalServer,
        username: str | None = None,
        password: str | None = None,
        certificate: Any = None,
    ) -> User | None:
        """Return an ordinary user for an anonymous client, and None, a refusal, for others."""
        if username is None and password is None and not certificate:
            return User(role=UserRole.User, name="anonymous")
        return None


@dataclass(frozen=True, slots=True, kw_only=True)
class Desk:
    """What all sessions of one link share.

    Parameters
    ----------
    link : str
        Name of the link.
    board : Board
        The values shown.
    sink : ExchangeSink
        Who hears of what clients do.
    now_ns : callable
        Returns the time for arrival stamps [ns].
    connections : iterator of int
        Numbers for connections, each once [-].
    subscribed : SubscribedPoints
        What monitored items show.
    """

    link: str
    board: Board
    sink: ExchangeSink
    now_ns: Callable[[], int]
    connections: Iterator[int] = field(default_factory=lambda: itertools.count(1))
    subscribed: SubscribedPoints = field(default_factory=SubscribedPoints)


class RigSession(InternalSession):
    """A client's session: it judges writes item by item and tells the sink.

    Only requests that touch the rig's points count as activity, and those that ask for the
    next notification: client libraries read the server's state by themselves to keep a session
    alive, also when the controller above them has stopped.
    """

    def __init__(self, desk: Desk, iserver: InternalServer, peer: str, user: User) -> None:
        super().__init__(iserver, iserver.aspace, iserver.subscription_service, peer, user=user)
        # The library counts its ids up from a known number, so that any peer could guess the
        # token and take a session over. It is registered under the random one only.
        self.session_id = node_id(uuid.uuid4(), 1)
        self.auth_token = node_id(secrets.token_bytes(_TOKEN_BYTES), 0)
        self.external = True
        iserver.register_external_session(self)
        self._desk = desk
        self._connection = next(desk.connections)
        self._image_tick = -1
        # Points in notifications that went out since the client last asked for one. Only with
        # its next request they count as read: that the server sent them shows nothing yet.
        self._delivered: dict[str, None] = {}

    def activate_session(
        self, params: ua.ActivateSessionParameters, peer_certificate: bytes | None
    ) -> ua.ActivateSessionResult:
        """Let the client in, or say who was refused."""
        first = self.state is SessionState.Created
        try:
            result = super().activate_session(params, peer_certificate)
        except (ServiceError, ua.uaerrors.UaStatusCodeError) as error:
            self._refuse(f"log-in refused: {status_name(error.code)}")
            raise
        for subscription in self._own_subscriptions():  # taken over on a new connection
            subscription.pub_result_callback = self._noting(subscription.pub_result_callback)
        if first:
            self._desk.sink.connection(self._desk.link, self._connection, self.name, True)
        return result

    async def close_session(self, delete_subs: bool = True) -> None:
        """Close the session and tell the sink once."""
        was_active = self.state is SessionState.Activated
        if delete_subs:
            self._desk.subscribed.closed(
                one.data.SubscriptionId for one in self._own_subscriptions()
            )
        await super().close_session(delete_subs)
        if was_active:
            self._desk.sink.connection(self._desk.link, self._connection, self.name, False)

    async def read(self, params: ua.ReadParameters) -> list[ua.DataValue]:
        """Answer a Read and remember which tick the client saw."""
        arrival_ns = self._desk.now_ns()
        results = await super().read(params)
        board = self._desk.board
        read = tuple(
            board.plan(item.NodeId).name
            for item in params.NodesToRead
            if item.AttributeId == AttributeIds.Value and board.shows(item.NodeId)
        )
        if read:
            self._image_tick = board.tick
            self._note_activity(arrival_ns, read)
        return results

    async def write(self, params: ua.WriteParameters) -> list[ua.StatusCode]:
        """Judge each item by itself, pass the good ones on together, and answer for each."""
        arrival_ns = self._desk.now_ns()
        judged = [(item, self._desk.board.judge(item)) for item in params.NodesToWrite]
        taken = [item for item, code in judged if code == GOOD]
        if taken:
            self._desk.sink.writes([self._exchange(item, arrival_ns) for item in taken])
            self._note_activity(arrival_ns)
        for item in taken:
            await self._desk.board.take(item)
        refused = [
            f"{item.NodeId.to_string()} = {_text(item)}: {status_name(code)}"
            for item, code in judged
            if code != GOOD
        ]
        if refused:
            self._refuse(f"Write refused: {'; '.join(refused)}")
        return [status(code) for _, code in judged]

    def publish(
        self, acks: Iterable[ua.SubscriptionAcknowledgement] | None = None
    ) -> tuple[int, list[ua.StatusCode]]:
        """Take a client's request for the next notification, which shows that it is there."""
        answer = super().publish(acks)
        delivered = tuple(self._delivered)
        self._delivered.clear()
        self._note_activity(self._desk.now_ns(), delivered)
        return answer

    async def create_subscription(
        self,
        params: ua.CreateSubscriptionParameters,
        callback: Callable[..., Any],
        request_callback: Callable[..., Any] | None = None,
    ) -> ua.CreateSubscriptionResult:
        """Create a subscription that is never faster than the shortest tick."""
        # Written this way round, NaN ends at the shortest interval too.
        params.RequestedPublishingInterval = max(
            _SHORTEST_PUBLISHING_MS, params.RequestedPublishingInterval
        )
        return await super().create_subscription(
            params, self._noting(callback), request_callback
        )

    async def transfer_subscriptions(  # type: ignore[override]  # the library's server side differs from its interface in the same way
        self, params: ua.TransferSubscriptionsParameters, callback: Callable[..., Any]
    ) -> list[ua.TransferResult]:
        """Take over subscriptions of an earlier session."""
        return await super().transfer_subscriptions(params, self._noting(callback))

    async def create_monitored_items(
        self, params: ua.CreateMonitoredItemsParameters
    ) -> list[ua.MonitoredItemCreateResult]:
        """Create items; refuse those with a deadband.

        The library's deadband fails on a value without a number, so that a client would not
        hear of a failed sensor, and it compares with the last sample instead of the last one
        sent.
        """
        plain = [item for item in params.ItemsToCreate if not _has_deadband(item)]
        wanted, params.ItemsToCreate = params.ItemsToCreate, plain
        made = await super().create_monitored_items(params)
        for item, result in zip(plain, made, strict=True):
            self._note_item(params.SubscriptionId, item, result)
        results = iter(made)
        return [
            ua.MonitoredItemCreateResult(StatusCode=_filter_refused())
            if _has_deadband(item)
            else next(results)
            for item in wanted
        ]

    async def modify_monitored_items(
        self, params: ua.ModifyMonitoredItemsParameters
    ) -> list[ua.MonitoredItemModifyResult]:
        """Modify items; refuse a deadband as at creation."""
        plain = [item for item in params.ItemsToModify if not _has_deadband(item)]
        wanted, params.ItemsToModify = params.ItemsToModify, plain
        changed = await super().modify_monitored_items(params)
        for item, result in zip(plain, changed, strict=True):
            if result.StatusCode.is_good():
                handle = item.RequestedParameters.ClientHandle
                self._desk.subscribed.modified(
                    params.SubscriptionId, item.MonitoredItemId, handle
                )
        results = iter(changed)
        return [
            ua.MonitoredItemModifyResult(StatusCode=_filter_refused())
            if _has_deadband(item)
            else next(results)
            for item in wanted
        ]

    async def delete_monitored_items(
        self, params: ua.DeleteMonitoredItemsParameters
    ) -> list[ua.StatusCode]:
        """Delete items."""
        codes = await super().delete_monitored_items(params)
        self._desk.subscribed.deleted(params.SubscriptionId, params.MonitoredItemIds)
        return codes

    async def delete_subscriptions(self, ids: list[int]) -> list[ua.StatusCode]:
        """Delete subscriptions."""
        codes = await super().delete_subscriptions(ids)
        self._desk.subscribed.closed(ids)
        return codes

    def _note_item(
        self,
        subscription: int,
        item: ua.MonitoredItemCreateRequest,
        result: ua.MonitoredItemCreateResult,
    ) -> None:
        """Remember which point an item shows; others than values of points show none."""
        node = item.ItemToMonitor
        board = self._desk.board
        if (
            result.StatusCode.is_good()
            and node.AttributeId == AttributeIds.Value
            and board.shows(node.NodeId)
        ):
            self._desk.subscribed.created(
                subscription,
                result.MonitoredItemId,
                item.RequestedParameters.ClientHandle,
                board.plan(node.NodeId).name,
            )

    def _own_subscriptions(self) -> Sequence[Any]:
        everyone = self.subscription_service.subscriptions.values()
        return [one for one in everyone if one.session_id == self.session_id]

    def _noting(self, deliver: Callable[..., Any]) -> Callable[..., Any]:
        """Return the same delivery, which also notes what the client gets to see, and its tick."""

        async def deliver_and_note(result: ua.PublishResult, *rest: Any) -> None:
            data = result.NotificationMessage.NotificationData or ()
            if data:
                self._image_tick = self._desk.board.tick
            for part in data:
                # Events and changes of status, which this server does not send, have no items.
                items = getattr(part, "MonitoredItems", None) or ()
                handles = (item.ClientHandle for item in items)
                names = self._desk.subscribed.names(result.SubscriptionId, handles)
                self._delivered.update(dict.fromkeys(names))
            await deliver(result, *rest)

        return deliver_and_note

    def _exchange(self, item: ua.WriteValue, arrival_ns: int) -> Exchange:
        value = item.Value.Value.Value
        return Exchange(
            link=self._desk.link,
            arrival_ns=arrival_ns,
            peer=self.name,
            connection=self._connection,
            function="Write",
            address=item.NodeId.to_string(),
            point=self._desk.board.plan(item.NodeId).name,
            value=float(value),
            raw=repr(value),
            image_tick=self._image_tick,
        )

    def _note_activity(self, arrival_ns: int, read: tuple[str, ...] = ()) -> None:
        self._desk.sink.activity(
            self._desk.link, self._connection, self.name, self._image_tick, arrival_ns, read
        )

    def _refuse(self, text: str) -> None:
        self._desk.sink.refused(
            self._desk.link, self._connection, self.name, text[:_TEXT_LENGTH]
        )


class RigInternalServer(InternalServer):
    """The library's server core, with our users and our sessions."""

    def __init__(self) -> None:
        super().__init__(user_manager=LoopbackUsers())
        self.allow_remote_admin = False
        self._desk: Desk | None = None

    def open_desk(self, desk: Desk) -> None:
        """Say what sessions share; to be called before the server listens."""
        self._desk = desk

    def create_session(
        self, name: object, user: User = _NOBODY, external: bool = False
    ) -> InternalSession:
        """Return a session for a new client; ``name`` is the address of its socket."""
        if self._desk is None:
            raise ServiceError(StatusCodes.BadServerHalted)
        return RigSession(self._desk, self, _peer_text(name), user)

    async def stop(self) -> None:
        """Stop at once: the library would let its clock sleep its second out."""
        if self.time_task is not None:
            self.time_task.cancel()
            await asyncio.wait((self.time_task,))
            self.time_task = None
        await super().stop()


def _peer_text(name: object) -> str:
    match name:
        case (str(host), int(port), *_):
            return f"[{host}]:{port}" if ":" in host else f"{host}:{port}"
        case _:
            return str(name)


def _has_deadband(item: ua.MonitoredItemCreateRequest | ua.MonitoredItemModifyRequest) -> bool:
    # Not by isinstance: a filter that came over the wire is of another class of the same name.
    kind = getattr(item.RequestedParameters.Filter, "DeadbandType", ua.DeadbandType.None_)
    return bool(kind != ua.DeadbandType.None_)


def _filter_refused() -> ua.StatusCode:
    return status(StatusCodes.BadMonitoredItemFilterUnsupported)


def _text(item: ua.WriteValue) -> str:
    variant = item.Value.Value
    return "nothing" if variant is None else f"{variant.VariantType.name} {variant.Value!r}"
