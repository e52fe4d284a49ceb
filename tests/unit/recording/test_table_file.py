"""Reading columns from files of many makes, and saying where a file is wrong."""

import re

import numpy as np
import pytest

from harness.errors import DataError, UsageError
from harness.recording.table_file import parse_time, read_columns


def read(
    tmp_path, content, *, encoding="utf-8", time="time", names=("FV-101", "LT-102"), **options
):
    path = tmp_path / "data.csv"
    path.write_bytes(content.encode(encoding))
    return read_columns(path, time, names, **options)


GOOD = {
    "comma": "time,FV-101,LT-102\n0,40,0.7\n1.5,50,0.71\n",
    "semicolon and decimal comma": "time;FV-101;LT-102\n0;40;0,7\n1,5;50;0,71\n",
    "tab": "time\tFV-101\tLT-102\n0\t40\t0.7\n1.5\t50\t0.71\n",
    "units in titles": "time [s],FV-101 (%),LT-102 [m]\n0,40,0.7\n1.5,50,0.71\n",
    "units below": "time;FV-101;LT-102\n[s];[%];[m]\n0;40;0,7\n1,5;50;0,71\n",
    "other order, other columns": "x,LT-102,time,FV-101\nabc,0.7,0,40\n,0.71,1.5,50\n",
    "quoted decimal comma": 'time,FV-101,LT-102\n0,40,"0,7"\n"1,5",50,"0,71"\n',
    "comments and blank lines": "# made by hand\n\ntime,FV-101,LT-102\n\n0,40,0.7\n# x\n1.5,50,0.71\n",
    "separator told": "sep=;\ntime;FV-101;LT-102\n0;40;0.7\n1.5;50;0.71\n",
    "carriage returns": "time,FV-101,LT-102\r\n0,40,0.7\r\n1.5,50,0.71\r\n",
    "stamps": "time,FV-101,LT-102\n2026-03-01T08:00:00,40,0.7\n2026-03-01T08:00:01.5,50,0.71\n",
    "stamps with zone": "time,FV-101,LT-102\n2026-03-01 08:00:00Z,40,0.7\n2026-03-01 09:00:01.5+01:00,50,0.71\n",
    "stamps, day first": "time;FV-101;LT-102\n01.03.2026 08:00:00;40;0,7\n01.03.2026 08:00:01.5;50;0,71\n",
    "clock": "time,FV-101,LT-102\n08:00:00,40,0.7\n08:00:01.5,50,0.71\n",
    "milliseconds": "time [ms],FV-101,LT-102\n0,40,0.7\n1500,50,0.71\n",
    "minutes": "time [min],FV-101,LT-102\n10,40,0.7\n10.025,50,0.71\n",
}  # fmt: skip


@pytest.mark.parametrize("content", GOOD.values(), ids=GOOD.keys())
def test_files_of_many_makes(tmp_path, content):
    found = read(tmp_path, content)
    np.testing.assert_allclose(found.time, [0.0, 1.5], atol=1e-6)
    np.testing.assert_array_equal(found.values["FV-101"], [40.0, 50.0])
    np.testing.assert_array_equal(found.values["LT-102"], [0.7, 0.71])


@pytest.mark.parametrize("encoding", ["utf-8-sig", "utf-16", "cp1252"])
def test_encodings(tmp_path, encoding):
    content = "time,FV-101 [°],LT-102 [m³]\n0,40,0.7\n1,50,0.71\n"
    found = read(tmp_path, content, encoding=encoding)
    assert found.units == {"time": "", "FV-101": "°", "LT-102": "m³"}


BAD = {
    "empty": ("", "is empty"),
    "header alone": ("time,FV-101,LT-102\n", ":1: there is a header and no rows"),
    "one column": ("time FV-101 LT-102\n0 40 0.7\n", ":1: only one column"),
    "text in a number": ("time,FV-101,LT-102\n0,40,0.7\n1,50,Bad\n", ':3: column LT-102: "Bad" is no number'),
    "nothing in a field": ("time,FV-101,LT-102\n0,40,0.7\n1,,0.7\n", ":3: column FV-101: the field is empty"),
    "not a number": ("time,FV-101,LT-102\n0,40,nan\n1,50,0.7\n", ':2: column LT-102: "nan" is no number'),
    "short row": ("time,FV-101,LT-102\n0,40,0.7\n1,50\n", ":3: column LT-102: the field is empty"),
    "bad time": ("time,FV-101,LT-102\n0,40,0.7\nsoon,50,0.7\n", ':3: column time: "soon" is no time'),
    "time back": ("time,FV-101,LT-102\n0,40,0.7\n5,50,0.7\n3,50,0.7\n", ":4: column time: the time goes back by 2 s"),
    "time reversed": ("time,FV-101,LT-102\n5,40,0.7\n4,50,0.7\n3,50,0.7\n", "runs backwards throughout"),
    "time twice": ("time,FV-101,LT-102\n0,40,0.7\n0,50,0.7\n3,50,0.7\n", ":3: column time: the same time"),
    "decimal commas between commas": ("time,FV-101,LT-102\n0,40,0,7\n1,50,0,7\n", ":2: 4 fields where the header has 3"),
    "commas between thousands": ('time;FV-101;LT-102\n0;"1,234.5";0.7\n', '"1,234.5" is no number'),
    "null bytes": ("time,FV\x00\x00\n1,2\n", "no text file"),
    "open quote": ('time,FV-101,LT-102\n0,40,"0.7\n1,50,0.7\n', "garbled"),
}  # fmt: skip


@pytest.mark.parametrize(("content", "words"), BAD.values(), ids=BAD.keys())
def test_what_is_wrong_is_said_with_its_place(tmp_path, content, words):
    with pytest.raises(DataError, match=re.escape(words)):
        read(tmp_path, content)


def test_many_problems_are_counted(tmp_path):
    rows = "".join(f"{k},40,x\n" for k in range(30))
    with pytest.raises(DataError, match="and 25 more of 30 rows"):
        read(tmp_path, "time,FV-101,LT-102\n" + rows)


def test_bad_rows_can_be_left_out(tmp_path):
    found = read(tmp_path, "time,FV-101,LT-102\n0,40,0.7\n1,50,Bad\n2,50,0.8\n", skip_bad=True)
    np.testing.assert_array_equal(found.time, [0.0, 2.0])
    assert found.skipped == 1
    np.testing.assert_array_equal(found.lines, [2, 4])


def test_a_missing_column_names_those_that_are_there(tmp_path):
    with pytest.raises(UsageError, match=r'no column "LT-103"; there are time, FV-101, LT-102'):
        read(tmp_path, GOOD["comma"], names=("LT-103",))


def test_a_title_that_is_there_twice_is_not_guessed(tmp_path):
    content = "time,LT-102 [m],LT-102 [mA]\n0,0.7,9\n1,0.8,10\n"
    with pytest.raises(UsageError, match="2 columns are called"):
        read(tmp_path, content, names=("LT-102",))
    found = read(tmp_path, content, names=("LT-102 [mA]",))
    np.testing.assert_array_equal(found.values["LT-102 [mA]"], [9.0, 10.0])


def test_a_file_that_is_not_there(tmp_path):
    with pytest.raises(UsageError, match="cannot be read"):
        read_columns(tmp_path / "none.csv", "time", ())


def test_times_are_read_alike_on_the_command_line():
    assert parse_time("2,5", 60.0) == 150.0
    assert parse_time("1970-01-01T00:01:00") == 60.0
    assert parse_time("then") is None
