"""Rig and trial files to domain objects, with every problem of a file reported at once."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.config.link_checks import check_links
from harness.config.loop_checks import check_loops
from harness.config.plant_checks import check_plant
from harness.config.rig_build import build_rig
from harness.config.rig_draft import read_rig
from harness.config.trial_checks import check_trial
from harness.config.trial_draft import build_trial, read_trial
from harness.errors import ConfigurationError

if TYPE_CHECKING:
    from pathlib import Path

    from harness.domain.rig import Rig
    from harness.domain.trial import Trial


def load_rig(path: Path) -> tuple[Rig, str]:
    """Read a rig file.

    Parameters
    ----------
    path : Path
        The file.

    Returns
    -------
    rig : Rig
        The rig, in SI units.
    text : str
        The text of the file, for the run folder.

    Raises
    ------
    ConfigurationError
        When the file cannot be read or has problems; all of them are listed.
    """
    text = _read(path, "rig")
    return rig_from_text(text, str(path)), text


def load_trial(path: Path, rig: Rig) -> tuple[Trial, str]:
    """Read a trial file.

    Parameters
    ----------
    path : Path
        The file.
    rig : Rig
        The rig that it is for.

    Returns
    -------
    trial : Trial
        The trial, in SI units.
    text : str
        The text of the file, for the run folder.

    Raises
    ------
    ConfigurationError
        When the file cannot be read or has problems; all of them are listed.
    """
    text = _read(path, "trial")
    return trial_from_text(text, str(path), rig), text


def rig_from_text(text: str, name: str) -> Rig:
    """Return the rig of a TOML text.

    Parameters
    ----------
    text : str
        The text.
    name : str
        Name of the file, for messages.

    Returns
    -------
    Rig
        The rig, in SI units.

    Raises
    ------
    ConfigurationError
        When the text has problems; all of them are listed.
    """
    draft = read_rig(text, name)
    check_plant(draft)
    check_loops(draft)
    check_links(draft)
    draft.findings.raise_any()
    return build_rig(draft)


def trial_from_text(text: str, name: str, rig: Rig) -> Trial:
    """Return the trial of a TOML text.

    Parameters
    ----------
    text : str
        The text.
    name : str
        Name of the file, for messages.
    rig : Rig
        The rig that it is for.

    Returns
    -------
    Trial
        The trial, in SI units.

    Raises
    ------
    ConfigurationError
        When the text has problems; all of them are listed.
    """
    draft = read_trial(text, name)
    check_trial(draft, rig)
    draft.findings.raise_any()
    return build_trial(draft, rig)


def _read(path: Path, what: str) -> str:
    """Return the text of a file, its line ends as line feeds, or say why it cannot be read."""
    if path.is_dir():
        raise ConfigurationError((f"{path}: is a folder; name the {what} file in it",))
    try:
        content = path.read_bytes()
    except FileNotFoundError as error:
        raise ConfigurationError((f"{path}: there is no such {what} file",)) from error
    except OSError as error:
        problem = f"{path}: cannot be read: {error.strerror or error}"
        raise ConfigurationError((problem,)) from error
    try:
        text = content.decode("utf-8-sig")  # some editors put a mark of the encoding in front
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        problem = f"{path}:{line}: is not UTF-8 text; save it with that encoding"
        raise ConfigurationError((problem,)) from error
    return text.replace("\r\n", "\n")
