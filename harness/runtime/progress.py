"""How far an earlier run of the same trial had got, for one that takes it up again."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from harness.domain.models import ControllerSettings, LoopModels

    Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class DonePhase:
    """A phase that was completed.

    Parameters
    ----------
    lead_in : ndarray, shape (n, n_columns)
        The rows shortly before its step [unit of the column].
    rows : ndarray, shape (n, n_columns)
        Its rows [unit of the column].
    end : int
        First tick after it [ticks].
    """

    lead_in: Floats
    rows: Floats
    end: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Progress:
    """What need not be done again.

    Parameters
    ----------
    run : str
        Id of the earlier run.
    phases : dict of str to DonePhase
        Completed phases by name, in order.
    models : dict of str to LoopModels
        Models by tag of the loop, where they had been found.
    settings : dict of str to ControllerSettings
        Settings by tag of the loop, where they had been given.
    """

    run: str
    phases: dict[str, DonePhase] = field(default_factory=dict)
    models: dict[str, LoopModels] = field(default_factory=dict)
    settings: dict[str, ControllerSettings] = field(default_factory=dict)
