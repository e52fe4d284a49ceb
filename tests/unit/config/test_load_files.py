"""From a file on disk to the domain: values in SI, and files that cannot be read."""

import os
import re
import subprocess
import sys
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from harness.config.load import load_rig, load_trial, rig_from_text, trial_from_text
from harness.domain.models import ControlLaw, ControllerSettings, LagModel, LoopModels
from harness.domain.orders import (
    BlockForm,
    BlockUnits,
    GainUnit,
    LoopOrders,
    OrderBy,
    OrderKind,
)
from harness.domain.rig import (
    Action,
    Characteristic,
    ControlValve,
    Encoding,
    Loop,
    Measurement,
    ModbusServerLink,
    OpcUaServerLink,
    Orifice,
    Overflow,
    RegisterItem,
    Scaling,
    Source,
    Transmitter,
    VerticalCylinder,
    Vessel,
    WordOrder,
)
from harness.domain.signals import Range
from harness.domain.trial import (
    Mode,
    ModelSource,
    Phase,
    PhaseKind,
    SettingsSource,
    SteadyRule,
    Tolerances,
)
from harness.errors import ConfigurationError, ExitCode

DATA = Path(__file__).parent / "data"
RIG_TEXT = (DATA / "rig.toml").read_text(encoding="utf-8")
TRIAL_TEXT = (DATA / "trial.toml").read_text(encoding="utf-8")
RIG = rig_from_text(RIG_TEXT, "rig.toml")


def test_plant_of_a_rig_is_in_si():
    rig, text = load_rig(DATA / "rig.toml")
    assert text == RIG_TEXT
    assert (rig.name, rig.description, rig.tick, rig.seed) == ("test rig", "", 0.5, 0)
    assert rig.gravity == 9.80665
    assert rig.sources == (Source(tag="PW-HEADER", pressure=3e5, density=998.2),)
    assert rig.vessels == (
        Vessel(
            tag="TK-101", shape=VerticalCylinder(diameter=0.35, height=1.6), initial_level=0.5
        ),
        Vessel(
            tag="TK-102", shape=VerticalCylinder(diameter=0.55, height=1.6), initial_level=None
        ),
    )
    assert rig.orifices[0] == Orifice(
        tag="RO-101",
        origin="TK-101",
        destination="TK-102",
        discharge_coefficient=0.61,
        diameter=0.0297,
    )
    assert [path.destination for path in rig.orifices] == ["TK-102", "drain"]
    assert rig.overflows == (
        Overflow(
            tag="OV-101",
            origin="TK-101",
            destination="TK-102",
            crest=1.45,
            width=0.3,
            discharge_coefficient=0.6,
            fraction=0.8,
        ),
    )


def test_valve_and_actuator_become_one():
    assert RIG.valves == (
        ControlValve(
            tag="FV-101",
            origin="PW-HEADER",
            destination="TK-101",
            kv=16.0,
            characteristic=Characteristic.EQUAL_PERCENTAGE,
            rangeability=30.0,
            line_kv=7.4,
            stroke_time=6.0,
            lag=1.0,
            fail_position=0.0,
            initial_output=0.58,
        ),
        ControlValve(
            tag="FV-102",
            origin="PW-HEADER",
            destination="TK-102",
            kv=6.3,
            characteristic=Characteristic.LINEAR,
            rangeability=50.0,
            line_kv=None,
            stroke_time=6.0,
            lag=1.0,
            fail_position=None,
            initial_output=0.4,
        ),
    )


@pytest.mark.parametrize(
    ("written", "travel"), [("closed", 0.0), ("open", 1.0), ("hold", None), ("20 %", 0.2)]
)
def test_fail_position_in_words_and_as_travel(written, travel):
    text = RIG_TEXT.replace('"closed"', f'"{written}"')
    assert rig_from_text(text, "rig.toml").valve("FV-101").fail_position == travel


def test_instruments_and_loop_of_a_rig():
    assert RIG.transmitters[0] == Transmitter(
        tag="LT-101",
        measures=Measurement.LEVEL,
        subject="TK-101",
        range=Range(lower=0.0, upper=1.5, unit="m"),
        damping=1.0,
        noise=0.0005,
        resolution=0.0001,
        failure_current_ma=3.6,
    )
    flow = RIG.transmitter("FT-101")
    assert (flow.measures, flow.subject) == (Measurement.FLOW, "FV-101")
    assert flow.range.unit == "m3/s"
    assert flow.range.upper == pytest.approx(12 / 3600, rel=1e-15)
    assert RIG.loops == (
        Loop(
            tag="LIC-102",
            process_variable="LT-102",
            output="FV-101",
            load="FV-102",
            action=Action.REVERSE,
            initial_setpoint=0.75,
            output_low=0.05,
            output_high=0.95,
            scan=1.0,
            scan_phase=1,
            output_delay=0,
            watchdog=10.0,
            heartbeat_timeout=5.0,
            orders=LoopOrders(),
        ),
    )


def test_links_of_a_rig():
    modbus, opcua = RIG.links
    assert isinstance(modbus, ModbusServerLink)
    assert (modbus.host, modbus.port, modbus.unit) == ("127.0.0.1", 5020, 1)
    assert (modbus.max_connections, modbus.idle_timeout) == (64, 60.0)
    assert modbus.items[0] == RegisterItem(
        point="LT-102", address=0, encoding=Encoding.FLOAT32, word_order=WordOrder.CDAB
    )
    assert modbus.items[1].split_writes
    assert modbus.items[4].scaling is Scaling.CURRENT
    assert (modbus.items[5].counts_low, modbus.items[5].counts_high) == (0, 32000)
    assert modbus.items[6].factor == 1000.0
    assert modbus.items[7].encoding is Encoding.BIT
    assert opcua == OpcUaServerLink(
        name="opcua", host="127.0.0.1", port=4840, points=("LT-102", "FV-101")
    )


def test_setpoint_of_a_flow_loop_is_a_flow():
    text = RIG_TEXT.replace('tag = "LIC-102"', 'tag = "FIC-101"').replace(
        'process_variable = "LT-102"', 'process_variable = "FT-101"'
    )
    text = text.replace('"750 mm"', '"6 m3/h"').replace("LIC-102.", "FIC-101.")
    loop = rig_from_text(text, "rig.toml").loop("FIC-101")
    assert loop.initial_setpoint == pytest.approx(6 / 3600, rel=1e-15)


def test_trial_in_si():
    trial, text = load_trial(DATA / "trial.toml", RIG)
    assert text == TRIAL_TEXT
    assert (trial.name, trial.law, trial.closed_loop_time) == (
        "test trial",
        ControlLaw.PI,
        60.0,
    )
    assert (trial.models, trial.given) == (ModelSource.IDENTIFIED, None)
    assert (trial.settings, trial.as_found) == (SettingsSource.COMPUTED, None)
    assert trial.phases[1] == Phase(
        name="output up",
        loop="LIC-102",
        kind=PhaseKind.OUTPUT_STEP,
        mode=Mode.MANUAL,
        change=0.04,
        time_limit=1500.0,
    )
    assert trial.phases[0].change == 0.0
    assert trial.steady == SteadyRule(dwell=6.0, remaining=0.02)
    assert trial.tolerances == Tolerances(relative=0.15)


def test_given_models_and_settings_as_found():
    text = TRIAL_TEXT.replace('"identified"', '"given"').replace('"computed"', '"as found"')
    text += """
[as_found]
gain = 1.1
integral_time = "2 min"
action = "reverse"
[given.output]
gain = 1.5
time_constants = ["118 s", "90 s"]
dead_time = "3 s"
[given.load]
gain = 0.7
time_constants = ["118 s"]
dead_time = "0 s"
"""
    trial = trial_from_text(text, "trial.toml", RIG)
    assert trial.as_found == ControllerSettings(
        gain=1.1, integral_time=120.0, action=Action.REVERSE
    )
    assert trial.given == LoopModels(
        output=LagModel(gain=1.5, time_constants=(118.0, 90.0), dead_time=3.0),
        load=LagModel(gain=0.7, time_constants=(118.0,), dead_time=0.0),
    )


def test_settings_as_found_in_the_blocks_own_units():
    rig_text = RIG_TEXT.replace(
        'watchdog = "10 s"',
        'watchdog = "10 s"\nblock = { gain_unit = "proportional band", time_unit = "repeats per minute" }',
    )
    rig = rig_from_text(rig_text, "rig.toml")
    text = TRIAL_TEXT.replace('"computed"', '"as found"')
    text += """
[as_found]
units = "block"
gain = 80
integral = 0.4
action = "reverse"
"""
    found = trial_from_text(text, "trial.toml", rig).as_found
    # 100 / 80 % and 60 / 0.4 per minute
    assert found == ControllerSettings(gain=1.25, integral_time=150.0, action=Action.REVERSE)


def test_models_of_an_earlier_run():
    text = TRIAL_TEXT.replace('"identified"', '{ run = "runs/of-last-week" }')
    trial = trial_from_text(text, "trial.toml", RIG)
    assert trial.models is ModelSource.RUN
    assert trial.models_run == "runs/of-last-week"
    assert trial.models_of("LIC-102") is None  # until that run is read


def test_orders_and_block_in_their_long_forms():
    text = RIG_TEXT.replace(
        'watchdog = "10 s"',
        'watchdog = "10 s"\norders = { setpoint = "prompt", settings = "callable", function = "bench.tools:take" }\n'
        'block = { form = "parallel", gain_unit = "counts", output_counts = 4095, setpoint_resolution = "5 mm" }',
    )
    loop = rig_from_text(text, "rig.toml").loops[0]
    assert loop.orders == LoopOrders(
        setpoint=OrderBy.PROMPT, settings=OrderBy.CALLABLE, function="bench.tools:take"
    )
    assert loop.block == BlockUnits(
        form=BlockForm.PARALLEL,
        gain_unit=GainUnit.COUNTS,
        output_counts=4095,
        setpoint_resolution=0.005,
    )
    short = rig_from_text(
        RIG_TEXT.replace('watchdog = "10 s"', 'watchdog = "10 s"\norders = "prompt"'),
        "rig.toml",
    )
    assert {short.loops[0].orders.way(kind) for kind in OrderKind} == {OrderBy.PROMPT}


def test_missing_file(tmp_path):
    path = tmp_path / "none.toml"
    with pytest.raises(ConfigurationError) as caught:
        load_rig(path)
    assert caught.value.problems == (f"{path}: there is no such rig file",)
    assert caught.value.exit_code is ExitCode.USAGE


def test_folder_in_place_of_a_file(tmp_path):
    with pytest.raises(ConfigurationError) as caught:
        load_trial(tmp_path, RIG)
    assert caught.value.problems == (f"{tmp_path}: is a folder; name the trial file in it",)


def test_file_within_a_file(tmp_path):
    path = tmp_path / "file"
    path.write_text("", encoding="utf-8")
    with pytest.raises(ConfigurationError) as caught:
        load_rig(path / "rig.toml")
    (problem,) = caught.value.problems  # which of the two it says differs by platform
    assert re.fullmatch(
        re.escape(str(path / "rig.toml")) + ": (cannot be read: .+|there is no such rig file)",
        problem,
    )


@pytest.mark.skipif(
    sys.platform == "win32" or getattr(os, "geteuid", lambda: 0)() == 0,
    reason="needs a file that the user may not read",
)
def test_file_without_permission(tmp_path):
    path = tmp_path / "rig.toml"
    path.write_text(RIG_TEXT, encoding="utf-8")
    path.chmod(0)
    with pytest.raises(ConfigurationError, match=r"cannot be read: Permission denied$"):
        load_rig(path)


def test_file_that_is_not_utf8(tmp_path):
    path = tmp_path / "rig.toml"
    path.write_bytes("format = 1\n# 20 °C\n".encode("latin-1"))
    with pytest.raises(ConfigurationError) as caught:
        load_rig(path)
    assert caught.value.problems == (
        f"{path}:2: is not UTF-8 text; save it with that encoding",
    )


def test_empty_file(tmp_path):
    path = tmp_path / "rig.toml"
    path.write_bytes(b"")
    with pytest.raises(ConfigurationError) as caught:
        load_rig(path)
    assert caught.value.problems[0] == (
        f"{path}:1: format: is missing; write format = 1 as the first line"
    )


def test_marks_and_line_ends_of_other_editors(tmp_path):
    path = tmp_path / "rig.toml"
    path.write_bytes(b"\xef\xbb\xbf" + RIG_TEXT.replace("\n", "\r\n").encode())
    rig, text = load_rig(path)
    assert rig == RIG
    assert text == RIG_TEXT


def test_deep_nesting_is_refused_and_does_not_overflow():
    text = "format = 1\nx = " + "[" * 5000 + "]" * 5000
    assert problems_of(rig_from_text, text, "rig.toml") == (
        "rig.toml:1: brackets are nested too deeply to be a rig or a trial",
    )


LINES = RIG_TEXT.splitlines()
ANY_VALUE = st.sampled_from(
    ["1", "-1", "1.5", "nan", "true", '""', '"x"', '"1 m"', "[]", "[1, 2]", "{}", "1979-05-27"]
)


def problems_of(load, *arguments):
    """Return the problems found; anything but a ConfigurationError fails the test."""
    try:
        load(*arguments)
    except ConfigurationError as error:
        return error.problems or ("an error without a problem",)
    return ()


@settings(deadline=None)  # the first unit unknown to the shortcut loads the library
@given(
    dropped=st.sets(st.integers(0, len(LINES) - 1), max_size=5),
    replaced=st.dictionaries(st.integers(0, len(LINES) - 1), ANY_VALUE, max_size=3),
)
def test_any_damage_is_reported_as_a_problem_and_nothing_else(dropped, replaced):
    lines = list(LINES)
    for index, value in replaced.items():
        key, equals, _ = lines[index].partition(" = ")
        lines[index] = (
            f"{key} = {value}" if equals and not key.startswith(" ") else lines[index]
        )
    text = "\n".join(line for index, line in enumerate(lines) if index not in dropped)
    for problem in problems_of(rig_from_text, text, "rig.toml"):
        assert re.match(r"rig\.toml:\d+: ", problem)
        assert 1 <= int(problem.split(":")[1]) <= text.count("\n") + 1


TRIAL_LINES = TRIAL_TEXT.splitlines()


@settings(deadline=None)  # the first unit unknown to the shortcut loads the library
@given(
    dropped=st.sets(st.integers(0, len(TRIAL_LINES) - 1), max_size=5),
    replaced=st.dictionaries(st.integers(0, len(TRIAL_LINES) - 1), ANY_VALUE, max_size=3),
)
def test_any_damage_to_a_trial_is_reported_as_a_problem_and_nothing_else(dropped, replaced):
    lines = list(TRIAL_LINES)
    for index, value in replaced.items():
        key, equals, _ = lines[index].partition(" = ")
        lines[index] = f"{key} = {value}" if equals else lines[index]
    text = "\n".join(line for index, line in enumerate(lines) if index not in dropped)
    for problem in problems_of(trial_from_text, text, "trial.toml", RIG):
        assert re.match(r"trial\.toml:\d+: ", problem)
        assert 1 <= int(problem.split(":")[1]) <= text.count("\n") + 1


def test_usual_files_are_read_without_loading_the_library_of_units():
    """That takes 0.3 s, which the command would add to every start."""
    code = (
        "import sys; from pathlib import Path; from harness.config.load import load_rig;"
        f"load_rig(Path({str(DATA / 'rig.toml')!r}));"
        "print('pint' in sys.modules, 'numpy' in sys.modules)"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    )
    assert done.stdout.split() == ["False", "False"]
