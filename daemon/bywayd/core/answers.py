"""
What was answered lately, so that a request that is repeated gets the same answer again.

A client that is not sure whether its request arrived sends it again with the same id; that must
neither plan twice nor give a second, different answer. Kept for a while, at most so many, at
most so many bytes; the oldest go first.
"""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import dataclass

from byway.messages import Message
from byway.packed import Bytes
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import invariant

#: Bytes of one entry beside its body and columns: ids, models, the dictionary.
_ENTRY_BYTES = 1000


@dataclass(frozen=True, slots=True)
class Answered:
    """One request and the reply that ended it."""

    body: bytes
    message: Message
    packed: Bytes
    at: Instant
    size_bytes: int


class Answers:
    """Owned by the front."""

    __slots__ = ("_bytes_max", "_count_max", "_keep", "_kept", "_size_bytes")

    def __init__(self, count_max: int, bytes_max: int, keep: Duration) -> None:
        self._count_max = count_max
        self._bytes_max = bytes_max
        self._keep = keep
        #: By request id, oldest first.
        self._kept: OrderedDict[str, Answered] = OrderedDict()
        self._size_bytes = 0

    def __len__(self) -> int:
        return len(self._kept)

    @property
    def size_bytes(self) -> int:
        """About how much memory the answers take."""
        return self._size_bytes

    def get(self, id: str) -> Answered | None:
        """Return what this request was answered with, if that is still known."""
        return self._kept.get(id)

    def keep(
        self,
        id: str,
        body: bytes,
        message: Message,
        outcome_bytes: int,
        packed: Bytes,
        now: Instant,
    ) -> None:
        """Remember an answer. `outcome_bytes` is the size of what the message carries."""
        invariant(id not in self._kept, "a request is answered once")
        size_bytes = _ENTRY_BYTES + len(body) + outcome_bytes + len(packed)
        self._kept[id] = Answered(body, message, packed, now, size_bytes)
        self._size_bytes += size_bytes
        self._forget(now)

    def _forget(self, now: Instant) -> None:
        kept = self._kept
        while len(kept) > 1:
            oldest = next(iter(kept.values()))
            fits = len(kept) <= self._count_max and self._size_bytes <= self._bytes_max
            if fits and now.since(oldest.at) <= self._keep:
                return
            kept.popitem(last=False)
            self._size_bytes -= oldest.size_bytes

    def check(self) -> None:
        """Stop with a `Defect` if memory is not bounded."""
        invariant(len(self._kept) <= self._count_max, "answers are forgotten")
        invariant(
            self._size_bytes == sum(answer.size_bytes for answer in self._kept.values()),
            "the size of the answers is known",
        )
        invariant(
            self._size_bytes <= self._bytes_max or len(self._kept) == 1,
            "large answers are forgotten",
        )
