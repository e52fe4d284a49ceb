"""Ranges, quality and the points that a rig shows to the outside."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum, StrEnum


class Quality(IntEnum):
    """Trust in a transmitted value; the number is what the record and the image hold."""

    GOOD = 0
    UNCERTAIN = 1
    BAD = 2


@dataclass(frozen=True, slots=True, kw_only=True)
class Range:
    """A calibrated range in engineering units.

    Parameters
    ----------
    lower : float
        Lower range value [unit].
    upper : float
        Upper range value; greater than ``lower`` [unit].
    unit : str
        Unit as shown to people, e.g. ``"m"``, ``"m3/h"``, ``"%"``, ``"s"``, ``""`` [-].
    """

    lower: float
    upper: float
    unit: str

    @property
    def span(self) -> float:
        """Return the upper minus the lower range value [unit]."""
        return self.upper - self.lower

    def to_fraction(self, value: float) -> float:
        """Return the value as fraction of span, unclamped [-]."""
        return (value - self.lower) / self.span

    def from_fraction(self, fraction: float) -> float:
        """Return the engineering value of a fraction of span, unclamped [unit]."""
        return self.lower + fraction * self.span


class PointKind(StrEnum):
    """What a point is to the controller; links need no more to decide how to show it."""

    MEASUREMENT = "measurement"
    POSITION = "position"
    COMMAND = "command"
    SETPOINT = "setpoint"
    MODE = "mode"
    MANUAL_OUTPUT = "manual_output"
    GAIN = "gain"
    INTEGRAL_TIME = "integral_time"
    HEARTBEAT = "heartbeat"
    TICK = "tick"
    READ_BACK = "read_back"  # what the controller says it has


@dataclass(frozen=True, slots=True, kw_only=True)
class Point:
    """One named value of the rig that a link can show or accept.

    The image carries, for every point, its value in the point's unit, its loop current
    (NaN where the point is not a 4-20 mA signal) and its quality.

    Parameters
    ----------
    name : str
        Name, e.g. ``"LT-102"``, ``"FV-101"``, ``"LIC-102.SP"``, ``"LIC-102.MODE"``.
    kind : PointKind
        Role of the point.
    range : Range
        Range and unit; written values outside it are refused.
    writable : bool
        Whether a controller may write it.
    description : str
        One line for people.
    """

    name: str
    kind: PointKind
    range: Range
    writable: bool
    description: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Exchange:
    """One write (or a condensed record of reads) seen on a link.

    Parameters
    ----------
    link : str
        Name of the link in the rig file.
    arrival_ns : int
        ``perf_counter_ns`` when the last byte of the request was there [ns].
    peer : str
        ``host:port`` of the other end, or the session's name.
    connection : int
        Number of the connection, unique within the link and the run [-].
    function : str
        ``"FC16"``, ``"Write"``, ...
    address : str
        Register address or node id as text.
    point : str
        Name of the point; empty where the exchange touched none.
    value : float
        Value in the point's unit.
    raw : str
        The raw value as hexadecimal text or number.
    image_tick : int
        Tick of the image that this connection read last before the write; -1 when none [ticks].
    """

    link: str
    arrival_ns: int
    peer: str
    connection: int
    function: str
    address: str
    point: str
    value: float
    raw: str
    image_tick: int
