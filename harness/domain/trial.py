"""A trial as data: phases, what each must show, and how the loop is tuned before."""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import StrEnum

from harness.domain.models import ControlLaw, ControllerSettings, LoopModels


class PhaseKind(StrEnum):
    """What a phase does to the rig."""

    SETTLE = "settle"
    OUTPUT_STEP = "output_step"
    LOAD_STEP = "load_step"
    SETPOINT_STEP = "setpoint_step"


class Mode(StrEnum):
    """Mode of the controller during a phase."""

    MANUAL = "manual"
    AUTOMATIC = "automatic"


class ModelSource(StrEnum):
    """Where the loop's models come from."""

    IDENTIFIED = "identified"
    LINEARISED = "linearised"
    GIVEN = "given"
    RUN = "run"  # an earlier one


class SettingsSource(StrEnum):
    """Where the controller's settings come from."""

    COMPUTED = "computed"
    AS_FOUND = "as found"


@dataclass(frozen=True, slots=True, kw_only=True)
class Phase:
    """One phase; it ends when the loop is steady, or is invalid at its time limit.

    Parameters
    ----------
    name : str
        Name, unique in the trial, e.g. ``"setpoint up"``.
    loop : str
        Tag of the loop.
    kind : PhaseKind
        What is stepped.
    mode : Mode
        Manual phases with a step are used to identify, automatic ones are scored.
    change : float
        Size of the step: of output or load output [fraction of output], of setpoint
        [fraction of PV span]; 0 for a settle phase.
    time_limit : float
        Longest duration; reached without being steady, the run is invalid [s].
    """

    name: str
    loop: str
    kind: PhaseKind
    mode: Mode
    change: float
    time_limit: float


@dataclass(frozen=True, slots=True, kw_only=True)
class SteadyRule:
    """When a phase counts as steady.

    Parameters
    ----------
    dwell : float
        Least duration in predicted dominant time constants of the phase's response [-].
    remaining : float
        Bound on the change still to come, as fraction of the step's effect [-].
    confidence : float
        Confidence of the statistical test [-].
    thinning : float
        The series is thinned to this fraction of the dominant time constant [-].
    """

    dwell: float = 5.0
    remaining: float = 0.01
    confidence: float = 0.95
    thinning: float = 0.04


@dataclass(frozen=True, slots=True, kw_only=True)
class Tolerances:
    """How far the controller may be from the nonlinear prediction.

    Parameters
    ----------
    relative : float
        Of times, IAE, ISE, ITAE, travel and peak deviation [fraction of the prediction].
    overshoot : float
        Of overshoot, absolute [fraction of the step].
    offset : float
        Of the final offset, absolute [fraction of PV span].
    """

    relative: float = 0.10
    overshoot: float = 0.02
    offset: float = 0.005


@dataclass(frozen=True, slots=True, kw_only=True)
class Trial:
    """Everything that a trial file says.

    Parameters
    ----------
    name, description : str
        For people.
    law : ControlLaw
        P or PI.
    closed_loop_time : float
        Closed-loop time constant asked for [s].
    models : ModelSource
        Where the models come from.
    given : LoopModels or None
        The models when ``models`` is given.
    settings : SettingsSource
        Where the settings come from.
    as_found : ControllerSettings or None
        The settings when ``settings`` is as found.
    phases : tuple of Phase
        In order.
    steady : SteadyRule
        Rule for the end of a phase.
    tolerances : Tolerances
        Allowed distance from the prediction.
    order_timeout : float
        Longest wait for an order by prompt or callable to be carried out [wall s].
    models_run : str
        The earlier run that the models come from: its folder as the trial file says it, or its
        id once they are read; empty for none.
    run_models : dict of str to LoopModels
        The models of that run by tag of the loop, once they are read.
    """

    name: str
    description: str
    law: ControlLaw
    closed_loop_time: float
    models: ModelSource
    given: LoopModels | None
    settings: SettingsSource
    as_found: ControllerSettings | None
    phases: tuple[Phase, ...]
    steady: SteadyRule
    tolerances: Tolerances
    order_timeout: float = 300.0
    models_run: str = ""
    run_models: dict[str, LoopModels] = field(default_factory=dict)

    def models_of(self, loop_tag: str) -> LoopModels | None:
        """Return the models that a loop is given, or None where it has none.

        Parameters
        ----------
        loop_tag : str
            Tag of the loop.
        """
        return self.run_models.get(loop_tag) or self.given
