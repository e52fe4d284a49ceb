"""Run every check of the project: format, lint, types, layers, tests, real-time tests.

All checks run, whatever fails; the exit code is the first failing one's. ``--quick`` leaves
out the slow and the real-time tests, ``--only`` picks checks by name. In CI nothing is left out.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import time
from dataclasses import dataclass

import _environment


@dataclass(frozen=True)
class Step:
    """One check: its name and the module that the environment's Python runs, with arguments."""

    name: str
    command: tuple[str, ...]


_LINT_IMPORTS = "from importlinter.cli import lint_imports_command; lint_imports_command()"


def steps(quick: bool) -> tuple[Step, ...]:
    """Return the checks in the order in which they run.

    Parameters
    ----------
    quick : bool
        Whether to leave out what takes long.

    Returns
    -------
    tuple of Step
        The checks.
    """
    everyday = "not realtime and not slow" if quick else "not realtime"
    table = [
        Step("format", ("-m", "ruff", "format", "--check", ".")),
        Step("lint", ("-m", "ruff", "check", ".")),
        Step("types", ("-m", "mypy", "harness", "plants", "scripts")),
        Step("layers", ("-c", _LINT_IMPORTS, "--no-logo")),
        Step("tests", ("-m", "pytest", "-m", everyday)),
    ]
    if not quick and _some_test_is_realtime():
        # Alone, because they watch the wall clock.
        table.append(Step("realtime", ("-m", "pytest", "-m", "realtime")))
    return tuple(table)


def _some_test_is_realtime() -> bool:
    tests = (_environment.ROOT / "tests").rglob("test_*.py")
    return any("mark.realtime" in test.read_text(encoding="utf-8") for test in tests)


def run(step: Step) -> tuple[int, float]:
    """Run one check and return its exit code and its duration.

    Parameters
    ----------
    step : Step
        The check.

    Returns
    -------
    code : int
        Exit code [-].
    duration : float
        Wall time [s].
    """
    print(f"\n=== {step.name} " + "=" * (70 - len(step.name)), flush=True)
    start = time.perf_counter()
    code = subprocess.run(
        [sys.executable, *step.command], cwd=_environment.ROOT, check=False
    ).returncode
    return code, time.perf_counter() - start


def main() -> int:
    """Run the checks and return the first failing code, or 0."""
    in_ci = os.environ.get("CI", "").lower() in {"1", "true"}
    names = [step.name for step in steps(quick=False)]
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument(
        "--quick", action="store_true", help="leave out slow and real-time tests"
    )
    parser.add_argument(
        "--only",
        action="append",
        choices=names,
        metavar="CHECK",
        help=f"run this check only (may be repeated): {', '.join(names)}",
    )
    options = parser.parse_args()
    chosen = steps(quick=options.quick and not in_ci)
    if options.only and not in_ci:
        chosen = tuple(step for step in chosen if step.name in options.only)

    results = [(step.name, *run(step)) for step in chosen]
    print("\n=== summary " + "=" * 63)
    for name, code, duration in results:
        print(f"{name:<10} {'ok' if code == 0 else f'FAILED ({code})':<12} {duration:7.1f} s")
    return next((code for _, code, _ in results if code != 0), 0)


if __name__ == "__main__":
    _environment.enter("dev")
    raise SystemExit(main())
