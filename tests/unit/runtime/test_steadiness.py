"""Memory set aside is not searched, new garbage still is, and all is taken back."""

from __future__ import annotations

import gc
import os
import sys
import threading
import weakref

import pytest

from harness.runtime.steadiness import steady_memory, steady_thread


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
def test_a_real_time_thread_where_granted_alone_and_for_as_long_as_asked() -> None:
    before = os.sched_getscheduler(0)
    inside: list[int] = []
    with steady_thread() as granted:
        here = os.sched_getscheduler(0) & ~os.SCHED_RESET_ON_FORK
        other = threading.Thread(target=lambda: inside.append(os.sched_getscheduler(0)))
        other.start()
        other.join()
    assert here == (os.SCHED_RR if granted else before)
    assert inside == [os.SCHED_OTHER]
    assert os.sched_getscheduler(0) == before
