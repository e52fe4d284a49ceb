"""Rigs that many tests use; their numbers are chosen for the tests alone."""

from __future__ import annotations

import pytest

from harness.app.trial import warm_up
from harness.domain.orders import LoopOrders
from harness.domain.rig import (
    DRAIN,
    Action,
    Characteristic,
    ControlValve,
    Loop,
    Measurement,
    Orifice,
    Overflow,
    Rig,
    Source,
    Transmitter,
    VerticalCylinder,
    Vessel,
)
from harness.domain.signals import Range
from harness.engine.engine import Engine


def _valve(tag, destination, characteristic, **changes):
    values = {
        "tag": tag,
        "origin": "HEADER",
        "destination": destination,
        "kv": 9.0,
        "characteristic": characteristic,
        "rangeability": 50.0,
        "line_kv": 12.0,
        "stroke_time": 8.0,
        "lag": 0.7,
        "fail_position": 0.0,
        "initial_output": 0.55,
    }
    return ControlValve(**(values | changes))


def _transmitter(tag, measures, subject, upper, **changes):
    values = {
        "tag": tag,
        "measures": measures,
        "subject": subject,
        "range": Range(lower=0.0, upper=upper, unit="m" if upper > 0.1 else "m3/s"),
        "damping": 1.5,
        "noise": 0.0005,
        "resolution": 0.0001,
        "failure_current_ma": 3.5,
    }
    return Transmitter(**(values | changes))


def make_two_tanks(**changes):
    """Two tanks in series, two valves, four transmitters, one loop; any field can be changed."""
    values = {
        "name": "test two tanks",
        "description": "two tanks in series",
        "tick": 0.5,
        "seed": 7,
        "gravity": 9.80665,
        "sources": (Source(tag="HEADER", pressure=2.5e5, density=998.2),),
        "vessels": (
            Vessel(
                tag="TK-1", shape=VerticalCylinder(diameter=0.4, height=1.5), initial_level=None
            ),
            Vessel(
                tag="TK-2", shape=VerticalCylinder(diameter=0.5, height=1.5), initial_level=None
            ),
        ),
        "orifices": (
            Orifice(
                tag="RO-1",
                origin="TK-1",
                destination="TK-2",
                discharge_coefficient=0.62,
                diameter=0.019,
            ),
            Orifice(
                tag="RO-2",
                origin="TK-2",
                destination=DRAIN,
                discharge_coefficient=0.62,
                diameter=0.022,
            ),
        ),
        "overflows": (
            Overflow(
                tag="OF-1",
                origin="TK-1",
                destination="TK-2",
                crest=1.4,
                width=0.2,
                discharge_coefficient=0.6,
                fraction=0.5,
            ),
            Overflow(
                tag="OF-2",
                origin="TK-2",
                destination=DRAIN,
                crest=1.4,
                width=0.2,
                discharge_coefficient=0.6,
                fraction=0.0,
            ),
        ),
        "valves": (
            _valve("FV-1", "TK-1", Characteristic.EQUAL_PERCENTAGE),
            _valve("FV-2", "TK-2", Characteristic.LINEAR, kv=1.2, initial_output=0.4),
        ),
        "transmitters": (
            _transmitter("LT-1", Measurement.LEVEL, "TK-1", 1.5),
            _transmitter("LT-2", Measurement.LEVEL, "TK-2", 1.5),
            _transmitter("FT-1", Measurement.FLOW, "FV-1", 2e-3),
            _transmitter("FT-2", Measurement.FLOW, "FV-2", 5e-4),
        ),
        "loops": (
            Loop(
                tag="LIC-2",
                process_variable="LT-2",
                output="FV-1",
                load="FV-2",
                action=Action.REVERSE,
                initial_setpoint=None,
                output_low=0.0,
                output_high=1.0,
                scan=1.0,
                scan_phase=0,
                output_delay=0,
                watchdog=10.0,
                heartbeat_timeout=None,
                orders=LoopOrders(),
            ),
        ),
        "links": (),
    }
    return Rig(**(values | changes))


def pytest_sessionstart():
    """Compile the kernels before any test's time limit runs: half a minute on a new machine."""
    engine = Engine(make_two_tanks())
    warm_up(engine)


@pytest.fixture
def two_tanks():
    """Return the factory of two-tank rigs."""
    return make_two_tanks
