"""The recorder in a process of its own behaves as the one at home, and tells its troubles."""

from __future__ import annotations

import os
import signal
import threading
from dataclasses import replace

import numpy as np
import pytest

from harness.domain.run import Closing, Column, Event, EventKind, RunEnd, RunHeader
from harness.domain.signals import Exchange
from harness.errors import RecordError
from harness.recording import process as module
from harness.recording.process import RecorderProcess
from harness.recording.reader import RunFolder

HEADER = RunHeader(
    run="a1b2",
    started_utc="2026-03-05T07:08:09Z",
    rig_name="skid",
    trial_name="short",
    rig_text="format = 1\n",
    trial_text="format = 1\n",
    versions={},
    seed=7,
    tick=0.1,
    clock="virtual",
    pace=0.0,
    controller="builtin",
    columns=(Column(name="LT-102.true", unit="m"), Column(name="FV-101.position", unit="")),
)
CLOSING = Closing(end=RunEnd.COMPLETE, reason="", last_tick=4999, rows=5000)
EXCHANGE = Exchange(
    link="modbus",
    arrival_ns=1,
    peer="127.0.0.1:51000",
    connection=1,
    function="FC06",
    address="1",
    point="FV-101",
    value=0.5,
    raw="8000",
    image_tick=3,
)


@pytest.mark.slow
def test_the_same_record_as_at_home(tmp_path):
    block = np.random.default_rng(3).random((5000, 2))
    lateness = np.linspace(0, 1e-3, 5000)
    event = Event(tick=1, kind=EventKind.NOTE, subject="x", text="y", data={"z": 1})
    with RecorderProcess.create(tmp_path, HEADER) as recorder:
        recorder.rows(0, 0, block, lateness)
        recorder.event(event)
        recorder.exchanges([(2, EXCHANGE)])
        recorder.flush()
        with pytest.raises(RecordError, match="no JSON form"):
            recorder.event(replace(event, data={"z": object()}))
        recorder.close(CLOSING)
        with pytest.raises(RecordError, match="closed"):
            recorder.flush()
    run = RunFolder.open(tmp_path)
    run.verify()
    assert run.closing == CLOSING
    assert run.header == HEADER
    trace = run.trace()
    np.testing.assert_array_equal(trace["LT-102.true"], block[:, 0])
    np.testing.assert_array_equal(trace["FV-101.position"], block[:, 1])
    np.testing.assert_array_equal(trace["lateness"], lateness)
    assert run.events() == (event,)
    assert run.exchanges() == ((2, EXCHANGE),)


@pytest.mark.slow
def test_an_error_of_the_child_is_raised_here_and_nothing_hangs(tmp_path):
    with RecorderProcess.create(tmp_path, HEADER) as recorder:
        recorder.rows(0, 0, np.zeros((10, 2)), None)
        recorder.rows(0, 5, np.zeros((10, 2)), None)
        assert recorder._closed.wait(20)
        with pytest.raises(RecordError, match="recorded twice"):
            recorder.rows(0, 15, np.zeros((10, 2)), None)
        with pytest.raises(RecordError, match="recorded twice"):
            recorder.close(CLOSING)
    assert not recorder._process.is_alive()
    assert RunFolder.open(tmp_path).closing is None


@pytest.mark.slow
def test_a_record_that_cannot_begin_is_told_with_the_childs_reason(tmp_path):
    with pytest.raises(RecordError, match=r"could not be written.*--out"):
        RecorderProcess.create(tmp_path / "none", HEADER)


@pytest.mark.slow
@pytest.mark.skipif(not hasattr(os, "kill") or os.name == "nt", reason="signals of POSIX")
def test_the_child_ignores_ctrl_c_and_ends_in_order_when_terminated(tmp_path):
    with RecorderProcess.create(tmp_path, HEADER) as recorder:
        os.kill(recorder.pid, signal.SIGINT)
        recorder.rows(0, 0, np.zeros((10, 2)), None)
        recorder.flush()
        os.kill(recorder.pid, signal.SIGINT)
        recorder.rows(0, 10, np.zeros((10, 2)), None)
        recorder.close(replace(CLOSING, last_tick=19, rows=20))
    RunFolder.open(tmp_path).verify()
    assert RunFolder.open(tmp_path).closing is not None


def test_a_full_backlog_waits_and_then_gives_up():
    backlog = module._Backlog()
    assert backlog.put(("rows",), module.BACKLOG, 0.0)
    assert not backlog.put(("rows",), 1, 0.0)
    taken = []
    getter = threading.Thread(target=lambda: taken.append(backlog.get()))
    getter.start()
    assert backlog.put(("event",), 1, 10.0)
    getter.join(10)
    assert taken == [("rows",)]
    backlog.finish()
    assert backlog.get() == ("event",)
    assert backlog.get() is None
