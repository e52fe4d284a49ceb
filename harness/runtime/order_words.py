"""An order to a controller as a person needs it: what to type, in the block's form and units."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from harness.controllers.block import AUTOMATIC, MANUAL
from harness.domain.orders import OrderBy, OrderKind
from harness.domain.points import PERCENT
from harness.tuning.block_units import BlockEntry, block_entry, rounded

if TYPE_CHECKING:
    from harness.domain.models import ControllerSettings
    from harness.domain.rig import Loop
    from harness.domain.signals import Range


@dataclass(frozen=True, slots=True, kw_only=True)
class Order:
    """What a loop's controller is to have; what is None stays as it is.

    Parameters
    ----------
    loop : str
        Tag of the loop.
    settings : ControllerSettings or None
        Settings.
    manual_output : float or None
        Output in manual [-].
    setpoint : float or None
        Setpoint in the unit shown [unit].
    mode : int or None
        MANUAL or AUTOMATIC [-].
    typed : BlockEntry or None
        The settings in the block's own form and units.
    """

    loop: str
    settings: ControllerSettings | None = None
    manual_output: float | None = None
    setpoint: float | None = None
    mode: int | None = None
    typed: BlockEntry | None = None

    @property
    def kinds(self) -> tuple[OrderKind, ...]:
        """Return what is ordered, in the order in which it is carried out."""
        kinds = [kind for kind in OrderKind if getattr(self, kind.value) is not None]
        if self.mode == MANUAL:  # an output is taken in manual only
            kinds.sort(key=lambda kind: kind is not OrderKind.MODE)
        return tuple(kinds)

    def part(self, kinds: tuple[OrderKind, ...]) -> Order:
        """Return the order with some of its kinds alone.

        Parameters
        ----------
        kinds : tuple of OrderKind
            The kinds to keep.
        """
        left_out: dict[str, Any] = {kind.value: None for kind in OrderKind if kind not in kinds}
        typed = self.typed if OrderKind.SETTINGS in kinds else None
        return dataclasses.replace(self, typed=typed, **left_out)


def parts_by_way(order: Order, loop: Loop) -> tuple[tuple[OrderBy, Order], ...]:
    """Return an order cut into parts that go the same way, in the order to carry them out.

    Parameters
    ----------
    order : Order
        The order.
    loop : Loop
        Its loop.

    Returns
    -------
    tuple of (OrderBy, Order)
        One part for each run of kinds that go one way.
    """
    runs: list[tuple[OrderBy, list[OrderKind]]] = []
    for kind in order.kinds:
        way = loop.orders.way(kind)
        if runs and runs[-1][0] is way:
            runs[-1][1].append(kind)
        else:
            runs.append((way, [kind]))
    return tuple((way, order.part(tuple(kinds))) for way, kinds in runs)


def as_typed(order: Order, loop: Loop, measured: Range) -> Order:
    """Return an order as the controller will have it once it is typed in.

    Parameters
    ----------
    order : Order
        The order.
    loop : Loop
        Its loop, for the block's form, units and resolution.
    measured : Range
        Range of the process variable in the unit shown.

    Returns
    -------
    Order
        Rounded to what the block can take.

    Raises
    ------
    ModelError
        When the block cannot hold the settings.
    """
    block = loop.block
    changes: dict[str, Any] = {}
    if order.setpoint is not None:
        changes["setpoint"] = rounded(order.setpoint, block.setpoint_resolution)[0]
    if order.manual_output is not None:
        percent = PERCENT.from_fraction(order.manual_output)
        step = PERCENT.from_fraction(block.output_resolution)
        changes["manual_output"] = PERCENT.to_fraction(rounded(percent, step)[0])
    if order.settings is not None:
        entry = block_entry(order.settings, block, measured)
        changes |= {"settings": entry.settings, "typed": entry}
    return dataclasses.replace(order, **changes)


def instruction(order: Order, loop: Loop, measured: Range) -> str:
    """Return exactly what somebody has to do at the controller.

    Parameters
    ----------
    order : Order
        The order, as typed.
    loop : Loop
        Its loop.
    measured : Range
        Range of the process variable in the unit shown.

    Returns
    -------
    str
        E.g. ``"LIC-102: put the block in manual, then set its output to 58.0 %"``.
    """
    steps = [_step(kind, order, loop, measured) for kind in order.kinds]
    return f"{order.loop}: " + ", then ".join(steps)


def _step(kind: OrderKind, order: Order, loop: Loop, measured: Range) -> str:
    match kind:
        case OrderKind.SETPOINT:
            value = order.setpoint or 0.0
            _, text = rounded(value, loop.block.setpoint_resolution)
            return (
                f"set the setpoint to {text} {measured.unit} "
                f"({PERCENT.from_fraction(measured.to_fraction(value)):.4g} %)"
            )
        case OrderKind.MODE:
            return f"put the block in {'automatic' if order.mode == AUTOMATIC else 'manual'}"
        case OrderKind.MANUAL_OUTPUT:
            step = PERCENT.from_fraction(loop.block.output_resolution)
            _, text = rounded(PERCENT.from_fraction(order.manual_output or 0.0), step)
            return f"set its output to {text} %"
        case OrderKind.SETTINGS:
            words = order.typed.words if order.typed else ""
            return f"set {words} ({loop.block.form.value} form, {loop.action.value} action)"


def ordered(order: Order) -> dict[str, Any]:
    """Return what is ordered, by the names that a session knows.

    Parameters
    ----------
    order : Order
        The order.
    """
    return {kind.value: getattr(order, kind.value) for kind in order.kinds}


def order_facts(order: Order) -> dict[str, object]:
    """Return an order as JSON-able facts, with the numbers to type for settings.

    Parameters
    ----------
    order : Order
        The order.
    """
    facts: dict[str, object] = {
        kind.value: getattr(order, kind.value)
        for kind in order.kinds
        if kind is not OrderKind.SETTINGS
    }
    typed = order.typed
    if typed is not None:
        facts["settings"] = {
            "gain": typed.gain,
            "gain_unit": typed.gain_unit,
            "integral": typed.integral,
            "integral_unit": typed.integral_unit,
        }
    return facts
