"""The set-up script makes, mends and keeps the virtual environment, and says why it cannot."""

import importlib.util
import json
import os
import subprocess
import sys
from pathlib import Path
from types import ModuleType

import pytest

SOURCE = Path(__file__).resolve().parents[3] / "scripts" / "_environment.py"
PROJECT = """\
[build-system]
requires = ["setuptools>=77"]
build-backend = "setuptools.build_meta"

[project]
name = "probe"
version = "0"
dependencies = []
"""


@pytest.fixture
def environment(tmp_path: Path) -> ModuleType:
    """Return the script as a module of its own, set to a project in a temporary folder."""
    spec = importlib.util.spec_from_file_location("environment_under_test", SOURCE)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    root = tmp_path / "a project"  # a blank in the path, as on many a laptop
    (root / "scripts").mkdir(parents=True)
    (root / "pyproject.toml").write_text(PROJECT, encoding="utf-8")
    (root / "scripts" / "constraints.txt").write_text("numpy==2.4.6\n", encoding="utf-8")
    module.ROOT = root
    module.VENV = root / ".venv"
    module.CONSTRAINTS = root / "scripts" / "constraints.txt"
    module.STAMP = module.VENV / "dryrig-stamp.json"
    return module


def record_an_installation(environment: ModuleType, extras: list[str]) -> None:
    environment.VENV.mkdir(exist_ok=True)
    stamp = {"digest": environment._digest(), "extras": extras}
    environment.STAMP.write_text(json.dumps(stamp), encoding="utf-8")


def test_an_old_python_is_told_so(
    environment: ModuleType, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(sys, "version_info", (3, 9, 2, "final", 0))
    with pytest.raises(SystemExit) as exit_:
        environment.ensure()
    assert exit_.value.code == 2
    assert "Python 3.9 is too old" in capsys.readouterr().err
    assert not environment.VENV.exists()


def test_without_ensurepip_the_package_is_named_and_nothing_is_left(
    environment: ModuleType, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    (environment.VENV / "bin").mkdir(parents=True)  # half an environment, as it is left behind
    monkeypatch.setattr(environment.importlib.util, "find_spec", lambda _name: None)
    with pytest.raises(SystemExit) as exit_:
        environment.ensure()
    assert exit_.value.code == 2
    assert "apt install python3-venv" in capsys.readouterr().err
    assert not environment.VENV.exists()


def test_a_failing_venv_module_leaves_nothing_half_made(
    environment: ModuleType, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def half_made(command: list[str], **_: object) -> subprocess.CompletedProcess[str]:
        (environment.VENV / "bin").mkdir(parents=True)
        return subprocess.CompletedProcess(command, 1, "", "ensurepip is not available")

    monkeypatch.setattr(environment.subprocess, "run", half_made)
    with pytest.raises(SystemExit) as exit_:
        environment.ensure()
    assert exit_.value.code == 2
    assert "python3-venv" in capsys.readouterr().err
    assert not environment.VENV.exists()


@pytest.mark.skipif(os.name == "nt", reason="making links takes a right of its own there")
def test_a_link_in_place_of_the_environment_is_cut_and_its_target_kept(
    environment: ModuleType, tmp_path: Path
) -> None:
    target = tmp_path / "precious"
    target.mkdir()
    environment.VENV.symlink_to(target, target_is_directory=True)
    environment._remove()
    assert target.is_dir()
    assert not environment.VENV.is_symlink()


def test_a_recorded_installation_is_kept(environment: ModuleType) -> None:
    record_an_installation(environment, ["dev"])
    assert environment._recorded_extras() == ["dev"]


@pytest.mark.parametrize("changed", ["pyproject.toml", "scripts/constraints.txt"])
def test_a_changed_requirement_asks_for_an_installation(
    environment: ModuleType, changed: str
) -> None:
    record_an_installation(environment, [])
    file = environment.ROOT / changed
    text = file.read_text(encoding="utf-8").replace("[]", '["numpy"]').replace("2.4.6", "2.4.7")
    file.write_text(text, encoding="utf-8")
    assert environment._recorded_extras() is None


def test_a_changed_linter_setting_asks_for_none(environment: ModuleType) -> None:
    record_an_installation(environment, [])
    with (environment.ROOT / "pyproject.toml").open("a", encoding="utf-8") as file:
        file.write("[tool.ruff]\nline-length = 96\n")
    assert environment._recorded_extras() == []


def test_a_moved_project_asks_for_an_installation(
    environment: ModuleType, tmp_path: Path
) -> None:
    record_an_installation(environment, [])
    environment.ROOT.rename(tmp_path / "moved")
    environment.ROOT = tmp_path / "moved"
    environment.CONSTRAINTS = environment.ROOT / "scripts" / "constraints.txt"
    environment.STAMP = environment.ROOT / ".venv" / "dryrig-stamp.json"
    assert environment._recorded_extras() is None


def test_an_unreadable_stamp_asks_for_an_installation(environment: ModuleType) -> None:
    environment.VENV.mkdir()
    environment.STAMP.write_text("{", encoding="utf-8")
    assert environment._recorded_extras() is None


def test_a_folder_that_is_no_environment_is_not_usable(environment: ModuleType) -> None:
    assert not environment._usable(environment._interpreter(environment.VENV))
    # An interpreter that works, but of another environment.
    assert not environment._usable(Path(sys.executable))


@pytest.mark.slow
def test_a_broken_environment_is_made_anew_and_an_unreachable_index_is_told(
    environment: ModuleType, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    environment.VENV.mkdir()
    (environment.VENV / "pyvenv.cfg").write_text("home = nowhere\n", encoding="utf-8")
    monkeypatch.setenv("PIP_CONFIG_FILE", os.devnull)
    monkeypatch.setenv("PIP_NO_INDEX", "1")
    monkeypatch.setenv("PIP_FIND_LINKS", "")
    with pytest.raises(SystemExit) as exit_:
        environment.ensure()
    assert exit_.value.code == 2
    assert "could not be installed" in capsys.readouterr().err
    assert environment._usable(environment._interpreter(environment.VENV))
    assert not environment.STAMP.exists()
