"""Linearised models against closed forms, and against the nonlinear rig itself."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest

from harness.analysis.linear import ScanSchedule, predict_sampled
from harness.analysis.loop_models import linearised_models, operating_point
from harness.domain.models import ControllerSettings
from harness.domain.rig import Action, Measurement
from harness.engine.engine import Engine
from harness.errors import ModelError


@pytest.fixture(scope="module")
def quiet(runs):
    """Return the demo rig without noise and resolution."""
    rig = runs.rig()
    return dataclasses.replace(
        rig,
        transmitters=tuple(
            dataclasses.replace(t, noise=0.0, resolution=0.0) for t in rig.transmitters
        ),
    )


def vessel_time(engine, vessel, flow, level):
    """Return 2 A h / q, the time constant of a free-draining vessel (Torricelli, linearised)."""
    area = next(v for v in engine.rig.vessels if v.tag == vessel).shape.area
    return 2.0 * area * level / flow


def test_operating_point_balances_every_vessel(quiet):
    """q = Cd a sqrt(2 g h) at each outlet, whatever the valves let in."""
    engine = Engine(quiet)
    point = operating_point(engine, {"FV-101": 0.52, "FV-102": 0.63})
    for orifice, flow in (
        (quiet.orifices[0], point.flows["FV-101"]),
        (quiet.orifices[1], point.flows["FV-101"] + point.flows["FV-102"]),
    ):
        speed = math.sqrt(2.0 * quiet.gravity * point.levels[orifice.origin])
        out = orifice.discharge_coefficient * orifice.area * speed
        assert out == pytest.approx(flow, rel=1e-9)


def test_lags_are_2ah_over_q(quiet):
    engine = Engine(quiet)
    point = operating_point(engine)
    models = linearised_models(engine, quiet.loops[0])
    upper = vessel_time(engine, "TK-101", point.flows["FV-101"], point.levels["TK-101"])
    through = point.flows["FV-101"] + point.flows["FV-102"]
    lower = vessel_time(engine, "TK-102", through, point.levels["TK-102"])
    assert models.output.time_constants == pytest.approx(
        sorted((upper, lower), reverse=True), rel=1e-6
    )
    assert models.load.time_constants == pytest.approx((lower,), rel=1e-6)


@pytest.mark.parametrize("path", ["output", "load"])
def test_gain_is_that_of_the_valve_times_2h_over_q(quiet, path):
    """dh/dq = 2 h / q; the valve's own gain by a central difference on its flow."""
    engine = Engine(quiet)
    loop = quiet.loops[0]
    valve = loop.output if path == "output" else loop.load
    point = operating_point(engine)
    step = 1e-4
    number = [v.tag for v in quiet.valves].index(valve)
    x = point.outputs[valve]
    flow_gain = (
        engine.valve_flows({valve: x + step})[number]
        - engine.valve_flows({valve: x - step})[number]
    ) / (2.0 * step)
    level = point.levels["TK-102"]
    through = point.flows["FV-101"] + point.flows["FV-102"]
    span = quiet.transmitter(loop.process_variable).range.span
    model = getattr(linearised_models(engine, loop), path)
    assert model.gain == pytest.approx(flow_gain * 2.0 * level / through / span, rel=1e-6)


def test_short_lags_count_as_dead_time(quiet):
    models = linearised_models(Engine(quiet), quiet.loops[0])
    damping = quiet.transmitter("LT-102").damping
    assert models.output.dead_time == quiet.valve("FV-101").lag + damping
    assert models.load.dead_time == quiet.valve("FV-102").lag + damping


@pytest.mark.parametrize("path", ["output", "load"])
def test_a_small_step_of_the_rig_follows_the_model(quiet, path):
    """A step of 0.1 % of output: the transmitted level is the model's but for short lags."""
    loop = quiet.loops[0]
    models = linearised_models(Engine(quiet), loop)
    rows, change, tick = 3000, 1e-3, quiet.tick
    engine = Engine(quiet)
    start = engine.output(loop.output)
    if path == "output":
        engine.set_manual_output(loop.tag, start + change)
    else:
        engine.set_output(loop.load, engine.output(loop.load) + change)
    names = [column.name for column in engine.columns]
    span = quiet.transmitter(loop.process_variable).range.span
    level = engine.record(rows)[:, names.index("LT-102.value")] / span
    output = np.full(rows, change if path == "output" else 0.0)
    load = np.full(rows, 0.0 if path == "output" else change)
    block = ControllerSettings(gain=0.0, integral_time=None, action=Action.REVERSE)
    predicted, _ = predict_sampled(
        models,
        block,
        ScanSchedule(scan_ticks=1),
        tick,
        np.zeros(rows),
        load,
        np.zeros(rows, dtype=np.int64),
        output,
        0.0,
        0.0,
        -1.0,
        1.0,
        initial_load=0.0,
    )
    effect = getattr(models, path).gain * change
    # 1 % of the step: two lags of 1 s as a dead time of 2 s, the stroke, and what is left of
    # curvature at a tenth of a percent.
    assert np.max(np.abs(level - level[0] - predicted)) < 0.01 * effect


def test_models_are_of_the_point_asked_for(quiet):
    engine = Engine(quiet)
    here = linearised_models(engine, quiet.loops[0])
    wide = linearised_models(engine, quiet.loops[0], {"FV-101": 0.65})
    assert wide.output.total_lag > here.output.total_lag  # 2 A h / q rises with q for h ~ q^2
    saved = engine.save()
    linearised_models(engine, quiet.loops[0])
    assert np.array_equal(engine.state, saved.state)


def test_a_loop_on_a_flow_is_refused(quiet):
    loop = dataclasses.replace(quiet.loops[0], process_variable="FT-101")
    assert quiet.transmitter("FT-101").measures is Measurement.FLOW
    with pytest.raises(ModelError, match="FT-101 is not a level"):
        linearised_models(Engine(quiet), loop)
