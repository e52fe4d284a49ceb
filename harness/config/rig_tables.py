"""The tables of a rig file, as pydantic models: keys, types and each key's own bounds."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field

from harness.config.quantities import (
    PART,
    LoopCurrent,
    NonNegativeLength,
    NonNegativeTime,
    OpenPercentage,
    Percentage,
    PositiveAcceleration,
    PositiveDensity,
    PositiveKv,
    PositiveLength,
    PositivePressure,
    PositiveTime,
    SmallPercentage,
    parse_quantity,
)

STANDARD_GRAVITY = 9.80665  # m/s2, the standard acceleration (3rd CGPM, 1901)

Tag = Annotated[str, Field(min_length=1)]
Coefficient = Annotated[float, Field(gt=0.0, le=1.0)]  # no outlet passes more than the ideal
Fraction = Annotated[float, Field(ge=0.0, le=1.0)]
Count = Annotated[int, Field(ge=0)]


def _fail_position(value: object) -> float | None:
    """Return the travel of a fail position, None to hold."""
    words: dict[object, float | None] = {"closed": 0.0, "open": 1.0, "hold": None}
    if isinstance(value, str) and value in words:
        return words[value]
    rule = 'must be "closed", "open", "hold" or a travel such as "20 %"'
    try:
        travel = parse_quantity(value, PART)
    except ValueError as error:
        raise ValueError(rule) from error
    if not 0.0 <= travel <= 1.0:
        raise ValueError(rule)
    return travel


FailPosition = Annotated[float | None, BeforeValidator(_fail_position)]


class Table(BaseModel):
    """What all tables share: no unknown keys, no conversions between types, no NaN."""

    model_config = ConfigDict(
        extra="forbid", strict=True, allow_inf_nan=False, validate_assignment=True
    )


class RigTable(Table):
    """``[rig]``."""

    name: Annotated[str, Field(min_length=1)]
    description: str = ""
    tick: PositiveTime
    seed: Annotated[int, Field(ge=0, le=2**63 - 1)] = 0
    gravity: PositiveAcceleration = STANDARD_GRAVITY


class SourceTable(Table):
    """``[[source]]``."""

    tag: Tag
    pressure: PositivePressure
    density: PositiveDensity


class VesselTable(Table):
    """``[[vessel]]``."""

    tag: Tag
    shape: Literal["vertical_cylinder"]
    diameter: PositiveLength
    height: PositiveLength
    initial_level: NonNegativeLength | None = None


class OrificeTable(Table):
    """``[[path]]`` with ``kind = "orifice"``."""

    tag: Tag
    kind: Literal["orifice"]
    origin: Annotated[Tag, Field(alias="from")]
    destination: Annotated[Tag, Field(alias="to")]
    discharge_coefficient: Coefficient
    diameter: PositiveLength


class OverflowTable(Table):
    """``[[path]]`` with ``kind = "overflow"``."""

    tag: Tag
    kind: Literal["overflow"]
    origin: Annotated[Tag, Field(alias="from")]
    destination: Annotated[Tag, Field(alias="to")]
    crest: PositiveLength
    width: PositiveLength
    discharge_coefficient: Coefficient
    fraction: Fraction = 1.0


class ValveTable(Table):
    """``[[path]]`` with ``kind = "valve"``."""

    tag: Tag
    kind: Literal["valve"]
    origin: Annotated[Tag, Field(alias="from")]
    destination: Annotated[Tag, Field(alias="to")]
    kv: PositiveKv
    characteristic: Literal["linear", "equal_percentage"]
    rangeability: Annotated[float, Field(gt=1.0, le=1000.0)]
    line_kv: PositiveKv | None = None


class ActuatorTable(Table):
    """``[[actuator]]``."""

    tag: Tag
    stroke_time: NonNegativeTime
    lag: NonNegativeTime
    fail_position: FailPosition
    initial_output: Percentage


class TransmitterTable(Table):
    """``[[transmitter]]``."""

    tag: Tag
    measures: Literal["level", "flow"]
    subject: Annotated[Tag, Field(alias="of")]
    range: Annotated[list[Any], Field(min_length=2, max_length=2)]  # of the unit it measures
    damping: NonNegativeTime
    noise: SmallPercentage
    resolution: SmallPercentage
    failure_current: LoopCurrent


_Way = Literal["link", "prompt", "callable"]
_WAYS = ("link", "prompt", "callable")
_Step = Annotated[float, Field(gt=0.0)]  # of a number that people type


def _orders(value: object) -> object:
    """Return the long form of ``orders``; one word stands for all kinds."""
    if isinstance(value, str):
        if value not in _WAYS:
            raise ValueError('must be "link", "prompt" or "callable"')
        return dict.fromkeys(("setpoint", "mode", "manual_output", "settings"), value)
    if not isinstance(value, (dict, OrdersTable)):
        raise ValueError('must be "link", "prompt" or "callable", or a table of them')  # noqa: TRY004  pydantic gathers only these
    return value


class OrdersTable(Table):
    """``[loop.orders]``."""

    setpoint: _Way = "link"
    mode: _Way = "link"
    manual_output: _Way = "link"
    settings: _Way = "link"
    function: str = ""


class BlockTable(Table):
    """``[loop.block]``.

    Parameters
    ----------
    gain_resolution, time_resolution : float
        In the block's own units.
    process_variable_counts, output_counts : int
        Counts of the spans [-].
    """

    form: Literal["ideal", "series", "parallel"] = "ideal"
    gain_unit: Literal["%/%", "engineering", "proportional band", "counts"] = "%/%"
    time_unit: Literal["s", "min", "repeats per minute", "1/s"] = "s"
    gain_resolution: _Step | None = None
    time_resolution: _Step | None = None
    setpoint_resolution: Any = None  # in a unit of its process variable
    output_resolution: OpenPercentage = 0.001
    process_variable_counts: Annotated[int, Field(ge=1)] = 65_535
    output_counts: Annotated[int, Field(ge=1)] = 65_535


class LoopTable(Table):
    """``[[loop]]``."""

    tag: Tag
    process_variable: Tag
    output: Tag
    load: Tag
    action: Literal["direct", "reverse"]
    initial_setpoint: Any = None  # in a unit of its process variable
    output_limits: Annotated[list[Percentage], Field(min_length=2, max_length=2)]
    scan: PositiveTime
    scan_phase: Count = 0
    output_delay: Count = 0
    watchdog: PositiveTime
    heartbeat_timeout: PositiveTime | None = None
    orders: Annotated[OrdersTable, BeforeValidator(_orders)] = OrdersTable()
    block: BlockTable = BlockTable()


class ItemTable(Table):
    """One line of ``items`` of a Modbus link.

    Parameters
    ----------
    address : int
        First register or bit, counted from 0 [-].
    factor : float
        Multiplier of a value before it becomes an integer [-].
    counts : list of int
        Counts of the two ends of the range [-].
    """

    point: Tag
    address: Annotated[int, Field(ge=0, le=65535)]
    encoding: Literal["uint16", "int16", "uint32", "int32", "float32", "bit"]
    word_order: Literal["ABCD", "CDAB", "BADC", "DCBA"] = "ABCD"
    scaling: Literal["engineering", "counts", "current"] = "engineering"
    factor: Annotated[float, Field(gt=0.0)] = 1.0
    counts: Annotated[list[int], Field(min_length=2, max_length=2)] = [0, 65535]
    split_writes: bool = False


Port = Annotated[int, Field(ge=1, le=65535)]


class ModbusServerTable(Table):
    """``[[link]]`` with ``kind = "modbus_server"``."""

    name: Tag
    kind: Literal["modbus_server"]
    host: Tag = "127.0.0.1"
    port: Port = 5020
    unit: Annotated[int, Field(ge=1, le=247)]  # Modbus: ids of single devices
    items: list[dict[str, object]]
    max_connections: Annotated[int, Field(ge=1, le=1024)] = 64
    idle_timeout: PositiveTime = 60.0


class OpcUaServerTable(Table):
    """``[[link]]`` with ``kind = "opcua_server"``."""

    name: Tag
    kind: Literal["opcua_server"]
    host: Tag = "127.0.0.1"
    port: Port = 4840
    points: list[Tag] = []
