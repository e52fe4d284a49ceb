"""What a rig is, as numbers: operating point, linearised models."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.analysis.loop_models import linearised_models, operating_point
from harness.app.loading import read_rig
from harness.app.trial import say_compiling
from harness.domain.points import shown_range
from harness.engine.engine import Engine

if TYPE_CHECKING:
    from pathlib import Path

    from harness.domain.models import LagModel

_M3H = 3600.0  # m3/h per m3/s


def model(rig_path: Path) -> dict[str, object]:
    """Return operating point and linearised models of a rig at its initial outputs.

    Parameters
    ----------
    rig_path : Path
        The rig file.

    Returns
    -------
    dict
        JSON-able.

    Raises
    ------
    ConfigurationError
        With every problem of the file.
    ModelError
        When there is no steady state.
    """
    rig, _ = read_rig(rig_path)
    say_compiling()
    engine = Engine(rig)
    point = operating_point(engine)
    loops = {}
    for loop in rig.loops:
        models = linearised_models(engine, loop)
        shown = shown_range(rig.transmitter(loop.process_variable))
        loops[loop.tag] = {
            "process_variable": loop.process_variable,
            "unit": shown.unit,
            "models": {
                "output": _model(models.output, loop.output, shown.span),
                "load": _model(models.load, loop.load, shown.span),
            },
        }
    return {
        "schema": 1,
        "rig": rig.name,
        "operating_point": {
            "outputs": point.outputs,
            "flows": {tag: flow * _M3H for tag, flow in point.flows.items()},
            "flow_unit": "m3/h",
            "levels": point.levels,
            "level_unit": "m",
        },
        "loops": loops,
    }


def _model(path: LagModel, valve: str, span: float) -> dict[str, object]:
    return {
        "valve": valve,
        "gain": path.gain,
        "gain_engineering": path.gain * span / 100.0,
        "time_constants": list(path.time_constants),
        "dead_time": path.dead_time,
        "total_lag": path.total_lag,
    }
