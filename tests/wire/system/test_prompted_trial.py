"""A controller that takes nothing over the link: somebody is told what to type, and says when.

The rig, the controller and its panel are programs of their own. The operator is this test: it
reads the prompts, types at the panel, and answers in a file.
"""

from __future__ import annotations

import json
import os
import re
import sys

import pytest

from harness.domain.run import EventKind
from harness.recording.reader import RunFolder
from harness.runtime.clock import PacedClock

pytestmark = [pytest.mark.wire, pytest.mark.slow, pytest.mark.timeout(200)]

ORDERS = """orders = "prompt"
block = { gain_unit = "proportional band", gain_resolution = 1, time_unit = "min", time_resolution = 0.01, setpoint_resolution = "1 mm" }"""
PATIENCE = 80.0  # [s]


def prompted_rig(bench, *, read_backs):
    """Have the bench's rig take its orders by prompt, with or without read-backs."""
    text, found = re.subn(
        r'(?m)^orders = "link".*$', ORDERS, bench.rig.read_text(encoding="utf-8")
    )
    assert found == 1
    if not read_backs:
        text, found = re.subn(r"(?m)^.*\.RB\".*\n", "", text)
        assert found
    bench.rig.write_text(text, encoding="utf-8")


class Operator:
    """Does what a prompt says."""

    def __init__(self, bench, *, confirms):
        self.panel, self.answers = bench.folder / "panel.txt", bench.folder / "answers.txt"
        self.panel.touch()
        self.confirms = confirms
        self.refuses = None  # how many prompts come before the one that is not carried out
        self.asked = []
        self.port = None

    @property
    def prompt(self):
        return self.answers.with_name("answers.txt.prompt.json")

    def serve(self, trial):
        """Work until the trial ends."""
        clock = PacedClock()
        end = clock.now_ns() + int(PATIENCE * 1e9)
        while trial.process.poll() is None:
            assert clock.now_ns() < end, trial.said + trial.complained
            try:
                ask = json.loads(self.prompt.read_text(encoding="utf-8"))
            except (OSError, ValueError):
                ask = None
            if ask and ask["number"] not in [each["number"] for each in self.asked]:
                self.asked.append(ask)
                if len(self.asked) - 1 == self.refuses:
                    append(self.answers, "no, typed 8.5")
                else:
                    self.do(ask["order"])
            clock.wait_until(clock.now_ns() + 20_000_000)

    def do(self, order):
        lines = []
        if "settings" in order:
            lines += [
                f"GAIN {order['settings']['gain']}",
                f"INT {order['settings']['integral']}",
            ]
        if order.get("mode") == 0:
            lines.append("MAN")
        if "setpoint" in order:
            lines.append(f"SP {order['setpoint']}")
        if "manual_output" in order:
            lines.append(f"OUT {100 * order['manual_output']}")
        if order.get("mode") == 1:
            lines.append("AUTO")
        append(self.panel, *lines)
        if self.confirms:
            clock = PacedClock()
            clock.wait_until(clock.now_ns() + 150_000_000)  # until a scan has taken it
            append(self.answers, "done")


def append(path, *lines):
    with path.open("a", encoding="utf-8") as file:
        file.write("".join(f"{line}\n" for line in lines))


def start(bench, operator, *arguments):
    operator.port = port = bench.free_port()
    bench.start_soft_plc("plc", port, "--orders", "none", "--panel", operator.panel)
    answers = ("--answers", operator.answers)
    return bench.start_external("runs", port, "--json", *answers, *arguments)


@pytest.mark.parametrize("read_backs", [False, True], ids=["confirmed", "seen"])
def test_a_prompted_trial_passes(bench, read_backs):
    prompted_rig(bench, read_backs=read_backs)
    # Settings are shown by no read-back: somebody has to say that they are there.
    operator = Operator(bench, confirms=True)
    trial = start(bench, operator)
    operator.serve(trial)
    assert trial.process.returncode == 0, trial.said + trial.complained
    verdict = json.loads(trial.said)
    assert verdict["verdict"] == "pass"

    asked = [list(ask["order"]) for ask in operator.asked]
    # A block that says that it is in manual, at the right output, is asked nothing.
    first = [] if read_backs else [["mode", "manual_output"]]
    assert asked == [*first, ["settings"], ["setpoint", "mode"], ["setpoint"]]
    settings = operator.asked[len(first)]
    assert re.search(
        r"set proportional band \d+ %, integral time 0\.\d\d min \(ideal form, reverse action\)",
        settings["text"],
    )
    # The prediction works with what the block has: whole percents, hundredths of a minute.
    tuning = verdict["loops"]["LIC-102"]["tuning"]
    assert tuning["gain"] == pytest.approx(100 / settings["order"]["settings"]["gain"])
    assert tuning["integral_time"] == pytest.approx(
        60 * settings["order"]["settings"]["integral"]
    )

    run = RunFolder.open(bench.run_folder("runs"))
    known = [event for event in run.events() if event.kind is EventKind.ORDER_KNOWN]
    by_subject = {event.subject: event for event in known}
    step = by_subject["setpoint up"]
    assert step.data["by"] == "prompt"
    assert step.data["who"]
    evidence = "seen in the data" if read_backs else "seen in the output"
    assert step.data["evidence"] == evidence
    # Metric time zero is when the controller is known to have it.
    (phase,) = verdict["phases"]
    assert phase["zero"] == step.tick * run.header.tick > phase["start"]


def test_an_order_that_nobody_carries_out_makes_the_run_invalid(bench):
    prompted_rig(bench, read_backs=False)
    operator = Operator(bench, confirms=False)
    trial = start(bench, operator, "--order-timeout", 1)
    operator.serve(trial)
    assert trial.process.returncode == 3, trial.said + trial.complained
    (reason,) = json.loads(trial.said)["reasons"][:1]
    assert "put the block in manual, then set its output to 55.0 %" in reason
    assert "nobody said that it was done, within 1 s" in reason
    assert not operator.prompt.exists()


@pytest.mark.skipif(sys.platform == "win32", reason="Windows has no pseudo-terminals in Python")
def test_enter_in_a_terminal_answers(bench):
    import pty  # noqa: PLC0415  not there on Windows

    prompted_rig(bench, read_backs=False)
    panel = bench.folder / "panel.txt"
    panel.touch()
    port = bench.free_port()
    bench.start_soft_plc("plc", port, "--orders", "none", "--panel", panel)
    keyboard, terminal = pty.openpty()
    paces = ("--pace", "20", "--controller-pace", "20")
    trial = bench.start_trial(
        "runs", "--controller", "external", *paces, "--link", "modbus", "--modbus-port", port,
        stdin=terminal,
    )  # fmt: skip
    for prompt, typed in (
        ("put the block in manual, then set its output to 55.0 %;", ("MAN", "OUT 55")),
        ("set proportional band ", ("GAIN {}", "INT {}")),
        ("then put the block in automatic;", ("SP {}", "AUTO")),
        ("set the setpoint to 0.266 m", ("SP 0.266",)),
    ):
        trial.wait_for(prompt)
        (line,) = (line for line in trial.said.splitlines() if prompt in line)
        assert "press Enter here when it is done" in line
        numbers = iter(re.findall(r"(?:band|time|setpoint to) ([\d.]+)", line))
        append(
            panel, *(each.format(next(numbers, "")) if "{" in each else each for each in typed)
        )
        bench.pause(0.15)  # until a scan has taken it
        os.write(keyboard, b"\n")
    assert trial.ended() == 0, trial.said + trial.complained
    os.close(keyboard)
    os.close(terminal)


TWO_STEPS = """
[[phase]]
name = "setpoint down"
loop = "LIC-102"
kind = "setpoint_step"
mode = "automatic"
change = "-5 %"
time_limit = "120 s"
"""


def test_a_run_ended_by_a_wrong_key_is_taken_up_after_its_last_completed_phase(bench):
    prompted_rig(bench, read_backs=False)
    bench.trial.write_text(
        bench.trial.read_text(encoding="utf-8") + TWO_STEPS, encoding="utf-8"
    )
    operator = Operator(bench, confirms=True)
    operator.refuses = 4  # the second setpoint
    trial = start(bench, operator)
    operator.serve(trial)
    assert trial.process.returncode == 3, trial.said + trial.complained
    first = json.loads(trial.said)
    assert "answered 'no, typed 8.5'" in first["reasons"][0]
    first_run = RunFolder.open(bench.run_folder("runs"))

    operator.refuses, operator.asked = None, []
    again = bench.start(
        "again", "trial", "--resume", first_run.path, "--out", bench.folder / "again",
        "--link", "modbus", "--modbus-port", operator.port, "--json",
        "--answers", operator.answers,
    )  # fmt: skip
    operator.serve(again)
    assert again.process.returncode == 0, again.said + again.complained
    verdict = json.loads(again.said)
    assert [phase["verdict"] for phase in verdict["phases"]] == ["pass", "pass"]

    # Put in manual where the plant stands, tuned, transferred, and the step that was missing.
    asked = [list(ask["order"]) for ask in operator.asked]
    assert asked == [
        ["mode", "manual_output"],
        ["settings"],
        ["setpoint", "mode"],
        ["setpoint"],
    ]

    second_run = RunFolder.open(bench.run_folder("again"))
    taken_up = int(second_run.header.extra["resumed_at"])
    assert second_run.header.extra["resumed"] == first_run.header.run
    old, new = first_run.trace(), second_run.trace()
    assert new["tick"].tolist() == list(range(len(new["tick"])))  # one record without a gap
    for column in ("LT-102.true", "FV-101.command", "LIC-102.setpoint"):
        assert new[column][:taken_up].tolist() == old[column][:taken_up].tolist()
    # The plant goes on from where it was.
    level = new["LT-102.true"]
    assert abs(level[taken_up] - level[taken_up - 1]) < 1e-3
    up, down = verdict["phases"]
    for name, metric in up["metrics"].items():
        before = first["phases"][0]["metrics"][name]
        assert metric["measured"] == before["measured"]
        assert metric["predicted_nonlinear"] == before["predicted_nonlinear"]
    assert down["start"] > taken_up * second_run.header.tick
