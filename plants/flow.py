"""Flow through orifices, valves, lines and weirs; each equation with its source."""

from __future__ import annotations

import math

from plants.compile import kernel

STANDARD_GRAVITY = 9.80665  # [m/s2], 3rd General Conference on Weights and Measures, 1901
WATER_REFERENCE_DENSITY = (
    999.1  # [kg/m3], water at 15 degC, the reference of Kv; common practice
)
# N1 = 1 for Kv in m3/h and pressure in bar (IEC 60534-2-1); here m3/s and Pa.
_VALVE_CONSTANT = 1.0 / (3600.0 * math.sqrt(1e5))


def orifice_coefficient(discharge_coefficient: float, area: float, gravity: float) -> float:
    """Return c in q = c sqrt(h), the free jet of a sharp-edged orifice (Torricelli).

    Parameters
    ----------
    discharge_coefficient : float
        Cd [-].
    area : float
        Area of the bore [m2].
    gravity : float
        Acceleration of gravity [m/s2].

    Returns
    -------
    float
        Coefficient [m2.5/s].
    """
    return discharge_coefficient * area * math.sqrt(2.0 * gravity)


@kernel
def orifice_flow(coefficient: float, level: float) -> float:
    """Return the flow of a free outlet under a level; zero when it is dry.

    Parameters
    ----------
    coefficient : float
        See ``orifice_coefficient`` [m2.5/s].
    level : float
        Level above the orifice [m].

    Returns
    -------
    float
        Flow [m3/s].
    """
    if level <= 0.0:
        return 0.0
    return coefficient * math.sqrt(level)


def weir_coefficient(discharge_coefficient: float, width: float, gravity: float) -> float:
    """Return c in q = c x**1.5 of a rectangular sharp-crested weir (Poleni).

    Parameters
    ----------
    discharge_coefficient : float
        Cd, about 0.6 (common practice) [-].
    width : float
        Width of the crest [m].
    gravity : float
        Acceleration of gravity [m/s2].

    Returns
    -------
    float
        Coefficient, two thirds Cd b sqrt(2 g) [m1.5/s].
    """
    return 2.0 / 3.0 * discharge_coefficient * width * math.sqrt(2.0 * gravity)


@kernel
def weir_flow(coefficient: float, head: float) -> float:
    """Return the flow over a weir; zero when the level is below its crest.

    Parameters
    ----------
    coefficient : float
        See ``weir_coefficient`` [m1.5/s].
    head : float
        Level above the crest [m].

    Returns
    -------
    float
        Flow [m3/s].
    """
    if head <= 0.0:
        return 0.0
    return coefficient * head * math.sqrt(head)


@kernel
def series_coefficient(valve: float, line: float) -> float:
    """Return the flow coefficient of a valve and a line in series.

    Squares of the reciprocals add, since the pressure drops do.

    Parameters
    ----------
    valve : float
        Kv of the valve at its travel [m3/h at 1 bar].
    line : float
        Kv of the line; 0 stands for a line without resistance [m3/h at 1 bar].

    Returns
    -------
    float
        Kv of both [m3/h at 1 bar].
    """
    if line <= 0.0 or valve <= 0.0:
        return valve
    return valve * line / math.sqrt(valve * valve + line * line)


def liquid_flow(kv: float, pressure_drop: float, density: float) -> float:
    """Return the turbulent, non-choked liquid flow through a flow coefficient.

    Parameters
    ----------
    kv : float
        Flow coefficient [m3/h at 1 bar].
    pressure_drop : float
        Inlet minus outlet pressure; negative flows back [Pa].
    density : float
        Density of the liquid [kg/m3].

    Returns
    -------
    float
        Flow, IEC 60534-2-1, Q = N1 C sqrt(dp rho0 / rho) [m3/s].
    """
    root = math.sqrt(abs(pressure_drop) * WATER_REFERENCE_DENSITY / density)
    return math.copysign(kv * _VALVE_CONSTANT * root, pressure_drop)


def choked_pressure_drop(
    recovery_factor: float,
    inlet_pressure: float,
    vapour_pressure: float,
    critical_pressure: float,
) -> float:
    """Return the pressure drop at which a liquid chokes in a valve without fittings.

    Parameters
    ----------
    recovery_factor : float
        FL [-].
    inlet_pressure : float
        Absolute inlet pressure [Pa].
    vapour_pressure : float
        Absolute vapour pressure at the inlet temperature [Pa].
    critical_pressure : float
        Absolute thermodynamic critical pressure [Pa].

    Returns
    -------
    float
        FL**2 (p1 - FF pv), FF = 0.96 - 0.28 sqrt(pv/pc), IEC 60534-2-1 [Pa].
    """
    factor = 0.96 - 0.28 * math.sqrt(vapour_pressure / critical_pressure)
    return recovery_factor**2 * (inlet_pressure - factor * vapour_pressure)
