"""One Modbus TCP connection of a server as a function: bytes in, bytes out.

No socket, no clock, no asyncio. Frames may come in any pieces and any number at once; replies
are in the order of the requests. What a request asks is checked in the order of the
specification's state diagrams (MODBUS Application Protocol Specification V1.1b3, section 6):
function (01), quantity and length (03), address (02), value (03).
"""

from __future__ import annotations

from struct import Struct
from typing import TYPE_CHECKING

from harness.domain.signals import Exchange
from harness.errors import LinkError, PeerError
from harness.links.modbus import requests
from harness.links.modbus.protocol import (
    COIL_OFF,
    COIL_ON,
    ERROR_BIT,
    HEADER_BEFORE_UNIT,
    LENGTH_MAX,
    LENGTH_MIN,
    PROTOCOL_ID,
    READ_BITS_MAX,
    READ_REGISTERS_MAX,
    READ_WRITE_REGISTERS_MAX,
    WRITE_BITS_MAX,
    WRITE_REGISTERS_MAX,
    ExceptionCode,
    Function,
    exception_text,
)
from harness.links.registers import AddressRefusedError, ValueRefusedError

if TYPE_CHECKING:
    from collections.abc import Callable

    from harness.links.port import ExchangeSink, ImageSource
    from harness.links.registers import Pending, RegisterBank, Written

_HEADER = Struct(">HHH")  # transaction, protocol, length
_REPLY_HEADER = Struct(">HHHB")  # the same and the unit
_WORD = Struct(">H")
_ECHO = (
    5  # function code, address, and value or quantity: what a write is answered with [bytes]
)
_BROADCAST, _ANY_UNIT = 0, 255  # for a server that is itself addressed (TCP/IP V1.0b, 4.4.2)
_REPLIES_MAX = 256  # kept between two ticks; more would be a scanner, not a controller
_TEXTS_MAX = 256  # different refusals told of for one connection; only a scanner has more


class FrameError(PeerError):
    """The bytes of a peer are not Modbus TCP; its connection must be closed.

    Parameters
    ----------
    text : str
        What is wrong.
    replies : bytes
        Replies to the good requests before; they may still be sent.
    """

    def __init__(self, text: str, replies: bytes) -> None:
        super().__init__(text)
        self.replies = replies


class ServerSession:
    """The protocol of one connection.

    Parameters
    ----------
    bank : RegisterBank
        Registers and bits, shared by all connections.
    image : ImageSource
        Where the bank's image comes from.
    sink : ExchangeSink
        Told of what the peer does.
    unit : int
        Unit id of the rig; 0 and 255 are answered as well [-].
    link : str
        Name of the link.
    connection : int
        Number of the connection [-].
    peer : str
        ``host:port`` of the other end.
    beside : callable
        Returns the newest image that other connections of this peer's host have read; -1 when
        none [ticks]. It stands in where this connection writes and never reads: some
        controllers keep a connection for each.
    """

    def __init__(
        self,
        *,
        bank: RegisterBank,
        image: ImageSource,
        sink: ExchangeSink,
        unit: int,
        link: str,
        connection: int,
        peer: str,
        beside: Callable[[], int] = lambda: -1,
    ) -> None:
        self._beside = beside
        self._bank = bank
        self._image = image
        self._sink = sink
        self._units = frozenset((_BROADCAST, unit, _ANY_UNIT))
        self._unit = unit
        self._link = link
        self._connection = connection
        self._peer = peer
        self._rest = b""
        self._pending: Pending = {}
        self._arrival_ns = 0
        self._read: tuple[str, ...] = ()  # points that the request in hand reads
        self._told: set[str] = set()
        self.image_tick = -1
        self._handlers: dict[int, Callable[[bytes], bytes]] = {
            Function.READ_COILS: self._read_bits,
            Function.READ_DISCRETE_INPUTS: self._read_bits,
            Function.READ_HOLDING_REGISTERS: self._read_registers,
            Function.READ_INPUT_REGISTERS: self._read_registers,
            Function.WRITE_SINGLE_COIL: self._write_coil,
            Function.WRITE_SINGLE_REGISTER: self._write_register,
            Function.WRITE_MULTIPLE_COILS: self._write_bits,
            Function.WRITE_MULTIPLE_REGISTERS: self._write_registers,
            Function.MASK_WRITE_REGISTER: self._mask_register,
            Function.READ_WRITE_MULTIPLE_REGISTERS: self._read_write_registers,
        }

    def receive(self, data: bytes, arrival_ns: int) -> bytes:
        """Take bytes from the peer and return the replies that are due.

        Parameters
        ----------
        data : bytes
            Bytes as they came, cut anywhere.
        arrival_ns : int
            When they came [ns].

        Returns
        -------
        bytes
            Replies in the order of the requests; empty while a request is incomplete.

        Raises
        ------
        FrameError
            If the protocol id or the length is wrong: where the next frame begins is lost.
        """
        self._arrival_ns = arrival_ns
        if self._rest:
            data = self._rest + data
        end = len(data)
        start = 0
        replies: list[bytes] = []
        while end - start >= _HEADER.size:
            transaction, protocol, length = _HEADER.unpack_from(data, start)
            if protocol != PROTOCOL_ID or not LENGTH_MIN <= length <= LENGTH_MAX:
                self._rest = b""
                raise FrameError(_frame_text(protocol, length), b"".join(replies))
            stop = start + HEADER_BEFORE_UNIT + length
            if stop > end:
                break
            unit = data[start + HEADER_BEFORE_UNIT]
            pdu = self._answer(unit, data[start + HEADER_BEFORE_UNIT + 1 : stop])
            replies.append(_REPLY_HEADER.pack(transaction, PROTOCOL_ID, len(pdu) + 1, unit))
            replies.append(pdu)
            start = stop
        self._rest = data[start:]
        return b"".join(replies)

    def _answer(self, unit: int, pdu: bytes) -> bytes:
        """Return the response PDU of a request PDU."""
        function = pdu[0]
        if unit not in self._units:
            text = f"unit {unit} is not here; the rig is unit {self._unit}"
            return self._refuse(function, ExceptionCode.GATEWAY_TARGET_FAILED_TO_RESPOND, text)
        handler = self._handlers.get(function)
        if handler is None:
            text = "the server has no such function"
            return self._refuse(function, ExceptionCode.ILLEGAL_FUNCTION, text)
        try:
            bank = self._bank
            if self._image.tick() != bank.tick:
                bank.load(self._image.read())
            kept = bank.replies.get(pdu)
            if kept is None:
                self._read = ()
                reply = handler(pdu)
            else:
                reply, self._read = kept
                self.image_tick = bank.tick
        except (requests.RefusalError, PeerError, LinkError) as error:
            return self._refuse(function, _code_of(error), error)
        self._sink.activity(
            self._link,
            self._connection,
            self._peer,
            self.image_tick,
            self._arrival_ns,
            self._read,
        )
        return reply

    def _refuse(self, function: int, code: ExceptionCode, why: object) -> bytes:
        """Return an exception reply and tell of it; the same refusal is told of once."""
        text = f"FC{function:02d}: {why}; answered {exception_text(code)}"
        if text not in self._told and len(self._told) < _TEXTS_MAX:
            self._told.add(text)
            self._sink.refused(self._link, self._connection, self._peer, text)
        return bytes((function | ERROR_BIT, code))

    def _read_bits(self, pdu: bytes) -> bytes:
        address, count = requests.read_request(pdu, READ_BITS_MAX)
        content = self._bank.read_bits(address, count)
        self._read = self._bank.points_at(address, count, bits=True)
        return self._show(pdu, content)

    def _read_registers(self, pdu: bytes) -> bytes:
        address, count = requests.read_request(pdu, READ_REGISTERS_MAX)
        content = self._bank.read_registers(address, count)
        self._read = self._bank.points_at(address, count)
        return self._show(pdu, content)

    def _show(self, pdu: bytes, content: bytes) -> bytes:
        """Return the reply to a read, and keep it for as long as the content stands."""
        bank = self._bank
        reply = bytes((pdu[0], len(content))) + content
        self.image_tick = bank.tick
        if len(bank.replies) < _REPLIES_MAX:
            bank.replies[pdu] = reply, self._read
        return reply

    def _write_coil(self, pdu: bytes) -> bytes:
        address, value = requests.two_fields(pdu)
        if value not in (COIL_ON, COIL_OFF):
            raise requests.value_refusal(
                f"coil {address} = {value:04X}; its values are 0000 and FF00"
            )
        self._tell(pdu[0], self._bank.write_bits(address, (value == COIL_ON,)))
        return pdu

    def _write_register(self, pdu: bytes) -> bytes:
        address, value = requests.two_fields(pdu)
        written = self._bank.write_registers(address, _WORD.pack(value), self._pending)
        self._tell(pdu[0], written)
        return pdu

    def _write_bits(self, pdu: bytes) -> bytes:
        address, count, data = requests.write_request(pdu, WRITE_BITS_MAX, bits=True)
        packed = int.from_bytes(data, "little")
        bits = [bool(packed >> place & 1) for place in range(count)]
        self._tell(pdu[0], self._bank.write_bits(address, bits))
        return pdu[:_ECHO]

    def _write_registers(self, pdu: bytes) -> bytes:
        address, _, data = requests.write_request(pdu, WRITE_REGISTERS_MAX, bits=False)
        self._tell(pdu[0], self._bank.write_registers(address, data, self._pending))
        return pdu[:_ECHO]

    def _mask_register(self, pdu: bytes) -> bytes:
        address, keep, put = requests.mask_request(pdu)
        self._bank.check_writable_registers(address, 1)
        (old,) = _WORD.unpack(self._bank.pending_register(address, self._pending))
        data = _WORD.pack((old & keep) | (put & ~keep & 0xFFFF))  # V1.1b3, 6.16
        self._tell(pdu[0], self._bank.write_registers(address, data, self._pending))
        return pdu

    def _read_write_registers(self, pdu: bytes) -> bytes:
        """Write first, then read (V1.1b3, 6.17)."""
        address, count, write_address, data = requests.read_write_request(
            pdu, READ_REGISTERS_MAX, READ_WRITE_REGISTERS_MAX
        )
        self._bank.read_registers(address, count)  # both addresses are checked before the write
        self._tell(pdu[0], self._bank.write_registers(write_address, data, self._pending))
        content = self._bank.read_registers(address, count)
        self._read = self._bank.points_at(address, count)
        self.image_tick = self._bank.tick
        return bytes((pdu[0], len(content))) + content

    def _tell(self, function: int, written: list[Written]) -> None:
        """Tell of the values taken by one request."""
        if not written:
            return
        image_tick = self.image_tick if self.image_tick >= 0 else self._beside()
        self._sink.writes(
            [
                Exchange(
                    link=self._link,
                    arrival_ns=self._arrival_ns,
                    peer=self._peer,
                    connection=self._connection,
                    function=f"FC{function:02d}",
                    address=str(one.address),
                    point=one.point,
                    value=one.value,
                    raw=one.raw,
                    image_tick=image_tick,
                )
                for one in written
            ]
        )


def _frame_text(protocol: int, length: int) -> str:
    """Return what is wrong with a header, in words."""
    if protocol != PROTOCOL_ID:
        return f"protocol id {protocol} is not Modbus, which has {PROTOCOL_ID}"
    return f"length {length} is outside {LENGTH_MIN} to {LENGTH_MAX}"


def _code_of(error: Exception) -> ExceptionCode:
    """Return the code that answers an error."""
    if isinstance(error, requests.RefusalError):
        return error.code
    if isinstance(error, AddressRefusedError):
        return ExceptionCode.ILLEGAL_DATA_ADDRESS
    if isinstance(error, ValueRefusedError):
        return ExceptionCode.ILLEGAL_DATA_VALUE
    return ExceptionCode.SERVER_DEVICE_FAILURE  # the image cannot be had: our own fault
