"""What the transmitters make of the plant: damping over a step, and a sample at its end."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from plants import layout as at
from plants.compile import inlined_kernel, kernel
from plants.flow import orifice_flow
from plants.noise import BLOCK_TICKS, normal_block
from plants.transmitter import damping_weights, loop_current, quality_of_current, quantised

Floats = NDArray[np.float64]
Table = NDArray[np.uint32]


@kernel
def follow(
    table: Table, parameters: Floats, state: Floats, work: Floats, interval: float
) -> None:
    """Move the damping of every transmitter over an interval that is not a whole tick.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    state : ndarray of float64
        State of the rig; the damped values are changed in place.
    work : ndarray of float64
        Scratch; holds the course of the interval.
    interval : float
        Length [s].
    """
    for transmitter in range(table[at.N_TRANSMITTERS]):
        p = table[at.AT_TRANSMITTER_PARAMETERS] + transmitter * at.TRANSMITTER_STRIDE
        start, middle, end, present = _quantity(table, parameters, state, work, transmitter)
        damping = parameters[p + at.DAMPING]
        damped = present
        if damping > 0.0:
            w_decay, w_start, w_middle, w_end = damping_weights(interval, damping)
            damped = w_decay * state[table[at.AT_DAMPED] + transmitter]
            damped += w_start * start + w_middle * middle + w_end * end
        state[table[at.AT_DAMPED] + transmitter] = damped


@kernel
def _quantity(
    table: Table, parameters: Floats, state: Floats, work: Floats, transmitter: int
) -> tuple[float, float, float, float]:
    """Return what a transmitter looks at over a step: start, middle, end of a parabola; present."""
    p = table[at.AT_TRANSMITTER_PARAMETERS] + transmitter * at.TRANSMITTER_STRIDE
    link = table[at.AT_TRANSMITTER_LINKS] + transmitter * at.TRANSMITTER_LINKS
    stride = table[at.N_VESSELS] + table[at.N_VALVES]
    place = table[at.AT_COURSE] + table[link + at.QUANTITY]
    factor = parameters[p + at.FACTOR]
    coefficient = parameters[p + at.SUBJECT_COEFFICIENT]
    start = work[place] * factor
    middle = work[place + stride] * factor
    end = work[place + 2 * stride] * factor
    present = state[table[link + at.PRESENT]] * factor
    if coefficient > 0.0:
        start = orifice_flow(coefficient, start)
        middle = orifice_flow(coefficient, middle)
        end = orifice_flow(coefficient, end)
        present = orifice_flow(coefficient, present)
    return start, middle, end, present


@kernel
def _draw(table: Table, work: Floats, block: int) -> None:
    """Draw the noise of all transmitters for the ticks of a block."""
    place = table[at.AT_NORMALS]
    work[place] = block + 1
    place += 1
    for transmitter in range(table[at.N_TRANSMITTERS]):
        link = table[at.AT_TRANSMITTER_LINKS] + transmitter * at.TRANSMITTER_LINKS
        first, second, third, fourth = normal_block(
            table[at.SEED_LOW], table[at.SEED_HIGH], table[link + at.STREAM], block
        )
        work[place] = first
        work[place + 1] = second
        work[place + 2] = third
        work[place + 3] = fourth
        place += at.NORMALS


@inlined_kernel
def sample(
    table: Table, parameters: Floats, state: Floats, work: Floats, tick: int, smooth: bool
) -> None:
    """Sample every transmitter: true value, current and quality.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    state : ndarray of float64
        State of the rig; the samples are written into it.
    work : ndarray of float64
        Scratch; holds the course of the last tick, and keeps the noise of a few ticks, which is
        drawn together.
    tick : int
        Tick of the sample, for the noise [ticks].
    smooth : bool
        Whether the damping has still to follow the course of the last tick.
    """
    block = tick // BLOCK_TICKS
    if work[table[at.AT_NORMALS]] != block + 1:
        _draw(table, work, block)
    normals = table[at.AT_NORMALS] + 1 + tick - block * BLOCK_TICKS
    links = table[at.AT_TRANSMITTER_LINKS]
    first = table[at.AT_TRANSMITTER_PARAMETERS]
    for transmitter in range(table[at.N_TRANSMITTERS]):
        p = first + transmitter * at.TRANSMITTER_STRIDE
        link = links + transmitter * at.TRANSMITTER_LINKS
        factor = parameters[p + at.FACTOR]
        coefficient = parameters[p + at.SUBJECT_COEFFICIENT]
        present = state[table[link + at.PRESENT]] * factor
        if coefficient > 0.0:
            present = orifice_flow(coefficient, present)
        damped = state[table[at.AT_DAMPED] + transmitter]
        if smooth:
            if parameters[p + at.DAMPING] > 0.0:
                start, middle, end, _ = _quantity(table, parameters, state, work, transmitter)
                damped = parameters[p + at.WEIGHT_DECAY] * damped + (
                    parameters[p + at.WEIGHT_START] * start
                    + parameters[p + at.WEIGHT_MIDDLE] * middle
                    + parameters[p + at.WEIGHT_END] * end
                )
            else:
                damped = present
            state[table[at.AT_DAMPED] + transmitter] = damped
        state[table[at.AT_TRUE] + transmitter] = present
        forced = state[table[at.AT_FORCED] + transmitter]
        if forced > 0.0:
            current, quality = forced, quality_of_current(forced)
        else:
            fraction = damped * parameters[p + at.SCALE] + parameters[p + at.OFFSET]
            fraction += parameters[p + at.NOISE] * work[normals + transmitter * at.NORMALS]
            current, quality = loop_current(
                quantised(
                    fraction,
                    parameters[p + at.RESOLUTION],
                    parameters[p + at.INVERSE_RESOLUTION],
                )
            )
        state[table[at.AT_CURRENT] + transmitter] = current
        state[table[at.AT_QUALITY] + transmitter] = quality
