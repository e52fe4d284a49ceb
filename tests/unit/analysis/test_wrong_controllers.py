# ruff: noqa: ARG001, ARG005  the overrides take what a controller is given, needed or not
"""Controllers with one deliberate mistake each: none may pass, and each is called by its name.

They close the loop of the demo rig in virtual time, tick by tick, through the same exchange log
as a controller outside.
"""

from __future__ import annotations

import math
import re
from collections import deque

import numpy as np
import pytest

from harness.analysis.score import score_run

NOT_DECIDABLE = "cannot be decided"


@pytest.fixture(scope="module")
def verdict_of(runs):
    """Return the verdict of a trial under a changed right controller, by its overrides."""

    def make(*first, **overrides):
        kind = type("Controller", (runs.Right,), overrides)
        trial = runs.only(runs.trial("short"), *first, "setpoint up", "load up")
        return score_run(runs.run(runs.rig(), trial, kind)).document

    return make


def findings_of(document, *kinds):
    return [
        finding
        for phase in document["phases"]
        if not kinds or phase["kind"] in kinds
        for finding in phase["findings"]
        if NOT_DECIDABLE not in finding
    ]


def test_nothing_is_found_on_a_right_controller(verdict_of):
    document = verdict_of()
    assert document["verdict"] == "pass"
    assert document["reasons"] == []
    assert findings_of(document) == []


@pytest.mark.parametrize(("period", "delay"), [(1, 1), (2, 0), (3, 2), (10, 4)], ids=str)
def test_a_right_controller_may_scan_as_it_likes(verdict_of, period, delay):
    """The prediction takes period and delay as measured, whatever the rig file says."""
    document = verdict_of(period=period, delay=delay)
    assert document["verdict"] == "pass"
    assert findings_of(document) == []
    told = document["loops"]["LIC-102"]["controller"]
    assert told["period"] == pytest.approx(period * 0.5, rel=1e-3)
    assert told["delay"] == pytest.approx(delay * 0.5)


def _hold_old(self, value):
    """Return the value of ``age`` scans ago."""
    line = self.__dict__.setdefault("line", deque(maxlen=self.age + 1))
    line.append(value)
    return line[0]


def _filter(self, seen):
    kept = self.__dict__.setdefault("filtered", seen.process_variable)
    share = self.seconds / (self.tau + self.seconds)
    self.filtered = kept + share * (seen.process_variable - kept)
    return self.filtered


def _noisy(self, output, seen):
    draws = self.__dict__.setdefault("draws", np.random.default_rng(11))
    return min(1.0, max(0.0, output + 0.01 * draws.standard_normal()))


def _dead_band(self, output, seen):
    last = self.__dict__.setdefault("last", output)
    if abs(output - last) > 0.02:
        self.last = output
    return self.last


def _rate_limited(self, output, seen):
    last = self.__dict__.setdefault("last", output)
    self.last = last + min(3e-4, max(-3e-4, output - last))
    return self.last


def _frozen(self, seen):
    if seen.tick < 200:  # the setpoint is stepped before
        self.__dict__["kept"] = seen.process_variable
    return self.kept


def _reversed(self, rig):
    super(type(self), self).__init__(rig)
    self.sign = -self.sign


def _derivative(self, output, seen):
    error = seen.setpoint - seen.process_variable
    last = self.__dict__.setdefault("last", error)
    self.last = error
    return min(1.0, max(0.0, output + seen.gain * 30.0 * (error - last) / self.seconds))


def _counts_a_second(self, rig):
    super(type(self), self).__init__(rig)
    self.seconds = 1.0


def _on_process_variable_alone(self, seen):
    """A PI block whose proportional part does not see the setpoint."""
    if seen.mode == 0:
        self.integral, self.output = None, seen.manual_output
        return self.output
    proportional = -seen.gain * seen.process_variable
    if self.integral is None:
        self.integral = self.output - proportional
    error = seen.setpoint - seen.process_variable
    self.integral += seen.gain * self.seconds / seen.integral_time * error
    self.output = min(1.0, max(0.0, self.integral + proportional))
    return self.output


MISTAKES = {
    "gain x 1.5": ({"gain": lambda self, seen: 1.5 * seen.gain}, r"gain of .* 1\.50 times"),
    "gain x 0.7": ({"gain": lambda self, seen: 0.7 * seen.gain}, r"gain of .* 0\.70 times"),
    "gain x 1.2": ({"gain": lambda self, seen: 1.2 * seen.gain}, r"gain of .* 1\.20 times"),
    "Ti x 3": (
        {"integral_time": lambda self, seen: 3.0 * seen.integral_time},
        r"Ti of .* 3\.00 times",
    ),
    "Ti x 0.5": (
        {"integral_time": lambda self, seen: 0.5 * seen.integral_time},
        r"Ti of .* 0\.50 times",
    ),
    "Ti in minutes": (
        {"integral_time": lambda self, seen: 60.0 * seen.integral_time},
        r"Ti of .* 60\.0\d? times .*minutes",
    ),
    "no integral": ({"integral_time": lambda self, seen: math.inf}, "No integral action"),
    "scans twice as fast as it thinks": (
        {"period": 1, "__init__": _counts_a_second},
        r"Ti of .* 0\.50 times .*scan period",
    ),
    "reversed": ({"__init__": _reversed}, "acts the wrong way"),
    "input 2 % high": (
        {"process_variable": lambda self, seen: seen.process_variable + 0.02},
        r"2 % of span higher than transmitted",
    ),
    "input of another range": (
        {"process_variable": lambda self, seen: 0.75 * seen.process_variable},
        r"gain of .* 0\.75 times .*ranges",
    ),
    "input 15 s old": (
        {
            "age": 15,
            "process_variable": lambda self, seen: _hold_old(self, seen.process_variable),
        },
        r"a process variable 15 s old",
    ),
    "output 15 s late": (
        {"age": 15, "answer": lambda self, output, seen: _hold_old(self, output)},
        r"a process variable 15 s old",
    ),
    "filter of 30 s": ({"tau": 30.0, "process_variable": _filter}, r"lag of about 30 s"),
    "derivative of 30 s": ({"answer": _derivative}, r"derivative part of about 30 s"),
    "noise of 1 %": ({"answer": _noisy}, r"moves of 1\.\d % rms.*noise"),
    "steps of 1 %": (
        {"answer": lambda self, output, seen: round(100.0 * output) / 100.0},
        r"moved by about 1 %.*coarse resolution",
    ),
    "dead band of 2 %": ({"answer": _dead_band}, r"moved by about 2\S* %.*dead band"),
    "rate of 0.03 %/s": ({"answer": _rate_limited}, r"same 0\.03 %/s"),
    "limit of 60 %": (
        {"answer": lambda self, output, seen: min(0.6, output)},
        r"stood (still )?at 60 %.*limit",
    ),
    "frozen input": ({"process_variable": _frozen}, r"frozen"),
    "no weight on the setpoint": (
        {"scan": _on_process_variable_alone},
        r"acts on 0\.00 of a change of setpoint",
    ),
    "stays in manual": (
        {
            "scan": lambda self, seen: min(
                1.0, max(0.0, self.__dict__.setdefault("kept", seen.manual_output))
            )
        },
        r"stood still at 58 %.*in automatic",
    ),
}


@pytest.mark.parametrize("mistake", MISTAKES)
def test_a_mistake_fails_and_is_named(verdict_of, mistake):
    overrides, words = MISTAKES[mistake]
    document = verdict_of(**overrides)
    assert document["verdict"] == "fail"
    assert document["reasons"] == []
    failed = [phase for phase in document["phases"] if phase["verdict"] == "fail"]
    assert failed
    for phase in failed:
        named = [finding for finding in phase["findings"] if re.search(words, finding)]
        assert named, phase["findings"]


INVALID = {
    "answers 20 s after reading": ({"delay": 40}, r"answered what the controller read 20 s"),
    "scans every 20 s": ({"period": 40}, r"held for 20 s"),
    "stops writing": (
        {"answer": lambda self, output, seen: None if seen.tick > 250 else output},
        r"held for [67]\d\d s",
    ),
    "writes no more near the end": (
        {"answer": lambda self, output, seen: None if seen.tick > 2600 else output},
        r"phase 'load up': an output of FV-101 was held for",
    ),
    "Ti in seconds where minutes are meant": (
        {"integral_time": lambda self, seen: seen.integral_time / 60.0},
        r"not steady within its time limit",
    ),
}


@pytest.mark.parametrize("case", INVALID)
def test_what_cannot_be_judged_is_invalid_and_says_why(verdict_of, case):
    overrides, words = INVALID[case]
    document = verdict_of(**overrides)
    assert document["verdict"] == "invalid"
    assert re.search(words, " ".join(document["reasons"]))
    touched = [phase for phase in document["phases"] if phase["verdict"] == "invalid"]
    assert touched
    assert all(phase["findings"] for phase in touched)


def test_an_unsteady_settling_names_the_cause(verdict_of):
    document = verdict_of("settle", integral_time=lambda self, seen: seen.integral_time / 60.0)
    assert document["phases"][0]["kind"] == "settle"
    assert len(document["phases"]) == 1
    assert re.search(r"Ti of about .* 0\.02 times", " ".join(findings_of(document)))


P_MISTAKES = {
    "gain x 1.3": ({"gain": lambda self, seen: 1.3 * seen.gain}, r"gain of .* 1\.30 times"),
    "integrates": (
        {"integral_time": lambda self, seen: 300.0},
        r"integrates \(Ti of about 300 s\)",
    ),
    "output 2 % high": (
        {"answer": lambda self, output, seen: min(1.0, output + 0.02 * (seen.mode == 1))},
        "elsewhere",
    ),
}


@pytest.mark.parametrize("mistake", P_MISTAKES)
def test_a_mistake_of_a_p_block_fails_and_is_named(runs, mistake):
    overrides, words = P_MISTAKES[mistake]
    kind = type("Controller", (runs.Right,), overrides)
    trial = runs.only(runs.trial("acceptance_p"), "setpoint up", "load up")
    document = score_run(runs.run(runs.rig(), trial, kind)).document
    assert document["verdict"] == "fail"
    assert re.search(words, " ".join(findings_of(document)))


def test_a_right_p_block_passes(runs):
    trial = runs.only(runs.trial("acceptance_p"), "setpoint up", "load up")
    document = score_run(runs.run(runs.rig(), trial, runs.Right)).document
    assert document["verdict"] == "pass"
    offset = document["phases"][0]["metrics"]["offset"]
    assert offset["measured"] < -0.005  # a P block leaves one, and it is more than is allowed
    # The phase ends with at most 1 % of its step still to come.
    assert offset["measured"] == pytest.approx(offset["predicted_nonlinear"], abs=5e-4)
