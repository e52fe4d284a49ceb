"""The box between the links and the pipe: every write, and little else."""

from __future__ import annotations

import threading

from harness.domain.signals import Exchange
from harness.runtime.news import Contact, LinkEventKind, LinkNews, NewsBox

NOW_NS = 1_000


def box() -> NewsBox:
    return NewsBox(lambda: NOW_NS)


def exchange(number: int) -> Exchange:
    return Exchange(
        link="modbus",
        arrival_ns=number,
        peer="127.0.0.1:50000",
        connection=1,
        function="FC16",
        address="20",
        point="FV-101",
        value=float(number),
        raw=hex(number),
        image_tick=7,
    )


def take_all(news_box: NewsBox) -> list[LinkNews]:
    """Close the box and take message after message."""
    news_box.close()
    messages = []
    while (news := news_box.wait(0.0)) is not None:
        messages.append(news)
    return messages


def test_reads_of_a_connection_become_one_line_with_the_last_stamps() -> None:
    news_box = box()
    for k in range(1_000):
        news_box.activity("modbus", 1, "a:1", image_tick=k // 10, arrival_ns=k)
        news_box.activity("modbus", 2, "b:1", image_tick=-1, arrival_ns=k + 5)
    (news,) = take_all(news_box)
    first, second = news.activity
    assert (first.connection, first.peer, first.requests) == (1, "a:1", 1_000)
    assert (first.arrival_ns, first.image_tick) == (999, 99)
    assert (second.connection, second.requests, second.arrival_ns) == (2, 1_000, 1_004)
    assert not news.writes
    assert not news.events


def test_of_several_readers_of_a_point_the_last_one_is_told_of() -> None:
    news_box = box()
    both, level = ("LT-102", "FT-101"), ("LT-102",)
    news_box.activity("modbus", 1, "a:1", 7, 40, both)
    news_box.activity("modbus", 2, "b:1", 7, 60, level)
    news_box.activity("opcua", 1, "c:1", 7, 50, both)
    news_box.activity("modbus", 2, "b:1", 7, 70)  # a write reads nothing
    (news,) = take_all(news_box)
    assert news.readers == {
        "LT-102": Contact(link="modbus", peer="b:1", arrival_ns=60),
        "FT-101": Contact(link="opcua", peer="c:1", arrival_ns=50),
    }


def test_readers_are_told_of_a_few_times_a_second_and_none_is_lost() -> None:
    now = [0]
    news_box = NewsBox(lambda: now[0])
    news_box.activity("modbus", 1, "a:1", 7, 1, ("LT-102",))
    first = news_box.wait(0.0)
    assert first is not None
    assert list(first.readers) == ["LT-102"]
    now[0] = 50_000_000
    news_box.activity("modbus", 1, "a:1", 8, 2, ("FT-101",))
    early = news_box.wait(0.0)
    assert early is not None
    assert [each.image_tick for each in early.activity] == [8]
    assert not early.readers
    now[0] = 200_000_000
    due = news_box.wait(3_600.0)  # nothing else happens: it is told of on its own
    assert due is not None
    assert list(due.readers) == ["FT-101"]
    assert not due.activity


def test_a_scanner_of_areas_does_not_fill_the_box() -> None:
    news_box = box()
    for k in range(5_000):
        news_box.activity("modbus", 1, "a:1", 7, k, (f"point {k}",))
    (news,) = take_all(news_box)
    assert len(news.readers) == 1_000


def test_the_activity_that_came_with_a_write_is_in_its_message() -> None:
    news_box = box()
    news_box.activity("modbus", 1, "a:1", image_tick=7, arrival_ns=50)
    news_box.writes([exchange(50)])
    news = news_box.wait(3_600.0)  # a write is not held back for the quiet time
    assert news is not None
    assert [each.arrival_ns for each in news.activity] == [50]
    assert [list(request) for request in news.writes] == [[exchange(50)]]


def test_no_write_is_lost_or_out_of_order_and_no_request_is_split() -> None:
    news_box = box()
    requests = [[exchange(k), exchange(k + 1)] for k in range(0, 5_000, 2)]
    for request in requests:
        news_box.writes(request)
    messages = take_all(news_box)
    taken = [list(request) for news in messages for request in news.writes]
    assert taken == requests
    assert max(sum(map(len, news.writes)) for news in messages) <= 300


def test_a_request_longer_than_a_message_goes_alone() -> None:
    news_box = box()
    news_box.writes([exchange(k) for k in range(1_000)])
    news_box.writes([exchange(1)])
    first, second = take_all(news_box)
    assert [len(request) for request in first.writes] == [1_000]
    assert [len(request) for request in second.writes] == [1]


def test_refusals_that_repeat_are_counted_and_long_texts_cut() -> None:
    news_box = box()
    news_box.connection("modbus", 1, "a:1", connected=True)
    for _ in range(500):
        news_box.refused("modbus", 1, "a:1", "register 9: 101 % is above 100 %")
    news_box.refused("modbus", 1, "a:1", "x" * 10_000)
    news_box.connection("modbus", 1, "a:1", connected=False)
    (news,) = take_all(news_box)
    assert [(event.kind, event.count) for event in news.events] == [
        (LinkEventKind.CONNECTED, 1),
        (LinkEventKind.REFUSED, 500),
        (LinkEventKind.REFUSED, 1),
        (LinkEventKind.GONE, 1),
    ]
    assert news.events[1].arrival_ns == NOW_NS
    assert len(news.events[2].text) == 300


def test_a_flood_of_connections_takes_bounded_memory_and_is_owned_up_to() -> None:
    news_box = box()
    for k in range(5_000):
        news_box.connection("modbus", k, f"a:{k}", connected=True)
    events = [event for news in take_all(news_box) for event in news.events]
    assert len(events) == 1_001
    assert sum(event.count for event in events) == 5_000
    assert (events[-1].count, events[-1].text) == (4_000, "more of these than could be kept")


def test_an_empty_box_wakes_nobody_until_something_comes() -> None:
    news_box = box()
    taken: list[LinkNews | None] = []
    thread = threading.Thread(target=lambda: taken.append(news_box.wait(0.0)))
    thread.start()
    assert thread.is_alive()
    news_box.writes([exchange(1)])
    thread.join(5.0)
    assert [news.writes for news in taken if news is not None] == [[(exchange(1),)]]


def test_a_closed_box_gives_what_is_left_and_then_nothing() -> None:
    news_box = box()
    news_box.writes([exchange(1)])
    news_box.close()
    assert news_box.wait(0.0) == LinkNews(writes=[(exchange(1),)], activity=[], events=[])
    assert news_box.wait(0.0) is None
