"""The controller's end of Modbus TCP, on pymodbus; nothing else here knows that library.

Its client reconnects by itself and queues concurrent calls. It returns exception replies
instead of raising them, and knows two of the four word orders: so the codecs are ours.
"""

from __future__ import annotations

import logging
from struct import Struct
from typing import TYPE_CHECKING

from pymodbus.client import AsyncModbusTcpClient
from pymodbus.exceptions import ConnectionException, ModbusException

from harness.domain.rig import Encoding
from harness.domain.signals import Quality
from harness.errors import LinkError, PeerError, UsageError
from harness.links.client import Reading
from harness.links.codecs import ItemCodec
from harness.links.modbus.plan import Block, read_blocks, write_blocks
from harness.links.modbus.protocol import ExceptionCode, Function, exception_text

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping, Sequence

    from pymodbus.pdu import ModbusPDU

    from harness.domain.rig import RegisterItem
    from harness.domain.signals import Point

TIMEOUT_S = 0.5  # for an answer [s]; the library's default of 3 s would outlast many scans
RETRIES = 1  # of a request that was not answered [-]
RECONNECT_DELAY_S = 0.1  # before the first attempt to reconnect, doubled each time [s]
RECONNECT_DELAY_MAX_S = 1.0  # longest wait between attempts [s]; the library's default is 300
_WORD = Struct(">H")


class ModbusFieldClient:
    """A `FieldClient` over Modbus TCP.

    Parameters
    ----------
    host : str
        Host of the server.
    port : int
        Its TCP port [-].
    unit : int
        Unit id [-].
    points : tuple of Point
        Points of the rig.
    items : tuple of RegisterItem
        The map; where several items show one point, the first is used.
    timeout : float
        Time allowed for a connection and for an answer [s].
    retries : int
        Times that an unanswered request is sent again [-].
    """

    def __init__(
        self,
        *,
        host: str,
        port: int,
        unit: int,
        points: tuple[Point, ...],
        items: tuple[RegisterItem, ...],
        timeout: float = TIMEOUT_S,
        retries: int = RETRIES,
    ) -> None:
        by_name = {point.name: point for point in points}
        self._points = by_name
        self._every = items
        self._items: dict[str, RegisterItem] = {}
        self._codecs: dict[str, ItemCodec] = {}
        for item in items:
            if item.point in self._items or item.point not in by_name:
                continue
            self._items[item.point] = item
            if item.encoding is not Encoding.BIT:
                self._codecs[item.point] = ItemCodec(by_name[item.point], item)
        self._read_plans: dict[tuple[str, ...], tuple[Block, ...]] = {}
        self._unit = unit
        self._timeout = timeout
        self._retries = retries
        self._host, self._port = host, port
        self._where = f"Modbus server {host}:{port}, unit {unit}"
        self._open: AsyncModbusTcpClient | None = None
        # The library logs every lost connection as an error; here it is raised and told of once.
        logging.getLogger("pymodbus").setLevel(logging.CRITICAL)

    async def connect(self) -> None:
        """Open the connection.

        Raises
        ------
        LinkError
            If nobody answers there within the timeout.
        """
        if self._open is not None and self._open.connected:
            return
        await self.close()
        client = AsyncModbusTcpClient(  # it wants a running loop, so it is made no earlier
            self._host,
            port=self._port,
            timeout=self._timeout,
            retries=self._retries,
            reconnect_delay=RECONNECT_DELAY_S,
            reconnect_delay_max=RECONNECT_DELAY_MAX_S,
        )
        if not await client.connect():
            client.close()
            raise LinkError(
                f"{self._where}: no connection within {self._timeout:g} s; "
                "is the rig being served there, and does no firewall stand between?"
            )
        self._open = client

    async def read(self, names: Sequence[str]) -> dict[str, Reading]:
        """Return the named points; those in neighbouring registers are of one tick.

        Parameters
        ----------
        names : sequence of str
            Names of points in the map.

        Returns
        -------
        dict of str to Reading
            By name. A failed transmitter is bad by its current (NAMUR NE 43), or by NaN.

        Raises
        ------
        UsageError
            If a name is not in the map.
        LinkError
            If there is no connection, or no answer in time.
        PeerError
            If the server answers with an exception.
        """
        key = tuple(names)
        plan = self._read_plans.get(key)
        if plan is None:
            plan = read_blocks(self._wanted(key), self._every)
            self._read_plans[key] = plan
        readings: dict[str, Reading] = {}
        for block in plan:
            readings.update(await self._read_block(block))
        return readings

    async def write(self, values: Mapping[str, float]) -> None:
        """Write values, neighbouring ones in one request.

        Parameters
        ----------
        values : mapping of str to float
            By name, in the points' units.

        Raises
        ------
        UsageError
            If a name is not in the map, or a value is NaN, infinite or out of the point's range.
        LinkError
            If there is no connection, or no answer in time.
        PeerError
            If the server answers with an exception.
        """
        wanted = self._wanted(values)
        for name, value in values.items():
            limits = self._points[name].range
            if not limits.lower <= value <= limits.upper:  # NaN is not either
                raise UsageError(
                    f"{name} = {value:g} {limits.unit} is not written: it must lie within "
                    f"{limits.lower:g} to {limits.upper:g} {limits.unit}"
                )
        for block in write_blocks(wanted):
            await self._write_block(block, values)

    async def close(self) -> None:
        """Close the connection and stop reconnecting."""
        if self._open is not None:
            self._open.close()
            self._open = None

    def _connected(self) -> AsyncModbusTcpClient:
        if self._open is None:
            raise LinkError(f"{self._where}: not connected; connect first")
        return self._open

    def _wanted(self, names: Iterable[str]) -> list[RegisterItem]:
        unknown = [name for name in names if name not in self._items]
        if unknown:
            raise UsageError(
                f"{', '.join(unknown)} not in the register map; it has {', '.join(self._items)}"
            )
        return [self._items[name] for name in names]

    async def _read_block(self, block: Block) -> dict[str, Reading]:
        client, unit = self._connected(), self._unit
        try:
            if block.bits:
                answer = await client.read_coils(
                    block.address, count=block.count, device_id=unit
                )
            else:
                answer = await client.read_holding_registers(
                    block.address, count=block.count, device_id=unit
                )
        except ModbusException as error:
            raise self._lost(error) from error
        function = Function.READ_COILS if block.bits else Function.READ_HOLDING_REGISTERS
        self._check(answer, function, block)
        if block.bits:
            return {
                item.point: Reading(
                    value=float(answer.bits[item.address - block.address]),
                    quality=Quality.GOOD,
                )
                for item in block.items
            }
        if len(answer.registers) != block.count:
            raise PeerError(
                f"{self._where}: {len(answer.registers)} registers in answer to "
                f"{block.count} at {block.address}"
            )
        data = b"".join(map(_WORD.pack, answer.registers))
        return {item.point: self._reading(item, data, block.address) for item in block.items}

    def _reading(self, item: RegisterItem, data: bytes, first: int) -> Reading:
        codec = self._codecs[item.point]
        start = _WORD.size * (item.address - first)
        value, quality = codec.decode_reading(data[start : start + codec.size])
        return Reading(value=value, quality=quality)

    async def _write_block(self, block: Block, values: Mapping[str, float]) -> None:
        client, unit = self._connected(), self._unit
        try:
            if block.bits:
                bits = [values[item.point] != 0.0 for item in block.items]
                answer = await client.write_coils(block.address, bits, device_id=unit)
            else:
                data = b"".join(
                    self._codecs[item.point].encode_written(values[item.point])
                    for item in block.items
                )
                words = [word for (word,) in _WORD.iter_unpack(data)]
                answer = await client.write_registers(block.address, words, device_id=unit)
        except ModbusException as error:
            raise self._lost(error) from error
        function = (
            Function.WRITE_MULTIPLE_COILS if block.bits else Function.WRITE_MULTIPLE_REGISTERS
        )
        self._check(answer, function, block)

    def _check(self, answer: ModbusPDU, function: Function, block: Block) -> None:
        if not answer.isError():
            return
        text = exception_text(answer.exception_code)
        asked = f"FC{function:02d} on {block.count} at {block.address} (counted from 0)"
        names = ", ".join(item.point for item in block.items)
        hint = ""
        if answer.exception_code == ExceptionCode.ILLEGAL_DATA_ADDRESS:
            hint = "; is the map the server's own, counted from 0, and are they writable?"
        elif answer.exception_code == ExceptionCode.GATEWAY_TARGET_FAILED_TO_RESPOND:
            hint = "; is the unit id right?"
        raise PeerError(f"{self._where}: {asked} for {names} answered with {text}{hint}")

    def _lost(self, error: ModbusException) -> LinkError:
        if isinstance(error, ConnectionException):
            return LinkError(f"{self._where}: the connection is lost; it is being tried again")
        return LinkError(f"{self._where}: no answer within {self._timeout:g} s")
