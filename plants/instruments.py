"""What the transmitters make of the plant: damping over a step, and a sample at its end."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from plants import layout as at
from plants.compile import kernel
from plants.flow import orifice_flow
from plants.noise import BLOCK_TICKS, normal_block
from plants.transmitter import damping_weights, loop_current, quality_of_current, quantised

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@kernel
def damp(
    table: Integers,
    parameters: Floats,
    state: Floats,
    work: Floats,
    interval: float,
    start: int,
    middle: int,
    end: int,
) -> None:
    """Move the damping of every transmitter over an interval.

    Parameters
    ----------
    table : ndarray of int64
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    state : ndarray of float64
        State of the rig; the damped values are changed in place.
    work : ndarray of float64
        Scratch; holds the volumes and the parabolas of the valves' flows.
    interval : float
        Length [s].
    start, middle, end : int
        Where the volumes at the start, the middle and the end stand in ``work`` [-].
    """
    flows = table[at.AT_PARABOLAS]
    n_valves = table[at.N_VALVES]
    whole = interval == parameters[at.TICK]
    damped = table[at.AT_DAMPED]
    links = table[at.AT_TRANSMITTER_LINKS]
    first = table[at.AT_TRANSMITTER_PARAMETERS]
    held_flows = table[at.AT_FLOW]
    for transmitter in range(table[at.N_TRANSMITTERS]):
        p = first + transmitter * at.TRANSMITTER_STRIDE
        link = links + transmitter * at.TRANSMITTER_LINKS
        subject = table[link + at.SUBJECT]
        kind = table[link + at.KIND]
        damping = parameters[p + at.DAMPING]
        if kind == at.MEASURES_VALVE_FLOW:
            x0 = work[flows + subject]
            xm = work[flows + n_valves + subject]
            x1 = work[flows + 2 * n_valves + subject]
            if damping <= 0.0:
                x1 = state[held_flows + subject]
        else:
            inverse = parameters[p + at.INVERSE_SUBJECT_AREA]
            x0 = work[start + subject] * inverse
            xm = work[middle + subject] * inverse
            x1 = work[end + subject] * inverse
            if kind == at.MEASURES_ORIFICE_FLOW:
                coefficient = parameters[p + at.SUBJECT_COEFFICIENT]
                x0 = orifice_flow(coefficient, x0)
                xm = orifice_flow(coefficient, xm)
                x1 = orifice_flow(coefficient, x1)
        if damping <= 0.0:
            state[damped + transmitter] = x1
            continue
        if whole:
            w_decay = parameters[p + at.WEIGHT_DECAY]
            w_start = parameters[p + at.WEIGHT_START]
            w_middle = parameters[p + at.WEIGHT_MIDDLE]
            w_end = parameters[p + at.WEIGHT_END]
        else:
            w_decay, w_start, w_middle, w_end = damping_weights(interval, damping)
        state[damped + transmitter] = (
            w_decay * state[damped + transmitter] + w_start * x0 + w_middle * xm + w_end * x1
        )


@kernel
def _refill(normals: Floats, place: int, seed: int, stream: int, block: int) -> None:
    """Draw the noise of four ticks of an instrument."""
    first, second, third, fourth = normal_block(seed, stream, block)
    normals[place] = block + 1
    normals[place + 1] = first
    normals[place + 2] = second
    normals[place + 3] = third
    normals[place + 4] = fourth


@kernel
def sample(table: Integers, parameters: Floats, state: Floats, work: Floats, tick: int) -> None:
    """Sample every transmitter: true value, current and quality.

    Parameters
    ----------
    table : ndarray of int64
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    state : ndarray of float64
        State of the rig; the samples are written into it.
    work : ndarray of float64
        Scratch; keeps the noise of a few ticks, which is drawn together.
    tick : int
        Tick of the sample, for the noise [ticks].
    """
    links = table[at.AT_TRANSMITTER_LINKS]
    first = table[at.AT_TRANSMITTER_PARAMETERS]
    damped = table[at.AT_DAMPED]
    true = table[at.AT_TRUE]
    currents = table[at.AT_CURRENT]
    qualities = table[at.AT_QUALITY]
    forced = table[at.AT_FORCED]
    flows = table[at.AT_FLOW]
    block = tick // BLOCK_TICKS
    number = tick - block * BLOCK_TICKS + 1
    for transmitter in range(table[at.N_TRANSMITTERS]):
        p = first + transmitter * at.TRANSMITTER_STRIDE
        link = links + transmitter * at.TRANSMITTER_LINKS
        subject = table[link + at.SUBJECT]
        kind = table[link + at.KIND]
        if kind == at.MEASURES_VALVE_FLOW:
            value = state[flows + subject]
        else:
            value = state[subject] * parameters[p + at.INVERSE_SUBJECT_AREA]
            if kind == at.MEASURES_ORIFICE_FLOW:
                value = orifice_flow(parameters[p + at.SUBJECT_COEFFICIENT], value)
        state[true + transmitter] = value
        if state[forced + transmitter] > 0.0:
            state[currents + transmitter] = state[forced + transmitter]
            state[qualities + transmitter] = quality_of_current(state[forced + transmitter])
            continue
        fraction = (
            state[damped + transmitter] * parameters[p + at.SCALE] + parameters[p + at.OFFSET]
        )
        noise = parameters[p + at.NOISE]
        if noise > 0.0:
            normals = table[at.AT_NORMALS] + transmitter * at.NORMALS
            if work[normals] != block + 1:
                _refill(work, normals, table[at.SEED], table[link + at.STREAM], block)
            fraction += noise * work[normals + number]
        current, quality = loop_current(
            quantised(
                fraction,
                parameters[p + at.RESOLUTION],
                parameters[p + at.INVERSE_RESOLUTION],
            )
        )
        state[currents + transmitter] = current
        state[qualities + transmitter] = quality
