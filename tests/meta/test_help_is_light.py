"""Help comes at once, because it loads nothing but the parser."""

import subprocess
import sys

import pytest

from harness.cli import build_parser

HEAVY = {"asyncio", "asyncua", "matplotlib", "multiprocessing", "numba", "numpy", "pint"}
HEAVY |= {"pydantic", "pymodbus", "rich", "scipy", "sqlite3"}
COMMANDS = sorted(build_parser()._subparsers._group_actions[0].choices)


def test_there_are_commands():
    assert {"check", "model", "serve", "control", "trial", "score"} <= set(COMMANDS)


@pytest.mark.parametrize("command", ["", *COMMANDS])
def test_help_loads_nothing_heavy(command):
    code = (
        "import sys; from harness.cli import main\n"
        f"try: main({[*command.split(), '--help']!r})\n"
        "except SystemExit as end: code = end.code\n"
        "print('MODULES', *sorted(sys.modules)); sys.exit(code)"
    )
    result = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    )
    shown, _, modules = result.stdout.partition("MODULES")
    assert "usage: " in shown
    assert command in shown
    loaded = {name.partition(".")[0] for name in modules.split()}
    assert "harness" in loaded
    assert not loaded & HEAVY
