"""A rig under a controller written in Python, called from inside the compiled loop.

The loop stays compiled and calls the controller at its scans through a C function pointer; that
costs less than half of what stepping the loop from Python tick by tick does.
"""

from __future__ import annotations

import ctypes
import math
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from harness.engine import places as place
from harness.engine.kernel import scan_loops, write_row
from harness.errors import ModelError
from plants import layout as at
from plants.careful import adapted_steps
from plants.compile import kernel
from plants.instruments import sample
from plants.stepper import smooth_tick
from plants.transmitter import BAD, fraction_of_current

if TYPE_CHECKING:
    from collections.abc import Callable

    from harness.controllers.port import Controller
    from harness.engine.engine import Engine

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Table = NDArray[np.uint32]

_CALL = ctypes.CFUNCTYPE(
    ctypes.c_double,
    ctypes.c_double,
    ctypes.c_double,
    ctypes.c_int64,
    ctypes.c_double,
    ctypes.c_int64,
)


@kernel
def _drive(
    table: Table,
    parameters: Floats,
    state: Floats,
    counters: Integers,
    work: Floats,
    rows: Floats,
    ticks: int,
    loop: int,
    call: Callable[[float, float, int, float, int], float],
) -> int:
    """Advance as ``advance`` does, with one loop closed by a call; return the ticks done."""
    stride = table[place.LOOP_STATE_STRIDE]
    recording = rows.shape[0] > 0
    link = table[place.AT_LOOP_LINKS] + loop * place.LOOP_LINKS
    s = table[place.AT_LOOP_STATE] + loop * stride
    p = table[place.AT_LOOP_PARAMETERS] + loop * place.LOOP_PARAMETERS
    transmitter = table[link + place.PROCESS_VARIABLE]
    line = s + place.DELAY_LINE
    length = table[link + place.DELAY_TICKS] + 1
    for i in range(ticks):
        tick = counters[place.TICK]
        if (tick - table[link + place.SCAN_PHASE]) % table[link + place.SCAN_TICKS] == 0:
            output = call(
                fraction_of_current(state[table[at.AT_CURRENT] + transmitter]),
                state[s + place.SETPOINT],
                int(state[s + place.MODE]),
                state[s + place.MANUAL_OUTPUT],
                int(state[table[at.AT_QUALITY] + transmitter] == BAD),
            )
            if math.isnan(output):
                return i
            low, high = parameters[p + place.OUTPUT_LOW], parameters[p + place.OUTPUT_HIGH]
            state[s + place.OUTPUT] = min(max(output, low), high)
        state[line + (tick + length - 1) % length] = state[s + place.OUTPUT]
        state[table[at.AT_COMMAND] + table[link + place.OUTPUT_VALVE]] = state[
            line + tick % length
        ]
        scan_loops(table, parameters, state, tick, stride)
        if recording:
            write_row(table, parameters, state, rows[i], stride)
        smooth = smooth_tick(table, parameters, state, work)
        if not smooth:
            adapted_steps(table, parameters, state, work, parameters[at.TICK])
        counters[place.TICK] = tick + 1
        sample(table, parameters, state, work, tick + 1, smooth)
    return ticks


class Drive:
    """One loop of an engine under a Python controller; the others stay as they are.

    Parameters
    ----------
    engine : Engine
        The engine; its built-in block leaves this loop.
    loop : str
        Tag of the loop.
    controller : Controller
        The controller.
    """

    def __init__(self, engine: Engine, loop: str, controller: Controller) -> None:
        self._engine = engine
        self._loop = loop
        self._number = [each.tag for each in engine.rig.loops].index(loop)
        self._no_rows = np.empty((0, len(engine.columns)))
        self._failure: BaseException | None = None
        engine.set_built_in(loop, built_in=False)
        scan = controller.scan

        def call(
            process_variable: float, setpoint: float, mode: int, manual: float, bad: int
        ) -> float:
            try:
                return scan(process_variable, setpoint, mode, manual, bad == 1)
            except BaseException as error:  # noqa: BLE001  no exception can cross the C frame
                self._failure = error
                return math.nan

        self._call = _CALL(call)

    def advance(self, ticks: int) -> None:
        """Advance without recording.

        Parameters
        ----------
        ticks : int
            Number of ticks [ticks].

        Raises
        ------
        ModelError
            When the controller gave no number; what it raised itself goes through as it is.
        """
        self._run(ticks, self._no_rows)

    def record(self, ticks: int) -> Floats:
        """Advance and return the rows.

        Parameters
        ----------
        ticks : int
            Number of ticks [ticks].

        Returns
        -------
        ndarray, shape (ticks, n_columns)
            One row a tick, in their columns' units.

        Raises
        ------
        ModelError
            When the controller gave no number; what it raised itself goes through as it is.
        """
        rows = np.empty((ticks, len(self._engine.columns)))
        self._run(ticks, rows)
        return rows

    def _run(self, ticks: int, rows: Floats) -> None:
        engine = self._engine
        done = _drive(
            engine.table,
            engine.parameters,
            engine.state,
            engine.counters,
            engine.work,
            rows,
            ticks,
            self._number,
            self._call,
        )
        if done == ticks:
            return
        failure, self._failure = self._failure, None
        if failure is not None:
            raise failure
        raise ModelError(
            f"loop {self._loop}: its controller gave no number as output at tick {engine.tick}; "
            "a scan must return a finite fraction of output"
        )
