"""The tables of a trial file, as pydantic models: keys, types and each key's own bounds."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BeforeValidator, Field

from harness.config.quantities import Change, NonNegativeTime, OpenPercentage, PositiveTime
from harness.config.rig_tables import Table, Tag

_Part = Annotated[float, Field(gt=0.0, lt=1.0)]


class RunTable(Table):
    """``models = { run = "folder" }``."""

    run: Annotated[str, Field(min_length=1)]


_SOURCES = ("identified", "linearised", "given")


def _models(value: object) -> object:
    """Pass a source of models by name, or a run as a table."""
    if isinstance(value, (dict, RunTable)) or value in _SOURCES:
        return value
    raise ValueError('must be "identified", "linearised", "given" or { run = "folder" }')


class TrialTable(Table):
    """``[trial]``."""

    name: Annotated[str, Field(min_length=1)]
    description: str = ""
    law: Literal["P", "PI"]
    closed_loop_time: PositiveTime
    models: Annotated[str | RunTable, BeforeValidator(_models)]
    settings: Literal["computed", "as found"]
    order_timeout: PositiveTime = 300.0


class ModelTable(Table):
    """``[given.output]`` and ``[given.load]``."""

    gain: float
    time_constants: Annotated[list[PositiveTime], Field(min_length=1, max_length=2)]
    dead_time: NonNegativeTime


class GivenTable(Table):
    """``[given]``."""

    output: ModelTable
    load: ModelTable


class AsFoundTable(Table):
    """``[as_found]``.

    Parameters
    ----------
    gain : float
        As ``units`` says; in %/% at most 1000 [%/%, or unit of the block].
    integral : float or None
        Integral action as the block shows it; None where it is off [unit of the block].
    """

    units: Literal["%/%", "block"] = "%/%"
    gain: Annotated[float, Field(gt=0.0, le=1e6)]
    integral_time: PositiveTime | None = None
    integral: Annotated[float, Field(gt=0.0, le=1e6)] | None = None
    action: Literal["direct", "reverse"]


class PhaseTable(Table):
    """``[[phase]]``."""

    name: Annotated[str, Field(min_length=1)]
    loop: Tag
    kind: Literal["settle", "output_step", "load_step", "setpoint_step"]
    mode: Literal["manual", "automatic"]
    change: Change = 0.0
    time_limit: PositiveTime


class SteadyTable(Table):
    """``[steady]``."""

    dwell: Annotated[float, Field(gt=0.0, le=100.0)] = 5.0
    remaining: OpenPercentage = 0.01
    confidence: _Part = 0.95
    thinning: _Part = 0.04


class TolerancesTable(Table):
    """``[tolerances]``."""

    relative: OpenPercentage = 0.10
    overshoot: OpenPercentage = 0.02
    offset: OpenPercentage = 0.005
