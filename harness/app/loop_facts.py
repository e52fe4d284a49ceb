"""What is to be known of each loop before anything is typed into its controller."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.domain.orders import OrderKind
from harness.domain.points import shown_range

if TYPE_CHECKING:
    from harness.domain.rig import Rig


def loop_facts(rig: Rig) -> dict[str, dict[str, object]]:
    """Return the facts of each loop: form, units, action, ranges, period, delay, orders.

    Parameters
    ----------
    rig : Rig
        The rig.

    Returns
    -------
    dict of str to dict
        JSON-able, by tag; times in seconds, outputs as fractions.
    """
    return {
        loop.tag: {
            "process_variable": loop.process_variable,
            "output": loop.output,
            "form": loop.block.form.value,
            "gain_unit": loop.block.gain_unit.value,
            "time_unit": loop.block.time_unit.value,
            "action": loop.action.value,
            "range": {
                "low": (shown := shown_range(rig.transmitter(loop.process_variable))).lower,
                "high": shown.upper,
                "unit": shown.unit,
            },
            "output_range": {"low": loop.output_low, "high": loop.output_high},
            "scan": loop.scan,
            "delay": loop.output_delay * rig.tick,
            "watchdog": loop.watchdog,
            "orders": {kind.value: loop.orders.way(kind).value for kind in OrderKind},
        }
        for loop in rig.loops
    }
