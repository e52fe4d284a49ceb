"""The whole job in one go: rig, soft PLC in its own process, trial, score, report.

Run it with any Python 3.11 or newer: ``python3 scripts/demo.py``. It makes the virtual
environment first if there is none.
"""

from __future__ import annotations

import argparse
import subprocess
import sys
from pathlib import Path

import _environment

ROOT = Path(__file__).resolve().parent.parent
PACE = "60"
SOFT_PLC_GRACE = 5.0  # for the soft PLC to end by itself [s]


def main() -> int:
    """Run the demo; returns the exit code of the trial."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--link", choices=("modbus", "opcua"), default="modbus")
    parser.add_argument("--out", type=Path, default=ROOT / "runs", metavar="FOLDER")
    options = parser.parse_args()
    _environment.enter()

    rig = str(ROOT / "configs" / "rigs" / "make_up_skid.toml")
    trial = str(ROOT / "configs" / "trials" / "acceptance_pi.toml")
    dryrig = [sys.executable, "-m", "harness.cli"]
    options.out.mkdir(parents=True, exist_ok=True)
    log_path = options.out / "demo-soft-plc.log"
    print(f"soft PLC: its own process, over {options.link}; what it says goes to {log_path}")
    with log_path.open("w", encoding="utf-8") as log:
        soft_plc = subprocess.Popen(
            [*dryrig, "control", rig, "--link", options.link, "--pace", PACE],
            cwd=ROOT,
            stdin=subprocess.DEVNULL,
            stdout=log,
            stderr=subprocess.STDOUT,
        )
        try:
            return subprocess.call(
                [
                    *dryrig,
                    *("trial", rig, trial, "--controller", "external", "--link", options.link),
                    *("--pace", PACE, "--controller-pace", PACE, "--out", str(options.out)),
                ],
                cwd=ROOT,
            )
        except KeyboardInterrupt:
            return 130
        finally:
            soft_plc.terminate()
            try:
                soft_plc.wait(SOFT_PLC_GRACE)
            except subprocess.TimeoutExpired:
                soft_plc.kill()
                soft_plc.wait()


if __name__ == "__main__":
    sys.exit(main())
