"""The reference block against PI sequences worked out by hand."""

from __future__ import annotations

import math

import pytest

from harness.controllers.block import AUTOMATIC, block_scan

pytestmark = pytest.mark.reference


def _outputs(errors, low=-math.inf, high=math.inf, sign=1.0):
    """Run Kc = 2, Ti = 10, Ts = 1 from rest."""
    integral, output, held = 0.0, 0.0, 0
    outputs = []
    for error in errors:
        output, integral, held = block_scan(
            -sign * error, 0.0, False, AUTOMATIC, 0.0, 2.0, 10.0, sign, low, high, 1.0,
            integral, output, held,
        )  # fmt: skip
        outputs.append(output)
    return outputs


ERRORS = [1.0, 1.0, 1.0, 0.5, 0.0, -0.5, -0.2, 0.0, 0.0, 0.0]


# Kc = 2, Ti = 10, Ts = 1, backward Euler: by hand.
@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_backward_euler_sequence(sign):
    expected = [2.2, 2.4, 2.6, 1.7, 0.7, -0.4, 0.16, 0.56, 0.56, 0.56]
    assert _outputs(ERRORS, sign=sign) == pytest.approx(expected, abs=1e-12)


def test_it_equals_the_velocity_form():
    velocity, output, before = [], 0.0, 0.0
    for error in ERRORS:
        output += 2.0 * (error - before) + 2.0 * 1.0 / 10.0 * error
        before = error
        velocity.append(output)
    assert _outputs(ERRORS) == pytest.approx(velocity, abs=1e-12)


# Output limits of 3, e = +1 for 40 scans, then -1. Conditional integration leaves the limit at
# once with -1.2, -1.4, ...; without anti-windup it would stay at +3 for 15 scans
# (K. J. Astrom & L. Rundqwist, ACC 1989, from memory; figures by hand).
def test_conditional_integration_leaves_the_limit_at_once():
    outputs = _outputs([1.0] * 40 + [-1.0] * 4, low=-3.0, high=3.0)
    assert outputs[39] == 3.0
    assert outputs[40:] == pytest.approx([-1.2, -1.4, -1.6, -1.8], abs=1e-12)
