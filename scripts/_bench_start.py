"""Benchmark section: how long the command takes to answer ``--help``."""

from __future__ import annotations

import statistics
import subprocess
import sys
import time
from pathlib import Path
from typing import TYPE_CHECKING

from _figures import Figure

if TYPE_CHECKING:
    from collections.abc import Iterator


def start_up(rounds: int) -> Iterator[Figure]:
    """Measure ``dryrig --help`` and an empty Python in alternation.

    Parameters
    ----------
    rounds : int
        Times that each is started [-].

    Yields
    ------
    Figure
        Medians.
    """
    command = Path(sys.executable).with_name(
        "dryrig.exe" if sys.platform == "win32" else "dryrig"
    )
    helps, empties = [], []
    for _ in range(rounds):
        helps.append(_seconds([str(command), "--help"]))
        empties.append(_seconds([sys.executable, "-c", ""]))
    yield Figure(name="start.help", value=statistics.median(helps), unit="s", wanted="< 0.3")
    yield Figure(name="start.empty_python", value=statistics.median(empties), unit="s")


def _seconds(command: list[str]) -> float:
    start = time.perf_counter()
    subprocess.run(command, check=True, stdout=subprocess.DEVNULL)
    return time.perf_counter() - start
