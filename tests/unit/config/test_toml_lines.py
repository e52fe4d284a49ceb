"""The scan that gives each key its line."""

import tomllib

from hypothesis import given
from hypothesis import strategies as st

from harness.config.toml_lines import line_map, line_of

TEXT = '''# a comment with [brackets] and "quotes"
format = 1
[rig]
name = "a # in text"
description = """
[not.a.table]
tick = 1 \\"""
"""
"quoted key" = 'C:\\temp'
dotted.key.here = 1979-05-27 07:32:00
[[link]]
items = [ # the map
    { point = "A", address = 0 },

    { point = "]", address = 2, counts = [0,
        5] },
]
after = true
[[link]]
[link.inner]
deep = -1.5e3
[[link.more]]
x = 1
[[link.more]]
x = 2
[given.output]
gain = 1
'''

EXPECTED = {
    "format": 2,
    "rig": 3,
    "rig.name": 4,
    "rig.description": 5,
    "rig.quoted key": 9,
    "rig.dotted": 10,
    "rig.dotted.key": 10,
    "rig.dotted.key.here": 10,
    "link[0]": 11,
    "link[0].items": 12,
    "link[0].items[0]": 13,
    "link[0].items[0].point": 13,
    "link[0].items[0].address": 13,
    "link[0].items[1]": 15,
    "link[0].items[1].point": 15,
    "link[0].items[1].address": 15,
    "link[0].items[1].counts": 15,
    "link[0].items[1].counts[0]": 15,
    "link[0].items[1].counts[1]": 16,
    "link[0].after": 18,
    "link[1]": 19,
    "link[1].inner": 20,
    "link[1].inner.deep": 21,
    "link[1].more[0]": 22,
    "link[1].more[0].x": 23,
    "link[1].more[1]": 24,
    "link[1].more[1].x": 25,
    "given": 26,
    "given.output": 26,
    "given.output.gain": 27,
}


def test_every_key_has_its_line():
    tomllib.loads(TEXT)
    assert line_map(TEXT) == EXPECTED


def test_a_missing_key_takes_the_line_of_what_is_around_it():
    lines = line_map(TEXT)
    assert line_of(lines, "link[1].inner.shallow") == 20
    assert line_of(lines, "link[0].items[7].address") == 12
    assert line_of(lines, "nowhere.at.all") == 1


values = st.recursive(
    st.sampled_from(["1", "1.5", "true", '"a"', "'b'", '"]"', '"\\""', "'#'", '"""\nx\n"""']),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3).map(lambda each: "[\n" + ",\n".join(each) + "\n]"),
        st.lists(inner, max_size=3).map(
            lambda each: (
                "{ " + ", ".join(f"k{index} = {one}" for index, one in enumerate(each)) + " }"
            )
        ),
    ),
    max_leaves=8,
)


@given(st.lists(values, min_size=1, max_size=6))
def test_any_nesting_is_followed_to_its_end(written):
    text = "".join(f"key{index} = {value}\n" for index, value in enumerate(written))
    tomllib.loads(text)
    lines = line_map(text)
    line = 1
    for index, value in enumerate(written):
        assert lines[f"key{index}"] == line
        line += value.count("\n") + 1
