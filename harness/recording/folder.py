"""Making the folder of a run, with the files it was run from."""

from __future__ import annotations

import re
from typing import TYPE_CHECKING

from harness.errors import RecordError
from harness.recording.schema import RIG_FILE, TRIAL_FILE

if TYPE_CHECKING:
    from pathlib import Path

    from harness.domain.run import RunHeader

LIVE = "live"  # stands where the trial's name would, for a session without trial
LONGEST_NAME = 40  # [characters]; Windows allows 260 for a whole path unless told otherwise
ATTEMPTS = 100  # folders of the same stamp, trial and id before giving up


def create_run_folder(out: Path, header: RunHeader) -> Path:
    """Make ``<out>/<UTC stamp>-<trial>-<short id>`` and put rig and trial into it as used.

    Parameters
    ----------
    out : Path
        Where run folders go; made if it is missing.
    header : RunHeader
        Names, texts, the stamp and the id of the run.

    Returns
    -------
    Path
        The new folder; a number is added where the name was taken.

    Raises
    ------
    RecordError
        If it cannot be made.
    """
    stamp = re.sub(r"[^0-9TZ]", "", header.started_utc.split(".")[0].split("+")[0])
    parts = (
        stamp.rstrip("Z") + "Z",
        name_part(header.trial_name or LIVE),
        name_part(header.run)[:8],
    )
    try:
        out.mkdir(parents=True, exist_ok=True)
        folder = _first_free(out, "-".join(parts))
        (folder / RIG_FILE).write_text(header.rig_text, encoding="utf-8", newline="")
        if header.trial_text:
            (folder / TRIAL_FILE).write_text(header.trial_text, encoding="utf-8", newline="")
    except OSError as error:
        raise RecordError(
            f"No run folder can be made in {out} ({error}). Choose another place with --out."
        ) from error
    return folder


def name_part(text: str) -> str:
    """Return a text as part of a file name on any system: small letters, digits, underscores."""
    return re.sub(r"[^a-z0-9]+", "_", text.casefold()).strip("_")[:LONGEST_NAME] or "run"


def _first_free(out: Path, name: str) -> Path:
    """Make and return the first folder of that name, or with a number, that is not there."""
    for attempt in range(ATTEMPTS):
        folder = out / (name if attempt == 0 else f"{name}-{attempt + 1}")
        try:
            folder.mkdir()
        except FileExistsError:
            continue
        return folder
    raise RecordError(f"{out / name} and {ATTEMPTS - 1} more of that name are there already.")
