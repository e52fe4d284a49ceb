"""The soft PLC as a block that takes nothing over the link: everything is typed in at its panel.

In the block's own form and units, rounded to what it can hold, as on the face plate of a
controller.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from harness.controllers.block import AUTOMATIC, MANUAL
from harness.domain.models import ControllerSettings
from harness.domain.points import (
    PERCENT,
    gain_point,
    integral_time_point,
    manual_output_point,
    mode_point,
    setpoint_point,
)
from harness.domain.signals import Quality
from harness.links.client import Reading
from harness.tuning.block_units import block_entry, block_settings, rounded

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping, Sequence

    from harness.domain.rig import Loop
    from harness.domain.signals import Range
    from harness.links.client import FieldClient
    from harness.runtime.lines import Lines

_FACTORY_GAIN = 1.0  # what it has before anybody types: a proportional band of 100 % [-]
_FACTORY_TIME = 60.0  # one repeat per minute [s]
_LEAST, _MOST = 1e-6, 1e6  # of gain and integral action, in any unit
_WORDS = "MAN, AUTO, SP, OUT, GAIN or INT, the last four with a number; INT OFF"


@dataclass(slots=True)
class Panel:
    """The face plate of one block.

    Parameters
    ----------
    loop : Loop
        The loop, for the block's form, units and resolution.
    measured : Range
        Range of the process variable in the unit shown.
    mode : int
        MANUAL or AUTOMATIC [-].
    setpoint : float
        Setpoint; not a number until it has begun [unit].
    output : float
        Output in manual; not a number until it has begun [%].
    gain : float
        Gain as the block shows it [unit of the block].
    integral : float or None
        Integral action as the block shows it; None for off [unit of the block].
    """

    loop: Loop
    measured: Range
    mode: int = MANUAL
    setpoint: float = math.nan
    output: float = math.nan
    gain: float = field(init=False)
    integral: float | None = field(init=False)

    def __post_init__(self) -> None:
        factory = ControllerSettings(
            gain=_FACTORY_GAIN, integral_time=_FACTORY_TIME, action=self.loop.action
        )
        entry = block_entry(factory, self.loop.block, self.measured)
        self.gain, self.integral = entry.gain, entry.integral

    @property
    def begun(self) -> bool:
        """Return whether it has seen its process variable and its output."""
        return math.isfinite(self.setpoint) and math.isfinite(self.output)

    def begin(self, value: float, command: float) -> None:
        """Start in manual from where the plant stands.

        Parameters
        ----------
        value : float
            Process variable in the unit shown [unit].
        command : float
            Command to the valve [%].
        """
        self.setpoint, self.output = value, command

    def enter(self, line: str) -> str:
        """Take what somebody typed; return what the panel shows then.

        Parameters
        ----------
        line : str
            One of the words of the panel, e.g. ``"SP 0.8"``.
        """
        word, _, rest = line.strip().partition(" ")
        rest = rest.strip()
        match word.upper(), rest.upper():
            case "MAN", "":
                self.mode = MANUAL
            case "AUTO", "":
                self.mode = AUTOMATIC
            case "INT", "OFF":
                self.integral = None
            case ("SP" | "OUT" | "GAIN" | "INT") as what, _:
                return self._enter_number(what, rest)
            case _:
                return f"{line!r} is not understood; {_WORDS}"
        return self.shown()

    def shown(self) -> str:
        """Return what the panel shows."""
        mode = "AUTO" if self.mode == AUTOMATIC else "MAN"
        integral = "OFF" if self.integral is None else f"{self.integral:g}"
        return (
            f"{mode}  SP {self.setpoint:g} {self.measured.unit}  OUT {self.output:g} %  "
            f"GAIN {self.gain:g}  INT {integral}"
        )

    def readings(self) -> dict[str, Reading]:
        """Return what the block works on, by the points from which it would else be read."""
        tag = self.loop.tag
        settings = block_settings(
            self.gain, self.integral, self.loop.action, self.loop.block, self.measured
        )
        values = {
            setpoint_point(tag): self.setpoint,
            mode_point(tag): float(self.mode),
            manual_output_point(tag): self.output,
            gain_point(tag): settings.gain,
            integral_time_point(tag): settings.integral_time or 0.0,
        }
        return {
            name: Reading(value=value, quality=Quality.GOOD) for name, value in values.items()
        }

    def _enter_number(self, what: str, text: str) -> str:
        try:
            number = float(text)
        except ValueError:
            number = math.nan
        if not math.isfinite(number):
            return f"{what} wants a number, not {text!r}"
        low, high, step = self._limits(what)
        number, _ = rounded(number, step)
        if not low <= number <= high:
            return f"{what} {text} is refused; {low:g} to {high:g}"
        match what:
            case "SP":
                self.setpoint = number
            case "OUT":
                self.output = number
            case "GAIN":
                self.gain = number
            case _:
                self.integral = number
        return self.shown()

    def _limits(self, what: str) -> tuple[float, float, float | None]:
        """Return the least and the greatest number taken, and the step."""
        block = self.loop.block
        match what:
            case "SP":
                return self.measured.lower, self.measured.upper, block.setpoint_resolution
            case "OUT":
                step = PERCENT.from_fraction(block.output_resolution)
                return PERCENT.lower, PERCENT.upper, step
            case "GAIN":
                return block.gain_resolution or _LEAST, _MOST, block.gain_resolution
            case _:
                return block.time_resolution or _LEAST, _MOST, block.time_resolution


class PanelClient:
    """A controller's end of a link that takes its orders from a panel instead.

    Parameters
    ----------
    client : FieldClient
        The real end.
    panel : Panel
        The panel.
    lines : Lines
        What is typed at it.
    say : callable
        Takes what the panel shows after each entry.
    """

    def __init__(
        self, client: FieldClient, panel: Panel, lines: Lines, say: Callable[[str], None]
    ) -> None:
        self._client = client
        self._panel = panel
        self._lines = lines
        self._say = say

    async def connect(self) -> None:
        """Open the connection."""
        await self._client.connect()

    async def read(self, names: Sequence[str]) -> dict[str, Reading]:
        """Return the named points; those of orders from the panel, and nothing of them from the link.

        Parameters
        ----------
        names : sequence of str
            The points.
        """
        panel = self._panel
        orders = panel.readings()
        found = await self._client.read([name for name in names if name not in orders])
        value, command = found[panel.loop.process_variable], found[panel.loop.output]
        if not panel.begun and value.quality is not Quality.BAD:
            panel.begin(value.value, command.value)
        while panel.begun and (line := self._lines.next()) is not None:
            if line:
                self._say(f"panel of {panel.loop.tag}: {panel.enter(line)}")
        orders = panel.readings()
        return {name: orders[name] if name in orders else found[name] for name in names}

    async def write(self, values: Mapping[str, float]) -> None:
        """Write values.

        Parameters
        ----------
        values : mapping of str to float
            By point [unit of the point].
        """
        await self._client.write(values)

    async def close(self) -> None:
        """Close the connection."""
        await self._client.close()
