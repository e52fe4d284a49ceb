"""How orders reach a controller, and in which form and units its block takes settings."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum


class OrderBy(StrEnum):
    """How an order reaches the controller."""

    LINK = "link"
    PROMPT = "prompt"
    CALLABLE = "callable"


class OrderKind(StrEnum):
    """What a controller is told; the value is the key in a rig file."""

    SETTINGS = "settings"
    MANUAL_OUTPUT = "manual_output"
    SETPOINT = "setpoint"
    MODE = "mode"


@dataclass(frozen=True, slots=True, kw_only=True)
class LoopOrders:
    """How each kind of order reaches a loop's controller.

    Parameters
    ----------
    setpoint, mode, manual_output, settings : OrderBy
        The ways.
    function : str
        ``"module:name"`` of the function for orders by callable; empty without.
    """

    setpoint: OrderBy = OrderBy.LINK
    mode: OrderBy = OrderBy.LINK
    manual_output: OrderBy = OrderBy.LINK
    settings: OrderBy = OrderBy.LINK
    function: str = ""

    @property
    def by_link_alone(self) -> bool:
        """Return whether every order goes over the link."""
        return all(self.way(kind) is OrderBy.LINK for kind in OrderKind)

    def way(self, kind: OrderKind) -> OrderBy:
        """Return how one kind of order goes.

        Parameters
        ----------
        kind : OrderKind
            The kind.
        """
        match kind:
            case OrderKind.SETPOINT:
                return self.setpoint
            case OrderKind.MODE:
                return self.mode
            case OrderKind.MANUAL_OUTPUT:
                return self.manual_output
            case OrderKind.SETTINGS:
                return self.settings


class BlockForm(StrEnum):
    """How a block combines its terms."""

    IDEAL = "ideal"
    SERIES = "series"
    PARALLEL = "parallel"


class GainUnit(StrEnum):
    """In which unit a block takes its gain."""

    PERCENT = "%/%"
    ENGINEERING = "engineering"
    BAND = "proportional band"
    COUNTS = "counts"


class TimeUnit(StrEnum):
    """In which unit a block takes its integral action."""

    SECONDS = "s"
    MINUTES = "min"
    REPEATS = "repeats per minute"
    RATE = "1/s"


@dataclass(frozen=True, slots=True, kw_only=True)
class BlockUnits:
    """Form, units and resolution in which people type into a controller's block.

    Parameters
    ----------
    form : BlockForm
        Form of the law.
    gain_unit : GainUnit
        Unit of the gain.
    time_unit : TimeUnit
        Unit of the integral action.
    gain_resolution, time_resolution : float or None
        Smallest step that the block takes; None for four digits [unit of the block].
    setpoint_resolution : float or None
        The same of the setpoint, in the unit shown; None for four digits [unit].
    output_resolution : float
        The same of the manual output [-].
    process_variable_counts, output_counts : int
        Counts of the two spans, for a gain in counts [-].
    """

    form: BlockForm = BlockForm.IDEAL
    gain_unit: GainUnit = GainUnit.PERCENT
    time_unit: TimeUnit = TimeUnit.SECONDS
    gain_resolution: float | None = None
    time_resolution: float | None = None
    setpoint_resolution: float | None = None
    output_resolution: float = 0.001
    process_variable_counts: int = 65_535
    output_counts: int = 65_535
