"""From a run folder to what scoring reads, and from a score to the files of a run."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from harness.analysis.run_data import RunData, with_orders_as_taken
from harness.analysis.score import score_run
from harness.app.loading import only_phases
from harness.config.load import rig_from_text, trial_from_text
from harness.domain.verdict import Outcome
from harness.errors import ExitCode, RecordError, UsageError
from harness.recording.export import export_csv, write_file
from harness.recording.folder import create_run_folder
from harness.recording.reader import RunFolder
from harness.recording.schema import TRACE_FILE
from harness.reporting.html import render_report
from harness.reporting.junit import render_junit

if TYPE_CHECKING:
    from harness.analysis.score import Scored
    from harness.domain.run import RunHeader

PHASES = "phases"  # key of the header's extra facts: the phases of a trial that was cut
_SEPARATOR = "\n"


@dataclass(frozen=True, slots=True, kw_only=True)
class RunResult:
    """A scored run on disk.

    Parameters
    ----------
    folder : Path
        The run folder.
    text : str
        The verdict as JSON.
    document : dict
        The same as a document.
    outcome : Outcome
        Verdict of the run.
    """

    folder: Path
    text: str
    document: dict[str, object]
    outcome: Outcome

    @property
    def exit_code(self) -> ExitCode:
        """Return what the command returns for this verdict."""
        match self.outcome:
            case Outcome.PASS | Outcome.SHOWN:  # steps in manual alone are judged by nobody
                return ExitCode.PASS
            case Outcome.FAIL:
                return ExitCode.FAIL
            case _:
                return ExitCode.INVALID


def phases_extra(phases: tuple[str, ...]) -> dict[str, str]:
    """Return the header's extra facts for a trial cut to some phases.

    Parameters
    ----------
    phases : tuple of str
        Names; empty for all.
    """
    return {PHASES: _SEPARATOR.join(phases)} if phases else {}


def make_run_folder(out: Path, header: RunHeader) -> Path:
    """Make the folder of a run.

    Parameters
    ----------
    out : Path
        Where run folders go.
    header : RunHeader
        First document of the run.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    UsageError
        When no folder can be made there.
    """
    try:
        return create_run_folder(out, header)
    except RecordError as error:
        raise UsageError(str(error)) from error


def read_run(folder: Path) -> RunData:
    """Read a run folder for scoring.

    Parameters
    ----------
    folder : Path
        The folder.

    Returns
    -------
    RunData
        Rig and trial as used, and the record.

    Raises
    ------
    UsageError
        When it is no run folder, or that of a live session.
    RecordError
        When the record is garbled.
    """
    if not (folder / TRACE_FILE).is_file():
        raise UsageError(
            f"{folder} is not a run folder: it holds no {TRACE_FILE}; name the folder that "
            "`dryrig trial` said its report is in"
        )
    run = RunFolder.open(folder)
    header = run.header
    if not header.trial_text:
        raise UsageError(
            f"{folder} is the record of a live session of `dryrig serve`, which has no trial to be "
            "scored by; name the folder of a `dryrig trial`"
        )
    rig = rig_from_text(header.rig_text, "rig.toml")
    trial = trial_from_text(header.trial_text, "trial.toml", rig)
    cut = header.extra.get(PHASES, "")
    data = RunData(
        rig=rig,
        trial=only_phases(trial, tuple(cut.split(_SEPARATOR)) if cut else ()),
        header=header,
        trace=run.trace(),
        events=run.events(),
        exchanges=run.exchanges(),
        closing=run.closing,
    )
    return with_orders_as_taken(data)


def score_folder(folder: Path) -> RunResult:
    """Score a run folder and write verdict, trace, JUnit file and report into it.

    Parameters
    ----------
    folder : Path
        The folder.

    Returns
    -------
    RunResult
        The verdict.

    Raises
    ------
    RecordError
        When the record cannot be read, or the files not be written.
    """
    data = read_run(folder)
    scored = score_run(data)
    document = scored.document | {"folder": str(folder)}
    text = json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"
    write_file(folder / "verdict.json", text)
    write_file(folder / "junit.xml", render_junit(document))
    write_file(folder / "report.html", _report(data, scored))
    export_csv(RunFolder.open(folder))
    return RunResult(folder=folder, text=text, document=document, outcome=scored.outcome)


def _report(data: RunData, scored: Scored) -> str:
    return render_report(scored.document, scored.curves, data.events, data.header)
