"""What starts often starts light: no heavy library is loaded before it is needed."""

import subprocess
import sys

import pytest

HEAVY = {"asyncua", "matplotlib", "numba", "pint", "pydantic", "pymodbus", "scipy", "sqlite3"}
LIGHT = {
    "harness.errors": HEAVY | {"numpy", "rich", "asyncio"},
    "harness.domain.rig": HEAVY | {"numpy", "rich", "asyncio"},
    "harness.domain.points": HEAVY | {"numpy", "rich", "asyncio"},
    "harness.domain.verdict": HEAVY | {"numpy", "rich", "asyncio"},
    "harness.links.port": HEAVY | {"numpy", "rich", "asyncio"},
    "harness.links.modbus.core": HEAVY | {"rich", "asyncio"},
    "harness.links.modbus.server": HEAVY | {"rich"},
}


@pytest.mark.parametrize("module", sorted(LIGHT))
def test_module_loads_nothing_heavy(module: str) -> None:
    code = f"import sys, {module}; print(*sorted(sys.modules))"
    result = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    )
    loaded = {name.partition(".")[0] for name in result.stdout.split()}
    assert loaded & LIGHT[module] == set()
