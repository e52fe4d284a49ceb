"""The reference block: positional PI, backward-Euler integral, conditional anti-windup."""

from __future__ import annotations

from plants.compile import kernel

MANUAL = 0
AUTOMATIC = 1


@kernel
def block_scan(
    process_variable: float,
    setpoint: float,
    bad: bool,
    mode: int,
    manual_output: float,
    gain: float,
    integral_time: float,
    sign: float,
    output_low: float,
    output_high: float,
    scan: float,
    integral: float,
    output: float,
    held: int,
) -> tuple[float, float, int]:
    """Execute one scan of the block and return its new state.

    The output is ``gain * e + integral`` with ``e = sign * (setpoint - process_variable)``.
    In manual the integral tracks, so that the transfer to automatic is bumpless. On a bad
    input the output holds, and on recovery it continues from where it stood. Integration stops
    while the output is at a limit and the error pushes further out (conditional integration:
    K. J. Astrom & L. Rundqwist, ACC 1989, value from memory).

    Parameters
    ----------
    process_variable, setpoint : float
        Fractions of the process variable's span [-].
    bad : bool
        Whether the process variable's quality is bad.
    mode : int
        MANUAL or AUTOMATIC [-].
    manual_output : float
        Output in manual [-].
    gain : float
        Kc, positive [-].
    integral_time : float
        Ti; infinite for a P block [s].
    sign : float
        +1 for reverse action, -1 for direct action [-].
    output_low, output_high : float
        Output limits [-].
    scan : float
        Scan period [s].
    integral, output : float
        State: integral part and last output [-].
    held : int
        State: 1 after a scan with a bad input [-].

    Returns
    -------
    output : float
        New output [-].
    integral : float
        New integral part [-].
    held : int
        New hold flag [-].
    """
    if bad and mode == AUTOMATIC:
        return output, integral, 1
    error = sign * (setpoint - process_variable)
    if mode == MANUAL:
        limited = min(max(manual_output, output_low), output_high)
        if not bad:
            integral = limited - gain * error
        return limited, integral, 1 if bad else 0
    if held == 1:
        integral = output - gain * error
    increment = gain * scan / integral_time * error
    wanted = gain * error + integral + increment
    # Past a limit the integral goes on only as far as the output itself: no further than the
    # limit, and not at all where the proportional part is beyond it.
    if wanted > output_high and increment > 0.0:
        integral = max(integral, min(integral + increment, output_high - gain * error))
    elif wanted < output_low and increment < 0.0:
        integral = min(integral, max(integral + increment, output_low - gain * error))
    else:
        integral += increment
    wanted = gain * error + integral
    return min(max(wanted, output_low), output_high), integral, 0
