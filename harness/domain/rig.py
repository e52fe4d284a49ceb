"""A rig as data: plant, instruments, actuators, loops and links. SI units throughout."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from enum import StrEnum
from typing import TypeVar

from harness.domain.orders import BlockUnits, LoopOrders
from harness.domain.signals import Range

_Tagged = TypeVar("_Tagged", "Vessel", "ControlValve", "Transmitter", "Loop")

DRAIN = "drain"  # the destination of flow that leaves the rig


@dataclass(frozen=True, slots=True, kw_only=True)
class Source:
    """A supply header of constant pressure.

    Parameters
    ----------
    tag : str
        Name, e.g. ``"PW-HEADER"``.
    pressure : float
        Gauge pressure at the valves' inlet lines [Pa].
    density : float
        Density of the liquid [kg/m3].
    """

    tag: str
    pressure: float
    density: float


@dataclass(frozen=True, slots=True, kw_only=True)
class VerticalCylinder:
    """An upright cylindrical vessel.

    Parameters
    ----------
    diameter : float
        Inside diameter [m].
    height : float
        Height of the rim above the bottom [m].
    """

    diameter: float
    height: float

    @property
    def area(self) -> float:
        """Return the cross-section [m2]."""
        return math.pi * self.diameter**2 / 4


@dataclass(frozen=True, slots=True, kw_only=True)
class Vessel:
    """A vessel; its state is its volume.

    Parameters
    ----------
    tag : str
        Name, e.g. ``"TK-101"``.
    shape : VerticalCylinder
        Shape.
    initial_level : float or None
        Level at tick 0; None asks for the steady state of the initial outputs [m].
    """

    tag: str
    shape: VerticalCylinder
    initial_level: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Orifice:
    """A free outlet at the bottom of a vessel: q = Cd a sqrt(2 g h).

    Parameters
    ----------
    tag : str
        Name, e.g. ``"RO-101"``.
    origin : str
        Vessel it leaves.
    destination : str
        Vessel it falls into, or ``"drain"``.
    discharge_coefficient : float
        Cd [-].
    diameter : float
        Bore [m].
    """

    tag: str
    origin: str
    destination: str
    discharge_coefficient: float
    diameter: float

    @property
    def area(self) -> float:
        """Return the bore area [m2]."""
        return math.pi * self.diameter**2 / 4


@dataclass(frozen=True, slots=True, kw_only=True)
class Overflow:
    """A weir in the wall of a vessel.

    Parameters
    ----------
    tag : str
        Name.
    origin : str
        Vessel it leaves.
    destination : str
        Vessel that takes ``fraction`` of it, or ``"drain"``; the rest is spilled.
    crest : float
        Height of the crest above the vessel's bottom [m].
    width : float
        Crest width [m].
    discharge_coefficient : float
        Cd of the weir equation [-].
    fraction : float
        Part that reaches the destination, 0 to 1 [-].
    """

    tag: str
    origin: str
    destination: str
    crest: float
    width: float
    discharge_coefficient: float
    fraction: float


class Characteristic(StrEnum):
    """Inherent characteristic of a control valve (IEC 60534-2-4)."""

    LINEAR = "linear"
    EQUAL_PERCENTAGE = "equal_percentage"


@dataclass(frozen=True, slots=True, kw_only=True)
class ControlValve:
    """A control valve from a header into a vessel, free fall at its outlet.

    Parameters
    ----------
    tag : str
        Tag of valve and actuator, e.g. ``"FV-101"``.
    origin : str
        Source it takes from.
    destination : str
        Vessel it feeds.
    kv : float
        Flow coefficient fully open [m3/h at 1 bar].
    characteristic : Characteristic
        Inherent characteristic.
    rangeability : float
        Inherent rangeability [-].
    line_kv : float or None
        Flow coefficient of the line in series, or None without [m3/h at 1 bar].
    stroke_time : float
        Time for full travel; 0 for instantaneous [s].
    lag : float
        First-order lag after the rate limit; 0 for none [s].
    fail_position : float or None
        Travel on loss of the controller; None holds [-].
    initial_output : float
        Output at tick 0 [-].
    """

    tag: str
    origin: str
    destination: str
    kv: float
    characteristic: Characteristic
    rangeability: float
    line_kv: float | None
    stroke_time: float
    lag: float
    fail_position: float | None
    initial_output: float


class Measurement(StrEnum):
    """What a transmitter measures."""

    LEVEL = "level"
    FLOW = "flow"


@dataclass(frozen=True, slots=True, kw_only=True)
class Transmitter:
    """A 4-20 mA transmitter (level by hydrostatic head, or a magnetic flow meter).

    Parameters
    ----------
    tag : str
        Tag, e.g. ``"LT-102"``.
    measures : Measurement
        Level of a vessel, or flow of a path.
    subject : str
        Tag of the vessel or path.
    range : Range
        Calibrated range in ``m`` or ``m3/s``.
    damping : float
        First-order damping time; 0 for none [s].
    noise : float
        Standard deviation of white noise [fraction of span].
    resolution : float
        Step of the transmitted value; 0 for none [fraction of span].
    failure_current_ma : float
        Current on failure, at most 3.6 or at least 21.0 [mA] (NAMUR NE 43).
    """

    tag: str
    measures: Measurement
    subject: str
    range: Range
    damping: float
    noise: float
    resolution: float
    failure_current_ma: float


class Action(StrEnum):
    """Direction of the controller output on a rising process variable."""

    DIRECT = "direct"
    REVERSE = "reverse"


@dataclass(frozen=True, slots=True, kw_only=True)
class Loop:
    """A control loop of the rig, whoever closes it.

    Parameters
    ----------
    tag : str
        Tag, e.g. ``"LIC-102"``.
    process_variable : str
        Tag of the transmitter.
    output : str
        Tag of the manipulated valve.
    load : str
        Tag of the valve that carries the load flow.
    action : Action
        Direct or reverse.
    initial_setpoint : float or None
        Setpoint at tick 0, in the transmitter's unit; None takes the initial process variable.
    output_low, output_high : float
        Output limits of the controller [-].
    scan : float
        Scan period of the built-in controller, a whole number of ticks [s].
    scan_phase : int
        Ticks by which its scans are shifted [ticks].
    output_delay : int
        Ticks from a sample to the output computed from it [ticks].
    watchdog : float
        Silence after which the controller counts as lost [plant s].
    heartbeat_timeout : float or None
        Longest time the optional heartbeat point may stand still [plant s].
    orders : LoopOrders
        How orders reach an external controller.
    block : BlockUnits
        Form and units in which people type into its block.
    """

    tag: str
    process_variable: str
    output: str
    load: str
    action: Action
    initial_setpoint: float | None
    output_low: float
    output_high: float
    scan: float
    scan_phase: int
    output_delay: int
    watchdog: float
    heartbeat_timeout: float | None
    orders: LoopOrders = field(default_factory=LoopOrders)
    block: BlockUnits = field(default_factory=BlockUnits)


class Encoding(StrEnum):
    """Type of a value in the register map."""

    UINT16 = "uint16"
    INT16 = "int16"
    UINT32 = "uint32"
    INT32 = "int32"
    FLOAT32 = "float32"
    BIT = "bit"


class WordOrder(StrEnum):
    """Order on the wire of the bytes of a 32-bit value A B C D, A the most significant."""

    ABCD = "ABCD"
    CDAB = "CDAB"
    BADC = "BADC"
    DCBA = "DCBA"


class Scaling(StrEnum):
    """How a point's value becomes a number in a register."""

    ENGINEERING = "engineering"  # the value in the point's unit, times ``factor`` for integers
    COUNTS = "counts"  # the point's range onto ``counts_low`` .. ``counts_high``
    CURRENT = "current"  # the loop current in microamperes


@dataclass(frozen=True, slots=True, kw_only=True)
class RegisterItem:
    """One value of a Modbus register map (or one bit, for ``Encoding.BIT``).

    Parameters
    ----------
    point : str
        Name of the point.
    address : int
        First register, counted from 0 (bits: coil and discrete input address) [-].
    encoding : Encoding
        Type.
    word_order : WordOrder
        Order of a 32-bit value.
    scaling : Scaling
        Scaling.
    factor : float
        Multiplier of an engineering value before it becomes an integer [-].
    counts_low, counts_high : int
        Counts of the ends of the range, for ``Scaling.COUNTS`` [-].
    split_writes : bool
        Whether the halves of a 32-bit value may be written one at a time; the value is then
        taken when both halves are there.
    """

    point: str
    address: int
    encoding: Encoding
    word_order: WordOrder = WordOrder.ABCD
    scaling: Scaling = Scaling.ENGINEERING
    factor: float = 1.0
    counts_low: int = 0
    counts_high: int = 65535
    split_writes: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class ModbusServerLink:
    """The rig as Modbus TCP server.

    Parameters
    ----------
    name : str
        Name of the link.
    host : str
        Address to listen on; loopback unless asked otherwise.
    port : int
        TCP port [-].
    unit : int
        Unit id of the rig [-].
    items : tuple of RegisterItem
        The map.
    max_connections : int
        Connections served at once [-].
    idle_timeout : float
        Time after which a silent connection is closed [s].
    """

    name: str
    host: str
    port: int
    unit: int
    items: tuple[RegisterItem, ...]
    max_connections: int = 64
    idle_timeout: float = 60.0


@dataclass(frozen=True, slots=True, kw_only=True)
class OpcUaServerLink:
    """The rig as OPC UA server.

    Parameters
    ----------
    name : str
        Name of the link.
    host : str
        Address to listen on; loopback unless asked otherwise.
    port : int
        TCP port [-].
    points : tuple of str
        Names of the points shown; empty for all.
    """

    name: str
    host: str
    port: int
    points: tuple[str, ...] = field(default=())


@dataclass(frozen=True, slots=True, kw_only=True)
class Rig:
    """Everything that a rig file says.

    Parameters
    ----------
    name : str
        Short name.
    description : str
        One paragraph for people.
    tick : float
        Step of the rig [s].
    seed : int
        Seed of all noise [-].
    gravity : float
        Acceleration of gravity [m/s2].
    sources, vessels, orifices, overflows, valves, transmitters, loops, links : tuple
        The parts, in file order.
    """

    name: str
    description: str
    tick: float
    seed: int
    gravity: float
    sources: tuple[Source, ...]
    vessels: tuple[Vessel, ...]
    orifices: tuple[Orifice, ...]
    overflows: tuple[Overflow, ...]
    valves: tuple[ControlValve, ...]
    transmitters: tuple[Transmitter, ...]
    loops: tuple[Loop, ...]
    links: tuple[ModbusServerLink | OpcUaServerLink, ...]

    def vessel(self, tag: str) -> Vessel:
        """Return the vessel of that tag; raises KeyError when there is none."""
        return _by_tag(self.vessels, tag)

    def valve(self, tag: str) -> ControlValve:
        """Return the control valve of that tag; raises KeyError when there is none."""
        return _by_tag(self.valves, tag)

    def transmitter(self, tag: str) -> Transmitter:
        """Return the transmitter of that tag; raises KeyError when there is none."""
        return _by_tag(self.transmitters, tag)

    def loop(self, tag: str) -> Loop:
        """Return the loop of that tag; raises KeyError when there is none."""
        return _by_tag(self.loops, tag)


def _by_tag(parts: tuple[_Tagged, ...], tag: str) -> _Tagged:
    for part in parts:
        if part.tag == tag:
            return part
    raise KeyError(tag)
