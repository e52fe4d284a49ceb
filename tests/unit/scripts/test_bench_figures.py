"""The benchmark prints the same figures as a table and as JSON."""

import importlib.util
import json
import sys
from pathlib import Path
from types import ModuleType

import pytest

SCRIPTS = Path(__file__).resolve().parents[3] / "scripts"


@pytest.fixture
def figures(monkeypatch: pytest.MonkeyPatch) -> ModuleType:
    spec = importlib.util.spec_from_file_location("_figures", SCRIPTS / "_figures.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    monkeypatch.setitem(sys.modules, "_figures", module)  # dataclasses look their module up
    spec.loader.exec_module(module)
    return module


def test_table_and_json_hold_the_same_figures(figures: ModuleType) -> None:
    found = [
        figures.Figure(name="loops.c", value=None, unit="x real time", note="no C compiler"),
        figures.Figure(
            name="loops.built_in", value=412345.6, unit="x real time", wanted=">= 1"
        ),
    ]
    table = figures.as_table(found).splitlines()
    document = json.loads(figures.as_json(found))
    assert [line.split()[0] for line in table] == list(document["figures"])
    assert "412,346" in table[1]
    assert document["figures"]["loops.built_in"]["value"] == 412345.6
    assert document["figures"]["loops.c"] == {
        "value": None,
        "unit": "x real time",
        "wanted": "",
        "note": "no C compiler",
    }
    assert document["schema"] == 1


def test_a_figure_that_is_no_number_is_refused(figures: ModuleType) -> None:
    with pytest.raises(ValueError, match="not JSON compliant"):
        figures.as_json([figures.Figure(name="x", value=float("nan"), unit="1")])
