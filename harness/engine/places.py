"""Places that the harness adds behind the plant's in the state, parameters and table."""

from __future__ import annotations

from plants import layout as at

# Header of the table, in the part that the plant leaves to the harness.
AT_LOOP_STATE = at.HARNESS_HEADER
AT_LOOP_PARAMETERS = at.HARNESS_HEADER + 1
AT_LOOP_LINKS = at.HARNESS_HEADER + 2
AT_SHOWN = at.HARNESS_HEADER + 3
N_COLUMNS = at.HARNESS_HEADER + 4
LOOP_STATE_STRIDE = at.HARNESS_HEADER + 5  # depends on the longest delay line

# State of a loop: orders, then the block's own state, then the delay line of its output.
SETPOINT = 0  # [fraction of span]
MODE = 1
MANUAL_OUTPUT = 2  # [-]
GAIN = 3  # [-]
INTEGRAL_TIME = 4  # [s]
INTEGRAL = 5  # [-]
OUTPUT = 6  # [-]
HELD = 7
DELAY_LINE = 8

# Parameters of a loop.
SIGN = 0  # +1 reverse, -1 direct action [-]
OUTPUT_LOW = 1  # [-]
OUTPUT_HIGH = 2  # [-]
SCAN = 3  # [s]
LOOP_PARAMETERS = 4

# Table of a loop.
PROCESS_VARIABLE = 0  # number of the transmitter
OUTPUT_VALVE = 1  # number of the valve
SCAN_TICKS = 2
SCAN_PHASE = 3
DELAY_TICKS = 4
BUILT_IN = 5  # 1 while the reference block closes the loop
LOOP_LINKS = 6

# How a transmitter's value is shown and recorded.
SHOWN_LOWER = 0  # [unit shown]
SHOWN_SPAN = 1  # [unit shown]
SHOWN_FACTOR = 2  # unit shown per SI unit of the true value [-]
SHOWN_STRIDE = 3

# Columns of a row.
TRANSMITTER_COLUMNS = 4  # true, value, current, quality
VALVE_COLUMNS = 3  # command, position, flow
LOOP_COLUMNS = 3  # setpoint, mode, manual output

# Counters.
TICK = 0
N_COUNTERS = 2

CUBIC_METRES_PER_HOUR = 3600.0  # per m3/s [-]
