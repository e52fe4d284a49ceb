"""What the link process tells the tick's process, and the box in which it is gathered.

Nothing that a peer does may fill the pipe between the two, or hold up the links. Reads are
condensed to one line a connection, repeated refusals to one with a count; only writes are all
kept, for each of them must reach a tick. Who read which point last is for people to look at: it
is told a few times a second, not with every message. A thread of its own empties the box, so
that a tick's process that is busy elsewhere holds up that thread alone.
"""

from __future__ import annotations

import threading
from collections import deque
from dataclasses import dataclass, field
from enum import StrEnum
from itertools import islice
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping, Sequence

    from harness.domain.signals import Exchange

# One message stays well below the 64 KiB that the smallest pipe holds.
_MOST_EXCHANGES = 300  # written values in a message, unless one request has more [-]
_MOST_EVENTS = 100  # events in a message [-]
_LONGEST_TEXT = 300  # of a refusal [characters]
_READERS_NS = 200_000_000  # between two tellings of who read which point [ns]
_MOST_AREAS = (
    1_000  # different sets of points read between two tellings; only a scanner has more
)
_MOST_WAITING = 1_000  # different events kept while nobody takes them; then only counted [-]


class LinkEventKind(StrEnum):
    """What a peer did beside reading and writing."""

    CONNECTED = "connected"
    GONE = "gone"
    REFUSED = "refused"


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkEvent:
    """A connection made or lost, or a request refused.

    Parameters
    ----------
    kind : LinkEventKind
        What happened.
    link : str
        Name of the link.
    connection : int
        Number of the connection, unique within the link and the run [-].
    peer : str
        ``host:port`` of the other end, or the session's name.
    text : str
        Why, for a refusal.
    arrival_ns : int
        ``perf_counter_ns`` when it happened (first of several) [ns].
    count : int
        How often, since the last message [-].
    """

    kind: LinkEventKind
    link: str
    connection: int
    peer: str
    text: str
    arrival_ns: int
    count: int = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkActivity:
    """The valid requests of one connection since the last message.

    Parameters
    ----------
    link : str
        Name of the link.
    connection : int
        Number of the connection [-].
    peer : str
        The other end.
    requests : int
        Valid requests, reads and writes [-].
    arrival_ns : int
        ``perf_counter_ns`` of the last of them [ns].
    image_tick : int
        Tick of the image that the connection read last; -1 when none [ticks].
    """

    link: str
    connection: int
    peer: str
    requests: int
    arrival_ns: int
    image_tick: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Contact:
    """Who dealt with a point, and when.

    Parameters
    ----------
    link : str
        Name of the link.
    peer : str
        ``host:port`` of the other end, or the session's name.
    arrival_ns : int
        ``perf_counter_ns`` of the request [ns].
    """

    link: str
    peer: str
    arrival_ns: int


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkNews:
    """All that happened on the links since it was last asked.

    Parameters
    ----------
    writes : sequence of sequence of Exchange
        One inner sequence a request, in order of arrival: latched in one tick or not at all.
    activity : sequence of LinkActivity
        Condensed requests.
    events : sequence of LinkEvent
        Connections and refusals.
    readers : mapping of str to Contact
        Who read a point last, by its name; only points that were read since the last telling.
    """

    writes: Sequence[Sequence[Exchange]] = ()
    activity: Sequence[LinkActivity] = ()
    events: Sequence[LinkEvent] = ()
    readers: Mapping[str, Contact] = field(default_factory=dict)

    def __bool__(self) -> bool:
        """Return whether there is anything in it."""
        return bool(self.writes or self.activity or self.events or self.readers)


NO_NEWS = LinkNews()


@dataclass(slots=True)
class _Requests:
    peer: str
    count: int
    arrival_ns: int
    image_tick: int


@dataclass(slots=True)
class _Happening:
    arrival_ns: int
    count: int


_EventKey = tuple[LinkEventKind, str, int, str, str]


class NewsBox:
    """Gathers what the links tell (an `ExchangeSink`) until a thread takes it.

    Parameters
    ----------
    now_ns : callable
        Gives the time stamp of connections and refusals [ns].
    """

    def __init__(self, now_ns: Callable[[], int]) -> None:
        self._now_ns = now_ns
        self._changed = threading.Condition(threading.Lock())
        self._writes: deque[Sequence[Exchange]] = deque()
        self._activity: dict[tuple[str, int], _Requests] = {}
        self._events: dict[_EventKey, _Happening] = {}
        self._areas: dict[tuple[str, ...], tuple[str, str, int]] = {}
        self._readers_told_ns = now_ns() - _READERS_NS
        self._closed = False

    def writes(self, exchanges: Sequence[Exchange]) -> None:
        """Take the writes of one request."""
        with self._changed:
            self._writes.append(tuple(exchanges))
            self._changed.notify()

    def activity(
        self,
        link: str,
        connection: int,
        peer: str,
        image_tick: int,
        arrival_ns: int,
        points: tuple[str, ...] = (),
    ) -> None:
        """Take note of a valid request, and of the points that it read."""
        with self._changed:
            if points and (points in self._areas or len(self._areas) < _MOST_AREAS):
                self._areas[points] = (link, peer, arrival_ns)
            requests = self._activity.get((link, connection))
            if requests is not None:
                requests.count += 1
                requests.arrival_ns = arrival_ns
                requests.image_tick = image_tick
                return
            self._activity[link, connection] = _Requests(peer, 1, arrival_ns, image_tick)
            self._changed.notify()

    def connection(self, link: str, connection: int, peer: str, connected: bool) -> None:
        """Take note that a peer connected or went."""
        kind = LinkEventKind.CONNECTED if connected else LinkEventKind.GONE
        self._event((kind, link, connection, peer, ""))

    def refused(self, link: str, connection: int, peer: str, text: str) -> None:
        """Take note of a refused write or a broken request."""
        self._event((LinkEventKind.REFUSED, link, connection, peer, text[:_LONGEST_TEXT]))

    def close(self) -> None:
        """Let the taking thread finish what is there, and end."""
        with self._changed:
            self._closed = True
            self._changed.notify()

    def wait(self, quiet: float) -> LinkNews | None:
        """Wait for news and take it; for the one thread that sends it on.

        Writes and events are there at once, reads after a while in which more are condensed,
        and who read which point at the latest when it is time to tell of it again.

        Parameters
        ----------
        quiet : float
            Time for which reads are condensed [s].

        Returns
        -------
        LinkNews or None
            News for one message; None when the box is closed and empty.
        """
        with self._changed:
            self._changed.wait_for(
                lambda: self._urgent() or bool(self._activity), self._until_readers()
            )
            if self._activity and not self._urgent():
                self._changed.wait_for(self._urgent, timeout=quiet)
            news = self._take()
            return news if news or not self._closed else None

    def _until_readers(self) -> float | None:
        """Return how long it is until readers are to be told of; None when there are none [s]."""
        if not self._areas:
            return None
        return max(0, self._readers_told_ns + _READERS_NS - self._now_ns()) / 1e9

    def _readers(self) -> dict[str, Contact]:
        """Take who read which point last, if it is time to tell of it."""
        now_ns = self._now_ns()
        if not (self._closed or now_ns - self._readers_told_ns >= _READERS_NS):
            return {}
        self._readers_told_ns = now_ns
        readers: dict[str, Contact] = {}
        # In order of arrival, so that of several readers of a point the last one stays.
        for points, (link, peer, arrival_ns) in sorted(
            self._areas.items(), key=lambda area: area[1][2]
        ):
            contact = Contact(link=link, peer=peer, arrival_ns=arrival_ns)
            readers |= dict.fromkeys(points, contact)
        self._areas.clear()
        return readers

    def _urgent(self) -> bool:
        return bool(self._writes or self._events) or self._closed

    def _event(self, key: _EventKey) -> None:
        now_ns = self._now_ns()
        with self._changed:
            if key not in self._events and len(self._events) >= _MOST_WAITING:
                kind, link, *_ = key
                key = (kind, link, -1, "", "more of these than could be kept")
            happening = self._events.setdefault(key, _Happening(now_ns, 0))
            happening.count += 1
            self._changed.notify()

    def _take(self) -> LinkNews:
        """Take as much as goes into one message; the rest stays."""
        writes: list[Sequence[Exchange]] = []
        exchanges = 0
        while self._writes and (
            exchanges == 0 or exchanges + len(self._writes[0]) <= _MOST_EXCHANGES
        ):
            writes.append(self._writes.popleft())
            exchanges += len(writes[-1])
        activity = [
            LinkActivity(
                link=link,
                connection=connection,
                peer=requests.peer,
                requests=requests.count,
                arrival_ns=requests.arrival_ns,
                image_tick=requests.image_tick,
            )
            for (link, connection), requests in self._activity.items()
        ]
        self._activity.clear()
        keys = list(islice(self._events, _MOST_EVENTS))
        events = [self._made(key, self._events.pop(key)) for key in keys]
        return LinkNews(
            writes=writes, activity=activity, events=events, readers=self._readers()
        )

    @staticmethod
    def _made(key: _EventKey, happening: _Happening) -> LinkEvent:
        kind, link, connection, peer, text = key
        return LinkEvent(
            kind=kind,
            link=link,
            connection=connection,
            peer=peer,
            text=text,
            arrival_ns=happening.arrival_ns,
            count=happening.count,
        )
