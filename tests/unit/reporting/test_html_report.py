"""The report: self-contained, the same bytes each time, complete, and tolerant of gaps."""

from __future__ import annotations

import re
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pytest

from harness.domain.run import Event, EventKind
from harness.reporting.html import render_report
from harness.reporting.markup import gauge
from harness.reporting.report_timing import event_table
from harness.reporting.words import CAUTIONS

VOID = {"meta", "br"}


class Reader(HTMLParser):
    """Keeps the text and refuses elements that are not closed in order."""

    def __init__(self):
        super().__init__()
        self.open, self.words, self.ids, self.links, self.names = [], [], [], [], []

    def handle_starttag(self, tag, attrs):
        self.names.append(tag)
        self.note(dict(attrs))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.note(dict(attrs))

    def note(self, attributes):
        self.links += [
            attributes[key] for key in ("href", "src", "xlink:href") if key in attributes
        ]
        if "id" in attributes:
            self.ids.append(attributes["id"])

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if self.open and self.open[-1] != "style":
            self.words.append(data)

    @property
    def text(self):
        return " ".join(" ".join(self.words).split())


def read(page):
    reader = Reader()
    reader.feed(page)
    reader.close()
    assert reader.open == []
    return reader


@pytest.fixture(scope="module")
def cache():
    return {}


@pytest.fixture
def page(cache, document, all_curves, events, header):
    if "page" not in cache:
        cache["page"] = render_report(document, all_curves, events, header)
    return cache["page"]


def test_the_same_input_gives_the_same_bytes(page, document, all_curves, events, header):
    assert render_report(document, all_curves, events, header) == page


def test_it_needs_nothing_from_outside(page):
    reader = read(page)
    assert all(link.startswith("#") for link in reader.links)
    assert not {"script", "link", "img", "iframe"} & set(reader.names)
    style = re.search(r"<style>(.*?)</style>", page, re.DOTALL).group(1)
    assert "url(" not in style
    assert "@import" not in style


def test_drawings_share_no_ids_and_refer_only_to_their_own(page):
    reader = read(page)
    assert len(reader.ids) == len(set(reader.ids))
    referred = {link[1:] for link in reader.links} | set(re.findall(r"url\(#([^)]+)\)", page))
    assert referred <= set(reader.ids)
    assert page.count('role="img"') == 3


def test_everything_an_engineer_asks_for_is_there(page, header):
    text = read(page).text
    expected = [
        "Process-water make-up skid",
        "Trial: Acceptance PI",
        header.run,
        "numba 0.68.1",
        "20260305",
        "0.62 s",
        "95 % limits",
        "214.7",
        "208.0 to 221.4",
        "213.8",
        "1.527 % of output per % of span",
        "65.49 % of span",  # 100 / 1.527
        "0.3681 repeats per minute",  # 60 / 163
        "163.0 s = 2.717 min",
        "0.009368 %/% per s",  # 1.527 / 163
        "factor 4.610 = 13.27 dB",  # 20 log10 4.61
        "Skogestad",
        "506.2",
        "443.3 to 541.8",
        "13.66",
        "The two predictions differ by 1.9 % of the step",
        "not decidable",
        "0.4120 ms",
        "controller found",
        "2690.0",
        "Tested by",
        "Witnessed by",
        "Date",
        *CAUTIONS,
    ]
    assert [words for words in expected if words not in text] == []
    assert not re.search(r"\b(nan|None|inf)\b", text)


def test_a_failure_shows_in_the_head_and_at_its_metric(failed_document, header):
    page = render_report(failed_document, [], [], header)
    text = read(page).text
    assert "outside its limits" in text
    assert "Setpoint up: settling time and overshoot outside their limits." in text
    assert "not reached" in text
    assert page.count('class="outside"') == 1


def test_what_comes_from_files_is_escaped(document, all_curves, header):
    nasty = '</style><script>alert("x")</script>'
    document["phases"][3]["findings"] = [nasty]
    document["phases"][3]["name"] = nasty
    event = Event(tick=1, kind=EventKind.NOTE, subject=nasty, text=nasty)
    odd = replace(header, rig_name=nasty, trial_name=nasty)
    page = render_report(document, [replace(all_curves[0], name=nasty)], [event], odd)
    reader = read(page)
    assert "script" not in reader.names
    assert nasty in reader.text
    assert page.count("</style>") == 1


@pytest.mark.parametrize(
    "document",
    [
        {},
        {"schema": 1, "verdict": "invalid", "reasons": ["stopped by the user"]},
        {"verdict": "pass", "loops": {"LIC-102": {}}, "phases": [{"name": "settle"}]},
        {
            "verdict": "pass",
            "loops": {
                "LIC-102": {
                    "models": {"output": {"gain": 1.0}},
                    "tuning": {"law": "P", "gain": 2.0, "integral_time": None},
                }
            },
            "phases": [{"name": "x", "metrics": {"iae": {"unit": "s", "measured": 1.0}}}],
            "lateness": None,
        },
    ],
)
def test_absent_parts_are_no_trouble(document, header):
    text = read(render_report(document, [], [], header)).text
    assert "Conditions" in text
    assert "None " not in text.replace("None were recorded", "")


def test_curves_without_values_are_left_out_and_long_ones_stay_small(
    document, all_curves, header
):
    count = 200_000
    curves = all_curves[0]
    nothing = np.full(count, np.nan)
    long = replace(
        curves,
        time=np.linspace(-60, 900, count),
        setpoint=np.ones(count),
        measured=np.ones(count),
        transmitted=np.random.default_rng(1).normal(1, 0.01, count),
        predicted_linear=nothing,
        predicted_nonlinear=nothing,
        design_target=None,
        output=np.ones(count),
        output_predicted=nothing,
        load=np.ones(count),
    )
    page = render_report(document, [long], [], header)
    assert "predicted, linear model" not in page
    assert "transmitted" in page
    assert len(page) < 200_000


def test_many_events_are_cut_with_a_word(document, header):
    events = [Event(tick=i, kind=EventKind.NOTE, subject="s", text=f"t{i}") for i in range(250)]
    text = read(render_report(document, [], events, header)).text
    assert "50 more events are in the record" in text


def test_the_same_event_over_and_over_takes_one_line(header):
    events = [
        Event(tick=i, kind=EventKind.REFUSED, subject="modbus", text="no such address")
        for i in range(40)
    ]
    events.append(Event(tick=41, kind=EventKind.ORDER_KNOWN, subject="x", text="known at once"))
    text = read(event_table(events, header.tick)).text
    assert text.count("no such address") == 1
    assert "(39 more times, last at 19.5 s)" in text  # the 40th at tick 39 of 0.5 s
    assert "known at once" not in text


def test_the_title_block_fills_in_what_is_known_and_leaves_the_rest(page, document, header):
    text = read(page).text
    for words in ("Client", "Project", "Site", "Document no., revision", "Loop LIC-102"):
        assert words in text
    assert "Date of the test 2026-03-05" in text
    assert "Controller: make, type, firmware Document no." in text
    own = read(render_report(document, [], [], replace(header, controller="builtin"))).text
    assert "firmware the rig's own reference block" in own


def test_the_summary_counts_phases_and_figures(page, failed_document, header):
    # conftest: 9 judged figures in each setpoint phase, 6 in the load phase, 1 of them open
    assert (
        "3 of 3 judged phases pass; of 24 figures judged 23 lie within limits, 1 not decidable."
        in read(page).text
    )
    text = read(render_report(failed_document, [], [], header)).text
    assert "2 of 3 judged phases pass" in text
    assert "21 lie within limits, 2 outside, 1 not decidable." in text
    assert (
        "setpoint up : outside limits: settling time (2 % band) not reached, allowed 443.3 to "
        "541.8 s; overshoot 24.10 %, allowed 11.18 to 15.18 %." in text
    )


def test_the_figures_of_a_phase_that_cannot_be_judged_do_not_count(document, header):
    document["phases"][3]["verdict"] = "invalid"
    text = read(render_report(document, [], [], header)).text
    assert "2 of 2 judged phases pass; of 15 figures judged 14 lie within limits" in text
    assert "1 not decidable; 1 of 3 phases cannot be judged." in text


def test_the_controllers_scan_is_told_as_measured(document, header):
    document["loops"]["LIC-102"] |= {
        "scan": 1.0,
        "controller": {"period": 1.02, "delay": 0.62, "scans": 5947, "longest_hold": 3.0},
    }
    text = read(render_report(document, [], [], header)).text
    assert "Period, mean 1.020 s Period as the rig file has it 1 s" in text
    assert "Sample to output, median 0.6200 s" in text
    assert "Longest time without a new output 3.000 s" in text
    assert "sampled every 1.020 s with a delay of 0.6200 s" in text


def test_a_model_that_was_not_identified_is_not_compared_with_itself(document, header):
    models = document["loops"]["LIC-102"]["models"]
    for model in models.values():
        model |= {"source": "linearised", "limits": {}, "gain_engineering_unit": "m/%"}
    text = read(render_report(document, [], [], header)).text
    assert "nothing was identified" in text
    assert "Difference" not in text
    assert "m/%" in text


def test_time_constants_differ_in_seconds_and_gains_in_per_cent(page):
    text = read(page).text
    assert "+0.9 s" in text  # 214.7 against 118.2 + 90.1 + 5.5
    assert "-1.3 %" in text  # 1.284 against 1.301


def test_the_gauge_puts_the_dot_where_the_figure_is():
    inside = gauge(5.0, 5.0, 0.0, 10.0)
    assert 'cx="46.0"' in inside  # half way between 18 and 74
    assert 'class="inside"' in inside
    assert 'class="outside"' in gauge(10.1, 5.0, 0.0, 10.0)
    assert 'cx="87.0"' in gauge(1e9, None, None, 10.0)
    assert gauge(None, 5.0, 0.0, 10.0) == ""
    assert gauge(1.0, 5.0, 0.0, None) == ""
