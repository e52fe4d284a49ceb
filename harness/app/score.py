"""Scoring a stored run."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.app.run_files import RunResult, score_folder
from harness.app.trial import say_compiling

if TYPE_CHECKING:
    from pathlib import Path


def score(folder: Path) -> RunResult:
    """Score a run folder again, from its record alone.

    Parameters
    ----------
    folder : Path
        The folder.

    Returns
    -------
    RunResult
        The verdict; its files in the folder are written anew.

    Raises
    ------
    RecordError
        When it is no run of a trial, or garbled.
    """
    say_compiling()
    return score_folder(folder)
