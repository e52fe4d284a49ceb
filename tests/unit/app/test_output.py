"""Documents on standard output, and what happens when it takes them no more."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from harness.app.output import write_output
from harness.errors import RecordError

RIG = Path(__file__).parents[3] / "configs" / "rigs" / "bench_skid.toml"


def test_it_is_utf_8_with_bare_line_feeds(capfdbinary):
    write_output('{"unit": "m³/h"}\n')
    assert capfdbinary.readouterr().out == '{"unit": "m³/h"}\n'.encode()


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs a device that is always full")
def test_a_full_disk_is_told(monkeypatch):
    with Path("/dev/full").open("w", encoding="utf-8") as full:
        monkeypatch.setattr(sys, "stdout", full)
        with pytest.raises(RecordError, match="is the disk full"):
            write_output("{}\n")
        monkeypatch.undo()
        os.dup2(os.open(os.devnull, os.O_WRONLY), full.fileno())  # what is left has to go


@pytest.mark.slow
@pytest.mark.parametrize("form", [[], ["--json"]])
def test_a_reader_that_goes_changes_no_exit_code(form):
    program = subprocess.Popen(
        [sys.executable, "-m", "harness.cli", "check", str(RIG), *form],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )
    program.stdout.close()
    _, complained = program.communicate(timeout=60)
    assert (program.returncode, complained) == (0, b"")
