"""Drawings as files: SVG or PNG, whole or not at all."""

from __future__ import annotations

import io
from typing import TYPE_CHECKING, Any

from harness.errors import RecordError, UsageError
from harness.reporting.plots import SETTINGS, inline_svg

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

KINDS = (".svg", ".png")
DOTS = 160  # [1/inch] of a PNG: sharp on a screen and in a document


def check_figure_path(path: Path) -> None:
    """Refuse a file name that says no kind of drawing, before any work is done.

    Parameters
    ----------
    path : Path
        File to write.

    Raises
    ------
    UsageError
        When it ends neither in .svg nor in .png.
    """
    if path.suffix.lower() not in KINDS:
        raise UsageError(f"{path}: a drawing is written as {' or '.join(KINDS)}")


def write_figure(path: Path, draw: Callable[[Any], None], size: tuple[float, float]) -> None:
    """Draw into a file; the same data give the same bytes.

    Parameters
    ----------
    path : Path
        File to write, .svg or .png.
    draw : callable
        Draws into a matplotlib figure.
    size : tuple of float
        Width and height [inch].

    Raises
    ------
    UsageError
        When the file name says no kind of drawing.
    RecordError
        When it cannot be written; what was there before stays.
    """
    check_figure_path(path)
    kind = path.suffix.lower().removeprefix(".")
    data = _rendered(draw, size, kind)
    temporary = path.with_name(path.name + ".part")
    try:
        temporary.write_bytes(data)
        temporary.replace(path)
    except OSError as error:
        raise RecordError(
            f"{path} could not be written ({error}). Free the disk, close the program that holds "
            "the file, or choose another place."
        ) from error
    finally:
        if temporary.exists():
            temporary.unlink()


def figure_element(draw: Callable[[Any], None], size: tuple[float, float], label: str) -> str:
    """Return a drawing as one ``<svg>`` element for a page.

    Parameters
    ----------
    draw : callable
        Draws into a matplotlib figure.
    size : tuple of float
        Width and height [inch].
    label : str
        What it shows.
    """
    return inline_svg(_rendered(draw, size, "svg").decode(), label)


def _rendered(draw: Callable[[Any], None], size: tuple[float, float], kind: str) -> bytes:
    # matplotlib takes a third of a second to load, and most commands draw nothing.
    from matplotlib import rc_context  # noqa: PLC0415
    from matplotlib.figure import Figure  # noqa: PLC0415

    buffer = io.BytesIO()
    with rc_context({**SETTINGS, "svg.hashsalt": "dryrig"}):
        figure = Figure(figsize=size, layout="constrained")
        draw(figure)
        metadata = {"Date": None, "Creator": None} if kind == "svg" else {"Software": None}
        figure.savefig(buffer, format=kind, dpi=DOTS, metadata=metadata)
    return buffer.getvalue()
