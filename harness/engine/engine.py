"""A rig in motion: the arrays of the kernel, and the orders that people and trials give it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from harness.domain.points import shown_range
from harness.engine import places as place
from harness.engine.assemble import assemble, columns_of
from harness.engine.kernel import advance, write_row
from harness.errors import ModelError
from plants import layout as at
from plants.instruments import sample
from plants.network import valve_flow
from plants.operating import steady_volumes
from plants.transmitter import BAD, fraction_of_current
from plants.vessel import cylinder_level, cylinder_volume

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from harness.domain.models import ControllerSettings
    from harness.domain.rig import Rig

    Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class SavedState:
    """A copy of everything that changes in an engine.

    Parameters
    ----------
    state : ndarray of float64
        State.
    counters : ndarray of int64
        Counters.
    """

    state: NDArray[np.float64]
    counters: NDArray[np.int64]


class Engine:
    """A rig that can be advanced tick by tick.

    Parameters
    ----------
    rig : Rig
        The rig.
    built_in : bool
        Whether the reference block closes the loops; otherwise ``set_output`` does.

    Raises
    ------
    ModelError
        When the rig has no steady state to start from.
    """

    def __init__(self, rig: Rig, *, built_in: bool = True) -> None:
        self.rig = rig
        self.columns = columns_of(rig)
        arrays = assemble(rig)
        self.table = arrays.table
        self.parameters = arrays.parameters
        self.state = np.zeros(arrays.state_size)
        self.counters = np.zeros(place.N_COUNTERS, dtype=np.int64)
        self.work = np.zeros(arrays.work_size)
        self._no_rows = np.empty((0, len(self.columns)))
        self._stride = int(self.table[place.LOOP_STATE_STRIDE])
        self._valves = {valve.tag: i for i, valve in enumerate(rig.valves)}
        self._transmitters = {t.tag: i for i, t in enumerate(rig.transmitters)}
        self._loops = {loop.tag: i for i, loop in enumerate(rig.loops)}
        self._start()
        for loop in rig.loops:
            self.set_built_in(loop.tag, built_in=built_in)

    @property
    def tick(self) -> int:
        """Return the present tick [ticks]."""
        return int(self.counters[place.TICK])

    def advance(self, ticks: int) -> None:
        """Advance without recording.

        Parameters
        ----------
        ticks : int
            Number of ticks [ticks].
        """
        advance(
            self.table,
            self.parameters,
            self.state,
            self.counters,
            self.work,
            self._no_rows,
            ticks,
        )

    def record(self, ticks: int) -> Floats:
        """Advance and return the rows.

        Parameters
        ----------
        ticks : int
            Number of ticks [ticks].

        Returns
        -------
        ndarray, shape (ticks, n_columns)
            One row a tick, each number in its column's unit.
        """
        rows = np.empty((ticks, len(self.columns)))
        advance(
            self.table,
            self.parameters,
            self.state,
            self.counters,
            self.work,
            rows,
            ticks,
        )
        return rows

    def row(self) -> Floats:
        """Return the row of the present tick without advancing.

        Returns
        -------
        ndarray, shape (n_columns,)
            As ``record`` would give it, but for outputs that this tick's scan may still
            change; each number in its column's unit.
        """
        row = np.empty(len(self.columns))
        write_row(self.table, self.parameters, self.state, row, self._stride)
        return row

    def save(self) -> SavedState:
        """Return a copy of all that changes."""
        return SavedState(state=self.state.copy(), counters=self.counters.copy())

    def restore(self, saved: SavedState) -> None:
        """Go back to a saved state.

        Parameters
        ----------
        saved : SavedState
            From an engine of the same rig.
        """
        self.state[:] = saved.state
        self.counters[:] = saved.counters

    # Orders; each holds from the present tick on.

    def set_built_in(self, loop: str, *, built_in: bool) -> None:
        """Say whether the reference block closes a loop.

        Parameters
        ----------
        loop : str
            Tag of the loop.
        built_in : bool
            True for the reference block.
        """
        link = self._loop_link(loop)
        self.table[link + place.BUILT_IN] = int(built_in)

    def set_scan(self, loop: str, *, ticks: int, phase: int, delay: int) -> None:
        """Set when the built-in block scans; before the first tick only.

        Parameters
        ----------
        loop : str
            Tag of the loop.
        ticks : int
            Scan period [ticks].
        phase : int
            Tick of the first scan [ticks].
        delay : int
            Ticks from sample to output, at most the rig's own ``output_delay`` [ticks].
        """
        link = self._loop_link(loop)
        self.table[link + place.SCAN_TICKS] = ticks
        self.table[link + place.SCAN_PHASE] = phase
        self.table[link + place.DELAY_TICKS] = delay
        p = (
            int(self.table[place.AT_LOOP_PARAMETERS])
            + self._loops[loop] * place.LOOP_PARAMETERS
        )
        self.parameters[p + place.SCAN] = ticks * self.rig.tick

    def set_setpoint(self, loop: str, setpoint: float) -> None:
        """Order a setpoint.

        Parameters
        ----------
        loop : str
            Tag of the loop.
        setpoint : float
            In the unit of the process variable as shown [unit].
        """
        shown = shown_range(self.rig.transmitter(self.rig.loop(loop).process_variable))
        self.state[self._at(loop) + place.SETPOINT] = shown.to_fraction(setpoint)

    def set_mode(self, loop: str, mode: int) -> None:
        """Order a mode.

        Parameters
        ----------
        loop : str
            Tag of the loop.
        mode : int
            MANUAL or AUTOMATIC of ``harness.controllers.block`` [-].
        """
        self.state[self._at(loop) + place.MODE] = mode

    def set_manual_output(self, loop: str, output: float) -> None:
        """Order the output in manual.

        Parameters
        ----------
        loop : str
            Tag of the loop.
        output : float
            Output [-].
        """
        self.state[self._at(loop) + place.MANUAL_OUTPUT] = output

    def set_settings(self, loop: str, settings: ControllerSettings) -> None:
        """Order settings.

        Parameters
        ----------
        loop : str
            Tag of the loop.
        settings : ControllerSettings
            Gain and integral time.
        """
        s = self._at(loop)
        self.state[s + place.GAIN] = settings.gain
        integral_time = settings.integral_time
        self.state[s + place.INTEGRAL_TIME] = np.inf if integral_time is None else integral_time

    def set_output(self, valve: str, output: float) -> None:
        """Command a valve: the load, or an output from outside.

        Parameters
        ----------
        valve : str
            Tag of the valve.
        output : float
            Commanded travel [-].
        """
        self.state[self.table[at.AT_COMMAND] + self._valves[valve]] = output
        for tag, loop in zip(self._loops, self.rig.loops, strict=True):
            if loop.output == valve:
                s = self._at(tag)
                self.state[s + place.OUTPUT] = output
                self.state[s + place.DELAY_LINE : s + self._stride] = output

    def force_current(self, transmitter: str, current_ma: float) -> None:
        """Force a transmitter's current, or let it go.

        Parameters
        ----------
        transmitter : str
            Tag of the transmitter.
        current_ma : float
            Current; 0 lets it go [mA].
        """
        self.state[self.table[at.AT_FORCED] + self._transmitters[transmitter]] = current_ma

    # Views for people, made when somebody looks.

    def measured(self, transmitter: str) -> float:
        """Return a transmitted value.

        Parameters
        ----------
        transmitter : str
            Tag of the transmitter.

        Returns
        -------
        float
            In the unit shown [unit].
        """
        shown = shown_range(self.rig.transmitter(transmitter))
        current = self.state[self.table[at.AT_CURRENT] + self._transmitters[transmitter]]
        return shown.from_fraction(fraction_of_current(current))

    def transmitted(self, transmitter: str) -> tuple[float, bool]:
        """Return a transmitted value as a controller's input card has it.

        Parameters
        ----------
        transmitter : str
            Tag of the transmitter.

        Returns
        -------
        value : float
            Fraction of span [-].
        bad : bool
            Whether its quality is bad.
        """
        number = self._transmitters[transmitter]
        current = self.state[self.table[at.AT_CURRENT] + number]
        bad = self.state[self.table[at.AT_QUALITY] + number] == BAD
        return float(fraction_of_current(current)), bool(bad)

    def output(self, valve: str) -> float:
        """Return a valve's command.

        Parameters
        ----------
        valve : str
            Tag of the valve.

        Returns
        -------
        float
            Commanded travel [-].
        """
        return float(self.state[self.table[at.AT_COMMAND] + self._valves[valve]])

    def levels(self) -> Floats:
        """Return the true levels.

        Returns
        -------
        ndarray, shape (n_vessels,)
            Levels [m].
        """
        return np.array(
            [
                cylinder_level(self.state[i], vessel.shape.area)
                for i, vessel in enumerate(self.rig.vessels)
            ]
        )

    def valve_flows(self, outputs: dict[str, float]) -> Floats:
        """Return the flow through every valve once it stands at its output.

        Parameters
        ----------
        outputs : dict of str to float
            By tag of the valve; those not named stand at their initial output [-].

        Returns
        -------
        ndarray, shape (n_valves,)
            Flows [m3/s].
        """
        travels = [outputs.get(valve.tag, valve.initial_output) for valve in self.rig.valves]
        return np.array(
            [valve_flow(self.table, self.parameters, i, x) for i, x in enumerate(travels)]
        )

    def place_of_transmitter(self, tag: str) -> int:
        """Return a transmitter's number among the transmitters [-].

        Parameters
        ----------
        tag : str
            Its tag.
        """
        return self._transmitters[tag]

    def place_of_valve(self, tag: str, entry: int) -> int:
        """Return where a valve's value stands in the state [-].

        Parameters
        ----------
        tag : str
            Tag of the valve.
        entry : int
            Entry of the table's header, e.g. ``plants.layout.AT_TRAVEL`` [-].
        """
        return int(self.table[entry]) + self._valves[tag]

    def place_of_loop(self, tag: str) -> int:
        """Return where a loop's places begin in the state [-].

        Parameters
        ----------
        tag : str
            Tag of the loop.
        """
        return self._at(tag)

    def _at(self, loop: str) -> int:
        return int(self.table[place.AT_LOOP_STATE]) + self._loops[loop] * self._stride

    def _loop_link(self, loop: str) -> int:
        return int(self.table[place.AT_LOOP_LINKS]) + self._loops[loop] * place.LOOP_LINKS

    def _start(self) -> None:
        """Fill the state for tick 0."""
        flows = self.valve_flows({})
        for i, valve in enumerate(self.rig.valves):
            for offset in (at.AT_COMMAND, at.AT_RAMP, at.AT_TRAVEL):
                self.state[self.table[offset] + i] = valve.initial_output
            self.state[self.table[at.AT_FLOW] + i] = flows[i]
        levels = [vessel.initial_level for vessel in self.rig.vessels]
        if None in levels:
            volumes = steady_volumes(self.table, self.parameters, flows)
            if volumes is None:
                raise ModelError(
                    f"rig {self.rig.name}: the initial outputs have no steady state, so the "
                    "levels cannot be found from them: give every vessel an initial_level"
                )
            self.state[: len(levels)] = volumes
        for i, (vessel, level) in enumerate(zip(self.rig.vessels, levels, strict=True)):
            if level is not None:
                self.state[i] = cylinder_volume(level, vessel.shape.area)
        self._start_instruments()
        for loop in self.rig.loops:
            self._start_loop(loop.tag)

    def _start_instruments(self) -> None:
        """Let the damping of every transmitter stand at its true value, and take sample 0."""
        sample(self.table, self.parameters, self.state, self.work, 0, False)
        n = len(self.rig.transmitters)
        true, damped = int(self.table[at.AT_TRUE]), int(self.table[at.AT_DAMPED])
        self.state[damped : damped + n] = self.state[true : true + n]
        sample(self.table, self.parameters, self.state, self.work, 0, False)

    def _start_loop(self, tag: str) -> None:
        loop = self.rig.loop(tag)
        initial = self.rig.valve(loop.output).initial_output
        s = self._at(tag)
        self.state[s + place.MANUAL_OUTPUT] = initial
        self.state[s + place.OUTPUT] = initial
        self.state[s + place.DELAY_LINE : s + self._stride] = initial
        self.state[s + place.GAIN] = 0.0
        self.state[s + place.INTEGRAL_TIME] = np.inf
        # As after a held scan: the first scan in automatic continues from the output.
        self.state[s + place.HELD] = 1
        transmitter = self.rig.transmitter(loop.process_variable)
        true = self.state[self.table[at.AT_TRUE] + self._transmitters[transmitter.tag]]
        fraction = transmitter.range.to_fraction(float(true))
        if loop.initial_setpoint is not None:
            fraction = transmitter.range.to_fraction(loop.initial_setpoint)
        self.state[s + place.SETPOINT] = fraction
