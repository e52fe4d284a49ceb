"""Memory set aside is not searched, new garbage still is, and all is taken back."""

from __future__ import annotations

import gc
import os
import sys
import threading
import weakref

import pytest

from harness.runtime.steadiness import steady_memory, steady_threads


class Node:
    """Something that can refer to itself."""

    def __init__(self) -> None:
        self.itself = self


def test_what_stood_before_is_set_aside_while_it_lasts() -> None:
    stays = [Node() for _ in range(100)]
    assert gc.get_freeze_count() == 0
    with steady_memory():
        assert gc.get_freeze_count() > len(stays)
        assert not any(each is stays[0] for each in gc.get_objects())
    assert gc.get_freeze_count() == 0
    assert any(each is stays[0] for each in gc.get_objects())


def test_garbage_made_before_is_collected_first_and_garbage_made_later_as_ever() -> None:
    before = weakref.ref(Node())
    with steady_memory():
        assert before() is None
        later = weakref.ref(Node())
        gc.collect()
        assert later() is None


@pytest.mark.skipif(sys.platform != "linux", reason="elsewhere there is nothing to ask for")
def test_real_time_threads_where_granted_those_that_are_there_and_for_as_long_as_asked() -> (
    None
):
    def kind(number: int | None) -> int:
        return os.sched_getscheduler(number or 0) & ~os.SCHED_RESET_ON_FORK

    done = threading.Event()
    there = threading.Thread(target=done.wait)
    there.start()
    before = kind(0)
    later: list[int] = []
    with steady_threads() as granted:
        inside = [kind(0), kind(there.native_id)]
        other = threading.Thread(target=lambda: later.append(kind(0)))
        other.start()
        other.join()
    after = [kind(0), kind(there.native_id)]
    done.set()
    there.join()
    assert inside == ([os.SCHED_RR] * 2 if granted else [before] * 2)
    assert later == [os.SCHED_OTHER]
    assert after == [before] * 2
