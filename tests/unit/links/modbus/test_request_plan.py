"""As few requests as the map allows, and none that a server would refuse."""

from __future__ import annotations

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from harness.domain.rig import Encoding, RegisterItem
from harness.links.codecs import register_count
from harness.links.modbus.plan import read_blocks, write_blocks

# What is tested is the result; how long an example takes is the machine's affair.
UNHURRIED = settings(deadline=None, suppress_health_check=[HealthCheck.too_slow])


def item(address, encoding=Encoding.FLOAT32):
    return RegisterItem(point=f"{encoding}{address}", address=address, encoding=encoding)


def spans(blocks):
    return [(block.bits, block.address, block.count) for block in blocks]


MAP = (item(0), item(2, Encoding.UINT16), item(3), item(5), item(9), item(4, Encoding.BIT), item(5, Encoding.BIT))  # fmt: skip


def test_neighbours_are_one_request_in_any_order():
    assert spans(read_blocks((MAP[3], MAP[0], MAP[1], MAP[2]), MAP)) == [(False, 0, 7)]


def test_a_read_goes_over_what_lies_between_but_a_write_does_not():
    wanted = (MAP[0], MAP[3])
    assert spans(read_blocks(wanted, MAP)) == [(False, 0, 7)]
    assert [block.items for block in read_blocks(wanted, MAP)] == [wanted]
    assert spans(write_blocks(wanted)) == [(False, 0, 2), (False, 5, 2)]


def test_a_gap_in_the_map_is_never_read():
    assert spans(read_blocks(MAP[:5], MAP)) == [(False, 0, 7), (False, 9, 2)]


def test_bits_are_requests_of_their_own():
    assert spans(read_blocks((MAP[6], MAP[0], MAP[5]), MAP)) == [(False, 0, 2), (True, 4, 2)]
    assert spans(write_blocks((MAP[6], MAP[5]))) == [(True, 4, 2)]


def test_a_long_run_is_cut_between_values():
    long = tuple(item(2 * place) for place in range(100))
    assert spans(read_blocks(long, long)) == [(False, 0, 124), (False, 124, 76)]
    assert spans(write_blocks(long)) == [(False, 0, 122), (False, 122, 78)]


def test_nothing_asked_is_no_request():
    assert read_blocks((), MAP) == ()


@UNHURRIED
@given(st.data())
def test_every_wanted_item_lies_whole_in_one_allowed_request(data):
    addresses = data.draw(st.lists(st.integers(0, 400), unique=True, max_size=60))
    every, end = [], 0
    for address in sorted(addresses):
        if address < end:
            continue
        encoding = data.draw(st.sampled_from([Encoding.UINT16, Encoding.INT32]))
        every.append(item(address, encoding))
        end = address + register_count(encoding)
    wanted = [one for one in every if data.draw(st.booleans())]
    present = {cell for one in every for cell in range(one.address, one.address + register_count(one.encoding))}  # fmt: skip
    blocks = read_blocks(wanted, tuple(every))
    assert [one for block in blocks for one in block.items] == wanted
    for block in blocks:
        cells = range(block.address, block.address + block.count)
        assert 1 <= block.count <= 125
        assert set(cells) <= present
        for one in block.items:
            assert one.address in cells
            assert one.address + register_count(one.encoding) - 1 in cells
