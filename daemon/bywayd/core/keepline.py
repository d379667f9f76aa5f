"""
The line of changes that are visible and not yet on the disk.

Each gets a position, counted from 1 since the start; `kept_to` is the last one that is certainly
on the disk, and so are all before it. Owned by the ledger, emptied by the clerk.
"""

from __future__ import annotations

from collections import deque

from bywayd.core.invariant import invariant
from bywayd.core.kept import Keepsake, Stock

#: What one commit takes at most: signs of life come after each change, and the next batch waits.
_BATCH_COUNT_MAX = 1024
_BATCH_BYTES_MAX = 16 * 1024 * 1024


class KeepLine:
    """What waits for the clerk, what is out, and how much is kept already."""

    __slots__ = ("_end", "_out", "_size_bytes", "_size_bytes_max", "_waiting", "kept_to", "stock")

    def __init__(self, size_bytes_max: int) -> None:
        self._size_bytes_max = size_bytes_max
        self._waiting: deque[Keepsake] = deque()
        #: What the clerk was given and has not answered.
        self._out: tuple[Keepsake, ...] = ()
        #: Of all of them.
        self._size_bytes = 0
        #: Position of the last that was put in.
        self._end = 0
        self.kept_to = 0
        #: As the clerk told it last.
        self.stock = Stock()

    def __len__(self) -> int:
        return len(self._waiting) + len(self._out)

    @property
    def size_bytes(self) -> int:
        """How much is not on the disk yet."""
        return self._size_bytes

    def has_room(self, size_bytes: int) -> bool:
        """
        Whether one more change may be taken in. It has a room of its own, so that a disk that
        takes nothing does not fill that of live layers.
        """
        return not self._size_bytes or self._size_bytes + size_bytes <= self._size_bytes_max

    def append(self, keepsake: Keepsake) -> int:
        """Put something at the end, and return its position."""
        self._waiting.append(keepsake)
        self._size_bytes += keepsake.size_bytes
        self._end += 1
        return self._end

    @property
    def out(self) -> tuple[Keepsake, ...]:
        """What was handed out and is not kept; empty if nothing is."""
        return self._out

    def next_batch(self) -> tuple[Keepsake, ...]:
        """Hand out what waits, up to a limit; what is out already comes again."""
        if self._out:
            return self._out
        batch: list[Keepsake] = []
        size = 0
        while self._waiting and len(batch) < _BATCH_COUNT_MAX:
            size += self._waiting[0].size_bytes
            if batch and size > _BATCH_BYTES_MAX:
                break
            batch.append(self._waiting.popleft())
        self._out = tuple(batch)
        return self._out

    def kept(self, stock: Stock) -> tuple[Keepsake, ...]:
        """What is out is on the disk. Returns it."""
        out, self._out = self._out, ()
        invariant(bool(out), "what is kept was handed out")
        self.kept_to += len(out)
        self._size_bytes -= sum(keepsake.size_bytes for keepsake in out)
        self.stock = stock
        return out

    def check(self) -> None:
        """Stop with a `Defect` if positions and sizes are not what they should be."""
        held = [*self._out, *self._waiting]
        invariant(self.kept_to + len(held) == self._end, "every position is kept or held")
        invariant(
            self._size_bytes == sum(keepsake.size_bytes for keepsake in held),
            "the size of what is not kept is known",
        )
