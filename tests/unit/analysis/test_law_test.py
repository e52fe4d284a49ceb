"""A step on a held input against the block's own closed form, and against the block itself."""

import math

import pytest

from harness.analysis.law_test import LawStep, check_law, law_found
from harness.controllers.block import AUTOMATIC, block_scan
from harness.domain.verdict import Outcome

SCAN = 0.5
ERROR = 0.02


def stepped(gain, integral_time, sign=1.0, scans=6, late=0):
    """Run the reference block on a held input; return times and outputs since before the step."""
    integral, output, held = 0.4, 0.4, 0
    found = []
    for scan in range(-1, scans):
        error = ERROR if scan >= 0 else 0.0
        output, integral, held = block_scan(
            0.5 - error, 0.5, False, AUTOMATIC, 0.0, gain, integral_time, sign,
            0.0, 1.0, SCAN, integral, output, held,
        )  # fmt: skip
        found.append(output)
    before, *after = found
    outputs = [0.0] * late + [output - before for output in after]
    return [SCAN * i for i in range(len(outputs))], outputs


def step_of(gain, integral_time, asked=(0.8, 5.0), span=0.5, **changes):
    times, outputs = stepped(gain, integral_time, **changes)
    limited = any(not 0.0 < 0.4 + output < 1.0 for output in outputs)
    return LawStep(
        times=times,
        outputs=outputs,
        error=ERROR,
        scan=SCAN,
        gain=asked[0],
        integral_time=asked[1],
        span=span,
        limited=limited,
    )


@pytest.mark.parametrize("late", [0, 1, 2])
def test_gain_and_integral_time_are_read_from_the_step(late):
    """u = Kc e (1 + t/Ti), t from a scan before the first (backward Euler): closed form."""
    found = law_found(step_of(0.8, 5.0, late=late))
    assert found.gain == pytest.approx(0.8, rel=1e-9)
    assert found.integral_time == pytest.approx(5.0, rel=1e-9)
    assert check_law("LIC-1", step_of(0.8, 5.0, late=late), units=True).outcome is Outcome.PASS


def test_no_integral_action_is_seen():
    assert law_found(step_of(0.8, math.inf)).integral_time == math.inf


WRONG = [
    ((0.8, 300.0), "integral time in minutes for seconds"),
    ((0.8, 5.0 / 60), "integral time in seconds for minutes"),
    ((0.8, 12.0), "integral time taken for repeats per minute"),
    ((0.8, 0.2), "integral time taken for repeats per second"),
    ((0.8, math.inf), "no integral action"),
    ((0.8, 8.0), "wrong integral time"),
    ((0.4, 5.0), "gain taken for output per unit"),
    ((1.6, 5.0), "gain per unit, not per percent of span"),
    ((0.004, 5.0), "does not act"),
    ((2.3, 5.0), "wrong gain"),
]


@pytest.mark.parametrize(("acts", "name"), WRONG)
def test_a_wrong_unit_is_named(acts, name):
    check = check_law("LIC-1", step_of(*acts), units=True)
    assert check.mistake == name, check
    assert check.outcome is (Outcome.INVALID if name == "does not act" else Outcome.FAIL)


def test_a_gain_that_drives_the_output_to_its_end_is_told_as_at_least():
    check = check_law("LIC-1", step_of(125.0, 5.0), units=True)
    assert check.mistake == "gain taken for a proportional band"
    assert check.others == ("gain times a hundred",)
    assert "at least" in check.evidence


def test_the_wrong_direction_is_named_whatever_was_ordered():
    times, outputs = stepped(0.8, 5.0, sign=-1.0)
    step = step_of(0.8, 5.0)
    wrong = LawStep(
        times=times,
        outputs=outputs,
        error=ERROR,
        scan=SCAN,
        gain=step.gain,
        integral_time=step.integral_time,
        span=step.span,
    )
    for units in (True, False):
        assert check_law("LIC-1", wrong, units=units).mistake == "reversed action"


def test_without_orders_only_the_direction_is_judged():
    assert check_law("LIC-1", step_of(2.3, 70.0), units=False).outcome is Outcome.PASS
