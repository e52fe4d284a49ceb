"""The command ``dryrig tune``: its options, and what is made of them."""

from __future__ import annotations

import argparse
import json
import math
from pathlib import Path
from typing import TYPE_CHECKING

from harness.errors import ExitCode, UsageError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from harness.app.tune import TuneOptions
    from harness.app.tune_source import TuningSource
    from harness.tuning.entered import BlockFormat, Spans

_EPILOG = (
    "Rules: ds-p, ds-pi, ds-pid (direct synthesis for setpoint); load-pi, load-pid (direct "
    "synthesis for load); simc-pi, simc-pid; lambda-pi, imc-pi, imc-pid; and for comparison "
    "zn-p, zn-pi, zn-pid (Ziegler-Nichols reaction curve), cc-p, cc-pi, cc-pid (Cohen-Coon). "
    "A family (ds, load, simc, imc, zn, cc) stands for all of its laws."
)


def add_tune(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the command line.

    Parameters
    ----------
    commands : argparse sub-parsers
        Where commands go.
    """
    parser = commands.add_parser(
        "tune",
        help="settings of the controller from a rig, a fit, or typed-in figures",
        epilog=_EPILOG,
    )
    parser.add_argument(
        "source", type=Path, nargs="?", metavar="SOURCE",
        help="rig file (.toml) or what dryrig fit --json wrote; without it, figures typed in",
    )  # fmt: skip
    parser.add_argument("--loop", metavar="TAG", help="loop of the rig; its first if not given")
    parser.add_argument(
        "--model", metavar="KIND", help="model of the fit; its best if not given"
    )
    _add_process(parser.add_argument_group("process, typed in"))
    _add_request(parser.add_argument_group("what is asked for"))
    _add_block(parser.add_argument_group("the block that takes the settings"))
    _add_test(parser.add_argument_group("the test that is to come"))
    parser.add_argument("--plot", type=Path, metavar="FILE", help="responses, as .svg or .png")
    parser.add_argument("--sheet", type=Path, metavar="FILE", help="tuning sheet, as .html")
    parser.add_argument(
        "--json", action="store_true", help="a JSON document on standard output"
    )
    parser.set_defaults(run=run_tune)


def _add_process(group: argparse._ArgumentGroup) -> None:
    group.add_argument(
        "--gain", type=float, metavar="K",
        help="process gain, fraction of PV range per fraction of output range (per second with "
        "--integrating)",
    )  # fmt: skip
    group.add_argument(
        "--engineering", action="store_true", help="the gain is in PV units per output unit"
    )
    group.add_argument(
        "--time-constant", type=_times, action="append", default=[], metavar="T",
        help="lag [s]; again for a second one, or T1,T2",
    )  # fmt: skip
    group.add_argument("--dead-time", type=float, default=0.0, metavar="L", help="[s]")
    group.add_argument(
        "--inverse-response", type=float, default=0.0, metavar="T",
        help="T of a zero 1 - T s on the wrong side [s]",
    )  # fmt: skip
    group.add_argument("--integrating", action="store_true", help="the process integrates")


def _add_request(group: argparse._ArgumentGroup) -> None:
    group.add_argument(
        "--closed-loop", type=_times, action="append", default=[], metavar="TC[,TC...]",
        help="closed-loop time constant [s]; if not given, the effective dead time or a tenth of "
        "the lag, whichever is longer",
    )  # fmt: skip
    group.add_argument(
        "--rule", action="append", default=[], metavar="NAME[,NAME...]",
        help="rule or family; all if not given",
    )  # fmt: skip
    group.add_argument("--scan", type=float, metavar="SECONDS", help="scan of the block")
    group.add_argument(
        "--filter", type=float, default=0.0, metavar="SECONDS",
        help="first-order filter between process variable and block",
    )  # fmt: skip
    group.add_argument(
        "--continuous", action="store_true",
        help="predict a continuous block, half the scan counted as dead time",
    )  # fmt: skip
    group.add_argument(
        "--spread", type=float, default=20.0, metavar="PERCENT",
        help="by how much gain, lags and dead time may be off, either way (default 20)",
    )  # fmt: skip
    group.add_argument(
        "--derivative-filter", type=float, metavar="SECONDS",
        help="lag on the derivative; a tenth of the derivative time if not given",
    )  # fmt: skip
    group.add_argument(
        "--derivative-on-error",
        action="store_true",
        help="the derivative sees the setpoint too",
    )


def _add_block(group: argparse._ArgumentGroup) -> None:
    group.add_argument(
        "--form", choices=("ideal", "series", "parallel"),
        help="form of the block; each rule's own if not given",
    )  # fmt: skip
    group.add_argument(
        "--gain-unit", choices=("gain", "band", "engineering", "counts"), default="gain",
        help="what the block calls its gain: gain in %%/%%, proportional band, engineering, raw counts",
    )  # fmt: skip
    group.add_argument(
        "--integral-unit", choices=("s", "min", "repeats/min", "1/s"), default="s"
    )
    group.add_argument("--derivative-unit", choices=("s", "min"), default="s")
    group.add_argument(
        "--resolution", type=float, nargs=2, metavar=("GAIN", "TIME"),
        help="steps in which the block takes its gain and its times, each in the block's unit",
    )  # fmt: skip
    group.add_argument(
        "--output-range", type=float, nargs=2, metavar=("LOW", "HIGH"),
        help="range of the process variable (the output of the process)",
    )  # fmt: skip
    group.add_argument(
        "--input-range", type=float, nargs=2, metavar=("LOW", "HIGH"),
        help="range of the controller output (the input of the process)",
    )  # fmt: skip
    group.add_argument("--output-unit", default="", metavar="UNIT", help="its unit, for show")
    group.add_argument("--input-unit", default="", metavar="UNIT", help="its unit, for show")
    group.add_argument(
        "--counts", type=float, nargs=2, metavar=("PV", "OUTPUT"),
        help="raw counts over the ranges of process variable and controller output",
    )  # fmt: skip


def _add_test(group: argparse._ArgumentGroup) -> None:
    group.add_argument(
        "--setpoint-step", type=float, default=5.0, metavar="PERCENT", help="default 5"
    )
    group.add_argument(
        "--load-step", type=float, default=5.0, metavar="PERCENT",
        help="as per cent of controller output; default 5",
    )  # fmt: skip
    group.add_argument(
        "--at", type=float, metavar="PERCENT", help="controller output before the test"
    )
    group.add_argument(
        "--limits", type=float, nargs=2, metavar=("LOW", "HIGH"),
        help="limits of the controller output, per cent",
    )  # fmt: skip
    group.add_argument(
        "--stroke-time", type=float, metavar="SECONDS", help="travel time of the valve"
    )


def run_tune(options: argparse.Namespace) -> int:
    """Run the command.

    Parameters
    ----------
    options : argparse.Namespace
        Parsed options.

    Returns
    -------
    int
        Exit code [-].

    Raises
    ------
    DryrigError
        As `harness.app.tune.tune` and the sources.
    """
    from harness.app.tune import tune  # noqa: PLC0415  kept out of --help

    _check_files(options)
    tuning = tune(_source(options), _asked(options))
    if options.plot is not None or options.sheet is not None:
        from harness.app.drawings import draw_tuning_file, tuning_element  # noqa: PLC0415

        if options.plot is not None:
            draw_tuning_file(options.plot, tuning)
        if options.sheet is not None:
            from harness.recording.export import write_file  # noqa: PLC0415
            from harness.reporting.tuning_sheet import render_sheet  # noqa: PLC0415

            write_file(options.sheet, render_sheet(tuning.document, tuning_element(tuning)))
    if options.json:
        from harness.app.output import write_output  # noqa: PLC0415  kept out of --help

        text = json.dumps(tuning.document, indent=2, ensure_ascii=False, allow_nan=False)
        write_output(text + "\n")
        return ExitCode.PASS
    from harness.reporting.terminal import make_console  # noqa: PLC0415
    from harness.reporting.tuning_tables import tuning_view  # noqa: PLC0415

    make_console().print(tuning_view(tuning.document))
    return ExitCode.PASS


def _check_files(options: argparse.Namespace) -> None:
    """Refuse file names before any work is done."""
    if options.plot is not None:
        from harness.reporting.figure_files import check_figure_path  # noqa: PLC0415

        check_figure_path(options.plot)
    if options.sheet is not None and options.sheet.suffix.lower() not in {".html", ".htm"}:
        raise UsageError(f"{options.sheet}: a tuning sheet is written as .html")


def _source(options: argparse.Namespace) -> TuningSource:
    from harness.app.tune_source import (  # noqa: PLC0415  kept out of --help
        TypedModel,
        fit_source,
        rig_source,
        typed_source,
    )

    spans = _spans(options)
    typed = TypedModel(
        gain=options.gain,
        time_constants=tuple(value for given in options.time_constant for value in given),
        dead_time=options.dead_time,
        inverse_response=options.inverse_response,
        integrating=options.integrating,
        engineering=options.engineering,
    )
    if options.source is None:
        return typed_source(typed, spans)
    if typed != TypedModel():
        raise UsageError(
            f"tune: a process typed in and {options.source} as well; give the one or the other"
        )
    if options.source.suffix.lower() == ".toml":
        return rig_source(options.source, options.loop, spans)
    return fit_source(options.source, options.model, spans)


def _spans(options: argparse.Namespace) -> Spans:
    from harness.domain.signals import Range  # noqa: PLC0415  kept out of --help
    from harness.tuning.entered import Spans  # noqa: PLC0415

    def given(name: str, ends: Sequence[float] | None, unit: str) -> Range | None:
        if ends is None:
            return None
        low, high = ends
        if not (math.isfinite(low) and math.isfinite(high) and low < high):
            raise UsageError(f"{name}: {low:g} to {high:g}; the first must be below the second")
        return Range(lower=low, upper=high, unit=unit)

    counts = options.counts or (None, None)
    for value in counts:
        if value is not None and not value > 0.0:
            raise UsageError(f"--counts: {value:g}; the counts over a range must be above 0")
    return Spans(
        pv=given("--output-range", options.output_range, options.output_unit),
        output=given("--input-range", options.input_range, options.input_unit),
        pv_counts=counts[0],
        output_counts=counts[1],
    )


def _asked(options: argparse.Namespace) -> TuneOptions:
    from harness.app.tune import TuneOptions  # noqa: PLC0415  kept out of --help
    from harness.tuning.forms import Form  # noqa: PLC0415

    names = [name for entry in options.rule for name in entry.split(",") if name.strip()]
    limits = options.limits
    if limits is not None and not limits[0] < limits[1]:
        raise UsageError(f"--limits: {limits[0]:g} to {limits[1]:g} %; the first must be lower")
    return TuneOptions(
        rules=tuple(names),
        closed_loop_times=tuple(value for given in options.closed_loop for value in given),
        scan=options.scan,
        filter_time=options.filter,
        spread=options.spread / 100.0,
        continuous=options.continuous,
        derivative_filter=options.derivative_filter,
        derivative_on_error=options.derivative_on_error,
        form=None if options.form is None else Form(options.form),
        block=_block(options),
        setpoint_step=options.setpoint_step / 100.0,
        load_step=options.load_step / 100.0,
        output=None if options.at is None else options.at / 100.0,
        limits=None if limits is None else (limits[0] / 100.0, limits[1] / 100.0),
        stroke_time=options.stroke_time,
    )


def _block(options: argparse.Namespace) -> BlockFormat | None:
    from harness.tuning.entered import (  # noqa: PLC0415  kept out of --help
        BlockFormat,
        DerivativeUnit,
        GainUnit,
        IntegralUnit,
    )
    from harness.tuning.forms import Form  # noqa: PLC0415

    steps = options.resolution or (0.0, 0.0)
    if min(steps) < 0.0:
        raise UsageError("--resolution: a step below 0; give steps of 0 or more")
    block = BlockFormat(
        form=Form(options.form or "ideal"),
        gain_unit=GainUnit(options.gain_unit),
        integral_unit=IntegralUnit(options.integral_unit),
        derivative_unit=DerivativeUnit(options.derivative_unit),
        gain_step=steps[0],
        time_step=steps[1],
    )
    return None if block == BlockFormat() and options.form is None else block


def _times(text: str) -> tuple[float, ...]:
    try:
        return tuple(float(part) for part in text.split(",") if part.strip())
    except ValueError:
        raise argparse.ArgumentTypeError(
            f'"{text}" is no time, nor times with commas between'
        ) from None
