"""Process models, controller settings and what a fit says of itself.

Gains are fractions of the process variable's span per fraction of output throughout; the
engineering gain stands beside them only where people read it.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from harness.domain.rig import Action


@dataclass(frozen=True, slots=True, kw_only=True)
class LagModel:
    """K exp(-theta s) / product of (tau_i s + 1): self-regulating, one or two lags.

    Parameters
    ----------
    gain : float
        K [fraction of PV span per fraction of output].
    time_constants : tuple of float
        tau_i, one or two, the larger first [s].
    dead_time : float
        theta [s].
    """

    gain: float
    time_constants: tuple[float, ...]
    dead_time: float

    @property
    def total_lag(self) -> float:
        """Return the sum of the time constants and the dead time [s]."""
        return sum(self.time_constants) + self.dead_time


@dataclass(frozen=True, slots=True, kw_only=True)
class Interval:
    """A confidence interval.

    Parameters
    ----------
    low, high : float
        Limits, in the unit of the parameter.
    level : float
        Confidence, e.g. 0.95 [-].
    """

    low: float
    high: float
    level: float


@dataclass(frozen=True, slots=True, kw_only=True)
class FittedModel:
    """A model fitted to recorded traces.

    Parameters
    ----------
    model : LagModel
        The fit.
    limits : dict of str to Interval
        By parameter: ``gain``, ``total_lag``, ``dead_time``, ``time_constant_1``,
        ``time_constant_2``.
    residual_rms : float
        Root mean square of the residuals [fraction of PV span].
    samples : int
        Samples fitted [-].
    """

    model: LagModel
    limits: dict[str, Interval]
    residual_rms: float
    samples: int


class ControlLaw(StrEnum):
    """Terms of the control law."""

    P = "P"
    PI = "PI"


@dataclass(frozen=True, slots=True, kw_only=True)
class ControllerSettings:
    """Settings of an ideal-form P or PI block.

    Parameters
    ----------
    gain : float
        Kc, positive; the sign of the action is in ``action`` [fraction of output per fraction of PV span].
    integral_time : float or None
        Ti; None for proportional only [s].
    action : Action
        Direct or reverse.
    """

    gain: float
    integral_time: float | None
    action: Action

    @property
    def law(self) -> ControlLaw:
        """Return whether this is a P or a PI block."""
        return ControlLaw.P if self.integral_time is None else ControlLaw.PI


@dataclass(frozen=True, slots=True, kw_only=True)
class LoopModels:
    """The two paths of a loop.

    Parameters
    ----------
    output : LagModel
        From controller output to process variable.
    load : LagModel
        From load valve output to process variable.
    """

    output: LagModel
    load: LagModel
