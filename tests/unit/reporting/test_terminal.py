"""The terminal: what a person at it, and a log behind a pipe, get to read."""

from __future__ import annotations

import io
from dataclasses import replace

import pytest
from rich.console import Console

from harness.domain.signals import Quality
from harness.reporting.frame import frame
from harness.reporting.tables import TagLine, tag_table, verdict_table
from harness.reporting.terminal import (
    FRAME_EVERY_NS,
    LiveView,
    PlainView,
    make_console,
    make_view,
)
from harness.reporting.trend import BRAILLE, trend
from harness.reporting.view_state import EventLine, LoopView, PhaseState, PhaseView, ViewState

LOOP = LoopView(
    tag="LIC-102",
    unit="m",
    setpoint=0.96,
    process_variable=0.9123,
    output=0.621,
    load=0.3,
    mode="automatic",
    quality=Quality.GOOD,
    recent_setpoint=(0.8, 0.96, 0.96, 0.96),
    recent_process_variable=(0.8, 0.8, 0.86, 0.91),
)


def a_phase(name, state, elapsed=0.0, note=""):
    return PhaseView(name=name, state=state, elapsed=elapsed, expected=640.0, note=note)


STATE = ViewState(
    rig="Process-water make-up skid",
    trial="Acceptance [bold]PI[/bold]",
    pace=60.0,
    elapsed=2700.0,
    expected=5600.0,
    phases=(
        a_phase("settle", PhaseState.DONE, 600.0),
        a_phase("setpoint up", PhaseState.RUNNING, 70.0, "waiting for steady state"),
        a_phase("load up", PhaseState.WAITING),
    ),
    loops=(LOOP,),
    events=(
        EventLine(time=1.0, text="127.0.0.1:51882 connected"),
        EventLine(time=2630.0, text="setpoint up: setpoint step of +10 %", of_phase=True),
        EventLine(time=2690.0, text="setpoint 0.80 to 0.96 m"),
    ),
)


A_LONG_ONE = EventLine(time=0.0, text="x" * 300)


class Hand:
    """A clock moved by hand."""

    def __init__(self):
        self.now = 0

    def __call__(self):
        return self.now


def terminal(width=100, height=40):
    return Console(
        file=io.StringIO(), force_terminal=True, width=width, height=height, color_system=None
    )


def printed(console):
    return console.file.getvalue()


def drawn(renderable, width=120):
    console = Console(file=io.StringIO(), width=width)
    console.print(renderable)
    return console.file.getvalue()


def test_a_frame_shows_head_phases_values_trend_and_events():
    console = terminal()
    with LiveView(console, Hand()) as view:
        view.show(STATE)
    text = printed(console)
    for words in (
        "Process-water make-up skid  Acceptance [bold]PI[/bold]",
        "plant time 45:00 of about 1:33:20   pace 60   about 0:48 to go",  # 2900 s / 60
        "10:00  ",
        "1:10 of about 10:40",
        "about 10:40",
        "waiting for steady state",
        "0.9600 m",
        "0.9123 m",
        "62.1 %",
        "30.0 %",
        "automatic",
        "good",
        "[44:50] setpoint 0.80 to 0.96 m",
    ):
        assert words in text
    assert any(BRAILLE < ord(char) <= BRAILLE + 255 for char in text)
    assert "setpoint step of +10 %" not in text  # the list of phases says it


def test_a_run_that_is_over_has_nothing_to_go():
    over = replace(STATE, elapsed=5700.0, expected=5700.0)
    console = terminal()
    console.print(frame(over, console))
    assert "plant time 1:35:00   pace 60" in printed(console)
    assert "to go" not in printed(console)
    virtual = replace(STATE, pace=0.0)
    console = terminal()
    console.print(frame(virtual, console))
    assert "virtual time" in printed(console)
    assert "to go" not in printed(console)


def test_a_frame_is_due_four_times_a_second():
    clock = Hand()
    view = LiveView(terminal(), clock)
    assert view.due()
    with view:
        view.show(STATE)
        assert not view.due()
        clock.now += FRAME_EVERY_NS - 1
        assert not view.due()
        clock.now += 1
        assert view.due()


@pytest.mark.parametrize(("width", "height"), [(80, 24), (60, 20), (200, 50)])
def test_no_line_is_wider_and_no_frame_higher_than_the_terminal(width, height):
    console = terminal(width, height)
    phases = tuple(a_phase(f"phase {i}", PhaseState.DONE, 1.0) for i in range(20))
    state = replace(STATE, phases=(*phases, *STATE.phases[1:]), events=(A_LONG_ONE,) * 9)
    console.print(frame(state, console))
    lines = printed(console).splitlines()
    assert max(len(line.rstrip()) for line in lines) <= width
    assert len(lines) <= height
    text = printed(console)
    for words in (
        "setpoint up",
        "running",
        "1:10 of about 10:40",
        "automatic",
        "0.9123 m",
        "xxxx",
    ):
        assert words in text


def test_plain_lines_tell_each_change_once():
    console = Console(file=io.StringIO(), width=80)
    with PlainView(console, Hand()) as view:
        view.show(STATE)
        view.show(STATE)
        worse = replace(
            STATE,
            elapsed=3400.0,
            phases=(STATE.phases[0], a_phase("setpoint up", PhaseState.DONE, 655.0)),
            loops=(replace(LOOP, quality=Quality.BAD),),
            events=(
                STATE.events[2],
                EventLine(time=3400.0, text="loop steady, " + "long " * 30),
            ),
            events_before=2,
        )
        view.show(worse)
        view.show(worse)
    assert printed(console).splitlines() == [
        "Process-water make-up skid, Acceptance [bold]PI[/bold]: pace 60, "
        "about 1:33:20 of plant time",
        "[0:01] 127.0.0.1:51882 connected",
        "[43:50] setpoint up: setpoint step of +10 %",
        "[44:50] setpoint 0.80 to 0.96 m",
        "[56:40] loop steady, " + "long " * 30,
        "[56:40] LIC-102: process variable bad",
    ]


def test_a_pipe_gets_plain_lines_and_a_terminal_the_live_view():
    assert isinstance(make_view(terminal(), Hand()), LiveView)
    assert isinstance(make_view(Console(file=io.StringIO()), Hand()), PlainView)


def test_a_poor_code_page_is_no_reason_to_fall(document):
    raw = io.BytesIO()
    stream = io.TextIOWrapper(raw, encoding="ascii")
    console = make_console(stream)
    console.print(verdict_table(document, full=True))
    with LiveView(Console(file=stream, force_terminal=True, width=80), Hand()) as view:
        view.show(STATE)
    stream.flush()
    text = raw.getvalue().decode("ascii")
    assert "1486 s?" in text
    assert "*" in text


def test_the_trend_puts_signal_and_reference_where_they_are():
    rows = trend([0, 1, 2, 3], [3, 3, 3, 3], width=13, height=4, braille=False).plain.split(
        "\n"
    )
    assert [row[9:] for row in rows] == ["---*", "  * ", " *  ", "*   "]
    assert rows[0][:9].strip() == "3.150"
    assert rows[3][:9].strip() == "-0.1500"


def test_the_trend_joins_jumps_and_leaves_gaps():
    nan = float("nan")
    text = trend([0, 0, 3, 3], [nan] * 4, width=13, height=4, braille=False).plain
    assert [row[9:] for row in text.split("\n")] == ["  **", "  * ", "  * ", "**  "]
    empty = trend([], [], width=13, height=2).plain
    assert set(empty.replace("\n", "")) <= set(" 0123456789.e-+") | {chr(BRAILLE)}


def test_braille_dots_follow_the_standard():
    # Unicode, Braille Patterns: U+2801 is dot 1 (top left), U+2880 is dot 8 (bottom right).
    text = trend([1, 0], [float("nan")] * 2, width=10, height=1).plain
    assert text[-1] == chr(0x2801 | 0x2880 | 0x2810 | 0x2820)  # the jump is joined downwards


def test_the_short_verdict_fits_eighty_characters(failed_document):
    text = drawn(verdict_table(failed_document), 80)
    assert "2 % [s]" in text
    assert "Measured (predicted); ! outside its limits" in text
    assert "never! (492)" in text  # 492.5 in three digits, half to even
    assert "24.1! (13.2)" in text
    assert "overshoot 24.10 %, allowed 11.18 to 15.18 %." in text
    assert "Offset" not in text
    assert "FAIL  Process-water make-up skid, trial Acceptance PI" in text
    assert "controller integrates too fast" in text
    assert "output down" not in text


def test_an_offset_that_is_predicted_gets_its_column(document):
    document["phases"][3]["metrics"]["offset"]["predicted_nonlinear"] = 0.034
    text = drawn(verdict_table(document), 80)
    assert "0.012 (3.40)" in text
    assert not any(
        "(" in line and ")" not in line for line in text.splitlines()
    )  # no cell wraps


def test_the_full_verdict_lists_every_metric_with_its_limits(document):
    text = drawn(verdict_table(document, full=True))
    assert "443.3 to 541.8 s" in text
    assert "not decidable" in text
    assert text.count("Settling time, 2 % band") == 3
    assert "PASS" in text


@pytest.mark.parametrize("document", [{}, {"verdict": "invalid", "reasons": ["no controller"]}])
def test_a_verdict_without_phases_is_invalid_and_says_why(document):
    text = drawn(verdict_table(document))
    assert "INVALID" in text
    assert all(reason in text for reason in document.get("reasons", []))


def test_the_tags_of_a_live_session():
    lines = [
        TagLine(
            name="LT-102",
            value=float("nan"),
            unit="m",
            raw="0x9F3A",
            quality=Quality.BAD,
            read_by="127.0.0.1:51882, 0.1 s ago",
            written_by="",
        )
    ]
    text = drawn(tag_table(lines, "Modbus TCP on 127.0.0.1:5020"))
    for words in ("Modbus TCP", "LT-102", "none", "0x9F3A", "bad", "51882", "never"):
        assert words in text


def test_a_counter_is_a_whole_number():
    line = TagLine(
        name="TICK",
        value=12_345.0,
        unit="",
        raw="0000 3039 at 10",
        quality=Quality.GOOD,
        read_by="",
        written_by="",
        whole=True,
    )
    assert " 12345 " in drawn(tag_table([line]))


def test_tags_keep_a_line_each_and_say_what_a_low_window_leaves_out():
    line = TagLine(
        name="LIC-102.MODE.RB",
        value=0.7527,
        unit="m3/h",
        raw="3F40 B25A at 12, 12.029 mA",
        quality=Quality.GOOD,
        read_by="A 0.1 s ago",
        written_by="A 12.4 s ago",
    )
    text = drawn(tag_table([line] * 30, "skid", {"A": "127.0.0.1:51882 over modbus"}, 20), 80)
    lines = text.splitlines()
    assert len(lines) <= 19  # and the line of the cursor
    assert all(len(line) <= 80 for line in lines)
    shown = [line for line in lines if line.startswith("LIC-102.MODE.RB")]
    assert f"{30 - len(shown)} more points" in text
    assert "A = 127.0.0.1:51882 over modbus" in text
    for words in ("0.7527", "m³/h", "good", "A 0.1 s ago", "A 12.4 s ago", "3F40"):
        assert words in shown[0]


def test_a_run_without_any_figure_has_no_table_of_them():
    phase = {"name": "settle", "verdict": "invalid", "findings": ["It did not end steady."]}
    text = drawn(verdict_table({"verdict": "invalid", "phases": [phase]}))
    assert "settle: It did not end steady." in text
    assert "Measured" not in text


def test_noise_on_a_level_at_rest_does_not_fill_the_trend():
    nan = [float("nan")] * 40
    noisy = [0.7527 + 0.0004 * (-1) ** i for i in range(40)]  # 0.05 % of a span of 1.5 m
    rows = trend(noisy, nan, width=49, height=7, braille=False).plain.split("\n")
    assert sum("*" in row for row in rows) <= 2
