"""The points of a rig: every value that a link can show or accept, named and with its range."""

from __future__ import annotations

from typing import TYPE_CHECKING

from harness.domain.rig import Measurement
from harness.domain.signals import Point, PointKind, Range

if TYPE_CHECKING:
    from harness.domain.rig import ControlValve, Loop, Rig, Transmitter

SECONDS_PER_HOUR = 3600.0
PERCENT = Range(lower=0.0, upper=100.0, unit="%")
GAIN = Range(lower=0.0, upper=1000.0, unit="%/%")  # a proportional band of 0.1 % at most
INTEGRAL_TIME = Range(lower=0.0, upper=100_000.0, unit="s")  # over a day; 0 is no integral
SWITCH = Range(lower=0.0, upper=1.0, unit="")
COUNTER_16 = Range(lower=0.0, upper=65_535.0, unit="")
COUNTER_32 = Range(lower=0.0, upper=4_294_967_295.0, unit="")
TICK_POINT = "TICK"
# So wide that a wrong value is received and named instead of refused: largest float32 (IEEE 754).
READ_BACK_LIMIT = 3.4028234663852886e38
_READ_BACK_ENDING = ".RB"


def points_of(rig: Rig, external: bool) -> tuple[Point, ...]:
    """Return the points of a rig, in a fixed order.

    Transmitters, valves, loops, tick; then what the controller says it has.

    Parameters
    ----------
    rig : Rig
        The rig.
    external : bool
        Whether a controller outside the rig closes its loops; only then can it write.

    Returns
    -------
    tuple of Point
        A measurement for each transmitter (flows in m3/h), command and position for each
        valve, orders and heartbeat for each loop, the tick counter; then a read-back for each
        transmitter, for setpoint and mode of each loop, and for orders carried out.
    """
    outputs = {loop.output for loop in rig.loops}
    points = [_measurement(transmitter) for transmitter in rig.transmitters]
    for valve in rig.valves:
        points += _valve_points(valve, writable=external and valve.tag in outputs)
    for loop in rig.loops:
        points += _loop_points(loop, rig, external)
    points.append(
        Point(
            name=TICK_POINT,
            kind=PointKind.TICK,
            range=COUNTER_32,
            writable=False,
            description="Tick of the values shown",
        )
    )
    return (*points, *_read_backs(rig, writable=external))


def shown_range(transmitter: Transmitter) -> Range:
    """Return a transmitter's range in the unit shown to people (flows in m3/h).

    Parameters
    ----------
    transmitter : Transmitter
        Its own range is in SI.

    Returns
    -------
    Range
        In ``m`` or ``m3/h``.
    """
    if transmitter.measures is Measurement.LEVEL:
        return transmitter.range
    return Range(
        lower=transmitter.range.lower * SECONDS_PER_HOUR,
        upper=transmitter.range.upper * SECONDS_PER_HOUR,
        unit="m3/h",
    )


def position_point(valve_tag: str) -> str:
    """Return the name of a valve's position point: ``"FV-101"`` gives ``"ZT-101"``.

    Parameters
    ----------
    valve_tag : str
        Tag of the valve, letters and loop number joined by a hyphen.

    Returns
    -------
    str
        Letters ZT (position, transmit: ISA-5.1, value from memory) and the loop number.
    """
    return "ZT-" + valve_tag.partition("-")[2]


def setpoint_point(loop_tag: str) -> str:
    """Return the name of a loop's setpoint point."""
    return f"{loop_tag}.SP"


def mode_point(loop_tag: str) -> str:
    """Return the name of a loop's mode point: 0 manual, 1 automatic."""
    return f"{loop_tag}.MODE"


def manual_output_point(loop_tag: str) -> str:
    """Return the name of a loop's manual output point."""
    return f"{loop_tag}.MO"


def gain_point(loop_tag: str) -> str:
    """Return the name of a loop's controller gain point."""
    return f"{loop_tag}.KC"


def integral_time_point(loop_tag: str) -> str:
    """Return the name of a loop's integral time point; 0 means no integral action."""
    return f"{loop_tag}.TI"


def heartbeat_point(loop_tag: str) -> str:
    """Return the name of a loop's heartbeat point."""
    return f"{loop_tag}.HB"


def read_back_point(name: str) -> str:
    """Return the name of the point where the controller says what it has for another point.

    Parameters
    ----------
    name : str
        Name of a transmitter's, setpoint's or mode's point, e.g. ``"LT-102"``.

    Returns
    -------
    str
        E.g. ``"LT-102.RB"``, ``"LIC-102.SP.RB"``.
    """
    return name + _READ_BACK_ENDING


def acknowledge_point(loop_tag: str) -> str:
    """Return the name of the point that changes when somebody has carried out an order."""
    return f"{loop_tag}.ACK"


def _read_backs(rig: Rig, writable: bool) -> tuple[Point, ...]:
    """Return the read-backs: transmitters, setpoint and mode of each loop; orders carried out."""
    shown = [
        (transmitter.tag, shown_range(transmitter).unit) for transmitter in rig.transmitters
    ]
    for loop in rig.loops:
        unit = shown_range(rig.transmitter(loop.process_variable)).unit
        shown += [(setpoint_point(loop.tag), unit), (mode_point(loop.tag), "")]
    told = [
        (read_back_point(name), unit, f"{name} as the controller has it")
        for name, unit in shown
    ]
    told += [
        (acknowledge_point(loop.tag), "", f"Changed when an order is carried out ({loop.tag})")
        for loop in rig.loops
    ]
    return tuple(
        Point(
            name=name,
            kind=PointKind.READ_BACK,
            range=Range(lower=-READ_BACK_LIMIT, upper=READ_BACK_LIMIT, unit=unit),
            writable=writable,
            description=text,
        )
        for name, unit, text in told
    )


def _measurement(transmitter: Transmitter) -> Point:
    what = "Level of" if transmitter.measures is Measurement.LEVEL else "Flow through"
    return Point(
        name=transmitter.tag,
        kind=PointKind.MEASUREMENT,
        range=shown_range(transmitter),
        writable=False,
        description=f"{what} {transmitter.subject}",
    )


def _valve_points(valve: ControlValve, writable: bool) -> tuple[Point, Point]:
    command = Point(
        name=valve.tag,
        kind=PointKind.COMMAND,
        range=PERCENT,
        writable=writable,
        description=f"Command to {valve.tag}",
    )
    position = Point(
        name=position_point(valve.tag),
        kind=PointKind.POSITION,
        range=PERCENT,
        writable=False,
        description=f"Travel of {valve.tag}",
    )
    return command, position


def _loop_points(loop: Loop, rig: Rig, external: bool) -> tuple[Point, ...]:
    tag = loop.tag
    measured = shown_range(rig.transmitter(loop.process_variable))
    orders = (
        (setpoint_point(tag), PointKind.SETPOINT, measured, "Setpoint ordered"),
        (mode_point(tag), PointKind.MODE, SWITCH, "Mode ordered: 0 manual, 1 automatic"),
        (
            manual_output_point(tag),
            PointKind.MANUAL_OUTPUT,
            PERCENT,
            "Output ordered in manual",
        ),
        (gain_point(tag), PointKind.GAIN, GAIN, "Controller gain ordered"),
        (
            integral_time_point(tag),
            PointKind.INTEGRAL_TIME,
            INTEGRAL_TIME,
            "Integral time ordered; 0 is no integral action",
        ),
        (heartbeat_point(tag), PointKind.HEARTBEAT, COUNTER_16, "Heartbeat of the controller"),
    )
    return tuple(
        Point(
            name=name,
            kind=kind,
            range=shown,
            writable=external and kind is PointKind.HEARTBEAT,
            description=f"{text} ({tag})",
        )
        for name, kind, shown, text in orders
    )
