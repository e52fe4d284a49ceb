"""The example files in configs/README.md name every key there is, and no other."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

import pytest

from harness.config import rig_tables, trial_tables

README = (Path(__file__).parents[2] / "configs" / "README.md").read_text(encoding="utf-8")
RIG, TRIAL = (
    tomllib.loads(text) for text in re.findall(r"```toml\n(.*?)```", README, re.DOTALL)
)


def keys(model):
    return {field.alias or name for name, field in model.model_fields.items()}


def of_kind(array, kind):
    return next(each for each in RIG[array] if each["kind"] == kind)


@pytest.mark.parametrize(
    ("shown", "model"),
    [
        (RIG["rig"], rig_tables.RigTable),
        (RIG["source"][0], rig_tables.SourceTable),
        (RIG["vessel"][0], rig_tables.VesselTable),
        (of_kind("path", "orifice"), rig_tables.OrificeTable),
        (of_kind("path", "overflow"), rig_tables.OverflowTable),
        (of_kind("path", "valve"), rig_tables.ValveTable),
        (RIG["actuator"][0], rig_tables.ActuatorTable),
        (RIG["transmitter"][0], rig_tables.TransmitterTable),
        (RIG["loop"][0], rig_tables.LoopTable),
        (of_kind("link", "modbus_server"), rig_tables.ModbusServerTable),
        (of_kind("link", "opcua_server"), rig_tables.OpcUaServerTable),
        (
            {key: value for item in RIG["link"][0]["items"] for key, value in item.items()},
            rig_tables.ItemTable,
        ),
        (TRIAL["trial"], trial_tables.TrialTable),
        (TRIAL["phase"][0], trial_tables.PhaseTable),
        (TRIAL["given"], trial_tables.GivenTable),
        (TRIAL["given"]["output"], trial_tables.ModelTable),
        (TRIAL["as_found"], trial_tables.AsFoundTable),
        (TRIAL["steady"], trial_tables.SteadyTable),
        (TRIAL["tolerances"], trial_tables.TolerancesTable),
    ],
    ids=lambda each: getattr(each, "__name__", ""),
)
def test_example_shows_every_key_with_a_value_that_is_accepted(shown, model):
    assert set(shown) == keys(model)
    if model is not rig_tables.ItemTable:  # its keys are gathered from several lines
        model.model_validate(shown)
