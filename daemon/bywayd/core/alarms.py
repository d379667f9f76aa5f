"""
Instants at which something is due, by key: set, moved, cleared, and found when they have come.

A heap whose stale entries are skipped when they surface: setting and clearing cost no search.
Stale entries are swept out when they outnumber the live ones, so memory follows what is set.
"""

from __future__ import annotations

import heapq
from collections.abc import Hashable
from typing import Generic, TypeVar

from bywayd.core.instants import Instant
from bywayd.core.invariant import invariant

Key = TypeVar("Key", bound=Hashable)

#: Stale entries that are not worth a sweep.
_STALE_FREE = 64


class Alarms(Generic[Key]):
    """One alarm a key at most. Alarms of the same instant come in the order they were set."""

    __slots__ = ("_heap", "_serial", "_set")

    def __init__(self) -> None:
        #: When each key is due, with the serial number of the setting that counts.
        self._set: dict[Key, tuple[Instant, int]] = {}
        #: (ns, serial, key). Holds every entry of `_set`, and stale ones.
        self._heap: list[tuple[int, int, Key]] = []
        self._serial = 0

    def set(self, key: Key, at: Instant) -> None:
        """Let this key be due at this instant, and at no other."""
        known = self._set.get(key)
        if known is not None and known[0] == at:
            return
        self._serial += 1
        self._set[key] = (at, self._serial)
        heapq.heappush(self._heap, (at.ns, self._serial, key))
        self._sweep()

    def clear(self, key: Key) -> None:
        """Let this key not be due at all."""
        if self._set.pop(key, None) is not None:
            self._sweep()

    def at(self, key: Key) -> Instant | None:
        """Return when this key is due, if it is set."""
        known = self._set.get(key)
        return None if known is None else known[0]

    def pop_due(self, now: Instant) -> Key | None:
        """Take the alarm that was due first out, if one is due."""
        self._drop_stale()
        if not self._heap or self._heap[0][0] > now.ns:
            return None
        key = heapq.heappop(self._heap)[2]
        del self._set[key]
        self._sweep()
        return key

    def next(self) -> Instant | None:
        """Return when the first alarm is due."""
        self._drop_stale()
        return Instant(self._heap[0][0]) if self._heap else None

    def _drop_stale(self) -> None:
        heap = self._heap
        while heap and self._set.get(heap[0][2], (None, 0))[1] != heap[0][1]:
            heapq.heappop(heap)

    def _sweep(self) -> None:
        if len(self._heap) > 2 * len(self._set) + _STALE_FREE:
            self._heap = [(at.ns, serial, key) for key, (at, serial) in self._set.items()]
            heapq.heapify(self._heap)

    def check(self) -> None:
        """Stop with a `Defect` unless every alarm will be found and memory is bounded."""
        live = {(at.ns, serial, key) for key, (at, serial) in self._set.items()}
        invariant(live <= set(self._heap), "every alarm that is set is in the heap")
        invariant(len(self._heap) <= 2 * len(self._set) + _STALE_FREE, "stale alarms are swept out")
