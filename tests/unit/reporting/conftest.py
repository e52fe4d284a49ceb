"""A verdict document and its curves, from closed forms, as a trial on a water skid would give."""

from __future__ import annotations

import copy

import numpy as np
import pytest

from harness.domain.run import Column, Event, EventKind, RunHeader
from harness.domain.verdict import PhaseCurves

SPAN = 1.6  # m
BASIS_TIME = "±10 % of the nonlinear prediction"
BASIS_OVERSHOOT = "±2 % of the step around the nonlinear prediction"
BASIS_OFFSET = "±0.5 % of span around the nonlinear prediction"


def step_response(time, damping, frequency):
    """Second-order step response, 0 before time zero."""
    after = np.maximum(time, 0.0)
    root = np.sqrt(1.0 - damping**2)
    angle = frequency * root * after
    wave = np.cos(angle) + damping / root * np.sin(angle)
    return np.where(time < 0, 0.0, 1.0 - np.exp(-damping * frequency * after) * wave)


def load_response(time, damping, frequency):
    """Impulse response of the same, scaled to a peak near 1, 0 before time zero."""
    after = np.maximum(time, 0.0)
    root = np.sqrt(1.0 - damping**2)
    decay = np.exp(-damping * frequency * after)
    return np.where(time < 0, 0.0, 2.3 * decay * np.sin(frequency * root * after))


def curves(name, base, setpoint_change, load_change, sign=1.0):
    time = np.arange(-60.0, 900.0, 0.5)
    noise = np.random.default_rng(11).normal(0.0, 0.0016, time.size)
    after = (time >= 0).astype(float)

    def response(damping, frequency):
        if setpoint_change:
            return base + setpoint_change * step_response(time, damping, frequency)
        return base + sign * 0.055 * load_response(time, damping, frequency)

    measured = response(0.535, 0.0153)
    output = 0.52 + 0.18 * np.sign(setpoint_change or -sign) * (
        0.55 * step_response(time, 0.7, 0.02)
        + after * (0.9 if setpoint_change else 0.0) * np.exp(-np.maximum(time, 0.0) / 70.0)
    )
    target = None
    if setpoint_change:
        target = base + setpoint_change * step_response(time - 16.0, 0.75, 0.02)
    return PhaseCurves(
        name=name,
        time=time,
        setpoint=base + setpoint_change * after,
        measured=measured,
        transmitted=measured + noise,
        predicted_linear=response(0.58, 0.0158),
        predicted_nonlinear=response(0.55, 0.0152),
        design_target=target,
        output=output,
        output_predicted=output + 0.006 * np.sin(time / 60.0) * after,
        load=0.3 + load_change * after,
        band=0.02 * abs(setpoint_change or 0.055),
        unit="m",
    )


def metric(unit, measured, linear, nonlinear, low=None, high=None, basis="", verdict="pass"):
    limit = None if low is None and high is None else {"low": low, "high": high, "basis": basis}
    return {
        "unit": unit,
        "measured": measured,
        "predicted_linear": linear,
        "predicted_nonlinear": nonlinear,
        "limit": limit,
        "verdict": verdict if limit else "shown",
    }


def setpoint_metrics():
    return {
        "settling_time_2": metric("s", 506.2, 471.0, 492.5, 443.3, 541.8, BASIS_TIME),
        "settling_time_5": metric("s", 361.0, 338.5, 352.0, 316.8, 387.2, BASIS_TIME),
        "overshoot": metric("1", 0.1366, 0.1127, 0.1318, 0.1118, 0.1518, BASIS_OVERSHOOT),
        "rise_time": metric("s", 118.4, 112.9, 116.1, 104.5, 127.7, BASIS_TIME),
        "peak_deviation": metric("1", 0.01366, 0.01127, 0.01318),
        "peak_time": metric("s", 243.0, 233.5, 241.0),
        "iae": metric("s", 12.84, 12.02, 12.61, 11.35, 13.87, BASIS_TIME),
        "ise": metric("s", 0.9127, 0.8840, 0.9066, 0.8159, 0.9973, BASIS_TIME),
        "itae": metric("s^2", 1486.0, 1322.0, 1440.0, 1296.0, 1584.0, BASIS_TIME),
        "offset": metric("1", 0.00012, 0.0, 0.00003, -0.00497, 0.00503, BASIS_OFFSET),
        "output_travel": metric("1", 0.3817, 0.3542, 0.3764, 0.3388, 0.4140, BASIS_TIME),
        "decay_ratio": metric("1", 0.0187, 0.0127, 0.0174),
    }


def load_metrics():
    return {
        "settling_time_2": metric("s", 588.0, None, 571.5, 514.4, 628.7, BASIS_TIME),
        "settling_time_5": metric(
            "s", 455.5, 421.0, 430.0, 387.0, 473.0, BASIS_TIME, "not decidable"
        ),
        "overshoot": metric("1", None, None, None),
        "peak_deviation": metric("1", 0.0344, 0.0331, 0.0340, 0.0306, 0.0374, BASIS_TIME),
        "iae": metric("s", 4.712, 4.506, 4.655, 4.190, 5.121, BASIS_TIME),
        "offset": metric("1", -0.0000021, 0.0, 0.0, -0.005, 0.005, BASIS_OFFSET),
        "output_travel": metric("1", 0.1287, 0.1214, 0.1263, 0.1137, 0.1389, BASIS_TIME),
    }


def phase(name, kind, mode, times, metrics=None, verdict="pass", findings=()):
    start, zero, end = times
    return {
        "name": name,
        "loop": "LIC-102",
        "kind": kind,
        "mode": mode,
        "start": start,
        "zero": zero,
        "end": end,
        "scored": metrics is not None,
        "metrics": metrics or {},
        "verdict": verdict,
        "findings": list(findings),
    }


def model(gain, lags, dead, engineering, spread):
    values = {"gain": gain, "total_lag": sum(lags) + dead, "dead_time": dead}
    values |= {f"time_constant_{i + 1}": lag for i, lag in enumerate(lags)}
    limits = {
        name: {"low": value * (1 - spread), "high": value * (1 + spread), "level": 0.95}
        for name, value in values.items()
    }
    return {
        "gain": gain,
        "time_constants": list(lags),
        "dead_time": dead,
        "limits": limits,
        "gain_engineering": engineering,
    }


def verdict_document():
    down = setpoint_metrics()
    output = model(1.284, (117.6, 90.9), 6.2, 2.054, 0.031)
    output["linearised"] = {
        "gain": 1.301,
        "time_constants": [118.2, 90.1],
        "dead_time": 5.5,
        "gain_engineering": 2.082,
    }
    load = model(0.742, (118.9,), 5.7, 1.187, 0.024)
    load["linearised"] = {
        "gain": 0.749,
        "time_constants": [118.2],
        "dead_time": 5.5,
        "gain_engineering": 1.198,
    }
    tuning = {
        "law": "PI",
        "gain": 1.527,
        "gain_engineering": 0.9544,
        "integral_time": 163.0,
        "action": "reverse",
        "closed_loop_time": 60.0,
        "rule": "direct synthesis on the half-rule model"
        " (S. Skogestad, J. Process Control 13:291-309, 2003)",
        "margins": {
            "gain_margin": 4.61,
            "phase_margin_deg": 54.2,
            "delay_margin": 61.7,
            "ms": 1.52,
        },
    }
    steps = [
        phase("settle", "settle", "manual", (0.0, 0.0, 640.0), verdict="shown"),
        phase("output up", "output_step", "manual", (640.0, 640.0, 1310.0), verdict="shown"),
        phase("load down", "load_step", "manual", (1310.0, 1310.0, 1990.0), verdict="shown"),
    ]
    scored = [
        phase(
            "setpoint up",
            "setpoint_step",
            "automatic",
            (2630.0, 2690.0, 3590.0),
            setpoint_metrics(),
            findings=[
                "The two predictions differ by 1.9 % of the step in overshoot: the step is large "
                "enough for the valve's characteristic and the outlets to matter.",
            ],
        ),
        phase("setpoint down", "setpoint_step", "automatic", (3590.0, 3650.0, 4550.0), down),
        phase(
            "load up",
            "load_step",
            "automatic",
            (4550.0, 4610.0, 5510.0),
            load_metrics(),
            findings=[
                "Settling into the 5 % band is not decidable: a lobe of the prediction comes "
                "within the noise of the band's edge."
            ],
        ),
    ]
    return {
        "schema": 1,
        "run": "20260305-5f0c1d2e",
        "rig": "Process-water make-up skid",
        "trial": "Acceptance PI",
        "verdict": "pass",
        "reasons": [],
        "conditions": {
            "pace": 60.0,
            "clock": "paced",
            "controller": "external over Modbus TCP",
            "controller_period": 1.0,
            "controller_delay": 0.62,
        },
        "loops": {"LIC-102": {"models": {"output": output, "load": load}, "tuning": tuning}},
        "phases": steps + scored,
        "lateness": {"p50": 0.000071, "p99": 0.000412, "max": 0.00931, "late_fraction": 0.0},
    }


def phase_curves():
    return [
        curves("setpoint up", 0.80, 0.16, 0.0),
        curves("setpoint down", 0.96, -0.16, 0.0),
        curves("load up", 0.80, 0.0, 0.1),
    ]


def run_header():
    return RunHeader(
        run="20260305-5f0c1d2e",
        started_utc="2026-03-05T07:08:09Z",
        rig_name="Process-water make-up skid",
        trial_name="Acceptance PI",
        rig_text="format = 1\n",
        trial_text="format = 1\n",
        versions={"dryrig": "0.1.0", "python": "3.11.7", "numpy": "2.4.6", "numba": "0.68.1"},
        seed=20260305,
        tick=0.5,
        clock="paced",
        pace=60.0,
        controller="external over Modbus TCP",
        columns=(Column(name="LT-102.true", unit="m"),),
    )


def run_events():
    return [
        Event(tick=0, kind=EventKind.PHASE_STARTED, subject="settle", text="settle begins"),
        Event(
            tick=2,
            kind=EventKind.CONTROLLER_FOUND,
            subject="modbus",
            text="127.0.0.1:51882 reads and writes; period 1.00 s of plant time",
        ),
        Event(
            tick=3980,
            kind=EventKind.SETTINGS,
            subject="LIC-102",
            text="gain 1.527, integral time 163.0 s, computed by direct synthesis",
        ),
        Event(tick=5380, kind=EventKind.ORDER, subject="LIC-102.SP", text="0.80 to 0.96 m"),
        Event(
            tick=5382,
            kind=EventKind.ORDER_KNOWN,
            subject="LIC-102.SP",
            text="read by 127.0.0.1:51882 at tick 5382",
        ),
    ]


@pytest.fixture
def document():
    return verdict_document()


@pytest.fixture
def failed_document():
    document = copy.deepcopy(verdict_document())
    document["verdict"] = "fail"
    document["reasons"] = ["setpoint up: settling time and overshoot outside their limits"]
    failed = next(item for item in document["phases"] if item["name"] == "setpoint up")
    failed["verdict"] = "fail"
    failed["findings"] = [
        "Overshoot is 24.10 % of the step where 11.18 to 15.18 % is allowed.",
        "The integral of the error shows an integral time near 96 s instead of 163 s: the "
        "controller integrates too fast.",
    ]
    failed["metrics"]["overshoot"] |= {"measured": 0.241, "verdict": "fail"}
    failed["metrics"]["settling_time_2"] |= {"measured": None, "verdict": "fail"}
    return document


@pytest.fixture
def all_curves():
    return phase_curves()


@pytest.fixture
def header():
    return run_header()


@pytest.fixture
def events():
    return run_events()
