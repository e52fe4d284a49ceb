"""What was written comes back, bit for bit; what cannot be written says why."""

from __future__ import annotations

import sqlite3
from dataclasses import replace
from itertools import count

import numpy as np
import pytest

from harness.domain.run import Closing, Column, Event, EventKind, RunEnd, RunHeader
from harness.domain.signals import Exchange
from harness.errors import RecordError
from harness.recording.reader import RunFolder
from harness.recording.schema import TRACE_FILE
from harness.recording.writer import COMMIT_EVERY_NS, Recorder

CLOSING = Closing(end=RunEnd.COMPLETE, reason="", last_tick=9, rows=10)


def a_header(names=("LT-102.true", 'odd "name"; --', "FV-101.position")):
    return RunHeader(
        run="a1b2",
        started_utc="2026-03-05T07:08:09Z",
        rig_name="make-up skid",
        trial_name="short",
        rig_text='format = 1\nname = "skid"  # m³/h\n',
        trial_text="format = 1\n",
        versions={"dryrig": "0.1.0"},
        seed=7,
        tick=0.1,
        clock="virtual",
        pace=0.0,
        controller="builtin",
        columns=tuple(Column(name=name, unit="m") for name in names),
        extra={"scan_ticks": "10"},
    )


def an_exchange(**changes):
    exchange = Exchange(
        link="modbus",
        arrival_ns=2**62 + 1,
        peer="127.0.0.1:51000",
        connection=3,
        function="FC16",
        address="40001",
        point="FV-101",
        value=0.1 + 0.2,
        raw="3e99999a",
        image_tick=41,
    )
    return replace(exchange, **changes)


def stopped():
    """A clock that stands still: nothing is committed unless asked for."""
    return 0


def ticking(step):
    clock = count(0, step)
    return lambda: next(clock)


def test_everything_written_comes_back_exactly(tmp_path):
    header = a_header()
    generator = np.random.default_rng(1)
    block = generator.normal(size=(2500, 3)) * 10.0 ** generator.integers(-300, 300, (2500, 3))
    block[3, 1] = np.nan
    lateness = generator.random(2500) * 1e-3
    event = Event(
        tick=5,
        kind=EventKind.ORDER,
        subject="LIC-102",
        text="setpoint to 1.2 m",
        data={"value": np.float64(1.25), "missing": float("nan"), "list": [1, "two", None]},
    )
    with Recorder.create(tmp_path, header, stopped) as recorder:
        recorder.rows(0, 0, block, lateness)
        recorder.rows(1, 2000, block[:10], None)
        recorder.event(event)
        recorder.exchanges([(42, an_exchange()), (43, an_exchange(value=float("nan")))])
        recorder.close(CLOSING)

    run = RunFolder.open(tmp_path)
    assert run.header == header
    assert run.closing == CLOSING
    assert run.segments() == (0, 1)
    first = run.trace(0)
    for index, column in enumerate(header.columns):
        np.testing.assert_array_equal(first[column.name], block[:, index])
    np.testing.assert_array_equal(first["lateness"], lateness)
    np.testing.assert_array_equal(first["tick"], np.arange(2500))
    second = run.trace(1, ("FV-101.position",))
    assert list(second) == ["segment", "tick", "lateness", "FV-101.position"]
    np.testing.assert_array_equal(second["tick"], np.arange(2000, 2010))
    assert np.isnan(second["lateness"]).all()
    assert run.trace()["tick"].size == 2510
    (back,) = run.events()
    assert back == replace(
        event, data={"value": 1.25, "missing": None, "list": [1, "two", None]}
    )
    assert run.exchanges("modbus")[0] == (42, an_exchange())
    assert np.isnan(run.exchanges()[1][1].value)
    assert run.exchanges("other") == ()


def test_a_closed_record_is_one_plain_file(tmp_path):
    recorder = Recorder.create(tmp_path, a_header(), stopped)
    recorder.rows(0, 0, np.zeros((10, 3)), None)
    recorder.close(CLOSING)
    assert [path.name for path in tmp_path.iterdir()] == [TRACE_FILE]
    RunFolder.open(tmp_path).verify()


def test_a_record_is_readable_while_it_grows_and_counts_as_cut_off(tmp_path):
    with Recorder.create(tmp_path, a_header(), stopped) as recorder:
        recorder.rows(0, 0, np.zeros((10, 3)), None)
        assert RunFolder.open(tmp_path).trace()["tick"].size == 0
        recorder.flush()
        run = RunFolder.open(tmp_path)
        assert run.trace()["tick"].size == 10
        assert run.closing is None
        run.verify()


def test_rows_are_committed_within_a_second_while_they_arrive(tmp_path):
    period = 100_000_000  # ns between two looks at the clock, one look a call
    with Recorder.create(tmp_path, a_header(), ticking(period)) as recorder:
        committed = []
        for tick in range(30):
            recorder.rows(0, tick, np.zeros((1, 3)), None)
            committed.append(RunFolder.open(tmp_path).trace()["tick"].size)
        outstanding = [tick + 1 - size for tick, size in enumerate(committed)]
    assert committed[-1] > 0
    assert max(outstanding) * period <= 1_000_000_000
    assert COMMIT_EVERY_NS < 1_000_000_000


def test_abandoning_keeps_the_rows_without_a_closing_document(tmp_path):
    recorder = Recorder.create(tmp_path, a_header(), stopped)
    recorder.rows(0, 0, np.ones((4, 3)), None)
    recorder.abandon()
    recorder.abandon()
    run = RunFolder.open(tmp_path)
    assert run.closing is None
    assert run.trace()["tick"].size == 4
    with pytest.raises(RecordError, match="is closed"):
        recorder.flush()


def test_a_full_disk_says_so_and_keeps_what_was_committed(tmp_path):
    recorder = Recorder.create(tmp_path, a_header(), stopped)
    recorder.rows(0, 0, np.ones((1000, 3)), None)
    recorder.flush()
    # SQLite answers its own page limit with the same SQLITE_FULL as a full disk.
    (pages,) = recorder._connection.execute("PRAGMA page_count").fetchone()
    recorder._connection.execute(f"PRAGMA max_page_count = {pages + 2}")
    with pytest.raises(RecordError, match="the disk is full") as caught:
        recorder.rows(0, 1000, np.ones((100_000, 3)), None)
    assert str(tmp_path / TRACE_FILE) in str(caught.value)
    with pytest.raises(RecordError, match="is closed"):
        recorder.close(CLOSING)
    run = RunFolder.open(tmp_path)
    assert run.closing is None
    np.testing.assert_array_equal(run.trace()["tick"], np.arange(1000))
    run.verify()


def test_a_tick_recorded_twice_is_refused(tmp_path):
    with Recorder.create(tmp_path, a_header(), stopped) as recorder:
        recorder.rows(0, 0, np.ones((3, 3)), None)
        with pytest.raises(RecordError, match="recorded twice"):
            recorder.rows(0, 2, np.ones((3, 3)), None)


def test_a_block_of_other_width_is_refused(tmp_path):
    with (
        Recorder.create(tmp_path, a_header(), stopped) as recorder,
        pytest.raises(RecordError, match="2 columns was handed to a record of 3"),
    ):
        recorder.rows(0, 0, np.ones((3, 2)), None)


def test_events_take_only_what_json_knows(tmp_path):
    event = Event(tick=0, kind=EventKind.NOTE, subject="", text="", data={"what": object()})
    with (
        Recorder.create(tmp_path, a_header(), stopped) as recorder,
        pytest.raises(RecordError, match="no JSON form"),
    ):
        recorder.event(event)


@pytest.mark.parametrize("names", [("LT-1", "lt-1"), ("tick",), ("Lateness",)])
def test_colliding_column_names_are_refused(tmp_path, names):
    with pytest.raises(RecordError, match="collides"):
        Recorder.create(tmp_path, a_header(names), stopped)
    assert not (tmp_path / TRACE_FILE).exists()


def test_too_many_columns_are_refused(tmp_path):
    with pytest.raises(RecordError, match="at most 1990"):
        Recorder.create(tmp_path, a_header([f"c{i}" for i in range(1991)]), stopped)


def test_a_record_of_no_columns_keeps_ticks(tmp_path):
    with Recorder.create(tmp_path, a_header(()), stopped) as recorder:
        recorder.rows(0, 3, np.zeros((2, 0)), None)
    assert RunFolder.open(tmp_path).trace()["tick"].tolist() == [3, 4]


def test_a_run_never_writes_into_anothers_record(tmp_path):
    Recorder.create(tmp_path, a_header(), stopped).close(CLOSING)
    with pytest.raises(RecordError, match="is there already"):
        Recorder.create(tmp_path, a_header(), stopped)


def test_a_missing_folder_is_told(tmp_path):
    with pytest.raises(RecordError, match="could not be written"):
        Recorder.create(tmp_path / "none", a_header(), stopped)


def closed_record(folder):
    with Recorder.create(folder, a_header(), stopped) as recorder:
        recorder.rows(0, 0, np.random.default_rng(2).random((20_000, 3)), None)
        recorder.close(replace(CLOSING, rows=20_000))
    return folder / TRACE_FILE


def test_a_folder_without_record_is_no_run_folder(tmp_path):
    with pytest.raises(RecordError, match="is not a run folder"):
        RunFolder.open(tmp_path)


def test_a_foreign_database_is_told(tmp_path):
    connection = sqlite3.connect(tmp_path / TRACE_FILE)
    connection.execute("CREATE TABLE other (x)")
    connection.close()
    with pytest.raises(RecordError, match="something else"):
        RunFolder.open(tmp_path)


def test_another_schema_version_is_told(tmp_path):
    connection = sqlite3.connect(closed_record(tmp_path))
    connection.execute("PRAGMA user_version = 99")
    connection.close()
    with pytest.raises(RecordError, match="schema version 99"):
        RunFolder.open(tmp_path)


def test_no_database_at_all_is_told(tmp_path):
    (tmp_path / TRACE_FILE).write_bytes(b"time,level\n0,1\n" * 500)
    with pytest.raises(RecordError, match="garbled"):
        RunFolder.open(tmp_path)


def test_a_cut_file_is_told(tmp_path):
    file = closed_record(tmp_path)
    file.write_bytes(file.read_bytes()[: file.stat().st_size // 2])
    with pytest.raises(RecordError, match="garbled"):
        RunFolder.open(tmp_path).verify()


def test_an_overwritten_page_is_told(tmp_path):
    file = closed_record(tmp_path)
    content = bytearray(file.read_bytes())
    middle = len(content) // 2 // 16_384 * 16_384
    content[middle : middle + 16_384] = b"\xff" * 16_384
    file.write_bytes(content)
    run = RunFolder.open(tmp_path)
    with pytest.raises(RecordError, match="garbled"):
        run.verify()
    with pytest.raises(RecordError, match="garbled"):
        run.trace()


def test_a_garbled_document_is_told(tmp_path):
    connection = sqlite3.connect(closed_record(tmp_path))
    with connection:
        connection.execute("UPDATE documents SET body = '{\"run\": 1}' WHERE kind = 'header'")
    connection.close()
    with pytest.raises(RecordError, match="its documents cannot be read"):
        RunFolder.open(tmp_path)


def test_missing_rows_are_told(tmp_path):
    connection = sqlite3.connect(closed_record(tmp_path))
    with connection:
        connection.execute("DELETE FROM trace WHERE tick = 19999")
    run = RunFolder.open(tmp_path)
    with pytest.raises(RecordError, match=r"is incomplete: 19999 rows.*counts 20000"):
        run.verify()
    with connection:
        connection.execute("DELETE FROM trace WHERE tick = 10")
    connection.close()
    with pytest.raises(RecordError, match="has gaps"):
        run.verify()


def test_an_unknown_column_is_told(tmp_path):
    closed_record(tmp_path)
    with pytest.raises(RecordError, match="'LT-9' is not a column"):
        RunFolder.open(tmp_path).trace(names=("LT-9",))
