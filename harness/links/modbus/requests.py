"""Request PDUs taken apart, with exact lengths and quantities; addresses and values come later."""

from __future__ import annotations

from struct import Struct

from harness.links.modbus.protocol import ExceptionCode

_TWO = Struct(">HH")
_THREE = Struct(">HHH")
_WRITE = Struct(">HHB")  # address, quantity, byte count
_READ_WRITE = Struct(">HHHHB")  # read address and quantity, write address, quantity, byte count


class RefusalError(Exception):
    """A request that is answered with an exception code.

    Parameters
    ----------
    code : ExceptionCode
        Code of the answer.
    text : str
        Why, in words.
    """

    def __init__(self, code: ExceptionCode, text: str) -> None:
        super().__init__(text)
        self.code = code


def value_refusal(text: str) -> RefusalError:
    """Return the refusal of a quantity, length or value (code 03).

    Parameters
    ----------
    text : str
        Why, in words.

    Returns
    -------
    RefusalError
        To be raised.
    """
    return RefusalError(ExceptionCode.ILLEGAL_DATA_VALUE, text)


def two_fields(pdu: bytes) -> tuple[int, int]:
    """Return the two fields of a request of five bytes (functions 1 to 6).

    Parameters
    ----------
    pdu : bytes
        Function code and what follows.

    Returns
    -------
    tuple of int
        Both fields [-].

    Raises
    ------
    RefusalError
        If the length is another.
    """
    if len(pdu) != 1 + _TWO.size:
        raise _length_refusal(len(pdu), 1 + _TWO.size)
    first, second = _TWO.unpack_from(pdu, 1)
    return first, second


def read_request(pdu: bytes, most: int) -> tuple[int, int]:
    """Return address and quantity of a request to read.

    Parameters
    ----------
    pdu : bytes
        Function code and what follows.
    most : int
        Largest quantity [-].

    Returns
    -------
    tuple of int
        Address and quantity [-].

    Raises
    ------
    RefusalError
        If the length is wrong or the quantity is 0 or above the largest.
    """
    address, count = two_fields(pdu)
    _check_count(count, most)
    return address, count


def mask_request(pdu: bytes) -> tuple[int, int, int]:
    """Return address, AND mask and OR mask of function 22.

    Parameters
    ----------
    pdu : bytes
        Function code and what follows.

    Returns
    -------
    tuple of int
        Address and masks [-].

    Raises
    ------
    RefusalError
        If the length is wrong.
    """
    if len(pdu) != 1 + _THREE.size:
        raise _length_refusal(len(pdu), 1 + _THREE.size)
    address, keep, put = _THREE.unpack_from(pdu, 1)
    return address, keep, put


def write_request(pdu: bytes, most: int, bits: bool) -> tuple[int, int, bytes]:
    """Return address, quantity and data of functions 15 and 16.

    Parameters
    ----------
    pdu : bytes
        Function code and what follows.
    most : int
        Largest quantity [-].
    bits : bool
        Whether bits are written, eight to a byte, or registers.

    Returns
    -------
    address, count : int
        Address and quantity [-].
    data : bytes
        What to write.

    Raises
    ------
    RefusalError
        If the length, the byte count or the quantity is wrong.
    """
    if len(pdu) < 1 + _WRITE.size:
        raise _length_refusal(len(pdu), 1 + _WRITE.size)
    address, count, size = _WRITE.unpack_from(pdu, 1)
    data = pdu[1 + _WRITE.size :]
    _check_count(count, most)
    _check_data(size, len(data), (count + 7) // 8 if bits else 2 * count)
    return address, count, data


def read_write_request(pdu: bytes, most: int, most_written: int) -> tuple[int, int, int, bytes]:
    """Return what function 23 asks to read and to write.

    Parameters
    ----------
    pdu : bytes
        Function code and what follows.
    most, most_written : int
        Largest quantities [-].

    Returns
    -------
    address, count : int
        Registers to read [-].
    write_address : int
        First register to write [-].
    data : bytes
        What to write.

    Raises
    ------
    RefusalError
        If the length, the byte count or a quantity is wrong.
    """
    if len(pdu) < 1 + _READ_WRITE.size:
        raise _length_refusal(len(pdu), 1 + _READ_WRITE.size)
    address, count, write_address, write_count, size = _READ_WRITE.unpack_from(pdu, 1)
    data = pdu[1 + _READ_WRITE.size :]
    _check_count(count, most)
    _check_count(write_count, most_written)
    _check_data(size, len(data), 2 * write_count)
    return address, count, write_address, data


def _check_count(count: int, most: int) -> None:
    if not 1 <= count <= most:
        raise value_refusal(f"quantity {count} is outside 1 to {most}")


def _check_data(stated: int, found: int, due: int) -> None:
    if not stated == found == due:
        raise value_refusal(
            f"byte count {stated} with {found} bytes of data; the quantity makes {due}"
        )


def _length_refusal(length: int, due: int) -> RefusalError:
    return value_refusal(f"request of {length} bytes; the function takes {due}")
