"""Level and volume of a vessel, for each shape."""

from __future__ import annotations

from plants.compile import kernel


@kernel
def cylinder_level(volume: float, area: float) -> float:
    """Return the level in an upright cylinder.

    Parameters
    ----------
    volume : float
        Volume of liquid [m3].
    area : float
        Cross-section [m2].

    Returns
    -------
    float
        Level above the bottom [m].
    """
    return volume / area


@kernel
def cylinder_volume(level: float, area: float) -> float:
    """Return the volume in an upright cylinder.

    Parameters
    ----------
    level : float
        Level above the bottom [m].
    area : float
        Cross-section [m2].

    Returns
    -------
    float
        Volume of liquid [m3].
    """
    return level * area
