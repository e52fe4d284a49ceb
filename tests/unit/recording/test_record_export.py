"""Run folders and what is exported from them."""

from __future__ import annotations

import csv
from dataclasses import replace

import numpy as np
import pytest

from harness.domain.run import Closing, Column, RunEnd, RunHeader
from harness.errors import RecordError
from harness.recording.export import export_csv, write_file
from harness.recording.folder import create_run_folder, name_part
from harness.recording.reader import RunFolder
from harness.recording.writer import Recorder

HEADER = RunHeader(
    run="5f0c1d2e3a",
    started_utc="2026-03-05T07:08:09.123456+00:00",
    rig_name="skid",
    trial_name="Acceptance: PI/up",
    rig_text='name = "skid"\r\nflow = "4 m³/h"\n',
    trial_text="format = 1\n",
    versions={},
    seed=7,
    tick=0.1,
    clock="virtual",
    pace=0.0,
    controller="builtin",
    columns=(Column(name="LT-102.true", unit="m"), Column(name="LIC-102.MODE", unit="")),
)


def test_a_folder_is_named_by_stamp_trial_and_id_and_never_shared(tmp_path):
    out = tmp_path / "runs"
    folders = [create_run_folder(out, HEADER) for _ in range(3)]
    stem = "20260305T070809Z-acceptance_pi_up-5f0c1d2e"
    assert [folder.name for folder in folders] == [stem, f"{stem}-2", f"{stem}-3"]
    assert (folders[0] / "rig.toml").read_bytes() == HEADER.rig_text.encode()
    assert (folders[0] / "trial.toml").read_text(encoding="utf-8") == "format = 1\n"


def test_a_live_session_has_no_trial(tmp_path):
    folder = create_run_folder(tmp_path, replace(HEADER, trial_name="", trial_text=""))
    assert folder.name == "20260305T070809Z-live-5f0c1d2e"
    assert not (folder / "trial.toml").exists()


def test_a_folder_that_cannot_be_made_is_told(tmp_path):
    (tmp_path / "file").write_text("", encoding="utf-8")
    with pytest.raises(RecordError, match="--out"):
        create_run_folder(tmp_path / "file", HEADER)


@pytest.mark.parametrize(
    ("text", "part"), [("../../etc", "etc"), ("a b", "a_b"), ("ü", "run"), ("x" * 99, "x" * 40)]
)
def test_names_are_safe_on_any_system(text, part):
    assert name_part(text) == part


def recorded(folder, block):
    with Recorder.create(folder, HEADER, lambda: 0) as recorder:
        recorder.rows(0, 0, block, np.full(len(block), 2e-5))
        recorder.rows(1, 100_000_003, block[:1], None)
        recorder.close(
            Closing(end=RunEnd.COMPLETE, reason="", last_tick=3, rows=len(block) + 1)
        )
    return RunFolder.open(folder)


def test_the_csv_holds_every_number_exactly_with_units_in_its_titles(tmp_path):
    block = np.random.default_rng(4).random((50, 2))
    block[2, 1] = np.nan
    run = recorded(tmp_path, block)
    file = export_csv(run)
    assert file == tmp_path / "trace.csv"
    with file.open(encoding="utf-8", newline="") as stream:
        titles, *rows = csv.reader(stream)
    assert titles == [
        "segment [-]",
        "tick [ticks]",
        "time [s]",
        "LT-102.true [m]",
        "LIC-102.MODE [-]",
        "lateness [s]",
    ]
    assert [row[2] for row in rows[:4]] == ["0.0", "0.1", "0.2", "0.3"]
    assert rows[2][4] == ""
    back = np.array([[float(x or "nan") for x in row[3:5]] for row in rows[:50]])
    np.testing.assert_array_equal(back, block)
    assert rows[50][:3] == ["1", "100000003", "10000000.3"]
    assert rows[50][-1] == ""


def test_an_export_that_fails_leaves_the_old_file_and_no_remains(tmp_path):
    run = recorded(tmp_path, np.zeros((30_000, 2)))
    export_csv(run)
    before = (tmp_path / "trace.csv").read_bytes()
    record = tmp_path / "trace.sqlite"
    content = bytearray(record.read_bytes())
    content[-16_384 * 2 :] = b"\xff" * 16_384 * 2
    record.write_bytes(content)
    with pytest.raises(RecordError, match="garbled"):
        export_csv(run)
    assert (tmp_path / "trace.csv").read_bytes() == before
    assert sorted(path.name for path in tmp_path.iterdir()) == ["trace.csv", "trace.sqlite"]


def test_a_file_that_cannot_be_written_is_told(tmp_path):
    with pytest.raises(RecordError, match=r"report\.html could not be written"):
        write_file(tmp_path / "none" / "report.html", "x")
    assert write_file(tmp_path / "a.txt", "é\n").read_bytes() == "é\n".encode()
