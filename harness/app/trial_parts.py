"""What a trial is made of: from files, or from an earlier run that is taken up again."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from harness.app.earlier import MODELS_FROM, Earlier, read_earlier, with_models_of
from harness.app.loading import read_rig, read_trial, with_links
from harness.app.run_files import phases_extra
from harness.domain.trial import ModelSource
from harness.errors import UsageError

if TYPE_CHECKING:
    from harness.app.trial import TrialOptions
    from harness.domain.rig import Rig
    from harness.domain.trial import Trial


@dataclass(frozen=True, slots=True, kw_only=True)
class TrialParts:
    """Rig and trial, ready to be run.

    Parameters
    ----------
    options : TrialOptions
        As the command line has them, or as the earlier run had them.
    rig : Rig
        The rig.
    trial : Trial
        The trial.
    rig_text, trial_text : str
        The files, for the run folder.
    extra : dict of str to str
        What else the header says.
    earlier : Earlier or None
        The run that is taken up.
    """

    options: TrialOptions
    rig: Rig
    trial: Trial
    rig_text: str
    trial_text: str
    extra: dict[str, str] = field(default_factory=dict)
    earlier: Earlier | None = None


def read_parts(options: TrialOptions) -> TrialParts:
    """Return what a trial is made of.

    Parameters
    ----------
    options : TrialOptions
        Of the command line.

    Raises
    ------
    ConfigurationError
        With every problem of rig and trial.
    UsageError
        When the options do not go together, or an earlier run does not serve.
    """
    parts = (
        _from_files(options) if options.resume is None else _resumed(options.resume, options)
    )
    trial = parts.trial
    if options.order_timeout is not None:
        trial = dataclasses.replace(trial, order_timeout=options.order_timeout)
    return dataclasses.replace(parts, trial=trial)


def run_named(trial: Trial, path: Path) -> Path | None:
    """Return the folder of the earlier run that a trial file takes its models from.

    Parameters
    ----------
    trial : Trial
        The trial.
    path : Path
        Its file; the folder is named from there.

    Returns
    -------
    Path or None
        None where the models come from elsewhere.
    """
    return path.parent / trial.models_run if trial.models is ModelSource.RUN else None


def _from_files(options: TrialOptions) -> TrialParts:
    if options.rig is None or options.trial is None:
        raise UsageError("trial: it wants a rig file and a trial file, or --resume and a run")
    rig, rig_text = read_rig(options.rig, options.links)
    trial, trial_text = read_trial(options.trial, rig, options.phases)
    extra = phases_extra(tuple(phase.name for phase in trial.phases) if options.phases else ())
    folder = options.models_from or run_named(trial, options.trial)
    if folder is not None:
        trial = with_models_of(trial, rig, folder)
        extra[MODELS_FROM] = str(folder.resolve())
    return TrialParts(
        options=options,
        rig=rig,
        trial=trial,
        rig_text=rig_text,
        trial_text=trial_text,
        extra=extra,
    )


def _resumed(folder: Path, options: TrialOptions) -> TrialParts:
    if options.rig is not None or options.trial is not None:
        raise UsageError(
            f"trial: --resume {folder} with a rig or trial file: a run is taken up with those it "
            "was begun with; leave the files out"
        )
    earlier = read_earlier(folder)
    header, trial = earlier.data.header, earlier.data.trial
    rig = with_links(earlier.data.rig, options.links, str(folder))
    if MODELS_FROM in header.extra:
        trial = with_models_of(trial, rig, Path(header.extra[MODELS_FROM]))
    return TrialParts(
        options=dataclasses.replace(
            options,
            clock=header.clock,
            pace=header.pace,
            controller="external",
            controller_pace=header.pace,
        ),
        rig=rig,
        trial=trial,
        rig_text=header.rig_text,
        trial_text=header.trial_text,
        extra=earlier.extra,
        earlier=earlier,
    )
