"""Drawing keeps every peak."""

from __future__ import annotations

import numpy as np

from harness.reporting.plots import STYLES, line_sample, thinned


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
