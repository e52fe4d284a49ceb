"""JUnit XML: counted right, never green for a run that is not, readable by any XML reader."""

from __future__ import annotations

import xml.etree.ElementTree as ET

import pytest

from harness.reporting.junit import render_junit


def parsed(document):
    return ET.fromstring(render_junit(document))  # noqa: S314  our own text


def suites(document):
    return {suite.get("name"): suite for suite in parsed(document)}


def test_a_suite_a_phase_and_a_case_a_metric(document):
    found = suites(document)
    assert list(found) == [
        "run",
        "settle",
        "output up",
        "load down",
        "setpoint up",
        "setpoint down",
        "load up",
    ]
    scored = found["setpoint up"]
    assert scored.get("time") == "960.000"
    names = [case.get("name") for case in scored.findall("testcase")]
    assert names == list(document["phases"][3]["metrics"])
    assert {case.get("classname") for case in scored.findall("testcase")} == {
        "LIC-102.setpoint up"
    }
    assert "two predictions differ" in scored.findtext("system-out")


def test_a_pass_has_no_failures_and_what_is_not_judged_is_skipped(document):
    root = parsed(document)
    assert (root.get("failures"), root.get("errors")) == ("0", "0")
    up = suites(document)["load up"]
    cases = {case.get("name"): case for case in up.findall("testcase")}
    assert cases["iae"].find("skipped") is None
    assert cases["overshoot"].find("skipped").get("type") == "shown"
    assert cases["settling_time_5"].find("skipped").get("type") == "not decidable"


def test_failures_tell_measured_predicted_and_limit(failed_document):
    root = parsed(failed_document)
    assert root.get("failures") == "3"  # the run's verdict and two metrics
    failed = [case for case in root.iter("testcase") if case.find("failure") is not None]
    assert [case.get("name") for case in failed] == ["verdict", "settling_time_2", "overshoot"]
    message = failed[2].find("failure").get("message")
    assert message == (
        "measured 24.10 %, predicted 13.18 % (nonlinear), 11.27 % (linear); "
        "limit 11.18 to 15.18 % (±2 % of the step around the nonlinear prediction)"
    )
    assert "measured not reached" in failed[1].find("failure").get("message")


def test_counts_add_up(failed_document):
    root = parsed(failed_document)
    assert int(root.get("tests")) == len(list(root.iter("testcase")))
    assert int(root.get("skipped")) == len(list(root.iter("skipped")))


@pytest.mark.parametrize(
    "document",
    [
        {"verdict": "invalid", "reasons": ["load up: never steady"], "phases": []},
        {"verdict": "something new"},
        {},
    ],
)
def test_what_cannot_be_judged_is_an_error(document):
    root = parsed(document)
    assert (root.get("errors"), root.get("tests")) == ("1", "1")


def test_an_invalid_phase_without_metrics_is_an_error(document):
    document["phases"][0] |= {"verdict": "invalid", "findings": ["never steady in 900 s"]}
    case = suites(document)["settle"].find("testcase")
    assert case.find("error").get("message") == "never steady in 900 s"


def test_odd_characters_stay_readable(document):
    document["phases"][0]["name"] = 'a <b> & "c"\x00\x1b'
    assert 'a <b> & "c"��' in suites(document)
