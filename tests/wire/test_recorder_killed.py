"""What a kill that cannot be caught leaves behind: all but the last second of the record."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from textwrap import dedent

import numpy as np
import pytest

from harness.domain.run import Column, RunHeader
from harness.errors import RecordError
from harness.recording.process import RecorderProcess
from harness.recording.reader import RunFolder

PARENT = dedent(
    """
    import sys, time
    from pathlib import Path
    import numpy as np
    from harness.domain.run import Column, RunHeader
    from harness.recording.process import RecorderProcess
    from harness.recording.writer import Recorder

    HEADER = RunHeader(
        run="k", started_utc="", rig_name="skid", trial_name="", rig_text="", trial_text="",
        versions={}, seed=1, tick=0.01, clock="paced", pace=1.0, controller="builtin",
        columns=(Column(name="LT-102.true", unit="m"),),
    )

    def main(kind, folder):
        recorder = (
            RecorderProcess.create(folder, HEADER)
            if kind == "process"
            else Recorder.create(folder, HEADER, time.perf_counter_ns)
        )
        tick = 0
        while True:
            recorder.rows(0, tick, np.full((1, 1), float(tick)), None)
            print(time.time_ns(), tick, getattr(recorder, "pid", 0), flush=True)
            tick += 1
            time.sleep(0.01)

    if __name__ == "__main__":
        main(sys.argv[1], Path(sys.argv[2]))
    """
)
SECOND = 1_000_000_000  # ns


def start(tmp_path, kind):
    script = tmp_path / "parent.py"
    script.write_text(PARENT, encoding="utf-8")
    folder = tmp_path / "run"
    folder.mkdir()
    command = [sys.executable, str(script), kind, str(folder)]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, text=True)
    return process, folder


def read_handed_over(process, seconds):
    """Return (wall time, tick, child) of what the parent handed over in that time."""
    said = [tuple(map(int, process.stdout.readline().split()))]
    while said[-1][0] - said[0][0] < seconds * SECOND:
        said.append(tuple(map(int, process.stdout.readline().split())))
    return said


def assert_only_the_last_second_is_missing(folder, said, killed_at):
    run = RunFolder.open(folder)
    run.verify()
    assert run.closing is None
    trace = run.trace()
    np.testing.assert_array_equal(trace["tick"], np.arange(trace["tick"].size))
    np.testing.assert_array_equal(trace["LT-102.true"], trace["tick"])
    older = [tick for at, tick, _ in said if at < killed_at - SECOND]
    assert len(older) > 20
    assert trace["tick"].size > older[-1]


@pytest.mark.wire
@pytest.mark.slow
@pytest.mark.skipif(os.name == "nt", reason="needs SIGKILL")
@pytest.mark.parametrize("kind", ["process", "at home"])
def test_killing_the_run_costs_at_most_the_last_second(tmp_path, kind):
    process, folder = start(tmp_path, kind)
    try:
        said = read_handed_over(process, 1.8)
    finally:
        killed_at = time.time_ns()
        process.kill()
        process.stdout.close()
        process.wait()
    wait_until_gone(said[-1][2])
    assert_only_the_last_second_is_missing(folder, said, killed_at)


@pytest.mark.wire
@pytest.mark.slow
@pytest.mark.skipif(os.name == "nt", reason="needs SIGKILL")
def test_killing_the_recorder_costs_at_most_the_last_second_and_is_told(tmp_path):
    process, folder = start(tmp_path, "process")
    try:
        said = read_handed_over(process, 1.8)
        killed_at = time.time_ns()
        os.kill(said[-1][2], signal.SIGKILL)
        rest = process.stdout.read()  # ends when the parent falls over its RecordError
        assert process.wait(20) == 1
    finally:
        process.kill()
        process.stdout.close()
        process.wait()
    assert len(rest.splitlines()) < 500
    assert_only_the_last_second_is_missing(folder, said, killed_at)


@pytest.mark.wire
@pytest.mark.slow
@pytest.mark.skipif(os.name == "nt", reason="needs SIGKILL")
def test_a_killed_child_is_a_record_error(tmp_path):
    with RecorderProcess.create(tmp_path, header()) as recorder:
        os.kill(recorder.pid, signal.SIGKILL)
        assert recorder._closed.wait(20)
        with pytest.raises(RecordError, match="ended without a word"):
            recorder.flush()


def header():
    return RunHeader(
        run="k",
        started_utc="",
        rig_name="skid",
        trial_name="",
        rig_text="",
        trial_text="",
        versions={},
        seed=1,
        tick=0.01,
        clock="paced",
        pace=1.0,
        controller="builtin",
        columns=(Column(name="LT-102.true", unit="m"),),
    )


def wait_until_gone(pid):
    """Wait for the orphan to finish writing; it is not our child."""
    while pid:
        try:
            os.kill(pid, 0)
        except ProcessLookupError:
            return
        time.sleep(0.02)  # noqa: TID251  no event tells the end of another's child
