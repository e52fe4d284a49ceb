"""What loads the rig in the benchmark: Modbus clients that poll flat out, and a subscriber.

Both run in processes of their own.
"""

from __future__ import annotations

import asyncio
import logging
import selectors
import socket
import struct
from dataclasses import dataclass
from multiprocessing import get_context
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from multiprocessing.context import SpawnProcess
    from multiprocessing.sharedctypes import Synchronized
    from multiprocessing.synchronize import Event

    from asyncua.client.client import Client
    from asyncua.common.node import Node
    from asyncua.common.subscription import DataChangeNotif

_CLIENTS = 10
_READ_HOLDING = 3  # function code, Modbus Application Protocol V1.1b3, 6.3
_REGISTERS = 20  # read at once [-]
_PERIOD_MS = 100.0  # publishing interval asked for [ms]
_QUEUE = 10  # values held for each tag between two publications [-]


@dataclass(frozen=True, slots=True, kw_only=True)
class Counts:
    """What the load has done so far.

    Parameters
    ----------
    replies : int
        Modbus replies received by all clients together [-].
    notifications : int
        Data changes received by the OPC UA subscriber [-].
    """

    replies: int
    notifications: int


class Load:
    """Ten Modbus clients in one process and one OPC UA subscriber in another.

    Parameters
    ----------
    modbus : tuple of str and int
        Host and port of the Modbus server.
    opcua : tuple of str and int
        Host and port of the OPC UA server.
    names : tuple of str
        Points to subscribe to.
    namespace : str
        Namespace of their node ids.
    """

    def __init__(
        self,
        modbus: tuple[str, int],
        opcua: tuple[str, int],
        names: tuple[str, ...],
        namespace: str,
    ) -> None:
        context = get_context("spawn")
        self._stop = context.Event()
        self._replies = context.Value("q", 0)
        self._notifications = context.Value("q", 0)
        url = f"opc.tcp://{opcua[0]}:{opcua[1]}"
        self._processes: list[SpawnProcess] = [
            context.Process(target=poll, args=(modbus, self._stop, self._replies)),
            context.Process(
                target=subscribe, args=(url, names, namespace, self._stop, self._notifications)
            ),
        ]
        for process in self._processes:
            process.start()

    def counts(self) -> Counts:
        """Return what has been received so far."""
        return Counts(
            replies=self._replies.value,
            notifications=self._notifications.value,
        )

    def alive(self) -> bool:
        """Return whether both processes run."""
        return all(process.is_alive() for process in self._processes)

    def close(self) -> None:
        """Stop both processes."""
        self._stop.set()
        for process in self._processes:
            process.join(10.0)
            if process.is_alive():
                process.kill()
                process.join()


def poll(address: tuple[str, int], stop: Event, replies: Synchronized[int]) -> None:
    """Poll with ten clients, each asking again as soon as it has its answer.

    Parameters
    ----------
    address : tuple of str and int
        Host and port.
    stop : Event
        Ends the polling.
    replies : Synchronized
        Counts the replies [-].
    """
    request = struct.pack(">HHHBBHH", 1, 0, 6, 1, _READ_HOLDING, 0, _REGISTERS)
    answer_length = 9 + 2 * _REGISTERS
    selector = selectors.DefaultSelector()
    received: dict[socket.socket, int] = {}
    for _ in range(_CLIENTS):
        client = socket.create_connection(address)
        client.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        selector.register(client, selectors.EVENT_READ)
        received[client] = 0
        client.sendall(request)
    while not stop.is_set():
        for key, _ in selector.select(0.1):
            client = key.fileobj  # type: ignore[assignment]  # the sockets registered above
            data = client.recv(4096)
            if not data:
                raise ConnectionError("the Modbus server closed a connection")
            if not received[client] and data[7] != _READ_HOLDING:
                raise ConnectionError(f"the Modbus server refused a read: {data.hex()}")
            received[client] += len(data)
            if received[client] == answer_length:
                received[client] = 0
                replies.value += 1
                client.sendall(request)
    for client in received:
        client.close()


def subscribe(
    url: str,
    names: tuple[str, ...],
    namespace: str,
    stop: Event,
    notifications: Synchronized[int],
) -> None:
    """Subscribe to points and count their changes.

    Parameters
    ----------
    url : str
        Endpoint of the server.
    names : tuple of str
        Points.
    namespace : str
        Namespace of their node ids.
    stop : Event
        Ends the subscription.
    notifications : Synchronized
        Counts the changes [-].
    """
    logging.getLogger("asyncua").setLevel(logging.ERROR)  # it warns of a shorter session
    asyncio.run(_subscribe(url, names, namespace, stop, notifications))


class _Counter:
    """Takes data changes and counts them."""

    def __init__(self, count: Synchronized[int]) -> None:
        self._count = count

    def datachange_notification(self, node: Node, val: object, data: DataChangeNotif) -> None:
        """Count one change."""
        self._count.value += 1


async def _subscribe(
    url: str,
    names: tuple[str, ...],
    namespace: str,
    stop: Event,
    notifications: Synchronized[int],
) -> None:
    from asyncua.client.client import Client  # noqa: PLC0415  heavy, and for this process only

    client: Client
    async with Client(url) as client:
        index = await client.get_namespace_index(namespace)
        nodes = [client.get_node(f"ns={index};s={name}") for name in names]
        subscription = await client.create_subscription(_PERIOD_MS, _Counter(notifications))
        await subscription.subscribe_data_change(nodes, queuesize=_QUEUE)
        await asyncio.to_thread(stop.wait)
        await subscription.delete()
