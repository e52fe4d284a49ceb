"""Ctrl-C before, while and after a run is under way."""

from __future__ import annotations

import signal
import threading

import pytest

from harness.app.stopping import StopRequest


def test_before_anything_is_under_way_it_is_raised_at_once():
    with pytest.raises(KeyboardInterrupt), StopRequest():
        signal.raise_signal(signal.SIGINT)


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_the_first_is_kept_and_ends_a_wait(number):
    stopped = []
    with StopRequest() as stop:
        stop.defer(lambda: stopped.append(True))
        assert not stop.asked()
        signal.raise_signal(number)
        assert stop.asked()
    assert stopped == [True]


def test_a_second_is_raised():
    stopped = []
    with StopRequest() as stop:
        stop.defer(lambda: stopped.append(True))
        signal.raise_signal(signal.SIGINT)
        with pytest.raises(KeyboardInterrupt):
            signal.raise_signal(signal.SIGINT)
    assert stopped == [True]


def test_the_handlers_are_put_back():
    before = [signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM)]
    with StopRequest() as stop:
        stop.defer(lambda: None)
        assert signal.getsignal(signal.SIGINT) != before[0]
    assert [signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM)] == before


def test_another_thread_than_the_main_one_may_use_it_in_vain():
    asked = []

    def elsewhere():
        with StopRequest() as stop:
            asked.append(stop.asked())

    thread = threading.Thread(target=elsewhere)
    thread.start()
    thread.join()
    assert asked == [False]
