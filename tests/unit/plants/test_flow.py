"""Flow equations: signs, zeros, limits, and resistances in series."""

from __future__ import annotations

import math

import pytest

from plants.flow import (
    liquid_flow,
    orifice_coefficient,
    orifice_flow,
    series_coefficient,
    weir_coefficient,
    weir_flow,
)


def test_nothing_leaves_a_dry_vessel_or_passes_below_a_crest():
    assert orifice_flow(1.0, 0.0) == 0.0
    assert orifice_flow(1.0, -1e-9) == 0.0
    assert weir_flow(1.0, 0.0) == 0.0
    assert weir_flow(1.0, -0.1) == 0.0


def test_orifice_is_torricellis_jet():
    coefficient = orifice_coefficient(0.61, 2e-4, 9.81)
    jet = math.sqrt(2 * 9.81 * 0.7)
    assert orifice_flow(coefficient, 0.7) == pytest.approx(0.61 * 2e-4 * jet, rel=1e-14)


def test_weir_is_the_integral_of_jets_over_its_head():
    """Poleni: the jets sqrt(2 g z) added up from the crest to the surface."""
    steps, head, width = 20_000, 0.13, 0.4
    jets = (math.sqrt(2 * 9.81 * (i + 0.5) * head / steps) for i in range(steps))
    total = 0.6 * width * head / steps * sum(jets)
    assert weir_flow(weir_coefficient(0.6, width, 9.81), head) == pytest.approx(total, rel=1e-6)


def test_pressure_drops_in_series_add():
    flow, density, valve, line = 3e-3, 950.0, 11.0, 7.0

    def drop(kv):
        return (flow / liquid_flow(kv, 1.0, density)) ** 2

    both = series_coefficient(valve, line)
    assert drop(both) == pytest.approx(drop(valve) + drop(line), rel=1e-13)
    assert series_coefficient(valve, 0.0) == valve  # a line without resistance
    assert series_coefficient(0.0, line) == 0.0


def test_a_kv_of_one_passes_a_cubic_metre_an_hour_of_water_at_one_bar():
    # Definition of Kv (IEC 60534-1, value from memory): water of 5 to 40 degC, 1 bar, m3/h.
    assert liquid_flow(1.0, 1e5, 999.1) * 3600 == pytest.approx(1.0, rel=1e-14)


def test_flow_follows_the_sign_of_the_pressure_drop():
    assert liquid_flow(5.0, -3e4, 998.0) == -liquid_flow(5.0, 3e4, 998.0)
    assert liquid_flow(5.0, 0.0, 998.0) == 0.0
