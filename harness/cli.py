"""The command ``dryrig``. Everything heavy is imported by the call that needs it."""

from __future__ import annotations

import argparse
import json
import math
import sys
import traceback
from pathlib import Path
from typing import TYPE_CHECKING

from harness.app.fit_command import add_fit
from harness.app.tune_command import add_tune
from harness.errors import DryrigError, ExitCode, UsageError

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from harness.app.loading import LinkChoice
    from harness.app.run_files import RunResult

_LAST_PORT = 65_535  # RFC 9293, section 3.1: a port is a 16 bit number [-]
_NO_CACHE = "cannot cache function"  # how numba begins to say that it has no place to write
_CAUTION = (
    "Outputs of a controller under test must be isolated from the field. Nothing here is evidence "
    "for a safety function; local codes and licensed practice decide."
)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    arguments : sequence of str or None
        Arguments; None takes those of the process.

    Returns
    -------
    int
        0 pass, 1 fail, 2 wrong configuration or use, 3 invalid run, 130 interrupted [-].
    """
    for stream in (sys.stdout, sys.stderr):
        # A pipe on Windows may have a code page without signs as common as a degree or a minus.
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(errors="backslashreplace")
    options = build_parser().parse_args(arguments)
    run: Callable[[argparse.Namespace], int] = options.run
    try:
        return int(run(options))
    except DryrigError as error:
        print(error, file=sys.stderr)  # noqa: T201
        return int(error.exit_code)
    except KeyboardInterrupt:
        return int(ExitCode.INTERRUPTED)
    except Exception as error:  # noqa: BLE001  it would end with 1, as if a controller had failed
        return int(_tell_unforeseen(error))


def _tell_unforeseen(error: Exception) -> ExitCode:
    """Say what no part of the program has foreseen."""
    if isinstance(error, RuntimeError) and str(error).startswith(_NO_CACHE):
        print(  # noqa: T201
            "dryrig: the compiled simulation can be kept nowhere: neither the user's cache folder "
            "nor the program's own may be written; set NUMBA_CACHE_DIR to a folder that may be",
            file=sys.stderr,
        )
        return ExitCode.USAGE
    traceback.print_exc()
    print(  # noqa: T201
        f"dryrig: {error!r}: this is a defect of the program, not of your files or your "
        "controller; please report it with the lines above. A run so far is kept and counts "
        "as invalid",
        file=sys.stderr,
    )
    return ExitCode.INVALID


def build_parser() -> argparse.ArgumentParser:
    """Return the parser of the command line."""
    parser = argparse.ArgumentParser(
        prog="dryrig",
        description="A simulated plant in real time, to test a level controller against before "
        "site start-up.",
        epilog=_CAUTION,
    )
    commands = parser.add_subparsers(metavar="COMMAND", required=True)
    _add_check(commands)
    _add_model(commands)
    _add_serve(commands)
    _add_control(commands)
    _add_signals(commands)
    _add_trial(commands)
    _add_score(commands)
    add_fit(commands)
    add_tune(commands)
    return parser


def _add_check(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    parser = commands.add_parser("check", help="check a rig and a trial; say how long it takes")
    parser.add_argument("rig", type=Path, metavar="RIG", help="rig file")
    parser.add_argument("trial", type=Path, nargs="?", metavar="TRIAL", help="trial file")
    _add_pace(parser, 1.0)
    _add_json(parser)
    parser.set_defaults(run=_check)


def _add_model(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    parser = commands.add_parser("model", help="operating point, gains and time constants")
    parser.add_argument("rig", type=Path, metavar="RIG", help="rig file")
    _add_json(parser)
    parser.set_defaults(run=_model)


def _add_serve(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    parser = commands.add_parser(
        "serve",
        help="run a rig live with its links open",
        description="Run a rig live with its links open, until Ctrl-C (exit code 0), or for a "
        "set time (Ctrl-C before its end: 130).",
        epilog=_CAUTION,
    )
    parser.add_argument("rig", type=Path, metavar="RIG", help="rig file")
    parser.add_argument(
        "--for",
        type=_above_zero,
        dest="duration",
        metavar="SECONDS",
        help="stop after this wall time",
    )
    parser.add_argument(
        "--builtin", action="store_true", help="close the loops with the built-in block"
    )
    parser.add_argument(
        "--out", type=Path, metavar="FOLDER", help="record into a run folder there"
    )
    _add_pace(parser, 1.0)
    _add_links(parser)
    _add_json(parser)
    parser.set_defaults(run=_serve)


def _add_control(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    parser = commands.add_parser(
        "control", help="run the soft PLC against a rig that is served"
    )
    parser.add_argument("rig", type=Path, metavar="RIG", help="rig file, for the map")
    parser.add_argument(
        "--link", required=True, metavar="LINK", help="modbus, opcua, or the name of a link"
    )
    parser.add_argument(
        "--loop", metavar="TAG", help="loop to close; the rig's first if not given"
    )
    parser.add_argument("--host", help="where the rig listens, if not as in the rig file")
    parser.add_argument(
        "--port", type=_port_to_reach, help="its port, if not as in the rig file"
    )
    parser.add_argument(
        "--scan", type=_above_zero, metavar="SECONDS", help="scan period in plant time"
    )
    parser.add_argument(
        "--orders",
        choices=("link", "none"),
        default="link",
        help="none: setpoint, mode and settings are typed in here, nothing is taken over the link",
    )
    parser.add_argument(
        "--panel",
        type=Path,
        metavar="FILE",
        help="with --orders none: take what is typed from lines appended to this file",
    )
    _add_faults(parser)
    _add_pace(parser, 1.0)
    parser.set_defaults(run=_control)


def _add_faults(parser: argparse.ArgumentParser) -> None:
    """Add deliberate mistakes, with which a test shows that the score finds them."""
    for name, kind, default in (
        ("--fault-gain", float, 1.0),
        ("--fault-integral-time", float, 1.0),
        ("--fault-bias", float, 0.0),
        ("--fault-silent-after", float, None),
    ):
        parser.add_argument(name, type=kind, default=default, help=argparse.SUPPRESS)
    parser.add_argument("--fault-reversed", action="store_true", help=argparse.SUPPRESS)
    parser.add_argument("--mistake", metavar="NAME", help=argparse.SUPPRESS)


def _add_signals(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    parser = commands.add_parser(
        "signals", help="check every signal between rig and controller", epilog=_CAUTION
    )
    parser.add_argument("rig", type=Path, metavar="RIG", help="rig file")
    parser.add_argument("--out", type=Path, default=Path("runs"), metavar="FOLDER")
    parser.add_argument(
        "--wait",
        type=_above_zero,
        default=30.0,
        metavar="SECONDS",
        help="how long to wait for the controller (default 30)",
    )
    parser.add_argument(
        "--answers",
        type=Path,
        metavar="FILE",
        help="take what the controller shows from lines appended to this file",
    )
    _add_pace(parser, 1.0)
    _add_links(parser)
    _add_json(parser)
    parser.set_defaults(run=_signals)


def _add_trial(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    parser = commands.add_parser(
        "trial", help="run a trial, score it and write the report", epilog=_CAUTION
    )
    parser.add_argument("rig", type=Path, nargs="?", metavar="RIG", help="rig file")
    parser.add_argument("trial", type=Path, nargs="?", metavar="TRIAL", help="trial file")
    parser.add_argument(
        "--clock",
        choices=("virtual", "paced"),
        help="virtual for the built-in controller, paced for one outside, unless said otherwise",
    )
    parser.add_argument("--controller", choices=("builtin", "external"))
    parser.add_argument(
        "--controller-pace",
        type=_above_zero,
        metavar="PACE",
        help="pace at which an external controller's own clock is scaled; it must be the rig's",
    )
    parser.add_argument(
        "--no-preflight",
        action="store_true",
        help="begin without trying an external controller first",
    )
    parser.add_argument(
        "--wait",
        type=_above_zero,
        metavar="SECONDS",
        help="how long to wait for an external controller (default 30)",
    )
    parser.add_argument(
        "--answers",
        type=Path,
        metavar="FILE",
        help="take answers to prompts from lines appended to this file, not from the terminal",
    )
    parser.add_argument(
        "--order-timeout",
        type=_above_zero,
        metavar="SECONDS",
        help="how long to wait for an order by prompt (default as in the trial file)",
    )
    parser.add_argument(
        "--models-from",
        type=Path,
        metavar="RUN",
        help="take the models from an earlier run, whatever the trial file says",
    )
    parser.add_argument(
        "--resume",
        type=Path,
        metavar="RUN",
        help="take up an interrupted or invalid run after its last completed phase, in place of "
        "RIG and TRIAL",
    )
    parser.add_argument(
        "--phases", type=_names, metavar="NAME[,NAME...]", help="run these phases only"
    )
    parser.add_argument(
        "--out",
        type=Path,
        default=Path("runs"),
        metavar="FOLDER",
        help="where the run folder goes (default runs)",
    )
    _add_pace(parser, None)
    _add_links(parser)
    _add_json(parser)
    parser.set_defaults(run=_trial)


def _add_score(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    parser = commands.add_parser("score", help="score a stored run again")
    parser.add_argument("folder", type=Path, metavar="RUN", help="run folder")
    _add_json(parser)
    parser.set_defaults(run=_score)


def _add_pace(parser: argparse.ArgumentParser, default: float | None) -> None:
    parser.add_argument(
        "--pace",
        type=_above_zero,
        default=default,
        help="plant seconds per wall second (default 1)",
    )


def _add_json(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "--json", action="store_true", help="a JSON document on standard output"
    )


def _add_links(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "--link", metavar="LINK", help="open this link only: modbus, opcua, a name"
    )
    parser.add_argument("--host", help="address to listen on (default as in the rig file)")
    for kind in ("modbus", "opcua"):
        parser.add_argument(
            f"--{kind}-port",
            type=_port,
            metavar="PORT",
            help="port to listen on, 0 for any free one (default as in the rig file)",
        )


def _above_zero(text: str) -> float:
    """Return a finite number above zero."""
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not (math.isfinite(value) and value > 0.0):
        raise argparse.ArgumentTypeError(
            f'"{text}" is not a finite number above 0; give e.g. 10'
        )
    return value


def _port(text: str) -> int:
    """Return a TCP port, or 0 for any."""
    try:
        value = int(text)
    except ValueError:
        value = -1
    if not 0 <= value <= _LAST_PORT:
        raise argparse.ArgumentTypeError(
            f'"{text}" is not a TCP port; give a whole number up to {_LAST_PORT}'
        )
    return value


def _port_to_reach(text: str) -> int:
    """Return a TCP port that a peer can listen on."""
    value = _port(text)
    if value == 0:
        raise argparse.ArgumentTypeError(
            "0 stands for any free port, which nobody can reach; give the port that the rig said "
            "it listens on"
        )
    return value


def _names(text: str) -> tuple[str, ...]:
    """Return names between commas, at least one."""
    names = tuple(name.strip() for name in text.split(",") if name.strip())
    if not names:
        raise argparse.ArgumentTypeError(
            f'"{text}" names no phase; leave the option out to run all of them'
        )
    return names


def _link_choice(options: argparse.Namespace) -> LinkChoice:
    from harness.app.loading import LinkChoice  # noqa: PLC0415  kept out of --help

    return LinkChoice(
        only=options.link,
        host=options.host,
        modbus_port=options.modbus_port,
        opcua_port=options.opcua_port,
    )


def _check(options: argparse.Namespace) -> int:
    from harness.app.check import check  # noqa: PLC0415  kept out of --help
    from harness.app.printing import print_check  # noqa: PLC0415

    document = check(options.rig, options.trial, options.pace)
    _tell(document, options, print_check)
    return ExitCode.PASS


def _model(options: argparse.Namespace) -> int:
    from harness.app.model import model  # noqa: PLC0415  kept out of --help
    from harness.app.printing import print_model  # noqa: PLC0415

    _tell(model(options.rig), options, print_model)
    return ExitCode.PASS


def _serve(options: argparse.Namespace) -> int:
    from harness.app.serve import ServeOptions, serve  # noqa: PLC0415  kept out of --help

    return serve(
        ServeOptions(
            rig=options.rig,
            pace=options.pace,
            duration=options.duration,
            links=_link_choice(options),
            builtin=options.builtin,
            out=options.out,
            json=options.json,
        )
    )


def _signals(options: argparse.Namespace) -> int:
    from harness.app.signals import signals_command  # noqa: PLC0415  kept out of --help

    return signals_command(options, _link_choice(options))


def _control(options: argparse.Namespace) -> int:
    from harness.app.control import control  # noqa: PLC0415  kept out of --help

    control(options)
    return ExitCode.PASS


def _trial(options: argparse.Namespace) -> int:
    from harness.app.trial import TrialOptions, run_trial  # noqa: PLC0415  kept out of --help

    external = options.controller == "external" or options.resume is not None
    _refuse_idle_options(options, external=external)
    # A pace means nothing in virtual time, so that asking for one asks for paced time.
    paced = external or options.pace is not None
    waiting = {} if options.wait is None else {"wait": options.wait}
    result = run_trial(
        TrialOptions(
            rig=options.rig,
            trial=options.trial,
            clock=options.clock or ("paced" if paced else "virtual"),
            pace=options.pace or 1.0,
            controller=options.controller or "builtin",
            controller_pace=options.controller_pace or 1.0,
            phases=options.phases or (),
            out=options.out,
            links=_link_choice(options),
            json=options.json,
            answers=options.answers,
            order_timeout=options.order_timeout,
            models_from=options.models_from,
            resume=options.resume,
            preflight=not options.no_preflight,
            **waiting,
        )
    )
    return _show(result, options)


def _refuse_idle_options(options: argparse.Namespace, *, external: bool) -> None:
    """Raise where an option would be passed over without a word."""
    if options.resume is not None:
        for name in ("clock", "pace", "controller", "controller_pace", "phases", "models_from"):
            if getattr(options, name) is not None:
                raise UsageError(
                    f"trial: --{name.replace('_', '-')} with --resume: a run is taken up as it was "
                    "begun; leave the option out"
                )
        return
    if options.clock == "virtual" and options.pace is not None:
        raise UsageError(
            f"trial: --pace {options.pace:g} with --clock virtual: virtual time runs as fast as "
            "the computer can; leave --pace out, or take --clock paced"
        )
    if external:
        return
    if options.no_preflight:
        raise UsageError(
            "trial: --no-preflight with --controller builtin: the built-in controller is never "
            "tried first; leave the option out, or take --controller external"
        )
    for name in (
        "link", "host", "modbus_port", "opcua_port", "controller_pace", "wait", "answers",
        "order_timeout",
    ):  # fmt: skip
        value = getattr(options, name)
        if value is not None:
            raise UsageError(
                f"trial: --{name.replace('_', '-')} {value} with --controller builtin: the "
                "built-in controller uses no link and no clock of its own; leave the option out, "
                "or take --controller external"
            )


def _score(options: argparse.Namespace) -> int:
    from harness.app.score import score  # noqa: PLC0415  kept out of --help

    return _show(score(options.folder), options)


def _show(result: RunResult, options: argparse.Namespace) -> int:
    if options.json:
        from harness.app.output import write_output  # noqa: PLC0415  kept out of --help

        write_output(result.text)
    else:
        from harness.app.printing import print_result  # noqa: PLC0415  kept out of --help

        print_result(result)
    return result.exit_code


def _tell(
    document: dict[str, object],
    options: argparse.Namespace,
    show: Callable[[dict[str, object]], None],
) -> None:
    if options.json:
        from harness.app.output import write_output  # noqa: PLC0415  kept out of --help

        text = json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False)
        write_output(text + "\n")
    else:
        show(document)


if __name__ == "__main__":
    sys.exit(main())
