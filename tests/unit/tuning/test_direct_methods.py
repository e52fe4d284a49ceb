import math

import numpy as np
import pytest

from harness.domain.models import LagModel
from harness.errors import DataError
from harness.tuning.direct import area_method, two_point_28_63, two_point_35_85
from harness.tuning.response import unit_step

METHODS = [two_point_28_63, two_point_35_85, area_method]


def test_rules_on_a_first_order_curve():
    # t_p = theta - tau ln(1 - p) put into each rule; the area method is exact there
    lag, dead = 40.0, 15.0
    early, late = (dead - lag * math.log(1 - p) for p in (0.353, 0.853))
    model = LagModel(gain=-0.6, time_constants=(lag,), dead_time=dead)
    time = np.arange(0.0, 900.0, 0.05)
    expected = {
        two_point_28_63: 1.5 * lag * math.log(0.717 / 0.368),
        two_point_35_85: 0.67 * (late - early),
        area_method: lag,
    }
    for method, lag_found in expected.items():
        found = method(time, 0.1 * unit_step(model, time), 0.1, -0.06)
        assert found.gain == pytest.approx(-0.6)
        assert found.time_constants[0] == pytest.approx(lag_found, abs=2e-3)
    assert two_point_35_85(time, unit_step(model, time), 1.0, -0.6).dead_time == pytest.approx(
        1.3 * early - 0.29 * late, abs=1e-3
    )
    assert area_method(time, unit_step(model, time), 1.0, -0.6).dead_time == pytest.approx(
        dead, abs=2e-3
    )


@pytest.mark.parametrize("method", METHODS)
def test_curves_that_do_not_serve_are_refused(method):
    time = np.arange(0.0, 20.0, 1.0)
    with pytest.raises(DataError, match="may be 0"):
        method(time, time, 0.0, 1.0)
    with pytest.raises(DataError, match="no numbers"):
        method(time, np.where(time > 3, np.nan, 0.0), 0.1, 1.0)
    with pytest.raises(DataError, match="shape"):
        method(time, time[:-1], 0.1, 1.0)


def test_an_unfinished_response_is_refused():
    time = np.arange(0.0, 20.0, 1.0)
    slow = 0.02 * time
    with pytest.raises(DataError, match=r"never reaches 63.2%"):
        two_point_28_63(time, slow, 0.1, 1.0)
    with pytest.raises(DataError, match="starts above"):
        two_point_35_85(time, slow + 0.5, 0.1, 1.0)
    with pytest.raises(DataError, match="not finished"):
        area_method(time, -slow, 0.1, 1.0)
