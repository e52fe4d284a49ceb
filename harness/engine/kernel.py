"""The one loop of the house: every run and every prediction goes through ``advance``."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from harness.controllers.block import block_scan
from harness.engine import places as place
from plants import layout as at
from plants.careful import adapted_steps
from plants.compile import inlined_kernel, kernel
from plants.instruments import sample
from plants.stepper import smooth_tick
from plants.transmitter import BAD, fraction_of_current

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Table = NDArray[np.uint32]


@inlined_kernel
def scan_loops(table: Table, parameters: Floats, state: Floats, tick: int, stride: int) -> None:
    """Execute the built-in block of every loop whose scan it is, and apply delayed outputs."""
    for loop in range(table[at.N_LOOPS]):
        link = table[place.AT_LOOP_LINKS] + loop * place.LOOP_LINKS
        if table[link + place.BUILT_IN] == 0:
            continue
        s = table[place.AT_LOOP_STATE] + loop * stride
        p = table[place.AT_LOOP_PARAMETERS] + loop * place.LOOP_PARAMETERS
        if (tick - table[link + place.SCAN_PHASE]) % table[link + place.SCAN_TICKS] == 0:
            transmitter = table[link + place.PROCESS_VARIABLE]
            output, integral, held = block_scan(
                fraction_of_current(state[table[at.AT_CURRENT] + transmitter]),
                state[s + place.SETPOINT],
                state[table[at.AT_QUALITY] + transmitter] == BAD,
                int(state[s + place.MODE]),
                state[s + place.MANUAL_OUTPUT],
                state[s + place.GAIN],
                state[s + place.INTEGRAL_TIME],
                parameters[p + place.SIGN],
                parameters[p + place.OUTPUT_LOW],
                parameters[p + place.OUTPUT_HIGH],
                parameters[p + place.SCAN],
                state[s + place.INTEGRAL],
                state[s + place.OUTPUT],
                int(state[s + place.HELD]),
            )
            state[s + place.OUTPUT] = output
            state[s + place.INTEGRAL] = integral
            state[s + place.HELD] = held
        line = s + place.DELAY_LINE
        length = table[link + place.DELAY_TICKS] + 1
        state[line + (tick + length - 1) % length] = state[s + place.OUTPUT]
        valve = table[link + place.OUTPUT_VALVE]
        state[table[at.AT_COMMAND] + valve] = state[line + tick % length]


@kernel
def write_row(
    table: Table, parameters: Floats, state: Floats, row: Floats, stride: int
) -> None:
    """Write one row of the trace: the samples of a tick and the outputs held over it.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    parameters, state : ndarray of float64
        Parameters and state of the rig.
    row : ndarray of float64, shape (n_columns,)
        The row; columns and their units as in ``harness.engine.assemble.columns_of``.
    stride : int
        Places of a loop in the state [-].
    """
    column = 0
    for transmitter in range(table[at.N_TRANSMITTERS]):
        shown = table[place.AT_SHOWN] + transmitter * place.SHOWN_STRIDE
        current = state[table[at.AT_CURRENT] + transmitter]
        row[column] = (
            state[table[at.AT_TRUE] + transmitter] * parameters[shown + place.SHOWN_FACTOR]
        )
        row[column + 1] = (
            parameters[shown + place.SHOWN_LOWER]
            + fraction_of_current(current) * parameters[shown + place.SHOWN_SPAN]
        )
        row[column + 2] = current
        row[column + 3] = state[table[at.AT_QUALITY] + transmitter]
        column += place.TRANSMITTER_COLUMNS
    for valve in range(table[at.N_VALVES]):
        row[column] = state[table[at.AT_COMMAND] + valve]
        row[column + 1] = state[table[at.AT_TRAVEL] + valve]
        row[column + 2] = state[table[at.AT_FLOW] + valve] * place.CUBIC_METRES_PER_HOUR
        column += place.VALVE_COLUMNS
    for loop in range(table[at.N_LOOPS]):
        s = table[place.AT_LOOP_STATE] + loop * stride
        link = table[place.AT_LOOP_LINKS] + loop * place.LOOP_LINKS
        shown = (
            table[place.AT_SHOWN] + table[link + place.PROCESS_VARIABLE] * place.SHOWN_STRIDE
        )
        row[column] = (
            parameters[shown + place.SHOWN_LOWER]
            + state[s + place.SETPOINT] * parameters[shown + place.SHOWN_SPAN]
        )
        row[column + 1] = state[s + place.MODE]
        row[column + 2] = state[s + place.MANUAL_OUTPUT]
        column += place.LOOP_COLUMNS
    totals = table[at.AT_TOTALS]
    for total in range(at.N_TOTALS):
        row[column + total] = state[totals + total]


@kernel
def advance(
    table: Table,
    parameters: Floats,
    state: Floats,
    counters: Integers,
    work: Floats,
    rows: Floats,
    ticks: int,
) -> None:
    """Advance a rig by a number of ticks with its orders and loads held.

    Each tick: controller (on the samples of this tick), row, plant over the tick, sample.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    parameters, state : ndarray of float64
        Parameters, and state that is changed in place.
    counters : ndarray of int64
        Counters; the tick is advanced.
    work : ndarray of float64
        Scratch.
    rows : ndarray of float64, shape (ticks, n_columns) or (0, n_columns)
        Rows of the trace are written here, in their columns' units, unless it is empty.
    ticks : int
        Ticks to advance [ticks].
    """
    stride = table[place.LOOP_STATE_STRIDE]
    recording = rows.shape[0] > 0
    for i in range(ticks):
        tick = counters[place.TICK]
        scan_loops(table, parameters, state, tick, stride)
        if recording:
            write_row(table, parameters, state, rows[i], stride)
        smooth = smooth_tick(table, parameters, state, work)
        if not smooth:
            adapted_steps(table, parameters, state, work, parameters[at.TICK])
        counters[place.TICK] = tick + 1
        sample(table, parameters, state, work, tick + 1, smooth)
