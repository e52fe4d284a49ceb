"""The verdict as JUnit XML, for build servers: a suite a phase, a case a metric.

The format has no formal standard; the elements are the ones that build servers agree on.
"""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from typing import TYPE_CHECKING

from harness.domain.verdict import Outcome
from harness.reporting.document import named_parts, number, part, parts, text, texts
from harness.reporting.words import limit_words, outcome_of, quantity, shown_unit

if TYPE_CHECKING:
    from collections.abc import Mapping

# Characters that XML 1.0 does not allow even as references (its section 2.2).
NOT_XML = re.compile("[^\t\n\r\x20-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]")

ELEMENTS = {
    Outcome.FAIL: "failure",
    Outcome.INVALID: "error",
    Outcome.NOT_DECIDABLE: "skipped",
    Outcome.SHOWN: "skipped",
}


def render_junit(document: Mapping[str, object]) -> str:
    """Return the verdict document as JUnit XML.

    A phase without metrics has one case, named after it. A run that is invalid, or failed
    outside its phases, has a suite ``run`` with that case, so that it is never green.

    Parameters
    ----------
    document : mapping
        The verdict document.
    """
    root = ET.Element(
        "testsuites", name=clean(f"{text(document, 'rig')} {text(document, 'trial')}")
    )
    _add_run(root, document)
    for phase in parts(document, "phases"):
        _add_phase(root, phase)
    for kind in ("tests", "failures", "errors", "skipped"):
        root.set(kind, str(sum(int(suite.get(kind, "0")) for suite in root)))
    ET.indent(root)
    return (
        '<?xml version="1.0" encoding="UTF-8"?>\n'
        + ET.tostring(root, encoding="unicode")
        + "\n"
    )


def _add_run(root: ET.Element, document: Mapping[str, object]) -> None:
    """Add the verdict of the whole, which no phase may carry."""
    suite = ET.SubElement(root, "testsuite", name="run")
    case = ET.SubElement(suite, "testcase", name="verdict", classname="run")
    outcome = outcome_of(text(document, "verdict"))
    _add_outcome(case, outcome, "; ".join(texts(document, "reasons")) or str(outcome))
    _count(suite)


def _add_phase(root: ET.Element, phase: Mapping[str, object]) -> None:
    start, end = number(phase, "start"), number(phase, "end")
    name = text(phase, "name")
    suite = ET.SubElement(root, "testsuite", name=clean(name))
    if start is not None and end is not None:
        suite.set("time", f"{end - start:.3f}")
    place = clean(f"{text(phase, 'loop')}.{name}")
    metrics = named_parts(phase, "metrics")
    for title, metric in metrics.items():
        case = ET.SubElement(suite, "testcase", name=clean(title), classname=place)
        _add_outcome(case, outcome_of(text(metric, "verdict")), _metric_words(metric))
    if not metrics:
        case = ET.SubElement(suite, "testcase", name=clean(name), classname=place)
        outcome = outcome_of(text(phase, "verdict") or "shown")
        _add_outcome(case, outcome, "; ".join(texts(phase, "findings")) or str(outcome))
    findings = texts(phase, "findings")
    if findings:
        ET.SubElement(suite, "system-out").text = clean("\n".join(findings))
    _count(suite)


def _add_outcome(case: ET.Element, outcome: Outcome, words: str) -> None:
    element = ELEMENTS.get(outcome)
    if element is not None:
        ET.SubElement(case, element, message=clean(words), type=str(outcome))


def _metric_words(metric: Mapping[str, object]) -> str:
    unit = text(metric, "unit")
    limit = part(metric, "limit")
    words = (
        f"measured {quantity(number(metric, 'measured'), unit)}, predicted "
        f"{quantity(number(metric, 'predicted_nonlinear'), unit)} (nonlinear), "
        f"{quantity(number(metric, 'predicted_linear'), unit)} (linear)"
    )
    if not limit:
        return words + "; shown, not judged"
    basis = text(limit, "basis")
    limits = f"{limit_words(limit, unit)} {shown_unit(unit)}".rstrip()
    return f"{words}; limit {limits}" + (f" ({basis})" if basis else "")


def _count(suite: ET.Element) -> None:
    cases = suite.findall("testcase")
    suite.set("tests", str(len(cases)))
    counted = {"failures": "failure", "errors": "error", "skipped": "skipped"}
    for kind, element in counted.items():
        suite.set(kind, str(sum(case.find(element) is not None for case in cases)))


def clean(words: str) -> str:
    """Return a text with nothing in it that XML does not allow.

    Parameters
    ----------
    words : str
        The text.
    """
    return NOT_XML.sub("\N{REPLACEMENT CHARACTER}", words)
