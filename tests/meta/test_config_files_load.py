"""Every file in configs/ loads, each trial with the rig that it is for."""

from pathlib import Path

import pytest

from harness.config.load import load_rig, load_trial
from harness.domain.rig import ModbusServerLink, OpcUaServerLink

CONFIGS = Path(__file__).parents[2] / "configs"
RIGS = sorted((CONFIGS / "rigs").glob("*.toml"))
TRIALS = sorted((CONFIGS / "trials").glob("*.toml"))


@pytest.mark.parametrize("path", RIGS, ids=lambda path: path.stem)
def test_rig_loads(path):
    rig, text = load_rig(path)
    assert rig.loops
    assert text == path.read_text(encoding="utf-8")
    modbus, opcua = rig.links
    assert isinstance(modbus, ModbusServerLink)
    assert isinstance(opcua, OpcUaServerLink)
    assert (modbus.host, modbus.port, modbus.unit) == ("127.0.0.1", 5020, 1)
    assert (opcua.host, opcua.port) == ("127.0.0.1", 4840)


@pytest.mark.parametrize("trial", TRIALS, ids=lambda path: path.stem)
@pytest.mark.parametrize("rig", RIGS, ids=lambda path: path.stem)
def test_trial_fits_every_rig(rig, trial):
    """All rigs here have the same tags, so that any trial at least starts on any of them."""
    loaded, _ = load_trial(trial, load_rig(rig)[0])
    assert loaded.phases


def test_nothing_lies_beside_the_files_known():
    assert {path.name for path in CONFIGS.rglob("*") if path.is_file()} == {
        "README.md",
        *(path.name for path in RIGS + TRIALS),
    }


@pytest.mark.parametrize("path", RIGS, ids=lambda path: path.stem)
def test_what_a_controller_reads_and_writes_lies_without_gaps(path):
    """One read and one write a scan: the blocks that README.md promises."""
    modbus = load_rig(path)[0].links[0]
    assert isinstance(modbus, ModbusServerLink)
    width = {"float32": 2, "uint32": 2, "uint16": 1, "int16": 1}
    taken = {
        item.address + offset: item.point
        for item in modbus.items
        if item.encoding != "bit"
        for offset in range(width[item.encoding])
    }
    assert all(address in taken for address in range(25))
    assert {taken[0], taken[10], taken[24]} == {"LT-102", "TICK", "LIC-102.MODE"}
    assert [taken[address] for address in (40, 41, 42)] == ["FV-101", "FV-101", "LIC-102.HB"]
