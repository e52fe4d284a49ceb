"""What a tuning rule returns, in its own published form."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.tuning.forms import Form, IdealForm, SeriesForm, series_to_ideal
from harness.tuning.process import PidSettings

if TYPE_CHECKING:
    from harness.domain.rig import Action

DERIVATIVE_DIVISOR = 10.0  # Td/Tf where nothing is said: common practice, 8 to 20 in blocks


@dataclass(frozen=True, slots=True, kw_only=True)
class RuleSettings:
    """Settings in the form that the rule is published in; the gain is positive.

    Parameters
    ----------
    gain : float
        Kc of that form [fraction of output per fraction of PV span].
    integral_time : float or None
        Ti of that form; None for no integral action [s].
    derivative_time : float
        Td of that form [s].
    form : Form
        Ideal or series; without derivative they are the same.
    """

    gain: float
    integral_time: float | None
    derivative_time: float = 0.0
    form: Form = Form.IDEAL


def ideal_settings(
    found: RuleSettings,
    action: Action,
    derivative_filter: float | None = None,
    *,
    derivative_on_error: bool = False,
) -> PidSettings:
    """Return the settings of an ideal block that does the same.

    Parameters
    ----------
    found : RuleSettings
        As the rule gives them.
    action : Action
        Direct or reverse.
    derivative_filter : float or None
        Lag on the derivative part; None for a tenth of the derivative time [s].
    derivative_on_error : bool
        Whether the derivative sees the setpoint too.

    Returns
    -------
    PidSettings
        Ideal form.
    """
    gain, integral, derivative = found.gain, found.integral_time, found.derivative_time
    if found.form is Form.SERIES and derivative > 0.0 and integral is not None:
        ideal = series_to_ideal(
            SeriesForm(gain=gain, integral_time=integral, derivative_time=derivative)
        )
        gain, integral, derivative = ideal.gain, ideal.integral_time, ideal.derivative_time
    lag = derivative / DERIVATIVE_DIVISOR if derivative_filter is None else derivative_filter
    return PidSettings(
        gain=gain,
        integral_time=integral,
        derivative_time=derivative,
        derivative_filter=lag if derivative > 0.0 else 0.0,
        derivative_on_error=derivative_on_error,
        action=action,
    )


def ideal_form(settings: PidSettings) -> IdealForm:
    """Return settings with integral action as an ideal form.

    Parameters
    ----------
    settings : PidSettings
        Settings; no integral action counts as an infinite time.
    """
    return IdealForm(
        gain=settings.gain,
        integral_time=float("inf")
        if settings.integral_time is None
        else settings.integral_time,
        derivative_time=settings.derivative_time,
    )
