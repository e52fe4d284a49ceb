"""What settings do on a process: margins, predicted figures, and how they bear a changed plant."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from harness.analysis.continuous import predict_continuous
from harness.analysis.metrics import load_metrics, setpoint_metrics
from harness.errors import UsageError
from harness.tuning.loop_margins import loop_margins, stability_and_sensitivity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.analysis.continuous import ContinuousResponse
    from harness.tuning.margins import Margins
    from harness.tuning.process import PidSettings, ProcessModel

    Array = NDArray[np.float64]

_POINTS = 4000  # of a curve up to its settling
_COARSE = 1500  # of a curve that only its highest point is wanted of
_SETTLED = 1e-3  # of the step: what may be left at the end of a prediction
_DOUBLINGS = 8
_LONGEST = 1e6  # samples of a sampled prediction


@dataclass(frozen=True, slots=True, kw_only=True)
class LoopConditions:
    """How the block stands in its loop.

    Parameters
    ----------
    scan : float
        Scan period; 0 predicts a continuous block [s].
    output_delay : float
        Time from a sample to the output computed from it [s].
    filter_time : float
        First-order filter between process variable and block [s].
    spread : float
        By how much gain, lags and dead time of the plant may be off, either way [-].
    """

    scan: float = 0.0
    output_delay: float = 0.0
    filter_time: float = 0.0
    spread: float = 0.2

    @property
    def counted_delay(self) -> float:
        """Return what a tuning rule counts as dead time: half the scan, filter, delay [s]."""
        return 0.5 * self.scan + self.filter_time + self.output_delay


@dataclass(frozen=True, slots=True, kw_only=True)
class Robustness:
    """The worst over a plant whose gain, lags and dead time are each off by the spread.

    Parameters
    ----------
    spread : float
        The spread [-].
    plants : int
        Plants looked at: every corner, and the nominal one [-].
    unstable : int
        How many of them are unstable [-].
    worst_sensitivity : float or None
        Largest Ms of the stable ones; None when any is unstable [-].
    worst_overshoot : float or None
        Largest overshoot of a setpoint step; None when any is unstable [-].
    worst_plant : dict of str to float
        Factors on gain, lags and dead time at the largest Ms, or of the first unstable plant [-].
    """

    spread: float
    plants: int
    unstable: int
    worst_sensitivity: float | None
    worst_overshoot: float | None
    worst_plant: dict[str, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Evaluation:
    """Settings on a process.

    Parameters
    ----------
    stable : bool
        Whether the closed loop is stable.
    margins : Margins
        Margins.
    setpoint, load : dict of str to float or None
        Figures after a unit step of the setpoint, and of a load at the process input, by the
        names of ``harness.analysis.metrics`` and ``output_peak``; empty when unstable
        [s, s^2 or per unit of the step].
    setpoint_curve, load_curve : ContinuousResponse or None
        Responses behind them; None when unstable.
    robustness : Robustness
        Over the spread of the plant.
    """

    stable: bool
    margins: Margins
    setpoint: dict[str, float | None]
    load: dict[str, float | None]
    setpoint_curve: ContinuousResponse | None
    load_curve: ContinuousResponse | None
    robustness: Robustness


def evaluate(
    model: ProcessModel, settings: PidSettings, conditions: LoopConditions
) -> Evaluation:
    """Return margins, predicted figures and robustness of settings on a process.

    Parameters
    ----------
    model : ProcessModel
        From controller output to process variable, scan and filter not counted in.
    settings : PidSettings
        Settings of the ideal block.
    conditions : LoopConditions
        Scan, delay, filter and spread.

    Returns
    -------
    Evaluation
        What was found; an unstable loop has margins and no curves.

    Raises
    ------
    ModelError
        When process or settings are not usable.
    UsageError
        When the spread is not between 0 and 1, or the scan is far too short for the process.
    """
    if not 0.0 <= conditions.spread < 1.0:
        raise UsageError(
            f"robustness: a spread of {conditions.spread:g}; it must be at least 0 and below 1 "
            "(0.2 stands for 20 % either way)"
        )
    margins = loop_margins(model, settings, **_times(conditions))
    stable, _ = stability_and_sensitivity(model, settings, **_times(conditions))
    if not stable:
        return Evaluation(
            stable=False, margins=margins, setpoint={}, load={}, setpoint_curve=None,
            load_curve=None, robustness=_robustness(model, settings, conditions, None),
        )  # fmt: skip
    final = final_values(model, settings)
    horizon = _horizon(model, settings, conditions, margins, final)
    setpoint = _predict(model, settings, conditions, (1.0, 0.0), horizon, _POINTS)
    load = _predict(model, settings, conditions, (0.0, 1.0), horizon, _POINTS)
    return Evaluation(
        stable=True,
        margins=margins,
        setpoint=_setpoint_figures(setpoint, final[0]),
        load=_load_figures(load, final[1]),
        setpoint_curve=setpoint,
        load_curve=load,
        robustness=_robustness(model, settings, conditions, horizon),
    )


def final_values(model: ProcessModel, settings: PidSettings) -> tuple[float, float]:
    """Return where the process variable ends after a unit step of setpoint, and of the load.

    Parameters
    ----------
    model : ProcessModel
        Process.
    settings : PidSettings
        Settings; without integral action an offset is left.

    Returns
    -------
    tuple of float
        After the setpoint step, and after the load step [per unit of the step].
    """
    if settings.integral_time is not None:
        return 1.0, 0.0
    if model.integrating:
        return 1.0, math.copysign(1.0 / settings.gain, model.gain)
    loop_gain = abs(model.gain) * settings.gain
    return loop_gain / (1.0 + loop_gain), model.gain / (1.0 + loop_gain)


def _times(conditions: LoopConditions) -> dict[str, float]:
    return {
        "scan": conditions.scan,
        "output_delay": conditions.output_delay,
        "filter_time": conditions.filter_time,
    }


def _horizon(
    model: ProcessModel,
    settings: PidSettings,
    conditions: LoopConditions,
    margins: Margins,
    final: tuple[float, float],
) -> float:
    """Return a time by which both responses have settled."""
    crossover = margins.gain_crossover
    quick = 8.0 / crossover if crossover else 3.0 * model.total_lag
    horizon = max(quick, 4.0 * (settings.integral_time or 0.0), 10.0 * model.dead_time)
    for _ in range(_DOUBLINGS):
        left = 0.0
        for steps, end in zip(((1.0, 0.0), (0.0, 1.0)), final, strict=True):
            curve = _predict(model, settings, conditions, steps, horizon, _COARSE)
            error = np.abs(curve.process_variable - end)
            rest = float(error[curve.times > 0.8 * horizon].max())
            left = max(left, rest / float(error.max()))
        if left < _SETTLED:
            break
        horizon *= 2.0
    return horizon


def _predict(
    model: ProcessModel,
    settings: PidSettings,
    conditions: LoopConditions,
    steps: tuple[float, float],
    horizon: float,
    points: int,
) -> ContinuousResponse:
    """Return the response to steps of setpoint and load, closely spaced where it is quick."""
    if conditions.scan > 0.0:
        # It brings the compiler with it, which a continuous prediction does without.
        from harness.analysis.sampled_pid import predict_sampled_pid  # noqa: PLC0415

        if horizon / conditions.scan > _LONGEST:
            raise UsageError(
                f"scan of {conditions.scan:g} s: the loop takes {horizon:g} s to settle, more "
                f"than {_LONGEST:g} scans; are both in seconds?"
            )
        return predict_sampled_pid(
            model, settings, conditions.scan, horizon,
            ticks_per_scan=max(1, math.ceil(points * conditions.scan / horizon)),
            output_delay=conditions.output_delay, filter_time=conditions.filter_time,
            setpoint_step=steps[0], input_step=steps[1],
        )  # fmt: skip
    delayed = replace(model, dead_time=model.dead_time + conditions.output_delay)
    times = np.union1d(
        np.linspace(0.0, horizon, points), np.linspace(0.0, 0.15 * horizon, points)
    )
    return predict_continuous(
        delayed, settings, times, setpoint_step=steps[0], input_step=steps[1],
        filter_time=conditions.filter_time,
    )  # fmt: skip


def _setpoint_figures(curve: ContinuousResponse, final: float) -> dict[str, float | None]:
    figures = setpoint_metrics(
        curve.times, curve.process_variable, curve.output,
        setpoint=1.0, initial=0.0, final=final, initial_output=0.0,
    )  # fmt: skip
    return {**figures, "offset": 1.0 - final, "output_peak": _peak(curve.output)}


def _load_figures(curve: ContinuousResponse, final: float) -> dict[str, float | None]:
    figures = load_metrics(
        curve.times, curve.process_variable, curve.output,
        setpoint=0.0, final=final, initial_output=0.0,
    )  # fmt: skip
    largest = _peak(curve.process_variable)
    when = float(curve.times[int(np.argmax(np.abs(curve.process_variable)))])
    return {
        **{name: value for name, value in figures.items() if value is not None},
        "peak_deviation": largest,
        "peak_time": when,
        "offset": final,
        "output_peak": _peak(curve.output),
    }


def _peak(values: Array) -> float:
    """Return the value of the largest size, with its sign."""
    return float(values[int(np.argmax(np.abs(values)))])


def _robustness(
    model: ProcessModel,
    settings: PidSettings,
    conditions: LoopConditions,
    horizon: float | None,
) -> Robustness:
    """Look at every corner of the spread; no time responses where the nominal loop is unstable."""
    factors = (1.0 - conditions.spread, 1.0 + conditions.spread)
    corners = [(1.0, 1.0, 1.0)]
    if conditions.spread > 0.0:
        corners += list(itertools.product(factors, factors, factors))
    worst, overshoot, unstable = 0.0, 0.0, 0
    where, fallen = corners[0], None
    for corner in corners:
        plant = _scaled(model, corner)
        good, sensitivity = stability_and_sensitivity(plant, settings, **_times(conditions))
        if not good:
            unstable += 1
            fallen = fallen or corner
            continue
        if sensitivity > worst:
            worst, where = sensitivity, corner
        if horizon is not None:
            final = final_values(plant, settings)[0]
            curve = _predict(plant, settings, conditions, (1.0, 0.0), horizon, _COARSE)
            overshoot = max(overshoot, float(curve.process_variable.max()) / final - 1.0)
    whole = unstable == 0
    return Robustness(
        spread=conditions.spread,
        plants=len(corners),
        unstable=unstable,
        worst_sensitivity=worst if whole else None,
        worst_overshoot=max(overshoot, 0.0) if whole and horizon is not None else None,
        worst_plant=dict(zip(("gain", "lags", "dead_time"), fallen or where, strict=True)),
    )


def _scaled(model: ProcessModel, factors: tuple[float, float, float]) -> ProcessModel:
    gain, lags, dead = factors
    return replace(
        model,
        gain=gain * model.gain,
        time_constants=tuple(lags * value for value in model.time_constants),
        dead_time=dead * model.dead_time,
    )
