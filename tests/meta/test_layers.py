"""Each import contract is broken on purpose in a copy of the tree, and the tool must see it."""

import shutil
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
RUN = "from importlinter.cli import lint_imports_command; lint_imports_command()"

# contract, file to plant (its folder is made a package), its text, the import that must be named
VIOLATIONS = [
    (
        "layers",
        "domain/planted.py",
        "import harness.links.port",
        "harness.domain.planted -> harness.links.port",
    ),
    (
        "layers",
        "recording/planted.py",
        "import harness.links.port",
        "harness.recording.planted -> harness.links.port",
    ),
    (
        "layers",
        "links/planted_up.py",
        "import harness.runtime.planted",
        "harness.links.planted_up -> harness.runtime.planted",
    ),
    (
        "config",
        "runtime/planted.py",
        "import harness.config.planted",
        "harness.runtime.planted -> harness.config.planted",
    ),
    ("plants", "../plants/planted.py", "import harness.errors\nimport time", "plants.planted -> time"),
    ("plants", "../plants/planted.py", "import harness.errors\nimport time", "plants.planted -> harness.errors"),
    ("asyncio", "controllers/planted_loop.py", "import asyncio", "harness.controllers.planted_loop -> asyncio"),
    ("clock", "controllers/planted.py", "import threading\nimport time", "harness.controllers.planted -> time"),
    ("clock", "controllers/planted.py", "import threading\nimport time", "harness.controllers.planted -> threading"),
    ("modbus", "links/planted.py", "import pymodbus.client", "harness.links.planted -> pymodbus"),
    ("opcua", "links/modbus/planted.py", "import asyncua", "harness.links.modbus.planted -> asyncua"),
    ("units", "app/planted.py", "import pydantic\nimport pint", "harness.app.planted -> pydantic"),
    ("units", "app/planted.py", "import pydantic\nimport pint", "harness.app.planted -> pint"),
    ("drawing", "analysis/planted.py", "import matplotlib.pyplot", "harness.analysis.planted -> matplotlib"),
    ("database", "reporting/planted.py", "import sqlite3", "harness.reporting.planted -> sqlite3"),
]  # fmt: skip


def contracts() -> dict[str, str]:
    settings = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    return {c["id"]: c["name"] for c in settings["tool"]["importlinter"]["contracts"]}


def copy_of_the_tree(place: Path) -> Path:
    for package in ("harness", "plants"):
        shutil.copytree(
            ROOT / package, place / package, ignore=shutil.ignore_patterns("__pycache__")
        )
    shutil.copy(ROOT / "pyproject.toml", place)
    return place


def plant(tree: Path, file: str, text: str) -> None:
    target = (tree / "harness" / file).resolve()
    target.parent.mkdir(parents=True, exist_ok=True)
    (target.parent / "__init__.py").touch()
    target.write_text(f'"""Planted."""\n\n{text}\n', encoding="utf-8")


def lint_imports(tree: Path) -> tuple[int, str]:
    """Run the tool on a tree; being there, the copy is found before the installed packages."""
    result = subprocess.run(
        [sys.executable, "-c", RUN, "--no-logo", "--no-cache"],
        cwd=tree, capture_output=True, text=True, check=False,
    )  # fmt: skip
    return result.returncode, result.stdout + result.stderr


@pytest.fixture(scope="module")
def broken_tree_output(tmp_path_factory: pytest.TempPathFactory) -> str:
    tree = copy_of_the_tree(tmp_path_factory.mktemp("broken"))
    plant(tree, "config/planted.py", "")
    for _, file, text, _ in VIOLATIONS:
        plant(tree, file, text)
    code, output = lint_imports(tree)
    assert code != 0
    return output


def test_the_tree_as_it_stands_keeps_every_contract(tmp_path: Path) -> None:
    code, output = lint_imports(copy_of_the_tree(tmp_path))
    assert code == 0, output
    assert "planted" not in output


def test_every_contract_has_a_planted_violation() -> None:
    assert {contract for contract, *_ in VIOLATIONS} == set(contracts())


@pytest.mark.parametrize("contract", sorted(contracts()))
def test_contract_is_reported_broken(broken_tree_output: str, contract: str) -> None:
    assert f"{contracts()[contract]} BROKEN" in broken_tree_output


@pytest.mark.parametrize("violation", VIOLATIONS, ids=lambda v: f"{v[0]}: {v[3]}")
def test_planted_import_is_named(
    broken_tree_output: str, violation: tuple[str, str, str, str]
) -> None:
    _, _, _, chain = violation
    assert chain in broken_tree_output


def test_a_folder_without_a_place_is_refused(tmp_path: Path) -> None:
    tree = copy_of_the_tree(tmp_path)
    plant(tree, "attic/__init__.py", "")
    code, output = lint_imports(tree)
    assert code != 0
    assert "attic" in output
