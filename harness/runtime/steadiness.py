"""Keeping the collector of unreachable objects out of what runs to the clock.

Compiled kernels and an OPC UA address space leave some 230,000 objects behind that stay for
good. A full collection walks through all of them: 100 to 200 ms in which no tick runs and no
link answers, whenever enough new objects have piled up. What was there at the start is therefore
set aside; what is made later is still collected, and there is little of it.
"""

from __future__ import annotations

import gc
from contextlib import contextmanager
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterator


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
