"""What stands out: each thing once, and no misses where nothing can be judged."""

from __future__ import annotations

from harness.reporting.summary import findings_told, judged_phases, misses


def test_the_same_finding_of_two_phases_is_told_once(document):
    for phase in document["phases"][3:5]:
        phase["findings"] = ["The step is large."]
    document["phases"][5]["findings"] = []
    assert findings_told(document) == [
        ("The step is large.", ["setpoint up", "setpoint down"]),
    ]


def test_what_the_reasons_say_is_not_said_again(document):
    document["reasons"] = ["phase 'load up': an output was held for 12 s. Look at the link"]
    document["phases"][3]["findings"] = []
    document["phases"][5]["findings"] = ["An output was held for 12 s. Look at the link."]
    assert findings_told(document) == []


def test_the_first_misses_have_figures_and_the_others_names(document):
    phase = document["phases"][3]
    phase["verdict"] = "fail"
    for name in ("settling_time_2", "overshoot", "rise_time", "iae", "offset"):
        phase["metrics"][name]["verdict"] = "fail"
    [(name, words)] = misses(judged_phases(document))
    assert name == "setpoint up"
    assert words.startswith("outside limits: settling time (2 % band) 506.2 s, allowed 443.3")
    assert words.endswith("rise time 118.4 s, allowed 104.5 to 127.7 s; also IAE, offset.")


def test_a_phase_that_cannot_be_judged_has_no_misses(document):
    phase = document["phases"][3]
    phase["verdict"] = "invalid"
    phase["metrics"]["overshoot"]["verdict"] = "fail"
    assert misses(judged_phases(document)) == []
