"""Checking a rig and a trial before they are run."""

from __future__ import annotations

import dataclasses
from typing import TYPE_CHECKING

from harness.app.earlier import with_models_of
from harness.app.forecast import Forecast, forecast
from harness.app.loading import read_rig, read_trial
from harness.app.loop_facts import loop_facts
from harness.app.trial import say_compiling
from harness.app.trial_parts import run_named
from harness.domain.points import points_of
from harness.domain.rig import ModbusServerLink
from harness.errors import ConfigurationError
from harness.links.register_map import check_map, describe_map

if TYPE_CHECKING:
    from pathlib import Path

    from harness.domain.rig import Rig
    from harness.domain.trial import Trial


def check(rig_path: Path, trial_path: Path | None, pace: float) -> dict[str, object]:
    """Check a rig, and a trial on it, and say how long it will take.

    Parameters
    ----------
    rig_path : Path
        The rig file.
    trial_path : Path or None
        The trial file.
    pace : float
        Plant seconds per wall second [-].

    Returns
    -------
    dict
        What was found, JSON-able.

    Raises
    ------
    ConfigurationError
        With every problem.
    ModelError
        When the rig has no steady state, or the predicted loop is impossible.
    """
    rig, _ = read_rig(rig_path)
    _check_maps(rig, rig_path)
    document: dict[str, object] = {
        "schema": 1,
        "rig": rig.name,
        "tick": rig.tick,
        "loops": [loop.tag for loop in rig.loops],
        "loop_facts": loop_facts(rig),
        "links": [_link(link, rig) for link in rig.links],
    }
    if trial_path is None:
        return document
    trial, _ = read_trial(trial_path, rig)
    folder = run_named(trial, trial_path)
    if folder is not None:
        trial = with_models_of(trial, rig, folder)
    say_compiling()
    return document | _trial(trial, forecast(rig, trial), pace)


def _check_maps(rig: Rig, path: Path) -> None:
    """Raise what only the register maps' own rules can tell."""
    points = points_of(rig, external=True)
    problems = [
        f"{path}: link {link.name}: items[{index}]: {text}"
        for link in rig.links
        if isinstance(link, ModbusServerLink)
        for index, text in check_map(points, link.items)
    ]
    if problems:
        raise ConfigurationError(tuple(problems))


def _link(link: object, rig: Rig) -> dict[str, object]:
    if isinstance(link, ModbusServerLink):
        rows = describe_map(points_of(rig, external=True), link.items)
        return {
            "name": link.name,
            "kind": "modbus",
            "address": f"{link.host}:{link.port}",
            "unit": link.unit,
            "items": len(rows),
            "map": [dataclasses.asdict(row) for row in rows],
        }
    name, host, port = (getattr(link, key) for key in ("name", "host", "port"))
    return {"name": name, "kind": "opcua", "address": f"opc.tcp://{host}:{port}"}


def _trial(trial: Trial, expected: Forecast, pace: float) -> dict[str, object]:
    return {
        "trial": trial.name,
        "pace": pace,
        "phases": [
            {
                "name": phase.name,
                "kind": phase.kind.value,
                "mode": phase.mode.value,
                "expected": expected.phases[phase.name].duration,
                "time_limit": phase.time_limit,
            }
            for phase in trial.phases
        ],
        "expected": expected.duration,
        "expected_wall": expected.duration / pace,
    }
