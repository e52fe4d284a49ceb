"""Drawing keeps every peak."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from harness.reporting.plots import STYLES, line_sample, phase_drawing, thinned


def test_thinning_keeps_ends_and_peaks():
    time = np.arange(100_000.0)
    values = np.sin(time / 5000)
    values[[12_345, 77_777]] = 9.0, -9.0
    thin_time, thin = thinned(time, values)
    assert thin.size <= 1202
    assert (thin.max(), thin.min()) == (9.0, -9.0)
    assert thin_time[[0, -1]].tolist() == [0.0, 99_999.0]
    assert (np.diff(thin_time) > 0).all()
    np.testing.assert_array_equal(thin, values[thin_time.astype(int)])


def test_thinning_leaves_gaps_and_short_curves():
    time = np.arange(5000.0)
    values = np.where(time < 2500, np.nan, time)
    _, thin = thinned(time, values)
    assert np.nanmax(thin) == 4999
    short = np.arange(10.0)
    assert thinned(short, short)[0] is short


def test_no_two_curves_share_a_line_style_in_grey():
    styles = {
        (str(style["linestyle"]), round(style["linewidth"], 1))
        for name, style in STYLES.items()
    }
    assert len(styles) == len(STYLES)
    assert "stroke-dasharray" not in line_sample("measured")
    assert "stroke-dasharray" in line_sample("predicted_linear")


def test_the_settling_band_stands_where_the_response_settles(all_curves):
    curves = all_curves[0]
    last = float(curves.setpoint[-1])
    at_setpoint = phase_drawing(curves)
    assert phase_drawing(replace(curves, band_centre=last)) == at_setpoint
    assert phase_drawing(replace(curves, band_centre=last - 0.02)) != at_setpoint
