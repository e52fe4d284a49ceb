"""The soft PLC that takes nothing over the link: what is typed at its panel, and what it works on."""

from __future__ import annotations

import dataclasses

import pytest

from harness.domain.orders import BlockUnits, GainUnit, TimeUnit
from harness.domain.points import points_of
from harness.domain.signals import Quality, Range
from harness.links.client import Reading
from harness.runtime.plc_block import BlockState, program_of, scan_once
from harness.runtime.plc_panel import Panel, PanelClient

LEVEL = Range(lower=0.0, upper=1.5, unit="m")
BLOCK = BlockUnits(
    gain_unit=GainUnit.BAND,
    gain_resolution=1.0,
    time_unit=TimeUnit.REPEATS,
    time_resolution=0.01,
    setpoint_resolution=0.005,
)


@pytest.fixture
def loop(two_tanks):
    return dataclasses.replace(two_tanks().loops[0], block=BLOCK)


@pytest.fixture
def panel(loop):
    panel = Panel(loop=loop, measured=LEVEL)
    panel.begin(0.75, 55.0)
    return panel


def values(panel):
    return {name: reading.value for name, reading in panel.readings().items()}


def test_it_starts_in_manual_with_the_settings_of_the_factory(panel):
    assert panel.shown() == "MAN  SP 0.75 m  OUT 55 %  GAIN 100  INT 1"
    assert values(panel) == pytest.approx(
        {"LIC-2.SP": 0.75, "LIC-2.MODE": 0, "LIC-2.MO": 55.0, "LIC-2.KC": 1.0, "LIC-2.TI": 60.0}
    )


def test_numbers_are_typed_in_the_blocks_units_and_rounded_to_its_steps(panel):
    panel.enter("SP 0.8031")
    panel.enter("gain 80.4")
    panel.enter("INT 0.402")
    panel.enter("OUT 43.21")
    assert panel.enter("AUTO") == "AUTO  SP 0.805 m  OUT 43.2 %  GAIN 80  INT 0.4"
    assert values(panel) == pytest.approx(
        {
            "LIC-2.SP": 0.805,
            "LIC-2.MODE": 1,
            "LIC-2.MO": 43.2,
            "LIC-2.KC": 1.25,
            "LIC-2.TI": 150,
        }
    )
    assert panel.enter("MAN").startswith("MAN ")


def test_integral_action_can_be_off(panel):
    assert panel.enter("INT OFF").endswith("INT OFF")
    assert values(panel)["LIC-2.TI"] == 0.0  # the point's way to say none


@pytest.mark.parametrize(
    ("line", "said"),
    [
        ("SP", "SP wants a number, not ''"),
        ("SP high", "SP wants a number, not 'high'"),
        ("SP nan", "SP wants a number, not 'nan'"),
        ("SP 1.6", "SP 1.6 is refused; 0 to 1.5"),
        ("OUT -1", "OUT -1 is refused; 0 to 100"),
        ("GAIN 0.2", "GAIN 0.2 is refused; 1 to 1e+06"),
        ("GO", "'GO' is not understood"),
        ("AUTO now", "'AUTO now' is not understood"),
    ],
)
def test_what_makes_no_sense_changes_nothing(panel, line, said):
    before = panel.shown()
    assert panel.enter(line).startswith(said)
    assert panel.shown() == before


class FarEnd:
    """A link whose orders must not be read."""

    def __init__(self):
        self.asked = []
        self.values = {"LT-2": 0.75, "FV-1": 55.0, "TICK": 7.0}

    async def read(self, names):
        self.asked.append(tuple(names))
        return {name: Reading(value=self.values[name], quality=Quality.GOOD) for name in names}


class Typed:
    def __init__(self, *lines):
        self.lines = list(lines)

    def next(self):
        return self.lines.pop(0) if self.lines else None

    def skip(self):
        self.lines.clear()


async def test_a_scan_works_on_the_panel_and_reads_no_order_over_the_link(two_tanks, loop):
    program = dataclasses.replace(
        program_of(loop, points_of(two_tanks(), external=True)), measured=LEVEL
    )
    far_end, said = FarEnd(), []
    typed = Typed("", "SP 0.9", "GAIN 200", "INT OFF", "AUTO")
    client = PanelClient(far_end, Panel(loop=loop, measured=LEVEL), typed, said.append)
    readings = await client.read(program.reads)
    assert set(readings) == set(program.reads)
    assert far_end.asked == [("LT-2", "FV-1", "TICK")]
    assert said[-1] == "panel of LIC-2: AUTO  SP 0.9 m  OUT 55 %  GAIN 200  INT OFF"
    state = BlockState(output=0.55)
    state = scan_once(program, state, readings)
    far_end.values["LT-2"] = 0.6
    state = scan_once(program, state, await client.read(program.reads))
    assert state.output == pytest.approx(0.55 + 0.5 * 0.1)  # Kc 0.5 on a tenth of span
