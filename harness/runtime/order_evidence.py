"""What the data show of an order that did not go over the link: yes, no, or nothing."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.controllers.block import AUTOMATIC
from harness.domain.orders import OrderKind
from harness.domain.points import (
    gain_point,
    mode_point,
    read_back_point,
    setpoint_point,
    shown_range,
)
from harness.domain.rig import Action

if TYPE_CHECKING:
    from harness.domain.rig import Loop
    from harness.runtime.order_words import Order
    from harness.runtime.session import Session

SEEN = "seen in the data"
SEEN_IN_OUTPUT = "seen in the output"
_SEEN_SHARE = 1e-4  # of span: a read-back nearer than this is the order [-]
_HALF = 0.5  # of a step; between the ends of a switch; of an expected jump [-]
_LEAST_JUMP = 0.01  # of output: a smaller one could be noise [-]
_QUIET = 0.25  # of the expected jump: moves that are no jump stay below [-]


class Evidence:
    """Watches a rig for an order to arrive.

    A controller's own read-back says most. A manual output is seen at the valve. A setpoint in
    automatic moves the output at once by the gain times the change, where the block's
    proportional part acts on the error; where it does not, nothing is seen.

    Parameters
    ----------
    session : Session
        The session.
    order : Order
        The order, as typed.
    loop : Loop
        Its loop.
    """

    def __init__(self, session: Session, order: Order, loop: Loop) -> None:
        self.order = order
        self.loop = loop
        self.words = SEEN
        self._session = session
        self._measured = shown_range(session.rig.transmitter(loop.process_variable))
        self._start = self._output()
        self._jump = _Jump(expected=self._expected_jump(), last=self._start)

    @property
    def shows_a_jump(self) -> bool:
        """Return whether the output can show it where nothing is read back."""
        seen = self._read_back(setpoint_point(self.loop.tag)) is not None
        return not seen and self._jump.usable

    def complete(self) -> bool:
        """Return whether the data are sure to show all of it."""
        return all(self._sees(kind) is not None for kind in self.order.kinds)

    def places(self) -> list[str]:
        """Return the read-backs that would show it."""
        tag = self.loop.tag
        names = {OrderKind.SETPOINT: setpoint_point(tag), OrderKind.MODE: mode_point(tag)}
        found = [read_back_point(names[kind]) for kind in self.order.kinds if kind in names]
        return found or ["what it has"]

    def look(self) -> dict[OrderKind, bool | None]:
        """Return for each kind whether it is seen by now; to be called at every tick."""
        self._jump.look(self._output())
        return {kind: self._sees(kind) for kind in self.order.kinds}

    def found(self, kinds: list[OrderKind]) -> str:
        """Return what the data show in place of the order.

        Parameters
        ----------
        kinds : list of OrderKind
            Kinds that are not seen.
        """
        return ", ".join(self._found(kind) for kind in kinds)

    def _sees(self, kind: OrderKind) -> bool | None:
        match kind:
            case OrderKind.SETTINGS:
                return None
            case OrderKind.MANUAL_OUTPUT:
                return self._sees_output(self.order.manual_output or 0.0)
            case OrderKind.SETPOINT:
                return self._sees_setpoint(self.order.setpoint or 0.0)
            case OrderKind.MODE:
                has = self._read_back(mode_point(self.loop.tag))
                return None if has is None else (has > _HALF) == (self.order.mode == AUTOMATIC)

    def _sees_output(self, wanted: float) -> bool | None:
        resolution = self.loop.block.output_resolution
        there = abs(self._output() - wanted) <= resolution
        if there and abs(wanted - self._start) <= resolution:
            # It stood there before: that shows something of a block in manual alone.
            mode = self._read_back(mode_point(self.loop.tag))
            return True if mode is not None and mode < _HALF else None
        return there

    def _sees_setpoint(self, wanted: float) -> bool | None:
        has = self._read_back(setpoint_point(self.loop.tag))
        if has is None:
            if self._jump.seen:
                self.words = SEEN_IN_OUTPUT
            return True if self._jump.seen else None
        step = _HALF * (self.loop.block.setpoint_resolution or 0.0)
        return abs(has - wanted) <= max(step, _SEEN_SHARE * self._measured.span)

    def _found(self, kind: OrderKind) -> str:
        match kind:
            case OrderKind.SETPOINT:
                has = self._read_back(setpoint_point(self.loop.tag)) or 0.0
                return f"a setpoint of {has:.5g} {self._measured.unit}"
            case OrderKind.MODE:
                manual = self.order.mode == AUTOMATIC
                return f"the block in {'manual' if manual else 'automatic'}"
            case _:
                return f"{self.loop.output} at {100 * self._output():.4g} %"

    def _expected_jump(self) -> float:
        """Return by how much the output has to jump; 0 where it need not [-]."""
        image = self._session.image()
        tag = self.loop.tag
        alone = self.order.kinds == (OrderKind.SETPOINT,)
        if not alone or image[mode_point(tag)][1] < _HALF:
            return 0.0
        change = (self.order.setpoint or 0.0) - image[setpoint_point(tag)][1]
        sign = 1.0 if self.loop.action is Action.REVERSE else -1.0
        return sign * image[gain_point(tag)][1] * change / self._measured.span

    def _output(self) -> float:
        return self._session.engine.output(self.loop.output)

    def _read_back(self, point: str) -> float | None:
        written = self._session.read_backs.get(read_back_point(point))
        return None if written is None else written.value


@dataclass(slots=True)
class _Jump:
    """Looks for one move of the output that stands out from the others."""

    expected: float
    last: float
    quiet: float = 0.0
    seen: bool = False

    @property
    def usable(self) -> bool:
        return abs(self.expected) >= _LEAST_JUMP and self.quiet <= _QUIET * abs(self.expected)

    def look(self, output: float) -> None:
        move, self.last = output - self.last, output
        jumped = move * self.expected >= _HALF * self.expected**2
        if jumped and self.usable:
            self.seen = True
        elif not self.seen:
            self.quiet = max(self.quiet, abs(move))
