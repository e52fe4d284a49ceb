"""Operating point of a plant: steady state, linearisation, time constants."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from plants import layout as at
from plants.network import rates, valve_flow

Floats = NDArray[np.float64]
Table = NDArray[np.uint32]

_NEWTON_STEPS = 200
_BALANCE = 1e-15  # residual flow relative to the throughput at which the balance is closed [-]
_RELATIVE_STEP = 1e-6  # of the central difference; its error is about the square [-]
_NEGLIGIBLE = 1e-9  # share of a mode in the gain below which it does not belong to the path [-]


def flows_into(
    table: Table, parameters: Floats, volumes: Floats, valve_flows: Floats
) -> Floats:
    """Return the rates of change of volumes and totals.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    volumes : ndarray, shape (n_vessels,)
        Volumes [m3].
    valve_flows : ndarray, shape (n_valves,)
        Flow through each valve [m3/s].

    Returns
    -------
    ndarray, shape (n_vessels + 3,)
        Rates [m3/s].
    """
    n_vessels = int(table[at.N_VESSELS])
    n = n_vessels + at.N_TOTALS
    work = np.zeros(int(table[at.WORK]))
    work[:n_vessels] = volumes
    flows = int(table[at.AT_COURSE]) + n_vessels
    work[flows : flows + len(valve_flows)] = valve_flows
    rates(table, parameters, work, 0, 0, n)
    return work[n : 2 * n]


def steady_volumes(table: Table, parameters: Floats, valve_flows: Floats) -> Floats | None:
    """Return the volumes at which every vessel's inflow equals its outflow.

    Newton's method on the square roots of the volumes, in which free outlets are linear.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    valve_flows : ndarray, shape (n_valves,)
        Flow through each valve [m3/s].

    Returns
    -------
    ndarray, shape (n_vessels,), or None
        Volumes, or None when the plant has no steady state for these flows [m3].
    """
    n = int(table[at.N_VESSELS])
    throughput = float(np.sum(np.abs(valve_flows)))
    if throughput == 0.0:
        return np.zeros(n)
    areas = _areas(table, parameters)
    roots = np.sqrt(areas * 1.0)  # a level of 1 m to start from
    for _ in range(_NEWTON_STEPS):
        residual = flows_into(table, parameters, roots**2, valve_flows)[:n]
        if np.max(np.abs(residual)) <= _BALANCE * throughput:
            return np.asarray(roots**2)
        jacobian = np.empty((n, n))
        for i in range(n):
            step = np.zeros(n)
            step[i] = _RELATIVE_STEP * max(roots[i], 1e-6)
            above = flows_into(table, parameters, (roots + step) ** 2, valve_flows)[:n]
            below = flows_into(table, parameters, (roots - step) ** 2, valve_flows)[:n]
            jacobian[:, i] = (above - below) / (2 * step[i])
        if np.linalg.matrix_rank(jacobian) < n:
            return None
        change = np.linalg.solve(jacobian, -residual)
        new = roots + change
        # A root may not change its sign; halve the way to zero instead.
        new = np.where(new <= 0.0, roots / 2, new)
        if np.max(np.abs(new - roots)) <= 1e-15 * np.max(roots):
            return np.asarray(new**2)
        roots = new
    return None


def _areas(table: Table, parameters: Floats) -> Floats:
    start = int(table[at.AT_VESSEL_PARAMETERS])
    return np.array(
        [parameters[start + i * at.VESSEL_STRIDE] for i in range(int(table[at.N_VESSELS]))]
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Linearisation:
    """dV/dt = A dV + B dx, dh = C dV around a steady state, x the travels of the valves.

    Parameters
    ----------
    state : ndarray, shape (n_vessels, n_vessels)
        A [1/s].
    inputs : ndarray, shape (n_vessels, n_valves)
        B [m3/s per unit of travel].
    levels : ndarray, shape (n_vessels, n_vessels)
        C [1/m2].
    """

    state: Floats
    inputs: Floats
    levels: Floats

    def path(self, valve: int, vessel: int) -> tuple[float, tuple[float, ...]]:
        """Return gain and time constants from a valve's travel to a vessel's level.

        Parameters
        ----------
        valve, vessel : int
            Their numbers [-].

        Returns
        -------
        gain : float
            Steady gain [m per unit of travel].
        time_constants : tuple of float
            Of the modes that belong to this path, the larger first [s].
        """
        b = self.inputs[:, valve]
        c = self.levels[vessel]
        gain = float(-c @ np.linalg.solve(self.state, b))
        eigenvalues, right = np.linalg.eig(self.state)
        left = np.linalg.inv(right)
        shares = (c @ right) * (left @ b) / -eigenvalues
        belongs = np.abs(shares) > _NEGLIGIBLE * np.max(np.abs(shares))
        times = sorted((float(-1 / v.real) for v in eigenvalues[belongs]), reverse=True)
        return gain, tuple(times)


def linearise(
    table: Table, parameters: Floats, volumes: Floats, travels: Floats
) -> Linearisation:
    """Return the linearisation of the volumes' balance around a steady state.

    Parameters
    ----------
    table : ndarray of uint32
        Table of the rig.
    parameters : ndarray of float64
        Parameters of the rig.
    volumes : ndarray, shape (n_vessels,)
        Steady volumes [m3].
    travels : ndarray, shape (n_valves,)
        Travels of the valves [-].

    Returns
    -------
    Linearisation
        By central differences, with a relative error of about 1e-10.
    """
    n, n_valves = int(table[at.N_VESSELS]), int(table[at.N_VALVES])

    def flows(at_travels: Floats) -> Floats:
        return np.array(
            [valve_flow(table, parameters, i, at_travels[i]) for i in range(n_valves)]
        )

    base = flows(travels)
    state = np.empty((n, n))
    for i in range(n):
        step = np.zeros(n)
        step[i] = _RELATIVE_STEP * volumes[i]
        above = flows_into(table, parameters, volumes + step, base)[:n]
        below = flows_into(table, parameters, volumes - step, base)[:n]
        state[:, i] = (above - below) / (2 * step[i])
    inputs = np.empty((n, n_valves))
    for i in range(n_valves):
        step = np.zeros(n_valves)
        step[i] = _RELATIVE_STEP
        above = flows_into(table, parameters, volumes, flows(travels + step))[:n]
        below = flows_into(table, parameters, volumes, flows(travels - step))[:n]
        inputs[:, i] = (above - below) / (2 * step[i])
    levels = np.diag(1.0 / _areas(table, parameters))
    return Linearisation(state=state, inputs=inputs, levels=levels)
