"""The kernels as plain Python, without compilation, give the rows of the compiled ones."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

ROOT = Path(__file__).resolve().parents[3]
PROGRAM = """
import runpy, sys
import numpy as np
make_two_tanks = runpy.run_path(sys.argv[1])["make_two_tanks"]
from harness.controllers.block import AUTOMATIC
from harness.domain.models import ControllerSettings
from harness.domain.rig import Action
from harness.engine.engine import Engine

engine = Engine(make_two_tanks())
engine.set_settings(
    "LIC-2", ControllerSettings(gain=3.0, integral_time=120.0, action=Action.REVERSE)
)
engine.advance(1)
engine.set_mode("LIC-2", AUTOMATIC)
engine.set_setpoint("LIC-2", engine.measured("LT-2") + 0.1)
rows = [engine.record(60)]
engine.state[:2] = 1e-9, 0.5  # nearly empty above, and over its crest below
rows.append(engine.record(20))
np.save(sys.argv[2], np.concatenate(rows))
"""


def _rows(path, **environment):
    subprocess.run(
        [sys.executable, "-c", PROGRAM, str(ROOT / "tests" / "conftest.py"), str(path)],
        check=True,
        cwd=ROOT,
        env=os.environ | environment,
        timeout=120,
    )
    return np.load(path)


@pytest.mark.slow
@pytest.mark.timeout(150)
def test_interpreted_rows_are_those_of_the_compiled_kernels(tmp_path):
    compiled = _rows(tmp_path / "compiled.npy")
    interpreted = _rows(tmp_path / "interpreted.npy", NUMBA_DISABLE_JIT="1")
    assert np.array_equal(compiled, interpreted)
