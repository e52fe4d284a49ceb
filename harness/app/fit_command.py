"""The command ``dryrig fit``: its options, and what is made of them."""

from __future__ import annotations

import argparse
import json
from pathlib import Path
from typing import TYPE_CHECKING

from harness.errors import ExitCode, UsageError

if TYPE_CHECKING:
    from harness.app.fit import FitOptions
    from harness.tuning.trace import Kind

_KINDS = ("first_order", "second_order", "integrating", "inverse_response")


def add_fit(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the command line.

    Parameters
    ----------
    commands : argparse sub-parsers
        Where commands go.
    """
    parser = commands.add_parser(
        "fit", help="models of a process from a recorded step test in a text file"
    )
    parser.add_argument("file", type=Path, metavar="FILE", help="comma, semicolon or tab")
    parser.add_argument("--time", required=True, metavar="COLUMN", help="time, or time stamps")
    parser.add_argument(
        "--input",
        required=True,
        metavar="COLUMN",
        help="input of the process: controller output",
    )
    parser.add_argument(
        "--output", required=True, metavar="COLUMN", help="output of the process"
    )
    parser.add_argument(
        "--step-time", action="append", default=[], metavar="TIME",
        help="when the input was stepped, as the time column has it; again for more; found if not given",
    )  # fmt: skip
    parser.add_argument(
        "--input-range", type=float, nargs=2, metavar=("LOW", "HIGH"),
        help="range of the input; with both ranges the gain is a fraction of them",
    )  # fmt: skip
    parser.add_argument("--output-range", type=float, nargs=2, metavar=("LOW", "HIGH"))
    parser.add_argument(
        "--kind", action="append", default=[], metavar="KIND",
        help=f"fit this kind only; again for more: {', '.join(_KINDS)}",
    )  # fmt: skip
    parser.add_argument(
        "--confidence", type=float, default=95.0, metavar="PERCENT", help="of the limits"
    )
    parser.add_argument("--drift", action="store_true", help="fit a linear drift as well")
    parser.add_argument(
        "--skip-bad", action="store_true", help="leave out rows with text or nothing in them"
    )
    parser.add_argument(
        "--force", action="store_true", help="fit even what the data do not support"
    )
    parser.add_argument("--plot", type=Path, metavar="FILE", help="data and fit, .svg or .png")
    parser.add_argument(
        "--json", action="store_true", help="a JSON document on standard output"
    )
    parser.set_defaults(run=run_fit)


def run_fit(options: argparse.Namespace) -> int:
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
        As `harness.app.fit.fit`.
    """
    from harness.app.fit import fit  # noqa: PLC0415  kept out of --help

    if options.plot is not None:
        from harness.reporting.figure_files import check_figure_path  # noqa: PLC0415

        check_figure_path(options.plot)
    asked = _asked(options)
    found = fit(asked)
    if options.plot is not None:
        from harness.app.drawings import draw_fit_file  # noqa: PLC0415

        draw_fit_file(options.plot, found, asked)
    if options.json:
        from harness.app.output import write_output  # noqa: PLC0415  kept out of --help

        text = json.dumps(found.document, indent=2, ensure_ascii=False, allow_nan=False)
        write_output(text + "\n")
        return ExitCode.PASS
    from harness.reporting.terminal import make_console  # noqa: PLC0415
    from harness.reporting.tuning_tables import fit_view  # noqa: PLC0415

    make_console().print(fit_view(found.document))
    return ExitCode.PASS


def _asked(options: argparse.Namespace) -> FitOptions:
    from harness.app.fit import FitOptions  # noqa: PLC0415  kept out of --help

    return FitOptions(
        path=options.file,
        time=options.time,
        input=options.input,
        output=options.output,
        step_times=tuple(options.step_time),
        input_range=_pair(options.input_range),
        output_range=_pair(options.output_range),
        kinds=_kinds(options.kind),
        confidence=options.confidence / 100.0,
        drift=options.drift,
        force=options.force,
        skip_bad=options.skip_bad,
    )


def _pair(ends: list[float] | None) -> tuple[float, float] | None:
    return None if ends is None else (ends[0], ends[1])


def _kinds(names: list[str]) -> tuple[Kind, ...]:
    from harness.tuning.trace import Kind  # noqa: PLC0415  kept out of --help

    chosen = []
    for name in (part for entry in names for part in entry.split(",")):
        plain = name.strip().lower().replace("-", "_").replace(" ", "_")
        if plain not in _KINDS:
            raise UsageError(f'--kind: no kind "{name}"; there are {", ".join(_KINDS)}')
        chosen.append(Kind(plain))
    return tuple(dict.fromkeys(chosen)) or tuple(Kind)
