"""What a trial says of its models and phases, for people and as facts for programs."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.domain.trial import ModelSource, PhaseKind

if TYPE_CHECKING:
    from harness.domain.models import FittedModel, LagModel, LoopModels
    from harness.domain.trial import Phase

PATHS = ("output", "load")


def models_told(
    models: LoopModels, linearised: LoopModels, fits: dict[str, FittedModel], source: str
) -> tuple[str, dict[str, object]]:
    """Return the models of a loop in words and as JSON-able facts.

    Parameters
    ----------
    models : LoopModels
        Models that the trial goes by.
    linearised : LoopModels
        The rig's own, for comparison.
    fits : dict of str to FittedModel
        Fits by path; empty where nothing was identified.
    source : str
        Where the models come from.

    Returns
    -------
    str
        One line.
    dict
        By path.
    """
    data: dict[str, object] = {"source": source}
    for path in PATHS:
        fit = fits.get(path)
        document = model_document(getattr(models, path))
        document["source"] = (
            source if not fits else "identified" if fit else ModelSource.LINEARISED.value
        )
        if fit is not None:
            document["limits"] = {
                name: {"low": limit.low, "high": limit.high, "level": limit.level}
                for name, limit in fit.limits.items()
            }
            document["residual_rms"] = fit.residual_rms
            document["samples"] = fit.samples
        document["linearised"] = model_document(getattr(linearised, path))
        data[path] = document
    output = models.output
    lags = " + ".join(f"{lag:.3g}" for lag in output.time_constants)
    text = (
        f"{source}: gain {output.gain:.4g} %/%, total lag {output.total_lag:.4g} s "
        f"(lags {lags} s, dead time {output.dead_time:.2g} s)"
    )
    return text, data


def phase_words(phase: Phase) -> str:
    """Return what a phase does, in words.

    Parameters
    ----------
    phase : Phase
        The phase.
    """
    if phase.kind is PhaseKind.SETTLE:
        return f"wait for a steady state, in {phase.mode.value}"
    return f"{phase.kind.value.replace('_', ' ')} of {100 * phase.change:+.3g} %, in {phase.mode.value}"


def known_words(phase: Phase, after: float) -> str:
    """Return since when a phase's step acts.

    Parameters
    ----------
    phase : Phase
        The phase.
    after : float
        Time since its order [s].
    """
    match phase.kind:
        case PhaseKind.SETTLE:
            return "nothing was ordered"
        case PhaseKind.LOAD_STEP:
            return "the load acts from here on"
        case _:
            return f"the controller has it {after:.3g} s after the order"


def model_document(model: LagModel) -> dict[str, object]:
    """Return a model as JSON-able facts.

    Parameters
    ----------
    model : LagModel
        The model.

    Returns
    -------
    dict
        Gain [-], time constants [s], dead time [s], total lag [s].
    """
    return {
        "gain": model.gain,
        "time_constants": list(model.time_constants),
        "dead_time": model.dead_time,
        "total_lag": model.total_lag,
    }
