"""
When obstacles expire.

An obstacle that was put with `expires_in_s` is dropped when that has passed since the change
arrived, unless it has been put again. The order of things matters: a put that is on its way to
the surveyor when the obstacle expires must not be undone by a drop that comes after it, but if
it is refused, the old obstacle still has to go. So an expiry waits while a put of the same
obstacle is under way, and is looked at again when that is decided.

Ids of obstacles are read only in layers that ever had an expiry; others cost nothing here.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Collection

from bywayd.core.alarms import Alarms
from bywayd.core.instants import Instant
from bywayd.core.invariant import invariant


class Expiries:
    """Owned by the ledger."""

    __slots__ = ("_alarms", "_at", "_coming", "_count_max", "_promised", "_replacing", "_timed")

    def __init__(self, count_max: int) -> None:
        # -- fixed -----------------------------------------------------------------------------
        self._count_max = count_max
        # -- state -----------------------------------------------------------------------------
        #: Layers in which an expiry was ever asked for.
        self._timed: set[str] = set()
        #: When each visible obstacle expires: layer, obstacle id, instant.
        self._at: dict[str, dict[str, Instant]] = {}
        #: Those of `_at` that nothing on its way will touch.
        self._alarms: Alarms[tuple[str, str]] = Alarms()
        #: Undecided puts of each obstacle in a timed layer, and undecided replacements.
        self._coming: Counter[tuple[str, str]] = Counter()
        self._replacing: Counter[str] = Counter()
        #: Obstacles with an expiry in undecided changes.
        self._promised = 0

    def __len__(self) -> int:
        return sum(len(layer) for layer in self._at.values()) + self._promised

    @property
    def room_left(self) -> int:
        """How many more obstacles may have an expiry."""
        return self._count_max - len(self)

    def begin(self, layer: str) -> None:
        """From now on ids of obstacles in this layer are wanted."""
        self._timed.add(layer)

    def is_timed(self, layer: str) -> bool:
        """Whether ids of obstacles in this layer are wanted."""
        return layer in self._timed

    def coming(self, layer: str, ids: Collection[str], *, replaces: bool, expires: bool) -> None:
        """Take note of a put or replacement that is on its way."""
        for id in ids:
            self._coming[layer, id] += 1
        if replaces:
            self._replacing[layer] += 1
        if expires:
            self._promised += len(ids)

    def decided(
        self,
        layer: str,
        ids: Collection[str],
        *,
        replaces: bool,
        expires_at: Instant | None,
        applied: bool,
    ) -> None:
        """Take note of how it went; the counterpart of `coming`."""
        for id in ids:
            self._coming[layer, id] -= 1
            if self._coming[layer, id] == 0:
                del self._coming[layer, id]
        if expires_at is not None:
            self._promised -= len(ids)
        if replaces:
            self._replacing[layer] -= 1
            if self._replacing[layer] == 0:
                del self._replacing[layer]
        touched: list[str] = list(ids)
        if replaces:
            touched += list(self._at.get(layer, ()))
        if applied:
            self.dropped(layer, touched)
            if expires_at is not None:
                self._at.setdefault(layer, {}).update(dict.fromkeys(ids, expires_at))
        for id in touched:
            self._arm(layer, id)

    def dropped(self, layer: str, ids: Collection[str]) -> None:
        """Take note that obstacles are gone."""
        known = self._at.get(layer)
        if known is None:
            return
        for id in ids:
            if known.pop(id, None) is not None:
                self._alarms.clear((layer, id))
        if not known:
            del self._at[layer]

    def pop_due(self, now: Instant) -> dict[str, list[str]]:
        """Take out what has expired, by layer."""
        due: dict[str, list[str]] = {}
        while (key := self._alarms.pop_due(now)) is not None:
            layer, id = key
            if self._coming[key] or self._replacing[layer]:
                continue  # looked at again when that is decided
            due.setdefault(layer, []).append(id)
        for layer, ids in due.items():
            self.dropped(layer, ids)
        return due

    def _arm(self, layer: str, id: str) -> None:
        at = self._at.get(layer, {}).get(id)
        if at is not None:
            self._alarms.set((layer, id), at)

    def next_alarm(self) -> Instant | None:
        """Return when the next obstacle expires."""
        return self._alarms.next()

    def check(self) -> None:
        """Stop with a `Defect` if an expiry could be forgotten, or memory is not bounded."""
        self._alarms.check()
        invariant(self._promised >= 0, "promised expiries are counted")
        invariant(len(self) <= self._count_max, "expiries are bounded")
        for layer, known in self._at.items():
            invariant(bool(known) and layer in self._timed, "only timed layers have expiries")
            for id in known:
                invariant(
                    self._alarms.at((layer, id)) is not None
                    or self._coming[layer, id] > 0
                    or self._replacing[layer] > 0,
                    "every expiry is timed",
                )
