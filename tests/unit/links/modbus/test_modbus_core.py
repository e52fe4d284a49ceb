"""The protocol core: frames in any pieces, exceptions in order, and what it tells the rig."""

from __future__ import annotations

import struct
from itertools import pairwise

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from harness.links.modbus.core import FrameError

# What is tested is the result; how long an example takes is the machine's affair.
UNHURRIED = settings(deadline=None, suppress_health_check=[HealthCheck.too_slow])

ARRIVAL = 77


def frame(pdu, transaction=1, unit=1):
    return struct.pack(">HHHB", transaction, 0, len(pdu) + 1, unit) + pdu


def ask(session, text, unit=1):
    """Return the response PDU to a request PDU, both as hexadecimal text."""
    reply = session.receive(frame(bytes.fromhex(text), 0x1234, unit), ARRIVAL)
    transaction, protocol, length, answered = struct.unpack_from(">HHHB", reply)
    assert (transaction, protocol, answered) == (0x1234, 0, unit)
    assert length == len(reply) - 6
    return reply[7:].hex(" ").upper()


def fresh(registers):
    """Registers 0-9 that hold their address and bits 0-9 that alternate; 0 and 1 are read only."""
    return registers(
        words={place: place for place in range(10)},
        bits={place: place % 2 for place in range(10)},
        fixed=(0, 1),
    )


@pytest.fixture
def rig(registers):
    return fresh(registers)


def test_functions_03_and_04_and_01_and_02_read_the_same(rig):
    assert ask(rig.session, "03 0000 0003") == "03 06 00 00 00 01 00 02"
    assert ask(rig.session, "04 0000 0003") == "04 06 00 00 00 01 00 02"
    assert ask(rig.session, "01 0000 000A") == "01 02 AA 02"
    assert ask(rig.session, "02 0000 000A") == "02 02 AA 02"


@pytest.mark.parametrize(
    ("request_", "reply"),
    [
        # function first
        ("00", "80 01"),
        ("07", "87 01"),
        ("08 0000 0000", "88 01"),
        ("2B 0E 01 00", "AB 01"),
        ("7F", "FF 01"),
        ("83 0000 0001", "83 01"),
        ("FF FF", "FF 01"),
        # then quantity and length, also where the address is wrong as well
        ("03 FFFF 0000", "83 03"),
        ("03 FFFF 007E", "83 03"),
        ("04 FFFF FFFF", "84 03"),
        ("01 FFFF 0000", "81 03"),
        ("01 FFFF 07D1", "81 03"),
        ("02 FFFF 07D1", "82 03"),
        ("0F FFFF 0000 00", "8F 03"),
        ("0F FFFF 07B1 F7" + "00" * 247, "8F 03"),
        ("10 FFFF 0000 00", "90 03"),
        ("10 FFFF 007C F8" + "00" * 247, "90 03"),
        ("10 0002 0002 04 0001", "90 03"),
        ("10 0002 0002 02 0001", "90 03"),
        ("10 0002 0001 02 0001 00", "90 03"),
        ("10 0002 0001", "90 03"),
        ("0F 0002 0009 01 FF", "8F 03"),
        ("0F 0002 0008 02 FFFF", "8F 03"),
        ("17 FFFF 0000 0002 0001 02 0000", "97 03"),
        ("17 FFFF 007E 0002 0001 02 0000", "97 03"),
        ("17 FFFF 0001 0002 0000 00", "97 03"),
        ("17 0000 0001 FFFF 007A F4" + "00" * 242, "97 03"),
        ("17 0000 0001 0002 0001 04 0000", "97 03"),
        ("17 0000 0001", "97 03"),
        ("03", "83 03"),
        ("03 0000", "83 03"),
        ("03 0000 0001 00", "83 03"),
        ("05 0002 FF", "85 03"),
        ("06 0002", "86 03"),
        ("06 0002 0001 00", "86 03"),
        ("16 0002 0000", "96 03"),
        ("16 0002 0000 0000 00", "96 03"),
        # the value of a coil is looked at before its address (V1.1b3, figure 15)
        ("05 0002 1234", "85 03"),
        ("05 FFFF 1234", "85 03"),
        ("05 0002 FF01", "85 03"),
        ("05 0002 0001", "85 03"),
        # then the address
        ("03 000A 0001", "83 02"),
        ("03 0009 0002", "83 02"),
        ("03 FFFF 007D", "83 02"),
        ("04 FFFF 0001", "84 02"),
        ("01 0009 0002", "81 02"),
        ("02 FFFF 07D0", "82 02"),
        ("05 000A FF00", "85 02"),
        ("06 FFFF 0000", "86 02"),
        ("0F 0009 0002 01 03", "8F 02"),
        ("10 0009 0002 04 00000000", "90 02"),
        ("16 000A FFFF 0000", "96 02"),
        ("17 000A 0001 0002 0001 02 0000", "97 02"),
        ("17 0000 0001 000A 0001 02 0000", "97 02"),
        # read only
        ("05 0001 FF00", "85 02"),
        ("06 0001 0000", "86 02"),
        ("0F 0001 0002 01 03", "8F 02"),
        ("10 0001 0002 04 00000000", "90 02"),
        ("16 0001 FFFF 0000", "96 02"),
        ("17 0000 0001 0001 0001 02 0000", "97 02"),
    ],
)
def test_exceptions_in_the_order_of_the_specification(rig, request_, reply):
    before = ask(rig.session, "03 0000 000A"), ask(rig.session, "01 0000 000A")
    rig.notebook.active.clear()
    assert ask(rig.session, request_) == reply
    assert rig.notebook.active == []  # nothing valid came
    assert rig.notebook.written == []
    assert len(rig.notebook.refusals) == 1
    assert (ask(rig.session, "03 0000 000A"), ask(rig.session, "01 0000 000A")) == before


@pytest.mark.parametrize(
    ("request_", "length"),
    [
        ("03 0000 007D", 252),
        ("01 0000 07D0", 252),
        ("17 0000 007D 0000 0079 F2" + "00" * 242, 252),
    ],
)
def test_the_largest_requests_are_answered(registers, request_, length):
    rig = registers(dict.fromkeys(range(125), 1), dict.fromkeys(range(2000), 1))
    assert len(bytes.fromhex(ask(rig.session, request_))) == length


@pytest.mark.parametrize("head", ["0F 0000 07B0 F6", "10 0000 007B F6"])
def test_the_largest_writes_are_taken(registers, head):
    rig = registers(dict.fromkeys(range(123), 1), dict.fromkeys(range(1968), 1))
    request_ = head + "00" * 246
    assert ask(rig.session, request_) == bytes.fromhex(head)[:5].hex(" ").upper()
    assert len(rig.notebook.written[0]) == (1968 if head.startswith("0F") else 123)


@pytest.mark.parametrize(("unit", "own"), [(0, 17), (17, 17), (255, 17), (1, 1)])
def test_units_that_are_answered(registers, unit, own):
    rig = registers({0: 5}, unit=own)
    assert ask(rig.session, "03 0000 0001", unit) == "03 02 00 05"


@pytest.mark.parametrize("unit", [1, 16, 18, 247, 254])
@pytest.mark.parametrize("request_", ["03 0000 0001", "03 0000 0000", "63", "06 0000 0001"])
def test_other_units_are_told_that_nobody_is_there(registers, unit, request_):
    rig = registers({0: 5}, unit=17)
    function = int(request_[:2], 16) | 0x80
    assert ask(rig.session, request_, unit) == f"{function:02X} 0B"
    assert rig.notebook.active == []
    assert f"unit {unit} is not here; the rig is unit 17" in rig.notebook.refusals[0][3]


READS = frame(bytes.fromhex("0300000002"), 1) + frame(bytes.fromhex("0100020003"), 2)
WRITES = frame(bytes.fromhex("0600040007"), 3) + frame(bytes.fromhex("63"), 4)
STREAM = READS + WRITES + frame(bytes.fromhex("0300040001"), 5)
REPLIES = bytes.fromhex(
    "0001 0000 0007 01 03 04 0000 0001"
    "0002 0000 0004 01 01 01 02"
    "0003 0000 0006 01 06 0004 0007"
    "0004 0000 0003 01 E3 01"
    "0005 0000 0005 01 03 02 0007"
)


@UNHURRIED
@given(st.lists(st.integers(min_value=0, max_value=len(STREAM)), max_size=8))
def test_any_cut_gives_the_same_replies(registers, cuts):
    session = fresh(registers).session
    edges = [0, *sorted(cuts), len(STREAM)]
    pieces = [STREAM[a:b] for a, b in pairwise(edges)]
    assert b"".join(session.receive(piece, ARRIVAL) for piece in pieces) == REPLIES


def test_one_byte_at_a_time_answers_as_soon_as_a_request_is_whole(rig):
    request_ = READS[:12]
    replies = [rig.session.receive(bytes((byte,)), ARRIVAL) for byte in request_]
    assert replies == [b""] * 11 + [REPLIES[:13]]


def test_thirty_requests_at_once_are_answered_in_order(rig):
    stream = b"".join(frame(bytes.fromhex("0300000001"), place) for place in range(30))
    reply = rig.session.receive(stream, ARRIVAL)
    assert [reply[start : start + 2] for start in range(0, len(reply), 11)] == [
        place.to_bytes(2, "big") for place in range(30)
    ]
    assert len(rig.notebook.active) == 30


@pytest.mark.parametrize(
    ("header", "words"),
    [
        ("0001 0001 0006", "protocol id 1 is not Modbus"),
        ("4745 5420 2F20", "protocol id 21536"),  # the start of an HTTP request
        ("0001 0000 0000", "length 0 is outside 2 to 254"),
        ("0001 0000 0001", "length 1 is outside 2 to 254"),
        ("0001 0000 00FF", "length 255 is outside 2 to 254"),
        ("0001 0000 FFFF", "length 65535 is outside 2 to 254"),
    ],
)
def test_what_is_no_modbus_ends_the_connection_after_the_replies_before(rig, header, words):
    with pytest.raises(FrameError, match=words) as caught:
        rig.session.receive(READS[:12] + bytes.fromhex(header), ARRIVAL)
    assert caught.value.replies == REPLIES[:13]


@pytest.mark.parametrize("length", [2, 254])
def test_both_ends_of_the_length_are_taken(rig, length):
    data = struct.pack(">HHHB", 9, 0, length, 1) + b"\x63" * (length - 1)
    assert rig.session.receive(data, ARRIVAL).hex() == "00090000000301e301"


@UNHURRIED
@given(st.lists(st.binary(max_size=300), max_size=6))
def test_no_bytes_do_harm(registers, pieces):
    """Any bytes are answered, waited on, or end the connection; nothing else ever happens."""
    made = fresh(registers)
    try:
        for piece in pieces:
            made.session.receive(piece, ARRIVAL)
    except FrameError:
        pass
    assert ask(made.another(2), "03 0000 0002") == "03 04 00 00 00 01"


@UNHURRIED
@given(st.binary(min_size=1, max_size=253), st.integers(min_value=0, max_value=255))
def test_every_framed_request_is_answered_once(registers, pdu, unit):
    reply = fresh(registers).session.receive(frame(pdu, 7, unit), ARRIVAL)
    transaction, protocol, length, answered, function = struct.unpack_from(">HHHBB", reply)
    assert (transaction, protocol, answered) == (7, 0, unit)
    assert length == len(reply) - 6 <= 254
    assert function & 0x7F == pdu[0] & 0x7F


VALID = st.one_of(
    st.builds(lambda f, a, n: struct.pack(">BHH", f, a, n), st.sampled_from([1, 2, 3, 4]), st.integers(0, 12), st.integers(0, 12)),
    st.builds(lambda a, v: struct.pack(">BHH", 6, a, v), st.integers(0, 12), st.integers(0, 65535)),
    st.builds(lambda a, v: struct.pack(">BHH", 5, a, v), st.integers(0, 12), st.sampled_from([0, 0xFF00, 1])),
    st.builds(lambda a, d: struct.pack(">BHHB", 16, a, len(d), 2 * len(d)) + struct.pack(f">{len(d)}H", *d), st.integers(0, 12), st.lists(st.integers(0, 65535), min_size=1, max_size=8)),
    st.builds(lambda a, x, o: struct.pack(">BHHH", 22, a, x, o), st.integers(0, 12), st.integers(0, 65535), st.integers(0, 65535)),
)  # fmt: skip


@UNHURRIED
@given(st.lists(VALID, max_size=12))
def test_the_registers_behave_like_a_plain_list(registers, requests_):
    """Against a model of ten registers that knows nothing of frames, items or caches."""
    made = fresh(registers)
    model = list(range(10))
    for pdu in requests_:
        made.session.receive(frame(pdu), ARRIVAL)
        function, address = struct.unpack_from(">BH", pdu)
        if function == 6:
            new = {address: struct.unpack(">H", pdu[3:])[0]}
        elif function == 16:
            new = dict(enumerate(struct.unpack(f">{pdu[5] // 2}H", pdu[6:]), address))
        elif function == 22 and address < 10:
            keep, put = struct.unpack(">HH", pdu[3:])
            new = {address: (model[address] & keep) | (put & ~keep & 0xFFFF)}
        else:
            new = {}
        if all(2 <= place < 10 for place in new):
            for place, word in new.items():
                model[place] = word
    reply = made.session.receive(frame(bytes.fromhex("030000000A")), ARRIVAL)
    assert reply[9:] == struct.pack(">10H", *model)


def test_writes_are_told_with_the_tick_that_this_connection_read_last(rig):
    other = rig.another(2)
    ask(rig.session, "06 0002 0011")  # has read nothing yet
    rig.image.now = 5
    ask(rig.session, "03 0002 0001")
    rig.image.now = 6
    ask(other, "01 0000 0001")
    ask(rig.session, "06 0002 0012")
    ask(other, "05 0002 FF00")
    ask(rig.session, "03 0002 0001")  # the same request again: from the kept replies or not
    ask(rig.session, "06 0002 0013")
    told = [
        (
            one.connection,
            one.function,
            one.address,
            one.point,
            one.value,
            one.raw,
            one.image_tick,
        )
        for request_ in rig.notebook.written
        for one in request_
    ]
    assert told == [
        (1, "FC06", "2", "word 2", 17.0, "0011", -1),
        (1, "FC06", "2", "word 2", 18.0, "0012", 5),
        (2, "FC05", "2", "bit 2", 1.0, "1", 6),
        (1, "FC06", "2", "word 2", 19.0, "0013", 6),
    ]
    (exchange,) = rig.notebook.written[0]
    assert (exchange.link, exchange.peer, exchange.arrival_ns) == (
        "modbus",
        "10.0.0.1:1",
        ARRIVAL,
    )


def test_a_refused_read_is_no_reading(rig):
    rig.image.now = 3
    ask(rig.session, "03 0009 0002")
    assert rig.session.image_tick == -1


def test_a_kept_reply_counts_as_a_reading_of_its_tick_by_each_connection(rig):
    other = rig.another(2)
    rig.image.now = 4
    ask(rig.session, "03 0002 0001")
    ask(other, "03 0002 0001")
    assert other.image_tick == 4


def test_replies_are_not_kept_over_a_tick_or_a_write(rig):
    assert ask(rig.session, "03 0002 0001") == "03 02 00 02"
    rig.image.now, rig.image.values[2] = 1, 33
    assert ask(rig.session, "03 0002 0001") == "03 02 00 21"
    ask(rig.session, "06 0002 0044")
    assert ask(rig.session, "03 0002 0001") == "03 02 00 44"
    assert ask(rig.session, "01 0002 0001") == "01 01 00"
    ask(rig.session, "05 0002 FF00")
    assert ask(rig.session, "01 0002 0001") == "01 01 01"


def test_function_23_writes_with_the_tick_read_before_and_reads_after(rig):
    rig.image.now = 4
    ask(rig.session, "03 0000 0001")
    rig.image.now = 5
    assert ask(rig.session, "17 0002 0002 0003 0001 02 00AA") == "17 04 00 02 00 AA"
    assert rig.notebook.written[0][0].image_tick == 4
    assert rig.session.image_tick == 5


def test_every_valid_request_is_activity(rig):
    rig.image.now = 9
    for request_ in ("03 0000 0001", "06 0002 0001", "16 0002 0000 0001", "03 0000 0000"):
        ask(rig.session, request_)
    assert rig.notebook.active == [("modbus", 1, "10.0.0.1:1", 9, ARRIVAL)] * 3


def test_a_read_is_told_of_with_the_points_in_it(rig):
    for request_ in (
        "03 0000 0003",
        "03 0000 0003",  # from the replies that are kept
        "04 0001 0001",
        "01 0002 0001",
        "06 0002 0001",
        "17 0000 0002 0003 0001 02 00AA",
    ):
        ask(rig.session, request_)
    assert rig.notebook.read == [
        ("word 0", "word 1", "word 2"),
        ("word 0", "word 1", "word 2"),
        ("word 1",),
        ("bit 2",),
        (),
        ("word 0", "word 1"),
    ]
    first, again, *_ = rig.notebook.read
    assert first is again  # the same tuple, which is cheap to look up


def test_a_refused_read_reads_nothing(rig):
    ask(rig.session, "03 0000 0001")
    ask(rig.session, "03 9C40 0001")
    ask(rig.session, "06 0002 0001")
    assert rig.notebook.read == [("word 0",), ()]


def test_the_same_refusal_is_told_of_once(rig):
    for _ in range(5):
        ask(rig.session, "03 9C40 0001")
    assert [text for *_, text in rig.notebook.refusals] == [
        "FC03: address 40000 is not in the map (asked for 40000, counted from 0); "
        "answered exception 02 (illegal data address)"
    ]


def test_a_scanner_cannot_fill_the_record(rig):
    for address in range(1000):
        ask(rig.session, f"03 {1000 + address:04X} 0001")
    assert len(rig.notebook.refusals) == 256


def test_without_an_image_the_fault_is_the_servers(rig):
    rig.image.now, rig.image.gone = 1, True
    assert ask(rig.session, "03 0000 0001") == "83 04"
    assert "the image is gone" in rig.notebook.refusals[0][3]
