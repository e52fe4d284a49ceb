"""The scan cycle of the soft PLC against a rig that a test drives; nothing here waits."""

from __future__ import annotations

import asyncio
import math

import pytest

from harness.domain.points import points_of
from harness.domain.rig import ModbusServerLink, OpcUaServerLink
from harness.domain.signals import Quality
from harness.errors import LinkError, PeerError, UsageError
from harness.links.client import Reading
from harness.runtime.clock import HandClock
from harness.runtime.plc_block import SoftPlcFaults, program_of
from harness.runtime.soft_plc import SoftPlc
from harness.runtime.soft_plc_process import find_link, make_client

MS = 1_000_000


class FakeRig:
    """A client whose far end is a table of values, with a script of what happens when."""

    def __init__(self, clock, stop, script, last_read):
        self.values = {
            "LT-2": 0.75, "LIC-2.SP": 0.75, "LIC-2.MODE": 1.0, "LIC-2.MO": 40.0,
            "LIC-2.KC": 2.0, "LIC-2.TI": 10.0, "FV-1": 55.0, "TICK": 100.0,
        }  # fmt: skip
        self.clock = clock
        self.stop = stop
        self.script = script
        self.last_read = last_read
        self.reads = 0
        self.read_at = []
        self.writes = []
        self.connects = 0
        self.closed = 0
        self.refusing = 0  # connections to be refused before one is taken

    async def connect(self):
        self.connects += 1
        if self.connects <= self.refusing:
            raise LinkError("nobody there")

    async def read(self, names):
        self.reads += 1
        self.read_at.append(self.clock.now_ns() // MS)
        if self.reads >= self.last_read:
            self.stop.set()
        self.values["TICK"] += 2
        self.script(self, self.reads)
        return {name: Reading(value=self.values[name], quality=Quality.GOOD) for name in names}

    async def write(self, values):
        self.writes.append(dict(values))

    async def close(self):
        self.closed += 1


def nothing(rig, scan):
    """Script of a rig at rest."""


async def yield_only(_seconds, _stop):
    """Doze without waiting: the hand clock does not move by itself."""
    await asyncio.sleep(0)


async def run(two_tanks, script=nothing, scans=5, pace=60.0, refusing=0, faults=None):
    rig = two_tanks()
    clock, stop, said = HandClock(), asyncio.Event(), []
    program = program_of(
        rig.loops[0], points_of(rig, external=True), faults=faults or SoftPlcFaults()
    )
    far_end = FakeRig(clock, stop, script, scans)
    far_end.refusing = refusing
    plc = SoftPlc(far_end, program, clock, pace, said.append, yield_only)
    await plc.run(stop)
    return far_end, said, clock


async def test_it_scans_at_its_period_divided_by_the_pace(two_tanks):
    far_end, said, clock = await run(two_tanks, scans=4, pace=60.0)
    assert far_end.read_at == [0, 16, 33, 50]
    assert clock.deadlines == [16_666_666, 33_333_333, 50_000_000]
    assert [each["LIC-2.HB"] for each in far_end.writes] == [1, 2, 3, 4]
    assert far_end.closed == 1
    assert said == [
        "soft PLC LIC-2: connected",
        "soft PLC LIC-2: first scan at tick 102: LT-2 0.75 m, takes over FV-1 at 55.0 %",
        "soft PLC LIC-2: stopped after 4 scans, 0 missed",
    ]


async def test_it_closes_the_loop(two_tanks):
    def low_level(far_end, scan):
        far_end.values["LT-2"] = 0.75 if scan == 1 else 0.60

    far_end, _, _ = await run(two_tanks, low_level, scans=3)
    # Kc 2, T/Ti 0.1, error 0.1 of span: kick 20 % and 2 % a scan
    assert [each["FV-1"] for each in far_end.writes] == pytest.approx([55.0, 77.0, 79.0])


async def test_a_scan_that_takes_too_long_leaves_out_those_it_ran_into(two_tanks):
    def slow(far_end, scan):
        if scan == 2:
            far_end.clock.advance(45 * MS)

    far_end, said, _ = await run(two_tanks, slow, scans=4)
    assert far_end.read_at == [0, 16, 66, 83]
    assert said[-1].endswith("stopped after 4 scans, 2 missed")


async def test_a_scan_left_out_is_made_up_for_in_the_integral(two_tanks):
    def slow(far_end, scan):
        far_end.values["LT-2"] = 0.75 if scan == 1 else 0.60
        if scan == 2:
            far_end.clock.advance(45 * MS)

    far_end, said, _ = await run(two_tanks, slow, scans=4)
    # Kc 2, T/Ti 0.1, error 0.1 of span: kick 20 % and 2 % a scan; the third covers three periods
    assert [each["FV-1"] for each in far_end.writes] == pytest.approx([55.0, 77.0, 83.0, 85.0])
    assert said[-1].endswith("2 missed")


async def test_it_waits_for_the_rig_and_says_so_once(two_tanks):
    far_end, said, _ = await run(two_tanks, refusing=3)
    assert far_end.connects == 4
    assert said[:2] == [
        "soft PLC LIC-2: waiting for the rig: nobody there",
        "soft PLC LIC-2: connected",
    ]


async def test_it_holds_its_output_over_a_lost_link_and_goes_on_from_there(two_tanks):
    def lost_for_a_while(far_end, scan):
        far_end.values["LT-2"] = 0.75 if scan == 1 else 0.60
        if 3 <= scan <= 6:
            raise LinkError(f"no answer, attempt {scan}")
        if scan > 6:
            far_end.values["LT-2"] = 0.90

    far_end, said, _ = await run(two_tanks, lost_for_a_while, scans=8)
    assert [each["FV-1"] for each in far_end.writes] == pytest.approx([55.0, 77.0, 75.0, 73.0])
    assert said[2:4] == [
        "soft PLC LIC-2: link lost, output held: no answer, attempt 3",
        "soft PLC LIC-2: link back",
    ]


async def test_a_rig_that_began_anew_is_taken_over_anew(two_tanks):
    def restarted(far_end, scan):
        if scan == 3:
            raise LinkError("gone")
        if scan == 4:
            far_end.values |= {"TICK": 1.0, "FV-1": 20.0}

    far_end, said, _ = await run(two_tanks, restarted, scans=5)
    assert [each["FV-1"] for each in far_end.writes] == pytest.approx([55.0, 55.0, 20.0, 20.0])
    assert any("the rig began anew, first scan at tick 1:" in line for line in said)


async def test_a_rig_that_shows_nothing_yet_is_taken_over_once_it_does(two_tanks):
    def restarted(far_end, scan):
        if scan == 3:
            raise LinkError("gone")
        if scan == 4:
            far_end.values["TICK"] = math.nan  # the link is open before the first tick
        if scan == 5:
            far_end.values |= {"TICK": 0.0, "FV-1": 20.0}

    far_end, said, _ = await run(two_tanks, restarted, scans=5)
    assert far_end.writes[-1]["FV-1"] == pytest.approx(20.0)
    assert any("the rig began anew, first scan at tick 0:" in line for line in said)


async def test_a_refused_write_is_told_once_and_the_scan_goes_on(two_tanks):
    def refuse(_far_end, scan):
        if scan < 4:
            raise PeerError("FV-1 is not writable")

    far_end, said, _ = await run(two_tanks, refuse, scans=5)
    assert [line for line in said if "refused" in line] == [
        "soft PLC LIC-2: refused by the rig: FV-1 is not writable"
    ]
    assert len(far_end.writes) == 2


async def test_nothing_is_written_while_the_orders_cannot_be_read(two_tanks):
    def no_image_yet(far_end, scan):
        far_end.values["FV-1"] = float("nan") if scan < 3 else 30.0

    far_end, _, _ = await run(two_tanks, no_image_yet, scans=4)
    assert [each["FV-1"] for each in far_end.writes] == pytest.approx([30.0, 30.0])


async def test_silence_on_purpose_leaves_the_connection_open_and_asks_nothing(two_tanks):
    rig = two_tanks()
    clock, stop = HandClock(), asyncio.Event()
    faults = SoftPlcFaults(silent_after=3.0)
    program = program_of(rig.loops[0], points_of(rig, external=True), faults=faults)
    far_end = FakeRig(clock, stop, nothing, last_read=100)
    dozes = 0

    async def count(_seconds, stop):
        nonlocal dozes
        dozes += 1
        if dozes == 10:
            stop.set()

    await SoftPlc(far_end, program, clock, 60.0, lambda _: None, count).run(stop)
    assert (far_end.reads, len(far_end.writes), far_end.closed) == (3, 3, 1)


async def test_the_link_is_closed_when_the_cycle_breaks(two_tanks):
    def broken(_far_end, _scan):
        raise ZeroDivisionError

    rig = two_tanks()
    clock, stop = HandClock(), asyncio.Event()
    far_end = FakeRig(clock, stop, broken, 5)
    program = program_of(rig.loops[0], points_of(rig, external=True))
    with pytest.raises(ZeroDivisionError):
        await SoftPlc(far_end, program, clock, 60.0, lambda _: None, yield_only).run(stop)
    assert far_end.closed == 1


MODBUS = ModbusServerLink(name="plant bus", host="127.0.0.1", port=5020, unit=1, items=())
OPCUA = OpcUaServerLink(name="station", host="127.0.0.1", port=4840)


def test_a_link_is_found_by_its_name_or_its_kind(two_tanks):
    rig = two_tanks(links=(MODBUS, OPCUA))
    assert find_link(rig, "station") is OPCUA
    assert find_link(rig, "modbus") is MODBUS
    assert find_link(rig, "opcua") is OPCUA


def test_a_link_that_is_not_there_is_refused_with_what_there_is(two_tanks):
    with pytest.raises(UsageError, match="it has plant bus"):
        find_link(two_tanks(links=(MODBUS,)), "opcua")


def test_each_kind_of_link_has_its_client(two_tanks):
    rig = two_tanks()
    points = points_of(rig, external=True)
    for link in (MODBUS, OPCUA):
        client = make_client(link, points, host="::1", port=6000)
        assert all(
            callable(getattr(client, name)) for name in ("connect", "read", "write", "close")
        )
