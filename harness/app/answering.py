"""Who answers the prompts of a trial."""

from __future__ import annotations

import sys
from typing import TYPE_CHECKING

from harness.domain.orders import OrderBy, OrderKind
from harness.runtime.answers import AnyAnswers, FileAnswers, TerminalAnswers
from harness.runtime.orders import load_function

if TYPE_CHECKING:
    from pathlib import Path

    from harness.domain.rig import Loop, Rig
    from harness.domain.trial import Trial
    from harness.runtime.answers import Answers


def answers_for(rig: Rig, trial: Trial, path: Path | None) -> Answers:
    """Return where the answers to a trial's prompts come from.

    Parameters
    ----------
    rig : Rig
        The rig, for how its loops take orders.
    trial : Trial
        The trial.
    path : Path or None
        A file for answers; None takes the terminal, where there is one.

    Raises
    ------
    UsageError
        When the file cannot be written, or a function for orders by callable is not there.
    """
    loops = [rig.loop(tag) for tag in dict.fromkeys(phase.loop for phase in trial.phases)]
    for loop in loops:
        if _has(loop, OrderBy.CALLABLE):
            load_function(loop.orders.function)
    places: list[Answers] = []
    if path is not None:
        places.append(FileAnswers(path))
    elif any(_has(loop, OrderBy.PROMPT) for loop in loops) and sys.stdin.isatty():
        places.append(TerminalAnswers(sys.stdin.fileno()))
    return AnyAnswers(places)


def _has(loop: Loop, way: OrderBy) -> bool:
    return any(loop.orders.way(kind) is way for kind in OrderKind)
