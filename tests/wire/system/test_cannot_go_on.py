"""What stands in the way of a run: a taken port, a full disk, a process that is gone."""

from __future__ import annotations

import math
import socket
import sys

import pytest

from harness.app.compute import ProcessComputer
from harness.cli import main
from harness.errors import InvalidRunError
from harness.recording.reader import RunFolder
from harness.runtime.requests import Compute

pytestmark = [pytest.mark.wire, pytest.mark.slow, pytest.mark.timeout(200)]


def test_a_taken_port_is_told_and_leaves_no_run_folder(bench, capsys):
    out = bench.folder / "runs"
    with socket.create_server(("127.0.0.1", 0)) as taken:
        port = str(taken.getsockname()[1])
        link = ["--link", "modbus", "--modbus-port", port]
        external = ["--controller", "external", "--out", str(out)]
        assert main(["trial", str(bench.rig), str(bench.trial), *external, *link]) == 2
        said = capsys.readouterr()
        assert main(["serve", str(bench.rig), *link]) == 2
        served = capsys.readouterr()
    expected = f'link "modbus": cannot listen on 127.0.0.1:{port}: another program has the port'
    assert expected in said.err
    assert expected in served.err
    assert said.out == ""
    assert not out.exists()


LITTLE_DISK = """
import resource
resource.setrlimit(resource.RLIMIT_FSIZE, (200_000, 200_000))
"""


@pytest.mark.skipif(sys.platform == "win32", reason="has no limit on the size of a file")
def test_a_full_disk_ends_the_run_and_keeps_what_was_committed(bench, capsys):
    trial = bench.start_paced("full", before=LITTLE_DISK)
    assert trial.ended() == 3
    assert "could not be written: the disk reported an error" in trial.complained
    assert "What was committed before is kept and readable." in trial.complained
    assert "Traceback" not in trial.said + trial.complained
    assert trial.left_nobody()
    folder = bench.run_folder("full")
    run = RunFolder.open(folder)
    run.verify()
    assert run.closing is None
    assert len(run.trace()["tick"]) > 20
    assert main(["score", str(folder)]) == 3
    assert "the run was cut off" in " ".join(capsys.readouterr().out.split())


def until_done(computer, pause):
    while True:
        done, result = computer.result()
        if done:
            return result
        pause()


def test_fits_are_made_elsewhere_and_their_errors_come_here(bench):
    with ProcessComputer() as computer:
        computer.wait_until_warm()
        assert computer.result() == (False, None)
        computer.begin(Compute(function=math.hypot, arguments=(3.0, 4.0)))
        assert until_done(computer, bench.pause) == 5.0
        computer.begin(Compute(function=math.sqrt, arguments=(-1.0,)))
        with pytest.raises(ValueError, match="math domain error"):
            until_done(computer, bench.pause)
        computer.begin(Compute(function=math.factorial, arguments=(4,)))
        assert until_done(computer, bench.pause) == 24


def test_fits_whose_process_is_gone_make_the_run_invalid(bench):
    with ProcessComputer() as computer:
        computer.wait_until_warm()
        computer.begin(Compute(function=sys.exit, arguments=(7,)))
        with pytest.raises(InvalidRunError, match="ended by itself with code 7"):
            until_done(computer, bench.pause)
        with pytest.raises(InvalidRunError, match="run again"):
            computer.begin(Compute(function=math.hypot, arguments=(3.0, 4.0)))


def test_nobody_waits_for_a_fit_that_is_not_wanted_any_more():
    with ProcessComputer() as computer:
        computer.wait_until_warm()
        computer.begin(Compute(function=math.factorial, arguments=(3_000_000,)))  # for minutes
        process = computer._process
    assert process.exitcode is not None
