"""Numbers and names of the Modbus protocol that server and client share.

Source of all of them: MODBUS Application Protocol Specification V1.1b3, and MODBUS Messaging on
TCP/IP Implementation Guide V1.0b for the header.
"""

from __future__ import annotations

from enum import IntEnum

PROTOCOL_ID = 0  # of Modbus in the MBAP header
HEADER_BEFORE_UNIT = 6  # transaction, protocol and length fields [bytes]
LENGTH_MIN, LENGTH_MAX = 2, 254  # unit id and a PDU of 1 to 253 bytes [bytes]
READ_BITS_MAX = 2000
READ_REGISTERS_MAX = 125
WRITE_BITS_MAX = 1968
WRITE_REGISTERS_MAX = 123
READ_WRITE_REGISTERS_MAX = 121  # written by function 23
COIL_ON, COIL_OFF = 0xFF00, 0x0000  # the only values of function 05
ERROR_BIT = 0x80  # set in the function code of an exception reply


class Function(IntEnum):
    """The function codes that the server answers."""

    READ_COILS = 1
    READ_DISCRETE_INPUTS = 2
    READ_HOLDING_REGISTERS = 3
    READ_INPUT_REGISTERS = 4
    WRITE_SINGLE_COIL = 5
    WRITE_SINGLE_REGISTER = 6
    WRITE_MULTIPLE_COILS = 15
    WRITE_MULTIPLE_REGISTERS = 16
    MASK_WRITE_REGISTER = 22
    READ_WRITE_MULTIPLE_REGISTERS = 23


class ExceptionCode(IntEnum):
    """The exception codes of the specification."""

    ILLEGAL_FUNCTION = 0x01
    ILLEGAL_DATA_ADDRESS = 0x02
    ILLEGAL_DATA_VALUE = 0x03
    SERVER_DEVICE_FAILURE = 0x04
    ACKNOWLEDGE = 0x05
    SERVER_DEVICE_BUSY = 0x06
    MEMORY_PARITY_ERROR = 0x08
    GATEWAY_PATH_UNAVAILABLE = 0x0A
    GATEWAY_TARGET_FAILED_TO_RESPOND = 0x0B


def exception_text(code: int) -> str:
    """Return an exception code with its name.

    Parameters
    ----------
    code : int
        Exception code [-].

    Returns
    -------
    str
        E.g. ``"exception 02 (illegal data address)"``.
    """
    try:
        name = ExceptionCode(code).name.replace("_", " ").lower()
    except ValueError:
        name = "not in the specification"
    return f"exception {code:02X} ({name})"
