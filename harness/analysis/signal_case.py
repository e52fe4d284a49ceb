"""What is known of a signal that is checked: what was forced, what the controller says."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from harness.domain.rig import RegisterItem
    from harness.domain.signals import Point
    from harness.domain.verdict import Outcome

# NAMUR NE 43: measurement 3.8 to 20.5 mA; failure at most 3.6 or at least 21.0 mA.
FAILURE_LOW_MA = 3.6
MEASUREMENT_LOW_MA = 3.8
MEASUREMENT_HIGH_MA = 20.5
FAILURE_HIGH_MA = 21.0
LIVE_ZERO_MA = 4.0  # of a 4-20 mA loop [mA] (IEC 60381-1, value from memory)
SPAN_MA = 16.0  # from 4 to 20 mA [mA] (IEC 60381-1, value from memory)

Registers = Mapping[int, int]


class Band(StrEnum):
    """Where a loop current lies."""

    FAILURE_LOW = "failure, low"
    BELOW = "between failure and measurement, low"
    UNDER_RANGE = "under-range"
    MEASUREMENT = "measurement"
    OVER_RANGE = "over-range"
    ABOVE = "between measurement and failure, high"
    FAILURE_HIGH = "failure, high"

    @property
    def failed(self) -> bool:
        """Return whether the current says that the transmitter has failed."""
        return self in {Band.FAILURE_LOW, Band.FAILURE_HIGH}

    @property
    def undefined(self) -> bool:
        """Return whether the current is neither a measurement nor a failure."""
        return self in {Band.BELOW, Band.ABOVE}


def band_of(current_ma: float) -> Band:
    """Return the band of a loop current after NAMUR NE 43.

    Parameters
    ----------
    current_ma : float
        Loop current [mA].

    Returns
    -------
    Band
        From 3.8 to 20.5 mA a measurement, beyond 4 and 20 mA an under- or over-range one.
    """
    edges = (
        (current_ma <= FAILURE_LOW_MA, Band.FAILURE_LOW),
        (current_ma < MEASUREMENT_LOW_MA, Band.BELOW),
        (current_ma < LIVE_ZERO_MA, Band.UNDER_RANGE),
        (current_ma <= LIVE_ZERO_MA + SPAN_MA, Band.MEASUREMENT),
        (current_ma <= MEASUREMENT_HIGH_MA, Band.OVER_RANGE),
        (current_ma < FAILURE_HIGH_MA, Band.ABOVE),
    )
    return next((band for inside, band in edges if inside), Band.FAILURE_HIGH)


def fraction_of(current_ma: float) -> float:
    """Return (I - 4)/16: the fraction of span that a current stands for [-].

    Parameters
    ----------
    current_ma : float
        Loop current [mA].
    """
    return (current_ma - LIVE_ZERO_MA) / SPAN_MA


@dataclass(frozen=True, slots=True, kw_only=True)
class Said:
    """One test point of a transmitter.

    Parameters
    ----------
    current_ma : float
        Current forced [mA].
    said : float or None
        What the controller says it reads, in its own unit; not a number where it says that it
        has no value; None where it said nothing [unit].
    registers : mapping of int to int
        Registers of the link at that time, by address counted from 0; empty where there are
        none [-].
    others : mapping of str to float
        Values of the rig's other measurements at that time, each in its unit.
    age : float or None
        Age of what the controller worked on when it said so [s].
    """

    current_ma: float
    said: float | None
    registers: Registers = field(default_factory=dict)
    others: Mapping[str, float] = field(default_factory=dict)
    age: float | None = None

    @property
    def fraction(self) -> float:
        """Return the fraction of span forced [-]."""
        return fraction_of(self.current_ma)

    @property
    def band(self) -> Band:
        """Return the band of the current forced."""
        return band_of(self.current_ma)

    @property
    def number(self) -> float:
        """Return what was said, not a number where there was none [unit]."""
        return math.nan if self.said is None else self.said


@dataclass(frozen=True, slots=True, kw_only=True)
class TransmitterCase:
    """A transmitter with everything that a mistake could have to do with.

    Parameters
    ----------
    point : Point
        The transmitter's point.
    items : tuple of RegisterItem
        Where the link shows it; empty over OPC UA.
    neighbours : tuple of (Point, RegisterItem)
        The rest of the link's map.
    points : tuple of Said
        Test points in order.
    tolerance : float
        Allowed distance [fraction of span].
    """

    point: Point
    items: tuple[RegisterItem, ...]
    neighbours: tuple[tuple[Point, RegisterItem], ...]
    points: tuple[Said, ...]
    tolerance: float = 0.0025  # a 12 bit converter and a display of three digits: both below it

    @property
    def measured(self) -> tuple[Said, ...]:
        """Return the points at which the current is a measurement."""
        return tuple(p for p in self.points if not (p.band.failed or p.band.undefined))

    @property
    def unit(self) -> str:
        """Return the transmitter's unit."""
        return self.point.range.unit


@dataclass(frozen=True, slots=True, kw_only=True)
class ValvePoint:
    """One test point of a valve.

    Parameters
    ----------
    told : float
        Output that the controller was told to put out [%].
    received : float or None
        What the rig received; None where nothing came [%].
    raw : str
        The registers as they came, hexadecimal; empty where unknown.
    refused : tuple of str
        What the rig refused meanwhile, in words.
    """

    told: float
    received: float | None
    raw: str = ""
    refused: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class TagCheck:
    """Whether a tag is right, and if not, what is wrong with it.

    Parameters
    ----------
    tag : str
        The tag.
    outcome : Outcome
        Pass, fail, or invalid where nothing could be told.
    mistake : str
        Name of the mistake; empty for none.
    evidence : str
        What says so, in a sentence.
    look_at : str
        What to look at; empty for a pass.
    others : tuple of str
        Mistakes that explain the same points as well.
    notes : tuple of str
        What is worth knowing though nothing is wrong with it.
    """

    tag: str
    outcome: Outcome
    mistake: str = ""
    evidence: str = ""
    look_at: str = ""
    others: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
