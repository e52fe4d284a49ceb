"""Names of every place in the state, parameter and table arrays of a plant.

One float64 array holds all that changes, one float64 array all that does not, one uint32 array
the connections (unsigned, so that the compiler need not provide for negative places). The first entries of the table are the counts and offsets that a kernel needs
to find its way; the harness appends its own places behind the plant's.
"""

from __future__ import annotations

from dataclasses import dataclass

# Header of the table: counts and seed.
N_VESSELS = 0
N_VALVES = 1
N_ORIFICES = 2
N_OVERFLOWS = 3
N_TRANSMITTERS = 4
N_LOOPS = 5
SEED_LOW = 6  # words of 32 bits
SEED_HIGH = 7
# Header of the table: offsets into the state.
AT_TOTALS = 8
AT_COMMAND = 9
AT_RAMP = 10
AT_TRAVEL = 11
AT_FLOW = 12
AT_DAMPED = 13
AT_TRUE = 14
AT_CURRENT = 15
AT_QUALITY = 16
AT_FORCED = 17
PLANT_STATE = 18  # length of the plant's part of the state
# Header of the table: offsets into the parameters.
AT_VESSEL_PARAMETERS = 20
AT_VALVE_PARAMETERS = 21
AT_ORIFICE_PARAMETERS = 22
AT_OVERFLOW_PARAMETERS = 23
AT_TRANSMITTER_PARAMETERS = 24
PLANT_PARAMETERS = 25
# Header of the table: offsets into the table itself.
AT_VESSEL_LINKS = 27
AT_VALVE_LINKS = 28
AT_ORIFICE_LINKS = 29
AT_OVERFLOW_LINKS = 30
AT_TRANSMITTER_LINKS = 31
PLANT_TABLE = 32
# Header of the table: offsets into the scratch array; its first places hold volumes and totals.
AT_DRY = 33
AT_COURSE = 34
AT_VALVES_BEFORE = 35
AT_INFLOWS = 36
AT_NORMALS = 37
AT_KEPT = 38
WORK = 39  # length of the scratch array
# Header of the table: left to the harness, see its engine.
HARNESS_HEADER = 40
HEADER = 48

# Totals, integrated with the volumes [m3].
TOTAL_IN = 0
TOTAL_OUT = 1
TOTAL_SPILLED = 2
N_TOTALS = 3

# Parameters of the plant as a whole.
TICK = 0  # [s]
N_PLANT_PARAMETERS = 4

# Parameters of a vessel.
AREA = 0  # [m2]
INVERSE_AREA = 1  # a product is several times faster than a quotient [1/m2]
OUTLETS_COEFFICIENT = 2  # of all its outlets together [m2.5/s]
LOWEST_CREST = 3  # volume at the lowest crest of its overflows, or infinite [m3]
VESSEL_STRIDE = 4

# Parameters of a valve.
KV = 0  # [m3/h at 1 bar]
RANGEABILITY = 1  # [-]
LOG_RANGEABILITY = 2  # [-]
LINE_KV = 3  # [m3/h at 1 bar]; 0 for no line
FLOW_PER_KV = 4  # at the pressure drop and density of this valve [m3/s per m3/h at 1 bar]
STROKE_TIME = 5  # [s]
LAG = 6  # [s]
HALF_DECAY = 7  # exp(-tick / 2 / lag) [-]
VALVE_STRIDE = 8

# Parameters of an orifice.
ORIFICE_COEFFICIENT = 0  # [m2.5/s]
SHARE = 1  # of what leaves its vessel by all outlets [-]
ORIFICE_STRIDE = 2

# Parameters of an overflow.
WEIR_COEFFICIENT = 0  # [m1.5/s]
CREST = 1  # [m]
CAUGHT_FRACTION = 2  # [-]
OVERFLOW_STRIDE = 3

# Parameters of a transmitter.
SCALE = 0  # [fraction of span per m or m3/s]
OFFSET = 1  # [fraction of span]
DAMPING = 2  # [s]
NOISE = 3  # [fraction of span]
RESOLUTION = 4  # [fraction of span]
WEIGHT_DECAY = 5  # weights for a whole tick, see transmitter.damping_weights [-]
WEIGHT_START = 6
WEIGHT_MIDDLE = 7
WEIGHT_END = 8
FACTOR = 9  # of the quantity: to a level [1/m2], or 1 for a valve's flow [-]
SUBJECT_COEFFICIENT = 10  # of the outlet whose flow it measures, or 0 [m2.5/s]
INVERSE_RESOLUTION = 11  # 0 for a transmitter without steps [1/fraction of span]
TRANSMITTER_STRIDE = 12

# Table of a vessel, in an order in which what feeds a vessel stands before it.
VESSEL = 0  # number of the vessel
FIRST_OUTLET = 1  # number of the first of its outlets; they stand side by side
N_OUTLETS = 2
VESSEL_LINKS = 3

# Table of a valve, an orifice, an overflow, a transmitter.
VALVE_DESTINATION = 0
VALVE_CHARACTERISTIC = 1
VALVE_LINKS = 2
ORIGIN = 0
DESTINATION = 1
OUTSIDE = 0xFFFFFFFF  # destination of what leaves the rig
PATH_LINKS = 2
QUANTITY = 0  # place in the course of a step: a vessel's volume or a valve's flow
PRESENT = 1  # place of the same in the state
STREAM = 2
TRANSMITTER_LINKS = 3

# Scratch of a vessel: what flows in at the four stages of a step.
STAGES = 4
# Scratch of the course of a step: volumes of all vessels and flows of all valves at its start,
# then at its middle, then at its end.
COURSE = 3
# Scratch of the noise: the number of a block, then the numbers of its ticks for each transmitter.
NORMALS = 4


@dataclass(frozen=True, slots=True, kw_only=True)
class Counts:
    """How many parts of each kind a plant has.

    Parameters
    ----------
    vessels, valves, orifices, overflows, transmitters : int
        Numbers of parts [-].
    """

    vessels: int
    valves: int
    orifices: int
    overflows: int
    transmitters: int

    def state_offsets(self) -> dict[int, int]:
        """Return the entries of the table's header that point into the state."""
        order = (
            (AT_TOTALS, self.vessels),
            (AT_COMMAND, N_TOTALS),
            (AT_RAMP, self.valves),
            (AT_TRAVEL, self.valves),
            (AT_FLOW, self.valves),
            (AT_DAMPED, self.valves),
            (AT_TRUE, self.transmitters),
            (AT_CURRENT, self.transmitters),
            (AT_QUALITY, self.transmitters),
            (AT_FORCED, self.transmitters),
            (PLANT_STATE, self.transmitters),
        )
        return _running(order, 0)

    def parameter_offsets(self) -> dict[int, int]:
        """Return the entries of the table's header that point into the parameters."""
        order = (
            (AT_VESSEL_PARAMETERS, 0),
            (AT_VALVE_PARAMETERS, self.vessels * VESSEL_STRIDE),
            (AT_ORIFICE_PARAMETERS, self.valves * VALVE_STRIDE),
            (AT_OVERFLOW_PARAMETERS, self.orifices * ORIFICE_STRIDE),
            (AT_TRANSMITTER_PARAMETERS, self.overflows * OVERFLOW_STRIDE),
            (PLANT_PARAMETERS, self.transmitters * TRANSMITTER_STRIDE),
        )
        return _running(order, N_PLANT_PARAMETERS)

    def table_offsets(self) -> dict[int, int]:
        """Return the entries of the table's header that point into the table."""
        order = (
            (AT_VESSEL_LINKS, 0),
            (AT_VALVE_LINKS, self.vessels * VESSEL_LINKS),
            (AT_ORIFICE_LINKS, self.valves * VALVE_LINKS),
            (AT_OVERFLOW_LINKS, self.orifices * PATH_LINKS),
            (AT_TRANSMITTER_LINKS, self.overflows * PATH_LINKS),
            (PLANT_TABLE, self.transmitters * TRANSMITTER_LINKS),
        )
        return _running(order, HEADER)

    def work_offsets(self) -> dict[int, int]:
        """Return the entries of the table's header that point into the scratch array."""
        order = (
            (AT_DRY, 5 * (self.vessels + N_TOTALS)),
            (AT_COURSE, self.vessels),
            (AT_VALVES_BEFORE, COURSE * (self.vessels + self.valves)),
            (AT_INFLOWS, 3 * self.valves),
            (AT_NORMALS, STAGES * self.vessels),
            (AT_KEPT, 1 + NORMALS * self.transmitters),
            (WORK, self.state_offsets()[PLANT_STATE] + self.vessels),
        )
        return _running(order, 0)


def _running(order: tuple[tuple[int, int], ...], start: int) -> dict[int, int]:
    """Return each place's offset, given the length of what stands before it."""
    offsets = {}
    at = start
    for place, length_before in order:
        at += length_before
        offsets[place] = at
    return offsets
