"""Mistakes of a map, a unit, a sign or a range, made in the soft PLC on purpose.

`MISTAKES` is the table: each mistake alters the map or the points that the client is given, what
it reads or writes, or the block. Each is found by the pre-flight or by the command ``signals``
under the name that stands beside it.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

from harness.domain.points import (
    gain_point,
    heartbeat_point,
    manual_output_point,
    mode_point,
    setpoint_point,
)
from harness.domain.rig import (
    Encoding,
    Loop,
    ModbusServerLink,
    RegisterItem,
    Scaling,
    WordOrder,
)
from harness.domain.signals import Point, PointKind, Quality, Range
from harness.errors import UsageError
from harness.links.client import Reading
from harness.runtime.plc_block import NO_FAULTS, SoftPlcFaults

if TYPE_CHECKING:
    from collections.abc import Sequence

    from harness.links.client import FieldClient

_SECONDS_PER_MINUTE = 60.0
_LEAST, _MOST = -0.1, 1.1  # beyond what any current of a transmitter shows [fraction of span]
_STUCK = 7.0  # counts of a heartbeat that stands still [-]


@dataclass(frozen=True, slots=True, kw_only=True)
class Setup:
    """What the soft PLC works with, and what a mistake alters of it.

    Parameters
    ----------
    loop : Loop
        The loop.
    link : ModbusServerLink
        Map and unit that the client is given.
    points : tuple of Point
        Points that the client is given.
    faults : SoftPlcFaults
        Faults of the block.
    reading : mapping of str to callable
        By point: what is made of a reading.
    writing : mapping of str to callable
        By point: what is made of a value to be written [unit].
    """

    loop: Loop
    link: ModbusServerLink
    points: tuple[Point, ...]
    faults: SoftPlcFaults = NO_FAULTS
    reading: Mapping[str, Callable[[Reading], Reading]] = field(default_factory=dict)
    writing: Mapping[str, Callable[[float], float]] = field(default_factory=dict)

    @property
    def range(self) -> Range:
        """Return the range of the process variable."""
        return next(p.range for p in self.points if p.name == self.loop.process_variable)


@dataclass(frozen=True, slots=True, kw_only=True)
class Mistake:
    """One mistake.

    Parameters
    ----------
    name : str
        What the command line calls it.
    found_as : str
        Name under which it is found.
    apply : callable
        Alters the setup.
    by_signals : bool
        Whether only the full check of all signals finds it, at currents that the short check
        before a trial does not force.
    """

    name: str
    found_as: str
    apply: Callable[[Setup], Setup]
    by_signals: bool = False


def _item_of(setup: Setup, name: str, scaling: Scaling) -> RegisterItem:
    """Return the item of the map that shows a point in some scaling."""
    for item in setup.link.items:
        if item.point == name and item.scaling is scaling and item.encoding is not Encoding.BIT:
            return item
    raise UsageError(
        f"link {setup.link.name}: {name} is not shown in {scaling.value}; this mistake needs it"
    )


def _item(
    name: str | None, shown_in: Scaling = Scaling.ENGINEERING, /, **changes: Any
) -> _Apply:
    """Return the change of one item; None stands for the process variable."""

    def apply(setup: Setup) -> Setup:
        point = name or setup.loop.process_variable
        item = _item_of(setup, point, shown_in)
        shift = changes.get("address")
        altered = {key: value for key, value in changes.items() if key != "address"}
        if isinstance(shift, int):
            altered["address"] = item.address + shift
        wrong = replace(item, **altered)
        return _with_item(setup, wrong)

    return apply


def _with_item(setup: Setup, wrong: RegisterItem) -> Setup:
    """Return a setup whose first item of a point is the wrong one: the first is what is read."""
    others = tuple(item for item in setup.link.items if item.point != wrong.point)
    return replace(setup, link=replace(setup.link, items=(wrong, *others)))


def _at_valve(**changes: Any) -> _Apply:
    return lambda setup: _item(setup.loop.output, **changes)(setup)


def _all_shifted(setup: Setup) -> Setup:
    """Count every register from 1."""
    items = tuple(replace(item, address=item.address + 1) for item in setup.link.items)
    return replace(setup, link=replace(setup.link, items=items))


def _swapped(setup: Setup) -> Setup:
    """Link the process variable to the registers of another level, or of any other transmitter."""
    own = _item_of(setup, setup.loop.process_variable, Scaling.ENGINEERING)
    unit = setup.range.unit
    others = [
        point
        for point in setup.points
        if point.kind is PointKind.MEASUREMENT and point.name != own.point
    ]
    others.sort(key=lambda point: point.range.unit != unit)
    other = _item_of(setup, others[0].name, Scaling.ENGINEERING)
    once = _with_item(setup, replace(own, address=other.address))
    return _with_item(once, replace(other, address=own.address))


def _wrong_range(setup: Setup) -> Setup:
    """Scale the counts of the process variable onto more than its range."""
    setup = _item(None, Scaling.COUNTS)(setup)
    limits = setup.range
    wide = replace(limits, upper=limits.lower + 1.6 * limits.span)
    return replace(
        setup,
        points=tuple(
            replace(point, range=wide) if point.name == setup.loop.process_variable else point
            for point in setup.points
        ),
    )


def _wrong_valve(setup: Setup) -> Setup:
    """Write the output where the load valve's command is shown."""
    load = _item_of(setup, setup.loop.load, Scaling.ENGINEERING)
    own = _item_of(setup, setup.loop.output, Scaling.ENGINEERING)
    return _with_item(setup, replace(own, address=load.address))


def _unsigned(setup: Setup) -> Setup:
    """Take the first signed register of a transmitter for an unsigned one."""
    for item in setup.link.items:
        if item.encoding is Encoding.INT16 and item.scaling is Scaling.COUNTS:
            return _with_item(setup, replace(item, encoding=Encoding.UINT16))
    raise UsageError(f"link {setup.link.name}: no transmitter in int16; this mistake needs one")


def _value(function: Callable[[float, Range], float]) -> _Apply:
    """Return a change of what is read of the process variable."""

    def apply(setup: Setup) -> Setup:
        limits = setup.range

        def changed(reading: Reading) -> Reading:
            return replace(reading, value=function(reading.value, limits))

        return replace(setup, reading={setup.loop.process_variable: changed})

    return apply


def _stale(setup: Setup) -> Setup:
    first: list[Reading] = []

    def changed(reading: Reading) -> Reading:
        first.append(reading)
        del first[1:]
        return first[0]

    return replace(setup, reading={setup.loop.process_variable: changed})


def _careless(setup: Setup) -> Setup:
    """Take a failed transmitter for one that reads zero."""
    lower = setup.range.lower

    def changed(reading: Reading) -> Reading:
        if reading.quality is Quality.BAD or math.isnan(reading.value):
            return Reading(value=lower, quality=Quality.GOOD)
        return reading

    return replace(setup, reading={setup.loop.process_variable: changed})


def _order(point: Callable[[str], str], function: Callable[[float, Range], float]) -> _Apply:
    """Return a change of what is read of an order."""

    def apply(setup: Setup) -> Setup:
        limits = setup.range

        def changed(reading: Reading) -> Reading:
            return replace(reading, value=function(reading.value, limits))

        return replace(setup, reading={point(setup.loop.tag): changed})

    return apply


def _output(function: Callable[[float], float]) -> _Apply:
    return lambda setup: replace(setup, writing={setup.loop.output: function})


def _faults(**changes: Any) -> _Apply:
    return lambda setup: replace(setup, faults=replace(setup.faults, **changes))


def _stuck_heartbeat(setup: Setup) -> Setup:
    return replace(setup, writing={heartbeat_point(setup.loop.tag): lambda _: _STUCK})


def _gain_per_unit(setup: Setup) -> Setup:
    return replace(setup, faults=replace(setup.faults, gain_factor=setup.range.span))


_Apply = Callable[[Setup], Setup]
_COUNTS = Scaling.COUNTS

MISTAKES = (
    Mistake(
        name="word-order-cdab",
        found_as="word order CDAB",
        apply=_item(None, word_order=WordOrder.CDAB),
    ),
    Mistake(
        name="word-order-badc",
        found_as="word order BADC",
        apply=_item(None, word_order=WordOrder.BADC),
    ),
    Mistake(
        name="word-order-dcba",
        found_as="word order DCBA",
        apply=_item(None, word_order=WordOrder.DCBA),
    ),
    Mistake(
        name="address-off-by-one",
        found_as="address base, off by one",
        apply=_item(None, address=1),
    ),
    Mistake(
        name="counted-from-one", found_as="address base or wrong address", apply=_all_shifted
    ),
    Mistake(name="swapped-transmitters", found_as="swapped tags", apply=_swapped),
    Mistake(
        name="half-value",
        found_as="half of a 32-bit value",
        apply=_item(None, encoding=Encoding.UINT16),
    ),
    Mistake(
        name="integer-for-float",
        found_as="integer for float",
        apply=_item(None, encoding=Encoding.UINT32),
    ),
    Mistake(
        name="signed-for-unsigned",
        found_as="signed for unsigned",
        apply=_item(None, _COUNTS, encoding=Encoding.INT16),
    ),
    Mistake(
        name="unsigned-for-signed",
        found_as="unsigned for signed",
        apply=_unsigned,
        by_signals=True,
    ),
    Mistake(
        name="counts-for-value",
        found_as="counts for engineering units",
        apply=_item(None, _COUNTS, scaling=Scaling.ENGINEERING),
    ),
    Mistake(name="wrong-range", found_as="wrong range", apply=_wrong_range),
    Mistake(
        name="percent-for-value",
        found_as="percent for engineering units",
        apply=_value(lambda value, limits: 100.0 * limits.to_fraction(value)),
    ),
    Mistake(
        name="inverted-signal",
        found_as="inverted signal",
        apply=_value(
            lambda value, limits: limits.from_fraction(1.0 - limits.to_fraction(value))
        ),
    ),
    Mistake(
        name="zero-to-twenty",
        found_as="scaled 0-20 mA for 4-20 mA",
        apply=_value(
            lambda value, limits: limits.from_fraction(0.2 + 0.8 * limits.to_fraction(value))
        ),
    ),
    Mistake(
        name="millimetres",
        found_as="unit mm for m",
        apply=_value(lambda value, _: 1000.0 * value),
    ),
    Mistake(
        name="decimal-point",
        found_as="decimal factor 10",
        apply=_value(lambda value, _: 10.0 * value),
    ),
    Mistake(name="offset", found_as="offset", apply=_value(lambda value, _: value + 273.15)),
    Mistake(name="stale-value", found_as="stale value", apply=_stale),
    Mistake(
        name="clamped-ends",
        found_as="clamped ends",
        apply=_value(lambda value, limits: min(max(value, limits.lower), limits.upper)),
        by_signals=True,
    ),
    Mistake(
        name="broken-wire-reads-zero",
        found_as="failure current not recognised",
        apply=_careless,
        by_signals=True,
    ),
    Mistake(
        name="setpoint-in-percent",
        found_as="percent for engineering units",
        apply=_order(setpoint_point, lambda value, limits: 100.0 * limits.to_fraction(value)),
    ),
    Mistake(
        name="mode-inverted",
        found_as="inverted signal",
        apply=_order(mode_point, lambda value, _: 1.0 - value),
    ),
    Mistake(
        name="unit-id",
        found_as="wrong unit id",
        apply=lambda setup: replace(setup, link=replace(setup.link, unit=setup.link.unit + 1)),
    ),
    Mistake(name="valve-register", found_as="wrong valve register", apply=_wrong_valve),
    Mistake(
        name="valve-word-order",
        found_as="word order CDAB",
        apply=_at_valve(word_order=WordOrder.CDAB),
    ),
    Mistake(
        name="valve-as-fraction",
        found_as="fraction for percent",
        apply=_output(lambda value: value / 100.0),
    ),
    Mistake(
        name="valve-inverted",
        found_as="inverted output",
        apply=_output(lambda value: 100.0 - value),
    ),
    Mistake(
        name="manual-output-as-fraction",
        found_as="fraction for percent",
        apply=_order(manual_output_point, lambda value, _: value / 100.0),
    ),
    Mistake(
        name="reversed-action", found_as="reversed action", apply=_faults(reversed_action=True)
    ),
    Mistake(
        name="minutes-for-seconds",
        found_as="integral time in minutes for seconds",
        apply=_faults(integral_time_factor=_SECONDS_PER_MINUTE),
    ),
    Mistake(
        name="gain-per-unit",
        found_as="gain taken for output per unit",
        apply=_gain_per_unit,
    ),
    Mistake(
        name="proportional-band",
        found_as="gain taken for a proportional band",
        apply=_order(gain_point, lambda value, _: 100.0 / value if value else value),
    ),
    Mistake(name="heartbeat-stuck", found_as="heartbeat stuck", apply=_stuck_heartbeat),
)


def mistake_of(name: str) -> Mistake:
    """Return a mistake by its name.

    Parameters
    ----------
    name : str
        Its name.

    Raises
    ------
    UsageError
        When there is none of that name.
    """
    for mistake in MISTAKES:
        if mistake.name == name:
            return mistake
    names = ", ".join(mistake.name for mistake in MISTAKES)
    raise UsageError(f'mistake "{name}" is not in the table; it has {names}')


class MistakenClient:
    """A client between the soft PLC and its link that garbles what goes through it.

    Parameters
    ----------
    client : FieldClient
        The client.
    setup : Setup
        What is garbled.
    """

    def __init__(self, client: FieldClient, setup: Setup) -> None:
        self._client = client
        self._setup = setup

    async def connect(self) -> None:
        """Open the connection."""
        await self._client.connect()

    async def read(self, names: Sequence[str]) -> dict[str, Reading]:
        """Return the named points, garbled."""
        readings = {
            name: self._believed(name, reading)
            for name, reading in (await self._client.read(names)).items()
        }
        for name, change in self._setup.reading.items():
            if name in readings:
                readings[name] = change(readings[name])
        return readings

    def _believed(self, name: str, reading: Reading) -> Reading:
        """Return a reading as a program has it that knows nothing of a current's bands.

        What lies far outside every current is no failed transmitter, but a number taken wrong;
        most blocks go on with it.
        """
        limits = next(point.range for point in self._setup.points if point.name == name)
        far = (
            not _LEAST <= limits.to_fraction(reading.value) <= _MOST
        )  # not a number is not far
        if reading.quality is Quality.BAD and far and math.isfinite(reading.value):
            return Reading(value=reading.value, quality=Quality.GOOD)
        return reading

    async def write(self, values: Mapping[str, float]) -> None:
        """Write values, garbled; see `FieldClient.write` [unit]."""
        garbled = dict(values)
        for name, change in self._setup.writing.items():
            if name in garbled:
                garbled[name] = change(garbled[name])
        await self._client.write(garbled)

    async def close(self) -> None:
        """Close the connection."""
        await self._client.close()
