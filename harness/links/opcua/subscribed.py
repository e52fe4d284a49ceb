"""Which point each monitored item shows, so that a notification tells what its client got to see."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator

_ITEMS_MAX = 20_000  # of one server; what a client asks for beyond is not told of by name


@dataclass(slots=True)
class SubscribedPoints:
    """The monitored items of one server, over all its subscriptions.

    A notification names an item by the handle that its client chose; ids of subscriptions and
    items are the server's.
    """

    _names: dict[tuple[int, int], str] = field(default_factory=dict, init=False)
    _handle_of: dict[tuple[int, int], int] = field(default_factory=dict, init=False)

    def created(self, subscription: int, item: int, handle: int, name: str) -> None:
        """Take note of a new item.

        Parameters
        ----------
        subscription, item : int
            Their ids [-].
        handle : int
            The client's handle [-].
        name : str
            Point that it shows.
        """
        if len(self._handle_of) < _ITEMS_MAX:
            self._handle_of[subscription, item] = handle
            self._names[subscription, handle] = name

    def modified(self, subscription: int, item: int, handle: int) -> None:
        """Take note that the client has given an item another handle.

        Parameters
        ----------
        subscription, item : int
            Their ids [-].
        handle : int
            The new handle [-].
        """
        before = self._handle_of.get((subscription, item))
        if before is not None and before != handle:
            self._handle_of[subscription, item] = handle
            self._names[subscription, handle] = self._names.pop((subscription, before))

    def deleted(self, subscription: int, items: Iterable[int]) -> None:
        """Forget items.

        Parameters
        ----------
        subscription : int
            Its id [-].
        items : iterable of int
            Their ids [-].
        """
        for item in items:
            handle = self._handle_of.pop((subscription, item), None)
            if handle is not None:
                self._names.pop((subscription, handle), None)

    def closed(self, subscriptions: Iterable[int]) -> None:
        """Forget whole subscriptions.

        Parameters
        ----------
        subscriptions : iterable of int
            Their ids [-].
        """
        gone = frozenset(subscriptions)
        for place in [place for place in self._handle_of if place[0] in gone]:
            self.deleted(place[0], (place[1],))

    def names(self, subscription: int, handles: Iterable[int]) -> Iterator[str]:
        """Return the points of a notification.

        Parameters
        ----------
        subscription : int
            Its id [-].
        handles : iterable of int
            Handles of the items in it [-].

        Yields
        ------
        str
            Names; items that show no point are left out.
        """
        for handle in handles:
            name = self._names.get((subscription, handle))
            if name is not None:
                yield name
