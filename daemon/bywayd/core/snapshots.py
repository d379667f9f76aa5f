"""
Which snapshot is current, and which older ones are still being read.

A running job pins the revision it reads. What is older than every pinned revision and the
current one can be given back; the surveyor is told when that line has moved.
"""

from __future__ import annotations

from dataclasses import dataclass

from bywayd.core.invariant import invariant, known


@dataclass(frozen=True, slots=True)
class Snapshot:
    """A revision of the site, and how workers attach to it (opaque)."""

    revision: int
    handle: object


class Snapshots:
    """Owned by the front. Revisions never go back."""

    __slots__ = ("_current", "_handles", "_pins", "_released_before")

    def __init__(self) -> None:
        self._current: Snapshot | None = None
        #: Readers of each revision that has any. Never a count of 0.
        self._pins: dict[int, int] = {}
        #: Of every pinned revision.
        self._handles: dict[int, object] = {}
        #: What the surveyor knows: everything older may be overwritten.
        self._released_before = 0

    @property
    def current(self) -> Snapshot | None:
        """The newest one; None before there is any."""
        return self._current

    @property
    def revision(self) -> int:
        """The newest revision; 0 before there is any."""
        return 0 if self._current is None else self._current.revision

    def publish(self, revision: int, handle: object) -> bool:
        """Make this the current one; False if that would go back in time."""
        if revision < self.revision:
            return False
        self._current = Snapshot(revision, handle)
        return True

    def pin(self) -> Snapshot:
        """Keep the current one until `unpin`, and return it."""
        current = known(self._current, "there is a snapshot before one is pinned")
        self._pins[current.revision] = self._pins.get(current.revision, 0) + 1
        self._handles[current.revision] = current.handle
        return current

    def unpin(self, revision: int) -> None:
        """End one pin of this revision."""
        pins = self._pins.get(revision, 0)
        invariant(pins > 0, "a revision is unpinned no more often than pinned")
        if pins > 1:
            self._pins[revision] = pins - 1
        else:
            del self._pins[revision]
            del self._handles[revision]

    def maybe_release(self) -> int | None:
        """Return the revision before which all can be given back, if it has moved."""
        oldest = min(self._pins, default=self.revision)
        if oldest <= self._released_before:
            return None
        self._released_before = oldest
        return oldest

    def hand_over(self) -> tuple[object, ...]:
        """Return the handles of all that must stay, oldest first: what a successor is told."""
        current = known(self._current, "there is a snapshot before one is handed over")
        handles = {**self._handles, current.revision: current.handle}
        # The successor gives back whatever it was not told to keep.
        self._released_before = min(handles)
        return tuple(handles[revision] for revision in sorted(handles))

    def pins(self) -> dict[int, int]:
        """Return how many readers each pinned revision has."""
        return dict(self._pins)

    def check(self) -> None:
        """Stop with a `Defect` if what is read could be overwritten."""
        invariant(self._pins.keys() == self._handles.keys(), "a pinned revision has its handle")
        invariant(all(count > 0 for count in self._pins.values()), "an unread revision is not kept")
        invariant(
            all(revision >= self._released_before for revision in self._pins),
            "no pinned revision was given back",
        )
        invariant(self._released_before <= self.revision, "the current revision was not given back")
