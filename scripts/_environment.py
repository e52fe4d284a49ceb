"""Make the project's virtual environment where it is missing, and run a script inside it.

Only the standard library, and nothing newer than Python 3.7 at import, so that an old Python
gets a message instead of a syntax error. Nothing is ever installed outside ``.venv``.
"""

from __future__ import annotations

import hashlib
import importlib.util
import json
import os
import shutil
import subprocess
import sys
from pathlib import Path
from typing import NoReturn

ROOT = Path(__file__).resolve().parent.parent
VENV = ROOT / ".venv"
CONSTRAINTS = ROOT / "scripts" / "constraints.txt"
STAMP = VENV / "dryrig-stamp.json"
OLDEST = (3, 11)
USAGE = 2

# Settings of the caller that would send an installation, or an import, somewhere else.
_STRAY_VARIABLES = (
    "PIP_TARGET",
    "PIP_PREFIX",
    "PIP_ROOT",
    "PIP_USER",
    "PYTHONHOME",
    "PYTHONPATH",
)


def enter(extra: str = "") -> None:
    """Return inside the environment: at once, or by running the calling script again in it.

    Parameters
    ----------
    extra : str
        Optional dependencies wanted, e.g. ``"dev"``; empty for none.

    Raises
    ------
    SystemExit
        With code 2 and a message when the environment cannot be made; with the script's own
        code when it was run again.
    """
    python = ensure(extra)
    if _inside():
        return
    arguments = [str(python), *sys.argv]
    sys.stdout.flush()
    if os.name == "posix":
        os.execv(python, arguments)  # noqa: S606  the same script, in the environment just made
    _run_again(arguments)


def ensure(extra: str = "") -> Path:
    """Return the environment's Python, after making or mending the environment.

    Parameters
    ----------
    extra : str
        Optional dependencies wanted; empty for none.

    Returns
    -------
    Path
        The interpreter.
    """
    if sys.version_info < OLDEST:
        _give_up(
            "Python {}.{} is too old: this project needs 3.11 or newer. "
            "Start the script with a newer one, e.g. python3.11 (Windows: py -3.11).".format(
                *sys.version_info[:2]
            )
        )
    python = _interpreter(VENV)
    if not _inside() and not _usable(python):
        _create()
    extras = _recorded_extras()
    if extras is None or (extra and extra not in extras):
        _install(python, sorted({*(extras or ()), *([extra] if extra else [])}))
    return python


def _interpreter(venv: Path) -> Path:
    return venv / ("Scripts/python.exe" if os.name == "nt" else "bin/python")


def _inside() -> bool:
    return Path(sys.prefix).resolve() == VENV.resolve()


def _usable(python: Path) -> bool:
    """Tell whether the interpreter starts, is new enough, has pip and belongs to ``.venv``."""
    if not python.exists():
        return False
    probe = "import pip, sys; print(sys.version_info >= (3, 11), sys.prefix)"
    result = subprocess.run(
        [str(python), "-I", "-c", probe], capture_output=True, text=True, check=False
    )
    new_enough, _, prefix = result.stdout.strip().partition(" ")
    return (
        result.returncode == 0
        and new_enough == "True"
        and Path(prefix).resolve() == VENV.resolve()
    )


def _create() -> None:
    if VENV.is_symlink() or VENV.exists():
        _say(f"{VENV} does not work; making it anew.")
        _remove()
    if importlib.util.find_spec("ensurepip") is None:
        _missing_venv()
    _say(f"Making a virtual environment in {VENV}")
    result = subprocess.run(
        [sys.executable, "-m", "venv", str(VENV)], capture_output=True, text=True, check=False
    )
    if result.returncode != 0 or not _usable(_interpreter(VENV)):
        _remove()
        if "ensurepip" in result.stdout + result.stderr:
            _missing_venv()
        _give_up(f"No virtual environment could be made:\n{result.stdout}{result.stderr}")


def _remove() -> None:
    """Delete what stands at ``.venv``; a link is cut, and what it points to is left alone."""
    if VENV.is_symlink():
        VENV.unlink()
    elif VENV.exists():
        shutil.rmtree(VENV)


def _missing_venv() -> NoReturn:
    _give_up(
        "This Python cannot make virtual environments: its module ensurepip is missing.\n"
        "On Debian or Ubuntu install it once with:  sudo apt install python3-venv\n"
        f"(for a Python of your own choice: python{sys.version_info[0]}.{sys.version_info[1]}-venv)"
    )


def _digest() -> str:
    """Return a digest of all that decides what is installed, and of the place."""
    import tomllib  # noqa: PLC0415  unknown to the Pythons that ensure() turns away

    settings = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    wanted = {
        "root": str(ROOT),
        "build": settings["build-system"],
        "project": settings["project"],
        "constraints": CONSTRAINTS.read_text(encoding="utf-8"),
    }
    return hashlib.sha256(json.dumps(wanted, sort_keys=True).encode()).hexdigest()


def _recorded_extras() -> list[str] | None:
    """Return the extras installed, or None where an installation is due."""
    try:
        stamp = json.loads(STAMP.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    if not isinstance(stamp, dict) or stamp.get("digest") != _digest():
        return None
    return [str(extra) for extra in stamp.get("extras", [])]


def _install(python: Path, extras: list[str]) -> None:
    _say("Installing the packages that are needed (once; a minute or two)")
    subject = str(ROOT) + (f"[{','.join(extras)}]" if extras else "")
    command = [str(python), "-m", "pip", "install", "--quiet", "--no-input"]
    command += ["--disable-pip-version-check", "-c", str(CONSTRAINTS), "-e", subject]
    environment = {k: v for k, v in os.environ.items() if k not in _STRAY_VARIABLES}
    environment["PIP_REQUIRE_VIRTUALENV"] = "1"
    STAMP.unlink(missing_ok=True)
    result = subprocess.run(
        command, env=environment, stdin=subprocess.DEVNULL, text=True, check=False,
        stdout=subprocess.PIPE, stderr=subprocess.STDOUT,
    )  # fmt: skip
    if result.returncode != 0:
        tail = "\n".join(result.stdout.strip().splitlines()[-12:])
        _give_up(
            f"{tail}\n\nThe packages could not be installed into {VENV}; the lines above are "
            "pip's.\nThe first set-up needs a connection to a package index (or a local one "
            "in pip's settings). Then start this again; nothing else was changed."
        )
    STAMP.write_text(
        json.dumps({"digest": _digest(), "extras": extras}) + "\n", encoding="utf-8"
    )


def _run_again(arguments: list[str]) -> NoReturn:
    """Run the script in the environment and exit with its code; Windows knows no true exec."""
    child = subprocess.Popen(arguments)
    while True:
        try:
            raise SystemExit(child.wait())
        except KeyboardInterrupt:  # the child has it too, and decides
            continue


def _say(text: str) -> None:
    print(text, flush=True)


def _give_up(text: str) -> NoReturn:
    print(text, file=sys.stderr)
    raise SystemExit(USAGE)
