"""A valve driven onto its seat stays shut, however long it stands there."""

from __future__ import annotations

from harness.engine.engine import Engine


def test_a_closed_valve_passes_nothing_for_ever(two_tanks):
    engine = Engine(two_tanks(), built_in=False)
    engine.set_output("FV-1", 0.0)
    names = [column.name for column in engine.columns]
    # Long enough for a lag of 0.7 s to run below the smallest float there is.
    rows = engine.record(4000)
    flow = rows[:, names.index("FV-1.flow")]
    position = rows[:, names.index("FV-1.position")]
    assert flow[200] < 1e-9
    assert (flow[200:] <= flow[199]).all()
    assert flow[-1] == 0.0
    assert position[-1] == 0.0
