"""What a client sees of the rig: nodes, ranges, units, values with quality, and who comes in."""

from __future__ import annotations

import asyncio
import logging
import math
import socket

import pytest
from asyncua import Client, ua
from asyncua.server.internal_session import InternalSession

from harness.domain.signals import Quality
from harness.errors import LinkError

pytestmark = [pytest.mark.wire, pytest.mark.asyncio(loop_scope="session")]


async def read(client, *names):
    """Return data values by one Read, bad ones included."""
    return await client.uaclient.session.read(
        ua.ReadParameters(
            NodesToRead=[
                ua.ReadValueId(NodeId=ua.NodeId(name, 2), AttributeId=ua.AttributeIds.Value)
                for name in names
            ]
        )
    )


async def test_points_are_found_by_browsing(client):
    folder = await client.nodes.objects.get_child("2:skid")
    found = [(await child.read_browse_name()).Name for child in await folder.get_children()]
    assert found == [
        "LT-102",
        "FT-101",
        "FV-101",
        "FV-102",
        "LIC-102.SP",
        "LIC-102.KC",
        "LIC-102.TI",
        "LIC-102.MODE",
        "HEARTBEAT",
        "TICK",
    ]
    assert (await client.get_namespace_array())[2] == "urn:dryrig:points"


@pytest.mark.parametrize(
    ("name", "high", "unit_id", "symbol"),
    [  # unitId: UNECE Recommendation 20 codes MTR, MQH, P1, SEC as OPC 10000-8 packs them
        ("LT-102", 2.0, 5067858, "m"),
        ("FT-101", 18.0, 5067080, "m³/h"),
        ("FV-101", 100.0, 20529, "%"),
        ("LIC-102.TI", 3600.0, 5457219, "s"),
    ],
)
async def test_analog_nodes_have_type_range_and_units(client, name, high, unit_id, symbol):
    node = client.get_node(ua.NodeId(name, 2))
    # AnalogUnitRangeType is i=17570 in the standard's NodeIds.
    assert await node.read_type_definition() == ua.NodeId(17570, 0)
    assert await node.read_data_type() == ua.NodeId(ua.ObjectIds.Double)
    limits = await (await node.get_child("0:EURange")).read_value()
    assert (limits.Low, limits.High) == (0.0, high)
    units = await (await node.get_child("0:EngineeringUnits")).read_value()
    assert (units.UnitId, units.DisplayName.Text) == (unit_id, symbol)
    assert units.NamespaceUri == "http://www.opcfoundation.org/UA/units/un/cefact"
    assert (await node.read_description()).Text == f"what {name} is"


@pytest.mark.parametrize(
    ("name", "data_type", "access"),
    [  # access bits: OPC 10000-3, 8.57: 0 read, 1 write
        ("LT-102", "Double", 0b01),
        ("FV-101", "Double", 0b11),
        ("LIC-102.MODE", "Int32", 0b11),
        ("HEARTBEAT", "Int32", 0b11),
        ("TICK", "Int64", 0b01),
    ],
)
async def test_nodes_say_their_type_and_access(client, name, data_type, access):
    node = client.get_node(ua.NodeId(name, 2))
    assert await node.read_data_type() == ua.NodeId(getattr(ua.ObjectIds, data_type))
    for attribute in (ua.AttributeIds.AccessLevel, ua.AttributeIds.UserAccessLevel):
        assert (await node.read_attribute(attribute)).Value.Value == access
    (value,) = await read(client, name)
    assert value.Value.VariantType.name == data_type


async def test_values_come_with_the_status_of_their_quality(bench, client):
    bench.image.advance(
        values={"LT-102": 1.25, "FT-101": 18.5, "FV-101": 40.0},
        qualities={"LT-102": Quality.GOOD, "FT-101": Quality.UNCERTAIN, "FV-101": Quality.BAD},
    )
    await bench.server.publish()
    good, uncertain, bad = await read(client, "LT-102", "FT-101", "FV-101")
    assert (good.Value.Value, good.StatusCode.value) == (1.25, 0)
    assert (uncertain.Value.Value, uncertain.StatusCode.value) == (18.5, 0x40940000)
    assert (bad.Value.Value, bad.StatusCode.value) == (None, 0x808C0000)
    bench.image.advance(qualities={"FV-101": Quality.GOOD})  # and back
    await bench.server.publish()
    (back,) = await read(client, "FV-101")
    assert (back.Value.Value, back.StatusCode.value) == (40.0, 0)


@pytest.mark.parametrize(
    ("name", "value"), [("LT-102", math.nan), ("LT-102", math.inf), ("HEARTBEAT", 2.0**31)]
)
async def test_a_number_that_a_node_cannot_show_is_bad(bench, client, name, value):
    bench.image.advance(values={name: value})
    await bench.server.publish()
    (shown,) = await read(client, name)
    assert (shown.Value.Value, shown.StatusCode.value) == (None, 0x808C0000)


async def test_stamps_are_of_the_publishing_and_aware(bench, client):
    (before,) = await read(client, "LT-102")
    bench.image.advance(values={"LT-102": 0.5})
    await bench.server.publish()
    (after,) = await read(client, "LT-102")
    assert after.SourceTimestamp.utcoffset().total_seconds() == 0.0
    assert after.SourceTimestamp > before.SourceTimestamp
    assert after.ServerTimestamp == after.SourceTimestamp


async def test_nothing_is_written_while_the_tick_stands_still(bench, client):
    bench.image.values[0] = 1.75  # the image is torn from its tick, as no real one is
    await bench.server.publish()
    (held,) = await read(client, "LT-102")
    assert held.Value.Value == 0.0
    bench.image.advance()
    await bench.server.publish()
    (shown,) = await read(client, "LT-102")
    assert shown.Value.Value == 1.75


async def test_one_read_is_of_one_tick(bench, client):
    names = ("LT-102", "FT-101", "FV-101", "FV-102", "LIC-102.SP", "TICK")
    seen = set()
    done = asyncio.Event()

    async def publish():
        while not done.is_set():
            bench.image.advance(values=dict.fromkeys(names, float(bench.image.tick() + 1)))
            await bench.server.publish()
            await asyncio.sleep(0)

    async def look():
        for _ in range(100):
            values = {int(one.Value.Value) for one in await read(client, *names)}
            assert len(values) == 1
            seen.update(values)
        done.set()

    await bench.server.publish()
    bench.image.advance(values=dict.fromkeys(names, float(bench.image.tick() + 1)))
    await bench.server.publish()
    await asyncio.gather(publish(), look())
    assert len(seen) > 50  # the reads did run against a moving image


class Notes:
    """A subscription's handler that remembers what came, and can be waited for."""

    def __init__(self):
        self.values = asyncio.Queue()

    def datachange_notification(self, node, value, data):
        self.values.put_nowait((value, data.monitored_item.Value.StatusCode.value))


async def test_a_subscription_hears_every_change_and_bad_quality(bench, client):
    notes = Notes()
    subscription = await client.create_subscription(20, notes)
    await subscription.subscribe_data_change(
        client.get_node(ua.NodeId("LT-102", 2)), queuesize=10
    )
    async with asyncio.timeout(5):
        assert await notes.values.get() == (0.0, 0)
        for value in (0.25, 0.5, 0.75):
            bench.image.advance(values={"LT-102": value})
            await bench.server.publish()
        bench.image.advance(qualities={"LT-102": Quality.BAD})
        await bench.server.publish()
        heard = [await notes.values.get() for _ in range(4)]
    assert heard == [(0.25, 0), (0.5, 0), (0.75, 0), (None, 0x808C0000)]
    assert bench.sink.activities  # the requests for notifications show that the client is there
    await subscription.delete()


async def seen_by(bench, name):
    """Wait until a client is known to have got a point to see."""
    async with asyncio.timeout(5):
        while not any(name in points for points in bench.sink.reads):  # noqa: ASYNC110  the sink is not ours to signal from
            await asyncio.sleep(0.01)


async def test_a_notification_counts_as_read_with_the_next_request(bench, client):
    notes = Notes()
    subscription = await client.create_subscription(20, notes)
    names = ("LT-102", "FV-101")
    await subscription.subscribe_data_change(
        [client.get_node(ua.NodeId(name, 2)) for name in names]
    )
    await seen_by(bench, "LT-102")
    await seen_by(bench, "FV-101")
    bench.sink.clear()
    bench.image.advance(values={"LT-102": 0.25})
    await bench.server.publish()
    await seen_by(bench, "LT-102")
    assert not any("FV-101" in points for points in bench.sink.reads)  # it did not change
    await subscription.delete()


async def test_an_item_that_is_gone_is_read_no_more(bench, client):
    notes = Notes()
    subscription = await client.create_subscription(20, notes)
    level, valve = await subscription.subscribe_data_change(
        [client.get_node(ua.NodeId(name, 2)) for name in ("LT-102", "FV-101")]
    )
    await seen_by(bench, "LT-102")
    await subscription.unsubscribe(level)
    bench.sink.clear()
    bench.image.advance(values={"LT-102": 0.5, "FV-101": 50.0})
    await bench.server.publish()
    await seen_by(bench, "FV-101")
    assert not any("LT-102" in points for points in bench.sink.reads)
    await subscription.unsubscribe(valve)
    await subscription.delete()


async def test_a_subscriber_that_wrote_is_known_to_have_seen_the_tick(bench, client, item):
    notes = Notes()
    subscription = await client.create_subscription(20, notes)
    await subscription.subscribe_data_change(client.get_node(ua.NodeId("LT-102", 2)))
    async with asyncio.timeout(5):
        await notes.values.get()
        bench.image.advance(7, values={"LT-102": 1.5})
        await bench.server.publish()
        await notes.values.get()
    await client.uaclient.session.write(
        ua.WriteParameters(NodesToWrite=[item("FV-101", ua.Variant(10.0))])
    )
    ((exchange,),) = bench.sink.exchanges
    assert exchange.image_tick == bench.image.tick()
    await subscription.delete()


async def test_a_deadband_is_refused_in_words_that_a_client_knows(client):
    subscription = await client.create_subscription(100, Notes())
    node = client.get_node(ua.NodeId("LT-102", 2))
    with pytest.raises(ua.UaStatusCodeError) as caught:
        await subscription.deadband_monitor(node, deadband_val=0.1)
    assert caught.value.code == ua.StatusCodes.BadMonitoredItemFilterUnsupported
    await subscription.subscribe_data_change(node)  # without one it is taken
    await subscription.delete()


@pytest.mark.parametrize("user", ["admin", "Admin", "operator"])
async def test_nobody_comes_in_by_name(bench, user):
    client = Client(bench.endpoint, timeout=5)
    client.set_user(user)
    client.set_password("any")
    with pytest.raises(ua.UaStatusCodeError) as caught:
        await client.connect()
    assert caught.value.code == ua.StatusCodes.BadIdentityTokenRejected
    ((link, _, peer, text),) = bench.sink.refusals
    assert (link, text) == ("opc", "log-in refused: BadIdentityTokenRejected")
    assert peer.startswith("127.0.0.1:")
    assert not any(connected for *_, connected in bench.sink.connections)


async def test_session_tokens_are_random_and_long(bench):
    tokens = []
    for _ in range(3):
        async with Client(bench.endpoint, timeout=5) as client:
            tokens.append(client.uaclient.session.authentication_token)
    assert {token.NodeIdType for token in tokens} == {ua.NodeIdType.ByteString}
    assert {len(token.Identifier) for token in tokens} == {32}
    assert len(set(tokens)) == 3


async def test_a_session_cannot_be_taken_over_by_counting(bench):
    thief = Client(bench.endpoint, timeout=5)
    await thief.connect_socket()
    try:
        await thief.send_hello()
        await thief.open_secure_channel()
        async with Client(bench.endpoint, timeout=5):  # the victim
            # The library counts its own tokens up from 1000.
            for guess in range(1000, InternalSession._auth_counter + 1):
                thief.uaclient.session.restore_authentication_token(ua.NodeId(guess))
                with pytest.raises(ua.UaStatusCodeError) as caught:
                    await thief.activate_session()
                assert caught.value.code == ua.StatusCodes.BadSessionIdInvalid
    finally:
        thief.disconnect_socket()


async def test_an_anonymous_client_cannot_change_the_address_space(client):
    with pytest.raises(ua.UaStatusCodeError) as caught:
        await client.nodes.objects.add_variable(ua.NodeId("more", 2), "2:more", 1.0)
    assert caught.value.code == ua.StatusCodes.BadUserAccessDenied
    with pytest.raises(ua.UaStatusCodeError) as caught:
        await client.uaclient.session.delete_nodes(
            ua.DeleteNodesParameters(
                NodesToDelete=[ua.DeleteNodesItem(NodeId=ua.NodeId("TICK", 2))]
            )
        )
    assert caught.value.code == ua.StatusCodes.BadUserAccessDenied


async def test_the_sink_hears_of_coming_and_going(bench):
    async with Client(bench.endpoint, timeout=5):
        ((link, number, peer, connected),) = bench.sink.connections
        assert (link, connected) == ("opc", True)
    assert bench.sink.connections[1:] == [("opc", number, peer, False)]


async def test_reading_the_server_itself_is_no_sign_of_the_controller(bench, client):
    await client.nodes.server_state.read_value()
    assert bench.sink.activities == []
    await read(client, "LT-102")
    ((link, _, _, image_tick, arrival_ns),) = bench.sink.activities
    assert (link, image_tick) == ("opc", bench.image.tick())
    assert arrival_ns >= 1000
    assert bench.sink.reads == [("LT-102",)]


async def test_build_information_is_ours(client):
    status = await client.get_node(ua.ObjectIds.Server_ServerStatus).read_value()
    assert status.State == ua.ServerState.Running
    assert status.BuildInfo.ManufacturerName == "dryrig"
    assert status.BuildInfo.BuildDate.utcoffset() is not None


async def test_a_taken_port_is_named_with_its_link_and_the_fix(bench, new_server, caplog):
    other = new_server(bench.image, bench.sink, port=bench.port, name="second")
    with caplog.at_level(logging.WARNING), pytest.raises(LinkError) as caught:
        await other.start()
    text = str(caught.value)
    assert "'second'" in text
    assert f"127.0.0.1:{bench.port}" in text
    assert "give the link another one" in text
    assert caplog.records == []  # said once, by us
    await other.stop()


@pytest.mark.parametrize("host", ["0.0.0.0", "192.0.2.1", "::", "rig.example"])  # noqa: S104
async def test_other_machines_are_kept_out(bench, new_server, host):
    with pytest.raises(LinkError, match=r"no secure policies yet.*127\.0\.0\.1"):
        await new_server(bench.image, bench.sink, host=host).start()


@pytest.mark.slow
@pytest.mark.timeout(90)  # it makes two address spaces, each seconds long on a busy machine
async def test_no_image_yet_then_a_fault_and_the_port_is_free_again(
    new_server, new_image, new_sink, points
):
    class FaultyImage(new_image):
        def read(self):
            if self.tick() > 0:
                raise RuntimeError("the image is gone")
            return super().read()

    image = FaultyImage(points)
    image.advance(-1)  # to -1: there is no image yet
    server = new_server(image, new_sink())
    await server.start()
    async with Client(server.endpoint, timeout=5) as client:
        waiting, sp = await read(client, "LT-102", "LIC-102.SP")
        assert waiting.StatusCode.value == 0x80320000  # BadWaitingForInitialData
        assert sp.StatusCode.value == 0x80320000
    image.advance()
    await server.publish()
    port = int(server.endpoint.rsplit(":", 1)[1])
    try:
        with pytest.raises(LinkError, match="already open"):
            await server.start()
        image.advance()
        with pytest.raises(RuntimeError, match="the image is gone"):
            await server.publish()
    finally:
        await server.stop()
    socket.create_server(("127.0.0.1", port)).close()
    with pytest.raises(RuntimeError, match="the image is gone"):
        await server.start()  # fails while the nodes are made, and leaves nothing behind
    with pytest.raises(LinkError, match="call start before publish"):
        await server.publish()
    socket.create_server(("127.0.0.1", port)).close()


async def test_publishing_on_a_closed_server_is_refused(bench, new_server):
    with pytest.raises(LinkError, match="call start before publish"):
        await new_server(bench.image, bench.sink).publish()
