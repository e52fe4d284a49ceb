"""A trial file read table by table, checked against its rig, and built."""

from __future__ import annotations

from dataclasses import dataclass

from harness.config.findings import Entry, Findings, read_document, single_table, tables
from harness.config.findings import unknown_keys as note_unknown_keys
from harness.config.rig_build import parsed
from harness.config.trial_tables import (
    AsFoundTable,
    GivenTable,
    ModelTable,
    PhaseTable,
    RunTable,
    SteadyTable,
    TolerancesTable,
    TrialTable,
)
from harness.domain.models import ControlLaw, ControllerSettings, LagModel, LoopModels
from harness.domain.points import shown_range
from harness.domain.rig import Action, Rig
from harness.domain.trial import (
    Mode,
    ModelSource,
    Phase,
    PhaseKind,
    SettingsSource,
    SteadyRule,
    Tolerances,
    Trial,
)
from harness.tuning.block_units import block_settings

_KEYS = ("format", "trial", "given", "as_found", "phase", "steady", "tolerances")


@dataclass(frozen=True, slots=True, kw_only=True)
class TrialDraft:
    """Every table of a trial file with what of it is right.

    Parameters
    ----------
    findings : Findings
        Problems so far.
    trial, steady, tolerances : Entry
        Tables that a file has once.
    given, as_found : Entry or None
        None where the file has no such table.
    phases : tuple of Entry
        In file order.
    """

    findings: Findings
    trial: Entry
    steady: Entry
    tolerances: Entry
    given: Entry | None
    as_found: Entry | None
    phases: tuple[Entry, ...]


def read_trial(text: str, name: str) -> TrialDraft:
    """Read a trial file table by table.

    Parameters
    ----------
    text : str
        The text.
    name : str
        Name of the file, for messages.

    Returns
    -------
    TrialDraft
        The tables, each validated for itself.

    Raises
    ------
    ConfigurationError
        When the text is no TOML, or of another format.
    """
    document, findings = read_document(text, name)
    note_unknown_keys(document, _KEYS, findings)

    def once(
        key: str, model: type[TrialTable | GivenTable | AsFoundTable | SteadyTable]
    ) -> Entry:
        return Entry(key, single_table(document, key, findings), model, findings)

    return TrialDraft(
        findings=findings,
        trial=once("trial", TrialTable),
        steady=once("steady", SteadyTable),
        tolerances=Entry(
            "tolerances",
            single_table(document, "tolerances", findings),
            TolerancesTable,
            findings,
        ),
        given=once("given", GivenTable) if "given" in document else None,
        as_found=once("as_found", AsFoundTable) if "as_found" in document else None,
        phases=tuple(
            Entry(f"phase[{index}]", raw, PhaseTable, findings)
            for index, raw in enumerate(tables(document, "phase", findings))
        ),
    )


def build_trial(draft: TrialDraft, rig: Rig) -> Trial:
    """Return the trial of a file that has no problem.

    Parameters
    ----------
    draft : TrialDraft
        The file, checked.
    rig : Rig
        The rig that it is for.

    Returns
    -------
    Trial
        In SI units.
    """
    table = parsed(draft.trial, TrialTable)
    steady = parsed(draft.steady, SteadyTable)
    tolerances = parsed(draft.tolerances, TolerancesTable)
    if isinstance(table.models, RunTable):
        models, run = ModelSource.RUN, table.models.run
    else:
        models, run = ModelSource(table.models), ""
    return Trial(
        name=table.name,
        description=table.description.strip(),
        law=ControlLaw(table.law),
        closed_loop_time=table.closed_loop_time,
        models=models,
        given=_models(parsed(draft.given, GivenTable)) if draft.given else None,
        settings=SettingsSource(table.settings),
        as_found=_settings(parsed(draft.as_found, AsFoundTable), draft, rig)
        if draft.as_found
        else None,
        phases=tuple(_phase(parsed(each, PhaseTable)) for each in draft.phases),
        steady=SteadyRule(
            dwell=steady.dwell,
            remaining=steady.remaining,
            confidence=steady.confidence,
            thinning=steady.thinning,
        ),
        tolerances=Tolerances(
            relative=tolerances.relative,
            overshoot=tolerances.overshoot,
            offset=tolerances.offset,
        ),
        order_timeout=table.order_timeout,
        models_run=run,
    )


def _models(table: GivenTable) -> LoopModels:
    return LoopModels(output=_model(table.output), load=_model(table.load))


def _model(table: ModelTable) -> LagModel:
    return LagModel(
        gain=table.gain,
        time_constants=tuple(table.time_constants),
        dead_time=table.dead_time,
    )


def _settings(table: AsFoundTable, draft: TrialDraft, rig: Rig) -> ControllerSettings:
    action = Action(table.action)
    if table.units != "block":
        return ControllerSettings(
            gain=table.gain, integral_time=table.integral_time, action=action
        )
    loop = rig.loop(parsed(draft.phases[0], PhaseTable).loop)
    measured = shown_range(rig.transmitter(loop.process_variable))
    return block_settings(table.gain, table.integral, action, loop.block, measured)


def _phase(table: PhaseTable) -> Phase:
    return Phase(
        name=table.name,
        loop=table.loop,
        kind=PhaseKind(table.kind),
        mode=Mode(table.mode),
        change=table.change,
        time_limit=table.time_limit,
    )
