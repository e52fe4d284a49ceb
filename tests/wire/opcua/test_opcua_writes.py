"""Writes: each item judged by itself, the good ones passed on together, shown until seen."""

from __future__ import annotations

import asyncio
import math
from datetime import UTC, datetime

import pytest
from asyncua import Client, ua

pytestmark = [pytest.mark.wire, pytest.mark.asyncio(loop_scope="session")]

Double = ua.VariantType.Double
Int32 = ua.VariantType.Int32


async def write(client, *items):
    """Return the names of the statuses of one Write."""
    answer = await client.uaclient.session.write(ua.WriteParameters(NodesToWrite=list(items)))
    return [status.name for status in answer]


async def shown(client, name):
    return await client.get_node(ua.NodeId(name, 2)).read_value()


async def test_each_item_of_a_write_has_its_own_status(bench, client, item):
    statuses = await write(
        client,
        item("FV-101", ua.Variant(40.0, Double)),
        item("FV-101", ua.Variant(120.0, Double)),
        item("LT-102", ua.Variant(1.0, Double)),
        item("FV-102", ua.Variant(40, Int32)),
        item("NO-SUCH", ua.Variant(1.0, Double)),
        item("LIC-102.MODE", ua.Variant(1, Int32)),
    )
    assert statuses == [
        "Good",
        "BadOutOfRange",
        "BadNotWritable",
        "BadTypeMismatch",
        "BadNodeIdUnknown",
        "Good",
    ]
    assert await shown(client, "FV-101") == 40.0
    assert await shown(client, "LIC-102.MODE") == 1
    assert await shown(client, "FV-102") == 0.0
    ((_, _, _, text),) = bench.sink.refusals
    assert "ns=2;s=FV-101 = Double 120.0: BadOutOfRange" in text
    assert "ns=2;s=LT-102 = Double 1.0: BadNotWritable" in text


@pytest.mark.parametrize(
    ("name", "variant", "status"),
    [
        ("FV-101", ua.Variant(math.nan, Double), "BadOutOfRange"),
        ("FV-101", ua.Variant(math.inf, Double), "BadOutOfRange"),
        ("FV-101", ua.Variant(-math.inf, Double), "BadOutOfRange"),
        ("FV-101", ua.Variant(-0.001, Double), "BadOutOfRange"),
        ("FV-101", ua.Variant(100.001, Double), "BadOutOfRange"),
        ("FV-101", ua.Variant(0.0, Double), "Good"),
        ("FV-101", ua.Variant(100.0, Double), "Good"),
        ("FV-101", ua.Variant(50.0, ua.VariantType.Float), "BadTypeMismatch"),
        ("FV-101", ua.Variant(50, ua.VariantType.Int64), "BadTypeMismatch"),
        ("FV-101", ua.Variant("50", ua.VariantType.String), "BadTypeMismatch"),
        ("FV-101", ua.Variant(True, ua.VariantType.Boolean), "BadTypeMismatch"),
        ("FV-101", ua.Variant([50.0, 50.0], Double), "BadTypeMismatch"),
        ("FV-101", ua.Variant(None, ua.VariantType.Null), "BadTypeMismatch"),
        ("LIC-102.MODE", ua.Variant(2, Int32), "BadOutOfRange"),
        ("LIC-102.MODE", ua.Variant(1.0, Double), "BadTypeMismatch"),
        ("HEARTBEAT", ua.Variant(65535, Int32), "Good"),
        ("HEARTBEAT", ua.Variant(-1, Int32), "BadOutOfRange"),
        ("TICK", ua.Variant(1, ua.VariantType.Int64), "BadNotWritable"),
    ],
)
async def test_a_value_is_judged(bench, client, item, name, variant, status):
    before = await shown(client, name)
    assert await write(client, item(name, variant)) == [status]
    if status == "Good":
        assert await shown(client, name) == variant.Value
        assert len(bench.sink.exchanges) == 1
    else:
        assert await shown(client, name) == before
        assert bench.sink.exchanges == []
        assert status in bench.sink.refusals[0][3]


@pytest.mark.parametrize(
    ("change", "status"),
    [
        ({"AttributeId": ua.AttributeIds.AccessLevel}, "BadNotWritable"),
        ({"AttributeId": ua.AttributeIds.DisplayName}, "BadNotWritable"),
        ({"IndexRange": "0:1"}, "BadWriteNotSupported"),
        ({"NodeId": ua.NodeId(ua.ObjectIds.Server_ServiceLevel)}, "BadNotWritable"),
        ({"NodeId": ua.NodeId("FV-101/EURange", 2)}, "BadNotWritable"),
    ],
)
async def test_only_whole_values_of_points_may_be_written(bench, client, item, change, status):
    wanted = item("FV-101", ua.Variant(50.0, Double))
    for name, value in change.items():
        setattr(wanted, name, value)
    assert await write(client, wanted) == [status]
    assert bench.sink.exchanges == []


async def test_a_status_cannot_be_written(client, item):
    wanted = item("FV-101", ua.Variant(50.0, Double))
    wanted.Value = ua.DataValue(
        ua.Variant(50.0, Double), StatusCode=ua.StatusCode(ua.StatusCodes.BadSensorFailure)
    )
    assert await write(client, wanted) == ["BadWriteNotSupported"]


async def test_a_source_time_stamp_is_kept_with_the_value(client, item):
    stamp = datetime(2024, 2, 29, 12, 0, tzinfo=UTC)
    wanted = item("FV-101", None)
    wanted.Value = ua.DataValue(ua.Variant(12.0, Double), SourceTimestamp=stamp)
    assert await write(client, wanted) == ["Good"]
    value = await client.get_node(ua.NodeId("FV-101", 2)).read_data_value()
    assert (value.Value.Value, value.SourceTimestamp) == (12.0, stamp)
    assert value.ServerTimestamp > stamp


async def test_the_writes_of_one_request_reach_the_sink_together(bench, client, item):
    await shown(client, "LT-102")
    seen = bench.image.tick()
    bench.image.advance(3)  # published to nobody who looked
    await bench.server.publish()
    bench.sink.clear()
    await write(
        client,
        item("FV-101", ua.Variant(40.5, Double)),
        item("FV-102", ua.Variant(400.0, Double)),
        item("LIC-102.MODE", ua.Variant(1, Int32)),
    )
    ((valve, mode),) = bench.sink.exchanges
    assert (valve.link, valve.function, valve.address) == ("opc", "Write", "ns=2;s=FV-101")
    assert (valve.point, valve.value, valve.raw) == ("FV-101", 40.5, "40.5")
    assert (mode.point, mode.value, mode.raw) == ("LIC-102.MODE", 1.0, "1")
    assert valve.image_tick == mode.image_tick == seen
    assert valve.arrival_ns == mode.arrival_ns
    assert bench.sink.activities == [
        ("opc", valve.connection, valve.peer, seen, valve.arrival_ns)
    ]


async def test_a_client_that_never_read_has_seen_no_tick(bench, client, item):
    await write(client, item("FV-101", ua.Variant(1.0, Double)))
    ((exchange,),) = bench.sink.exchanges
    assert exchange.image_tick == -1


async def test_two_sessions_are_told_apart(bench, client, item):
    async with Client(bench.endpoint, timeout=5) as second:
        await shown(client, "LT-102")
        bench.image.advance()
        await bench.server.publish()
        await shown(second, "LT-102")
        await write(client, item("FV-101", ua.Variant(10.0, Double)))
        await write(second, item("FV-101", ua.Variant(20.0, Double)))
        assert await shown(client, "FV-101") == 20.0
    (first_write,), (second_write,) = bench.sink.exchanges
    assert first_write.connection != second_write.connection
    assert first_write.peer != second_write.peer
    assert (first_write.image_tick, second_write.image_tick) == (
        bench.image.tick() - 1,
        bench.image.tick(),
    )


async def test_a_written_value_stands_until_the_image_has_caught_up(bench, client, item):
    bench.image.advance(values={"FV-101": 30.0})
    await bench.server.publish()
    await write(client, item("FV-101", ua.Variant(60.0, Double)))
    bench.image.advance()  # the write is on its way: this image still has the old value
    await bench.server.publish()
    assert await shown(client, "FV-101") == 60.0
    bench.image.advance()  # two ticks on, the image decides, whatever became of the write
    await bench.server.publish()
    assert await shown(client, "FV-101") == 30.0


async def test_a_restored_rig_lets_go_of_what_was_written(bench, client, item):
    bench.image.advance(values={"FV-101": 30.0})
    await bench.server.publish()
    await write(client, item("FV-101", ua.Variant(60.0, Double)))
    bench.image.advance(-5)
    await bench.server.publish()
    assert await shown(client, "FV-101") == 30.0
    bench.image.advance(5)


async def test_a_subscriber_hears_of_another_clients_write(bench, client, item):
    heard = asyncio.Queue()

    class Notes:
        def datachange_notification(self, node, value, data):
            heard.put_nowait(value)

    async with Client(bench.endpoint, timeout=5) as watcher:
        subscription = await watcher.create_subscription(20, Notes())
        await subscription.subscribe_data_change(watcher.get_node(ua.NodeId("FV-101", 2)))
        async with asyncio.timeout(5):
            assert await heard.get() == 0.0
            await write(client, item("FV-101", ua.Variant(77.0, Double)))
            assert await heard.get() == 77.0
        await subscription.delete()
