"""How long each phase of a trial will take, before it is run."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.analysis.linear import ScanSchedule
from harness.analysis.loop_models import linearised_models
from harness.analysis.plan import PhasePlan, plan_phase
from harness.domain.trial import Mode, SettingsSource
from harness.engine.engine import Engine
from harness.tuning.synthesis import direct_synthesis

if TYPE_CHECKING:
    from harness.domain.models import ControllerSettings, LoopModels
    from harness.domain.rig import Rig
    from harness.domain.trial import Trial


@dataclass(frozen=True, slots=True, kw_only=True)
class Forecast:
    """Expectation of a trial.

    Parameters
    ----------
    phases : dict of str to PhasePlan
        Expectation of each phase by name.
    models : dict of str to LoopModels
        Linearised (or given) models of each loop.
    settings : dict of str to ControllerSettings
        Settings expected for each loop that goes to automatic.
    transfer : float
        Time between the last phase in manual and the first in automatic [s].
    """

    phases: dict[str, PhasePlan]
    models: dict[str, LoopModels]
    settings: dict[str, ControllerSettings]
    transfer: float

    @property
    def duration(self) -> float:
        """Return the expected duration of the whole [s]."""
        return sum(plan.duration for plan in self.phases.values()) + self.transfer


def forecast(rig: Rig, trial: Trial) -> Forecast:
    """Return the expectation of a trial, from the linearised rig.

    Parameters
    ----------
    rig : Rig
        The rig.
    trial : Trial
        The trial.

    Returns
    -------
    Forecast
        Durations, models and settings.

    Raises
    ------
    ModelError
        When the rig has no steady state, or the tuning or the predicted loop is impossible.
    """
    engine = Engine(rig)
    models: dict[str, LoopModels] = {}
    settings: dict[str, ControllerSettings] = {}
    phases: dict[str, PhasePlan] = {}
    transfers = 0
    for phase in trial.phases:
        loop = rig.loop(phase.loop)
        if loop.tag not in models:
            models[loop.tag] = trial.models_of(loop.tag) or linearised_models(engine, loop)
        if phase.mode is Mode.AUTOMATIC and loop.tag not in settings:
            settings[loop.tag] = _settings(trial, models[loop.tag])
            transfers += 1
        schedule = ScanSchedule(
            scan_ticks=max(1, round(loop.scan / rig.tick)), delay_ticks=loop.output_delay
        )
        phases[phase.name] = plan_phase(
            phase,
            loop,
            models[loop.tag],
            settings.get(loop.tag),
            schedule,
            rig.tick,
            trial.steady,
        )
    return Forecast(
        phases=phases,
        models=models,
        settings=settings,
        transfer=transfers * max(trial.closed_loop_time, 10 * rig.tick),
    )


def _settings(trial: Trial, models: LoopModels) -> ControllerSettings:
    if trial.settings is SettingsSource.AS_FOUND and trial.as_found is not None:
        return trial.as_found
    return direct_synthesis(models.output, trial.law, trial.closed_loop_time).settings
