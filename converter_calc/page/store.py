"""What the sessions of a server share: answers and pictures of heats that are the same to the
last digit. Nothing of one session can be seen by another but what it asks for itself.
"""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Callable, Hashable
from threading import Lock
from typing import Generic, TypeVar

Kept = TypeVar("Kept")


class Store(Generic[Kept]):
    """Things made last, by what was asked; at most so many. What is in it must not be changed."""

    def __init__(self, most: int) -> None:
        self._kept: OrderedDict[Hashable, Kept] = OrderedDict()
        self._lock = Lock()
        self._most = most

    def find(self, asked: Hashable, make: Callable[[], Kept]) -> Kept:
        """What was made for the same question, or made now. What `make` raises is not kept."""
        with self._lock:
            if asked in self._kept:
                self._kept.move_to_end(asked)
                return self._kept[asked]
        found = make()
        with self._lock:
            self._kept[asked] = found
            while len(self._kept) > self._most:
                self._kept.popitem(last=False)
        return found
