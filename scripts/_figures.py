"""One figure of the benchmark, its table and its JSON."""

from __future__ import annotations

import json
import os
import platform
from dataclasses import dataclass
from importlib import metadata
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterable

SCHEMA = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class Figure:
    """One measured figure.

    Parameters
    ----------
    name : str
        Section and name, e.g. ``"loops.built_in"``.
    value : float or None
        Figure in ``unit``; None where it could not be measured, and ``note`` says why.
    unit : str
        Its unit, ``"1"`` for a plain number.
    wanted : str
        What the project asks for, e.g. ``">= 300000"``; empty where it asks nothing.
    note : str
        What a reader has to know.
    """

    name: str
    value: float | None
    unit: str
    wanted: str = ""
    note: str = ""


def as_table(figures: Iterable[Figure]) -> str:
    """Return the figures as lines of a table for people.

    Parameters
    ----------
    figures : iterable of Figure
        The figures.

    Returns
    -------
    str
        The lines.
    """
    return "\n".join(
        f"{figure.name:<34} {_shown(figure.value):>12} {figure.unit:<16} "
        f"{figure.wanted:<12} {figure.note}".rstrip()
        for figure in figures
    )


def as_json(figures: Iterable[Figure]) -> str:
    """Return the same figures by name, with the machine and the versions.

    Parameters
    ----------
    figures : iterable of Figure
        The figures.

    Returns
    -------
    str
        A JSON document.
    """
    packages = ("numpy", "scipy", "numba", "asyncua")
    document = {
        "schema": SCHEMA,
        "machine": {
            "system": platform.platform(),
            "processor": platform.machine(),
            "cores": os.cpu_count(),
        },
        "versions": {
            "python": platform.python_version(),
            **{name: metadata.version(name) for name in packages},
        },
        "figures": {
            figure.name: {
                "value": figure.value,
                "unit": figure.unit,
                "wanted": figure.wanted,
                "note": figure.note,
            }
            for figure in figures
        },
    }
    return json.dumps(document, indent=2, allow_nan=False)


def _shown(value: float | None) -> str:
    if value is None:
        return "-"
    return f"{value:,.0f}" if abs(value) >= 1000 else f"{value:.3g}"  # noqa: PLR2004  for reading
