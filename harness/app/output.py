"""Documents on standard output."""

from __future__ import annotations

import os
import sys


def write_output(text: str) -> None:
    """Write a document to standard output: UTF-8 and bare line feeds, whatever the console has.

    A reader that has gone is no fault of the run: the exit code still says how that went.

    Parameters
    ----------
    text : str
        The document.
    """
    try:
        sys.stdout.flush()
        sys.stdout.buffer.write(text.encode("utf-8"))
        sys.stdout.flush()
    except BrokenPipeError:
        leave_output()


def leave_output() -> None:
    """Let everything further on standard output go nowhere, for its reader has gone."""
    # The interpreter flushes at its end, and would complain of the broken pipe there.
    nowhere = os.open(os.devnull, os.O_WRONLY)
    os.dup2(nowhere, sys.stdout.fileno())
    os.close(nowhere)
