"""Documents on standard output."""

from __future__ import annotations

import errno
import os
import sys

from harness.errors import RecordError


def write_output(text: str) -> None:
    """Write a document to standard output: UTF-8 and bare line feeds, whatever the console has.

    A reader that has gone is no fault of the run: the exit code still says how that went.

    Parameters
    ----------
    text : str
        The document.

    Raises
    ------
    RecordError
        When it cannot be written where it was sent to.
    """
    try:
        sys.stdout.flush()
        sys.stdout.buffer.write(text.encode("utf-8"))
        sys.stdout.flush()
    except OSError as error:
        if not is_reader_gone(error):
            raise RecordError(
                f"standard output could not be written ({error}): is the disk full that it goes "
                "to? The same document is in the run folder, if there is one"
            ) from error
        leave_output()


def is_reader_gone(error: OSError) -> bool:
    """Return whether a write failed because nobody reads any more.

    Parameters
    ----------
    error : OSError
        What the write raised; Windows calls a broken pipe an invalid argument.
    """
    return isinstance(error, BrokenPipeError) or (
        sys.platform == "win32" and error.errno == errno.EINVAL
    )


def leave_output() -> None:
    """Let everything further on standard output go nowhere, for its reader has gone."""
    # The interpreter flushes at its end, and would complain of the broken pipe there.
    nowhere = os.open(os.devnull, os.O_WRONLY)
    os.dup2(nowhere, sys.stdout.fileno())
    os.close(nowhere)
