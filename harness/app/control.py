"""The soft PLC as a command."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.app.loading import read_rig
from harness.app.output import is_reader_gone, leave_output
from harness.errors import UsageError
from harness.runtime.lines import AppendedLines, TypedLines
from harness.runtime.plc_block import SoftPlcFaults
from harness.runtime.soft_plc_process import run_soft_plc_blocking

if TYPE_CHECKING:
    import argparse

    from harness.runtime.lines import Lines


def control(options: argparse.Namespace) -> None:
    """Run the soft PLC until it is told to end.

    Parameters
    ----------
    options : Namespace
        Of the command line.

    Raises
    ------
    ConfigurationError
        With every problem of the rig.
    UsageError
        When the rig has no such loop or link.
    """
    rig, _ = read_rig(options.rig)
    if not rig.loops:
        raise UsageError(f"{options.rig}: this rig has no loop to control")
    run_soft_plc_blocking(
        rig,
        options.link,
        options.loop or rig.loops[0].tag,
        options.pace,
        _say,
        host=options.host,
        port=options.port,
        scan=options.scan,
        mistake=options.mistake,
        panel=_panel(options),
        faults=SoftPlcFaults(
            gain_factor=options.fault_gain,
            integral_time_factor=options.fault_integral_time,
            reversed_action=options.fault_reversed,
            output_bias=options.fault_bias,
            silent_after=options.fault_silent_after,
        ),
    )


def _panel(options: argparse.Namespace) -> Lines | None:
    """Return where a controller that takes nothing over the link has its orders from."""
    if options.orders != "none":
        if options.panel is not None:
            raise UsageError(
                f"control: --panel {options.panel} with --orders link: nothing is typed in there; "
                "take --orders none, or leave --panel out"
            )
        return None
    return TypedLines() if options.panel is None else AppendedLines(options.panel)


def _say(text: str) -> None:
    try:
        print(text, flush=True)  # noqa: T201
    except OSError as error:
        if not is_reader_gone(error):
            raise
        leave_output()  # a controller does not stop because nobody listens to it
