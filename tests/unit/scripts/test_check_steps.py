"""The check script runs everything, reports everything, and returns the first failing code."""

import importlib
import sys
from pathlib import Path
from types import ModuleType

import pytest

SCRIPTS = Path(__file__).resolve().parents[3] / "scripts"


@pytest.fixture
def check(monkeypatch: pytest.MonkeyPatch) -> ModuleType:
    monkeypatch.syspath_prepend(str(SCRIPTS))
    monkeypatch.delenv("CI", raising=False)
    for name in ("check", "_environment"):
        monkeypatch.delitem(sys.modules, name, raising=False)
    return importlib.import_module("check")


@pytest.fixture
def started(check: ModuleType, monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """Let each step only note its name; lint fails with 7, tests with 1."""
    names: list[str] = []

    def note(step: object) -> tuple[int, float]:
        names.append(step.name)
        return {"lint": 7, "tests": 1}.get(step.name, 0), 0.0

    monkeypatch.setattr(check, "run", note)
    return names


def test_all_steps_run_and_the_first_failure_decides(
    check: ModuleType,
    started: list[str],
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.setattr(sys, "argv", ["check.py"])
    assert check.main() == 7
    assert started == ["format", "lint", "types", "layers", "tests", "realtime"]
    summary = capsys.readouterr().out
    assert "FAILED (7)" in summary
    assert "FAILED (1)" in summary


def test_quick_leaves_out_what_is_slow(
    check: ModuleType, started: list[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(sys, "argv", ["check.py", "--quick"])
    check.main()
    assert "realtime" not in started
    tests = next(step for step in check.steps(quick=True) if step.name == "tests")
    assert tests.command[-1] == "not realtime and not slow"


def test_one_step_can_be_picked(
    check: ModuleType, started: list[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(sys, "argv", ["check.py", "--only", "layers"])
    assert check.main() == 0
    assert started == ["layers"]


def test_ci_leaves_nothing_out(
    check: ModuleType, started: list[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("CI", "true")
    monkeypatch.setattr(sys, "argv", ["check.py", "--quick", "--only", "layers"])
    check.main()
    assert started == ["format", "lint", "types", "layers", "tests", "realtime"]


def test_a_failing_program_gives_its_code(check: ModuleType) -> None:
    step = check.Step("format", ("-c", "raise SystemExit(3)"))
    code, duration = check.run(step)
    assert code == 3
    assert duration > 0.0
