"""The command as a program of its own, with what a shell would see of it."""

from __future__ import annotations

import os
import re
import socket
import subprocess
import sys
from pathlib import Path

import pytest

from harness.domain.run import EventKind
from harness.errors import RecordError
from harness.recording.reader import RunFolder
from harness.runtime.clock import PacedClock

ROOT = Path(__file__).resolve().parents[3]
PACE = "20"
PATIENCE = 80.0  # for anything to happen, on a machine that does much else [s]

TRIAL = """
format = 1
[trial]
name = "one step"
law = "PI"
closed_loop_time = "6 s"
models = "linearised"
settings = "computed"
[[phase]]
name = "setpoint up"
loop = "LIC-102"
kind = "setpoint_step"
mode = "automatic"
change = "5 %"
time_limit = "120 s"
"""


def pause(seconds=0.02):
    clock = PacedClock()
    clock.wait_until(clock.now_ns() + int(seconds * 1e9))


def slow_bench_rig():
    """The bench rig with ticks and scans so long that no busy machine is late for them."""
    text = (ROOT / "configs" / "rigs" / "bench_skid.toml").read_text(encoding="utf-8")
    for key, value in (("tick", "0.25 s"), ("scan", "1 s"), ("watchdog", "20 s")):
        text, found = re.subn(rf'(?m)^{key} = "[^"]*"', f'{key} = "{value}"', text)
        assert found == 1
    return text


class Program:
    """A run of the command, its output in files; its group is its own, as from a shell."""

    def __init__(self, folder, name, *arguments, before="", stdout=None, stdin=None):
        self.out, self.err = folder / f"{name}.out", folder / f"{name}.err"
        code = f"import sys\n{before}\nfrom harness.cli import main\nsys.exit(main())"
        with self.out.open("wb") as out, self.err.open("wb") as err:
            self.process = subprocess.Popen(
                [sys.executable, "-c", code, *map(str, arguments)],
                cwd=folder,
                stdin=subprocess.DEVNULL if stdin is None else stdin,
                stdout=stdout or out,
                stderr=err,
                start_new_session=True,
            )

    @property
    def said(self):
        return self.out.read_text(encoding="utf-8")

    @property
    def complained(self):
        return self.err.read_text(encoding="utf-8")

    def wait_for(self, text):
        """Wait until it has said this, on either stream."""
        clock = PacedClock()
        end = clock.now_ns() + int(PATIENCE * 1e9)
        while text not in self.said + self.complained:
            assert self.process.poll() is None, self.said + self.complained
            assert clock.now_ns() < end, self.said + self.complained
            pause()

    def ended(self):
        """Wait for its end and return the exit code."""
        return self.process.wait(PATIENCE)

    def stop(self):
        self.process.terminate()
        return self.ended()

    def left_nobody(self):
        """Wait until no process of its group is left; they may end a moment after it."""
        if not hasattr(os, "killpg"):
            return True  # Windows has no such groups
        for _ in range(150):
            try:
                os.killpg(self.process.pid, 0)
            except ProcessLookupError:
                return True
            pause()
        return False

    def kill(self):
        if self.process.poll() is None:
            self.process.kill()
        self.process.wait()


class Bench:
    """A folder with a rig and a trial, and the programs that were started in it."""

    def __init__(self, folder):
        self.folder = folder
        self.rig, self.trial = folder / "rig.toml", folder / "trial.toml"
        self.rig.write_text(slow_bench_rig(), encoding="utf-8")
        self.trial.write_text(TRIAL, encoding="utf-8")
        self.programs = []

    def start(self, name, *arguments, **how):
        program = Program(self.folder, name, *arguments, **how)
        self.programs.append(program)
        return program

    def start_trial(self, name, *arguments, **how):
        out = ("--out", self.folder / name)
        return self.start(name, "trial", self.rig, self.trial, *out, *arguments, **how)

    def start_paced(self, name, *arguments, **how):
        """Start a trial that needs no controller but takes its time."""
        return self.start_trial(name, "--clock", "paced", "--pace", PACE, *arguments, **how)

    def start_external(self, name, port, *arguments, link="modbus"):
        paces = ("--pace", PACE, "--controller-pace", PACE)
        where = ("--controller", "external", "--link", link, f"--{link}-port", port)
        return self.start_trial(name, *paces, *where, *arguments)

    def start_soft_plc(self, name, port, *arguments, link="modbus"):
        where = ("--link", link, "--port", port, "--pace", PACE)
        return self.start(name, "control", self.rig, *where, *arguments)

    def wait_for_phase(self, name):
        """Wait until the record of a run says that its phase has begun; return the folder."""
        clock = PacedClock()
        end = clock.now_ns() + int(PATIENCE * 1e9)
        while clock.now_ns() < end:
            pause()
            for record in (self.folder / name).glob("*/trace.sqlite"):
                if self._has_begun(record.parent):
                    return record.parent
        raise AssertionError("\n".join(program.complained for program in self.programs))

    @staticmethod
    def _has_begun(folder):
        try:
            events = RunFolder.open(folder).events()
        except RecordError:  # it is only being made
            return False
        return any(event.kind is EventKind.PHASE_STARTED for event in events)

    @staticmethod
    def pause(seconds=0.02):
        pause(seconds)

    @staticmethod
    def free_port():
        with socket.create_server(("127.0.0.1", 0)) as server:
            return server.getsockname()[1]

    def run_folder(self, name):
        (folder,) = (self.folder / name).iterdir()
        return folder


@pytest.fixture
def bench(tmp_path):
    bench = Bench(tmp_path)
    yield bench
    for program in bench.programs:
        program.kill()
