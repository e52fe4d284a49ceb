"""Every rule of a trial file, broken once: the whole message, with its line."""

from __future__ import annotations

from pathlib import Path
from typing import NamedTuple

import pytest

from harness.config.load import rig_from_text, trial_from_text
from harness.errors import ConfigurationError

DATA = Path(__file__).parent / "data"
RIG = rig_from_text((DATA / "rig.toml").read_text(encoding="utf-8"), "rig.toml")
TRIAL_TEXT = (DATA / "trial.toml").read_text(encoding="utf-8")


class Case(NamedTuple):
    """One edit of the sound file, and the problems that it makes (line, path and words)."""

    name: str
    old: str
    new: str
    problems: tuple[str, ...]
    occurrence: int = 0


def edited(text: str, case: Case) -> str:
    parts = text.split(case.old)
    assert len(parts) > case.occurrence + 1, f"{case.old!r} is not in the sound file"
    place = case.occurrence + 1
    return case.old.join(parts[:place]) + case.new + case.old.join(parts[place:])


CASES = (
    Case(
        "trial table missing",
        '[trial]\nname = "test trial"\nlaw = "PI"\nclosed_loop_time = "60 s"\nmodels = "identified"\nsettings = "computed"\n',
        "",
        (
            "1: trial.name: is missing",
            "1: trial.law: is missing",
            "1: trial.closed_loop_time: is missing",
            "1: trial.models: is missing",
            "1: trial.settings: is missing",
        ),
    ),
    Case(
        "closed-loop time missing",
        'closed_loop_time = "60 s"\n',
        "",
        ("2: trial.closed_loop_time: is missing",),
    ),
    Case(
        "closed-loop time zero",
        'closed_loop_time = "60 s"',
        'closed_loop_time = "0 s"',
        ('5: trial.closed_loop_time: "0 s" must be above 0 s',),
    ),
    Case(
        "law unknown", 'law = "PI"', 'law = "PID"', ('4: trial.law: "PID" must be "P" or "PI"',)
    ),
    Case(
        "models unknown",
        'models = "identified"',
        'models = "guessed"',
        (
            '6: trial.models: "guessed" must be "identified", "linearised", "given" or { run = "folder" }',
        ),
    ),
    Case(
        "given models missing",
        'models = "identified"',
        'models = "given"',
        ('6: trial.models: "given" wants the models in [given.output] and [given.load]',),
    ),
    Case(
        "given models not used",
        "[steady]",
        '[given.output]\ngain = 1.5\ntime_constants = ["118 s", "90 s"]\ndead_time = "3 s"\n[given.load]\ngain = 0.7\ntime_constants = ["118 s"]\ndead_time = "3 s"\n[steady]',
        ('35: given: is not used with models = "identified"; take it out',),
    ),
    Case(
        "given load missing",
        "[steady]",
        '[given.output]\ngain = 1.5\ntime_constants = ["118 s", "90 s"]\ndead_time = "3 s"\n[steady]',
        (
            "35: given.load: is missing",
            '35: given: is not used with models = "identified"; take it out',
        ),
    ),
    Case(
        "time constants crossed, gain of the wrong sign, gain zero",
        'models = "identified"',
        'models = "given"\n[given.output]\ngain = -1.5\ntime_constants = ["90 s", "118 s"]\ndead_time = "3 s"\n[given.load]\ngain = 0\ntime_constants = ["118 s"]\ndead_time = "3 s"\n[nothing]',
        (
            "2: trial.settings: is missing",
            "8: given.output.gain: -1.5 does not go with the reverse action of LIC-102; reverse action wants a gain above 0, direct action below 0",
            '9: given.output.time_constants: ["90 s", "118 s"] is crossed; the larger comes first',
            "12: given.load.gain: 0 moves nothing; a gain is not 0",
            "15: nothing: is not a key of the file; keys are format, trial, given, as_found, phase, steady, tolerances",
        ),
    ),
    Case(
        "three time constants",
        'models = "identified"\nsettings = "computed"',
        'models = "given"\nsettings = "computed"\n[given.output]\ngain = 1.5\ntime_constants = ["118 s", "90 s", "2 s"]\ndead_time = "-3 s"\n[given.load]\ngain = 1\ntime_constants = []\ndead_time = "3 s"',
        (
            '10: given.output.time_constants: ["118 s", "90 s", "2 s"] must have 2 or fewer elements',
            '11: given.output.dead_time: "-3 s" must be at least 0 s',
            "14: given.load.time_constants: [] must have 1 or more elements",
        ),
    ),
    Case(
        "settings missing",
        'settings = "computed"',
        'settings = "as found"',
        ('7: trial.settings: "as found" wants the settings in [as_found]',),
    ),
    Case(
        "settings not used",
        "[steady]",
        '[as_found]\ngain = 1.1\nintegral_time = "120 s"\naction = "reverse"\n[steady]',
        ('35: as_found: is not used with settings = "computed"; take it out',),
    ),
    Case(
        "integral time missing",
        'settings = "computed"',
        'settings = "as found"\n[as_found]\ngain = 1.1\naction = "reverse"',
        ('8: as_found.integral_time: is missing; law = "PI" wants one',),
    ),
    Case(
        "integral time of a P law",
        'law = "PI"\nclosed_loop_time = "60 s"\nmodels = "identified"\nsettings = "computed"',
        'law = "P"\nclosed_loop_time = "60 s"\nmodels = "identified"\nsettings = "as found"\n[as_found]\ngain = 1.1\nintegral_time = "120 s"\naction = "reverse"',
        ('10: as_found.integral_time: has no place with law = "P"; take it out',),
    ),
    Case(
        "gain zero",
        'settings = "computed"',
        'settings = "as found"\n[as_found]\ngain = 0\nintegral_time = "120 s"\naction = "reverse"',
        ("9: as_found.gain: 0 must be above 0.0",),
    ),
    Case(
        "gain as found too large",
        'settings = "computed"',
        'settings = "as found"\n[as_found]\ngain = 2000\nintegral_time = "120 s"\naction = "reverse"',
        ("9: as_found.gain: 2000 must be at most 1000",),
    ),
    Case(
        "integral time in the block's units",
        'settings = "computed"',
        'settings = "as found"\n[as_found]\nunits = "block"\ngain = 80\nintegral_time = "120 s"\naction = "reverse"',
        (
            "11: as_found.integral_time: has no place with the block's own units; write integral",
        ),
    ),
    Case(
        "integral without the block's units",
        'settings = "computed"',
        'settings = "as found"\n[as_found]\ngain = 80\nintegral = 2.0\naction = "reverse"',
        (
            "10: as_found.integral: has no place with units of %/% and seconds; write integral_time",
        ),
    ),
    Case(
        "no phases",
        '[[phase]]\nname = "settle"\nloop = "LIC-102"\nkind = "settle"\nmode = "manual"\ntime_limit = "1500 s"\n[[phase]]\nname = "output up"\nloop = "LIC-102"\nkind = "output_step"\nmode = "manual"\nchange = "4 %"\ntime_limit = "25 min"\n[[phase]]\nname = "load up, manual"\nloop = "LIC-102"\nkind = "load_step"\nmode = "manual"\nchange = "6 %"\ntime_limit = "1500 s"\n[[phase]]\nname = "setpoint up"\nloop = "LIC-102"\nkind = "setpoint_step"\nmode = "automatic"\nchange = "5 %"\ntime_limit = "1500 s"\n',
        "",
        ("1: phase: is missing; a trial has at least one [[phase]]",),
    ),
    Case(
        "phase name twice",
        'name = "output up"',
        'name = "settle"',
        ('15: phase[1].name: "settle" is already the name of phase[0]',),
    ),
    Case(
        "loop unknown",
        'loop = "LIC-102"',
        'loop = "LIC-101"',
        ('10: phase[0].loop: "LIC-101" is not a loop of the rig; it has LIC-102',),
    ),
    Case(
        "kind unknown",
        'kind = "settle"',
        'kind = "wait"',
        (
            '11: phase[0].kind: "wait" must be "settle", "output_step", "load_step" or "setpoint_step"',
        ),
    ),
    Case(
        "output step in automatic",
        'kind = "output_step"\nmode = "manual"',
        'kind = "output_step"\nmode = "automatic"',
        (
            '18: phase[1].mode: "automatic" gives the output to the controller; must be "manual"',
            '18: phase[1].mode: "automatic" comes before a manual load_step and output_step; models = "identified" wants both first',
        ),
    ),
    Case(
        "setpoint step in manual",
        'mode = "automatic"',
        'mode = "manual"',
        ('32: phase[3].mode: "manual" does not follow a setpoint; must be "automatic"',),
    ),
    Case(
        "settle with a change",
        'time_limit = "1500 s"',
        'change = "1 %"\ntime_limit = "1500 s"',
        ('13: phase[0].change: "1 %" has no meaning for a settle phase',),
    ),
    Case(
        "change missing",
        'change = "4 %"\n',
        "",
        ('14: phase[1].change: is missing; a step has a size, e.g. change = "5 %"',),
    ),
    Case(
        "change zero",
        'change = "4 %"',
        'change = "0 %"',
        ('19: phase[1].change: "0 %" is no step; it must not be 0',),
    ),
    Case(
        "change bare",
        'change = "4 %"',
        "change = 0.04",
        (
            '19: phase[1].change: 0.04 is a bare number; write a percentage with its unit, e.g. "5 %"',
        ),
    ),
    Case(
        "change beyond the span",
        'change = "4 %"',
        'change = "104 %"',
        ('19: phase[1].change: "104 %" must be at most 100 %',),
    ),
    Case(
        "output leaves its limits",
        'change = "4 %"',
        'change = "38 %"',
        (
            '19: phase[1].change: "38 %" takes the output to 96 %; it must stay within 5 to 95 %',
        ),
    ),
    Case(
        "load leaves its range",
        'change = "6 %"',
        'change = "-41 %"',
        (
            '26: phase[2].change: "-41 %" takes the load to -1 %; it must stay within 0 to 100 %',
        ),
    ),
    Case(
        "setpoint leaves the range",
        'change = "5 %"',
        'change = "51 %"',
        (
            '33: phase[3].change: "51 %" takes the setpoint to 101 %; it must stay within 0 to 100 %',
        ),
    ),
    Case(
        "time limit zero",
        'time_limit = "25 min"',
        'time_limit = "0 min"',
        ('20: phase[1].time_limit: "0 min" must be above 0 s',),
    ),
    Case(
        "nothing to identify the load from",
        'kind = "load_step"\nmode = "manual"',
        'kind = "load_step"\nmode = "automatic"',
        (
            '25: phase[2].mode: "automatic" comes before a manual load_step; models = "identified" wants both first',
        ),
    ),
    Case(
        "dwell zero", "dwell = 6.0", "dwell = 0.0", ("36: steady.dwell: 0.0 must be above 0.0",)
    ),
    Case(
        "remaining bare",
        'remaining = "2 %"',
        "remaining = 0.02",
        (
            '37: steady.remaining: 0.02 is a bare number; write a percentage with its unit, e.g. "5 %"',
        ),
    ),
    Case(
        "confidence one",
        "dwell = 6.0",
        "confidence = 1.0",
        ("36: steady.confidence: 1.0 must be below 1.0",),
    ),
    Case(
        "tolerance zero",
        'relative = "15 %"',
        'relative = "0 %"',
        ('39: tolerances.relative: "0 %" must be above 0 %',),
    ),
    Case(
        "tolerance misspelt",
        'relative = "15 %"',
        'relativ = "15 %"',
        ('39: tolerances.relativ: is not a key here; did you mean "relative"?',),
    ),
    Case(
        "unknown table",
        "[steady]",
        "[stedy]",
        ('35: stedy: is not a key of the file; did you mean "steady"?',),
    ),
    Case(
        "given not a table",
        'models = "identified"',
        'models = "given"\n[given]\noutput = 1\nload = 2\n[trial.x]',
        (
            "2: trial.settings: is missing",
            "8: given.output: 1 must be a table",
            "9: given.load: 2 must be a table",
            "10: trial.x: is not a key here; keys are name, description, law, closed_loop_time, models, settings, order_timeout",
        ),
    ),
    Case(
        "syntax",
        '[tolerances]\nrelative = "15 %"\n',
        "[tolerances",
        (
            "38: not valid TOML: Expected ']' at the end of a table declaration at the end of the file",
        ),
    ),
)


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_broken_rule_is_reported_with_line_value_and_rule(case):
    with pytest.raises(ConfigurationError) as caught:
        trial_from_text(edited(TRIAL_TEXT, case), "trial.toml", RIG)
    assert caught.value.problems == tuple(f"trial.toml:{problem}" for problem in case.problems)


def test_case_names_are_unique():
    names = [case.name for case in CASES]
    assert len(set(names)) == len(names)
