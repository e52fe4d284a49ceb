"""What any record must satisfy, whoever closed the loop: integral of error, balance of mass."""

from __future__ import annotations

import math

import numpy as np
import pytest

from harness.analysis.metrics import integral_identity
from harness.analysis.nonlinear import settings_of
from harness.analysis.run_data import phases_of
from harness.analysis.schedule import scan_log


def settings_and_phases(data):
    loop = data.rig.loops[0]
    (settings,) = settings_of(data, loop).values()
    spans = [span for span in phases_of(data) if span.mode == "automatic"]
    return loop, settings, spans


@pytest.mark.parametrize("made", ["builtin", "external"])
def test_the_integral_of_the_error_is_ti_over_kc_times_the_change_of_output(runs, made):
    """For any change, on the nonlinear rig too: Ti / Kc of an unsaturated PI trace.

    With the error as the block saw it, at its own scans, summed by right-hand rectangles as a
    backward-Euler integral does, it holds to rounding.
    """
    data = runs.builtin("acceptance_pi") if made == "builtin" else runs.external("short")
    loop, settings, spans = settings_and_phases(data)
    assert len(spans) >= 3
    expected = settings.integral_time / settings.gain
    for span in spans:
        log = scan_log(data, loop).within(span.start, span.end)
        error = data.setpoint(loop)[log.read] - data.process_variable(loop, "value")[log.read]
        assert np.max(log.outputs) < loop.output_high
        assert np.min(log.outputs) > loop.output_low
        found = integral_identity(
            log.read * data.rig.tick,
            error,
            log.outputs,
            gain=settings.gain,
            integral_time=settings.integral_time,
            right_rectangles=True,
        )
        assert found.error_integral == pytest.approx(found.expected, abs=1e-9)
        if span.kind != "settle":
            assert found.time_per_gain == pytest.approx(expected, rel=1e-6)


def test_on_the_true_level_it_holds_but_for_what_noise_adds(runs):
    """The area under the recorded error and the lasting move of the output give Ti / Kc to 3 %."""
    data = runs.builtin("acceptance_pi")
    loop, settings, spans = settings_and_phases(data)
    for span in spans:
        if span.kind == "settle":
            continue
        window = slice(span.zero, span.end)
        error = data.setpoint(loop)[window] - data.process_variable(loop)[window]
        area = float(np.sum(error)) * data.rig.tick
        output = data.trace[f"{loop.output}.command"]
        moved = float(np.mean(output[span.end - 100 : span.end])) - float(
            np.mean(output[span.start - 100 : span.start])
        )
        assert area / moved == pytest.approx(settings.integral_time / settings.gain, rel=0.03)


@pytest.mark.parametrize("trial", ["acceptance_pi", "acceptance_p", "short"])
def test_what_came_in_is_what_went_out_and_what_is_there(runs, trial):
    """Mass balance of the whole rig from the record's own columns, at every row, to 1e-9."""
    data = runs.builtin(trial)
    held = sum(
        math.pi * vessel.shape.diameter**2 / 4.0 * data.trace[f"{tag}.true"]
        for vessel, tag in zip(data.rig.vessels, ("LT-101", "LT-102"), strict=True)
    )
    came = data.trace["total.in"]
    gone = data.trace["total.out"] + data.trace["total.spilled"]
    assert came[-1] > 5.0  # cubic metres: the tanks, half full, many times over
    assert np.max(np.abs(held - held[0] - (came - gone))) < 1e-9 * came[-1]
    assert data.trace["total.spilled"][-1] == 0.0


def test_the_inflow_s_total_is_the_integral_of_the_recorded_flows(runs):
    data = runs.builtin("short")
    flow = (data.trace["FV-101.flow"] + data.trace["FV-102.flow"]) / 3600.0
    summed = np.sum((flow[1:] + flow[:-1]) / 2.0) * data.rig.tick
    # By trapezoids on the samples: the valves move within a tick, by noise of a tenth of a percent.
    assert data.trace["total.in"][-1] == pytest.approx(summed, rel=1e-5)
