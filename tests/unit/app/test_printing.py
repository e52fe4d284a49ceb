"""What check and model print: every fact of their documents, within eighty characters."""

from __future__ import annotations

import pytest

from harness.app.printing import print_check, print_model

ROW = {
    "point": "LT-102",
    "address": 0,
    "address_from_one": 1,
    "encoding": "float32",
    "word_order": "ABCD",
    "scaling": "value",
    "unit": "m3/h",
    "access": "read",
}
CHECK = {
    "rig": "skid [bold]",
    "links": [
        {"name": "modbus", "address": "127.0.0.1:5020", "unit": 7, "map": [ROW]},
        {"name": "opcua", "address": "opc.tcp://127.0.0.1:4840"},
    ],
    "trial": "acceptance",
    "pace": 60.0,
    "phases": [
        {"name": "settle", "mode": "manual", "expected": 469.0, "time_limit": 1500.0},
        {"name": "setpoint up", "mode": "automatic", "expected": 662.0, "time_limit": 1500.0},
    ],
    "expected": 3600.0,
}
MODEL = {
    "rig": "skid",
    "operating_point": {
        "outputs": {"FV-101": 0.58},
        "flows": {"FV-101": 5.9},
        "flow_unit": "m3/h",
        "levels": {"TK-102": 0.75},
        "level_unit": "m",
    },
    "loops": {
        "LIC-102": {
            "process_variable": "LT-102",
            "unit": "m",
            "models": {
                "output": {
                    "valve": "FV-101",
                    "gain": 1.4607,
                    "gain_engineering": 0.021908,
                    "time_constants": [86.5, 66.14],
                    "dead_time": 2.0,
                    "total_lag": 154.64,
                }
            },
        }
    },
}


@pytest.fixture(autouse=True)
def narrow(monkeypatch):
    monkeypatch.setenv("COLUMNS", "80")


def test_a_check_tells_links_map_phases_and_how_long_it_takes(capsys):
    print_check(CHECK)
    text = capsys.readouterr().out
    assert "rig skid [bold]: in order" in text
    assert "link modbus: 127.0.0.1:5020, unit 7" in text
    assert "link opcua: opc.tcp://127.0.0.1:4840" in text
    cells = next(line for line in text.splitlines() if "LT-102" in line).split()
    assert cells == ["0", "1", "LT-102", "float32", "ABCD", "read", "value", "in", "m³/h"]
    assert next(line for line in text.splitlines() if "setpoint" in line).split() == [
        *("setpoint", "up", "automatic"),
        *("11:02", "25:00"),  # 662 s and 1500 s
    ]
    assert "about 1:00:00 of plant time, 1:00 at pace 60" in text
    assert max(len(line) for line in text.splitlines()) <= 80


def test_a_rig_without_a_trial_says_nothing_of_phases(capsys):
    print_check({"rig": "skid", "links": []})
    assert capsys.readouterr().out == "rig skid: in order\n"


def test_a_model_has_a_line_for_each_tag_and_path(capsys):
    print_model(MODEL)
    lines = capsys.readouterr().out.splitlines()
    assert next(line for line in lines if line.startswith("FV-101")).split() == [
        *("FV-101", "58.0", "%", "5.900", "m³/h", "-"),
    ]
    assert next(line for line in lines if line.startswith("TK-102")).split() == [
        *("TK-102", "-", "-", "0.7500", "m"),
    ]
    path = next(line for line in lines if line.startswith("output"))
    assert path.split()[1:] == [
        *("(FV-101)", "1.461", "0.02191", "154.6", "86.50", "+", "66.14", "2.000"),
    ]
    assert max(len(line) for line in lines) <= 80
