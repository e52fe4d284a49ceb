"""What keeps a thread to the clock: no long collections, and a turn when it wakes.

Compiled kernels and an OPC UA address space leave some 230,000 objects behind that stay for
good. A full collection of the unreachable walks through all of them: 100 to 200 ms in which no
tick runs and no link answers, whenever enough new objects have piled up. What was there at the
start is therefore set aside; what is made later is still collected, and there is little of it.

On a machine whose processors are all busy, an ordinary thread waits for its turn when its time
has come: 5 to 18 ms at the 99th percentile beside two or three programs that only count, 0.14 ms
on a real-time thread. The other threads of its process have to be of the same kind: one that is
held up while it has the interpreter's lock holds up all. A lower priority for the other
processes of a run did not help, and made the links slower to answer.
"""

from __future__ import annotations

import gc
import os
import sys
import threading
from contextlib import contextmanager, suppress
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterator

_PROCESSORS = 2  # fewer, and a thread that never waits would stop the machine [-]


def set_memory_aside() -> None:
    """Collect once, and leave what stays out of all later collections.

    For a process of its own, once it is set up; `steady_memory` is for one that goes on to do
    other things.
    """
    gc.collect()
    gc.freeze()


@contextmanager
def steady_memory() -> Iterator[None]:
    """Set memory aside while something runs to the clock, and take it back afterwards."""
    set_memory_aside()
    try:
        yield
    finally:
        gc.unfreeze()


@contextmanager
def steady_threads() -> Iterator[bool]:
    """Have the present threads of this process run as soon as they wake, where the system lets it.

    Linux grants real-time threads to a privileged user, and to others by ``ulimit -r``. Threads
    and processes that are started later do not inherit it. Threads that wait for every tick
    take little of a processor; should one ever fail to wait, the system keeps a twentieth of
    the time for others, and with one processor alone nothing is asked for.

    Yields
    ------
    bool
        Whether the system grants it.
    """
    numbers = [each.native_id for each in threading.enumerate() if each.native_id]
    changed = [number for number in numbers if _ask_for_real_time(number)]
    try:
        yield bool(changed)
    finally:
        for number in changed:
            _be_ordinary(number)


def _ask_for_real_time(number: int) -> bool:
    """Ask for a thread, by its number in the system, and return whether it is granted."""
    if sys.platform != "linux" or (os.cpu_count() or 1) < _PROCESSORS:
        return False
    lowest = os.sched_param(os.sched_get_priority_min(os.SCHED_RR))
    try:
        if os.sched_getscheduler(number) != os.SCHED_OTHER:
            return False  # whoever started the program has chosen already
        os.sched_setscheduler(number, os.SCHED_RR | os.SCHED_RESET_ON_FORK, lowest)
    except OSError:  # not allowed to this user, or the thread has ended
        return False
    return True


def _be_ordinary(number: int) -> None:
    if sys.platform == "linux":
        with suppress(ProcessLookupError):  # a thread may have ended by now
            os.sched_setscheduler(number, os.SCHED_OTHER, os.sched_param(0))
