"""
Who sends changes: numbers in order, what has been decided of them, what was refused.

Each source numbers its changes 1, 2, 3, ... and repeats what is not acknowledged in time. So a
number that is known already is a repeat, one that leaves a gap is told so, and whatever becomes
of a number is remembered long enough to be told again in the same words.
"""

from __future__ import annotations

from collections import OrderedDict, deque
from collections.abc import Iterator
from dataclasses import dataclass, field

from byway.messages import Refused
from bywayd.core.events import Peer
from bywayd.core.instants import Instant
from bywayd.core.invariant import invariant


@dataclass(slots=True)
class Source:
    """One source. Changed by the ledger only."""

    name: str
    #: Where it was last heard from; there its replies go.
    peer: Peer
    heard_at: Instant
    #: The last number taken in, without a gap before it.
    have: int = 0
    #: The last number decided: visible (and on the disk, if its layer is durable) or refused,
    #: and so are all before it.
    decided: int = 0
    #: Numbers that are visible or refused and wait for the disk, each with the position in the
    #: keep line that it waits for. Both rise.
    held: deque[tuple[int, int]] = field(default_factory=deque)
    #: What was refused lately, by number. Bounded.
    refusals: OrderedDict[int, Refused] = field(default_factory=OrderedDict)
    #: The number that was asked for last, and when.
    asked_for: int = 0
    asked_at: Instant | None = None

    @property
    def undecided(self) -> int:
        """Changes taken in and not decided."""
        return self.have - self.decided

    @property
    def settled(self) -> int:
        """The last number that is visible or refused, whatever the disk has of it."""
        return self.held[-1][1] if self.held else self.decided

    def settle(self, number: int, position: int, kept_to: int) -> bool:
        """
        Note that all up to a number are visible or refused; True if they are decided by that.

        Args:
            position: In the keep line, of the last of them that is to be kept; 0 if none is.
            kept_to: How far the keep line has got.
        """
        if self.held and position <= self.held[-1][0]:
            self.held[-1] = (self.held[-1][0], number)
        elif position > kept_to:
            self.held.append((position, number))
        else:
            self.decided = number
            return True
        return False

    def let_go(self, kept_to: int) -> bool:
        """Decide what is on the disk by now; True if anything is."""
        was = self.decided
        while self.held and self.held[0][0] <= kept_to:
            self.decided = self.held.popleft()[1]
        return self.decided > was

    def remember_refusal(self, refused: Refused, count_max: int) -> None:
        """Keep a refusal to tell it again; the oldest are forgotten."""
        self.refusals[refused.number] = refused
        if len(self.refusals) > count_max:
            self.refusals.popitem(last=False)


class Sources:
    """Owned by the ledger. The source heard last comes last."""

    __slots__ = ("_count_max", "_refusals_max", "_sources")

    def __init__(self, count_max: int, refusals_max: int) -> None:
        self._count_max = count_max
        self._refusals_max = refusals_max
        self._sources: OrderedDict[str, Source] = OrderedDict()

    def __iter__(self) -> Iterator[Source]:
        return iter(self._sources.values())

    def __len__(self) -> int:
        return len(self._sources)

    def get(self, name: str) -> Source | None:
        """Return a source, if it is known."""
        return self._sources.get(name)

    def heard(self, name: str, peer: Peer, now: Instant) -> Source | None:
        """
        Return the source that has just been heard; None if no more can be known.

        The one that was silent longest makes room, unless all have changes under way. It is
        asked for its changes from the beginning if it comes back.
        """
        source = self._sources.get(name)
        if source is None:
            if len(self._sources) >= self._count_max and not self._forget_one():
                return None
            source = self._sources[name] = Source(name, peer, now)
        source.peer = peer
        source.heard_at = now
        self._sources.move_to_end(name)
        return source

    def _forget_one(self) -> bool:
        for source in self._sources.values():
            if source.undecided == 0:
                del self._sources[source.name]
                return True
        return False

    def check(self) -> None:
        """Stop with a `Defect` if numbers are out of order, or memory is not bounded."""
        invariant(len(self._sources) <= self._count_max, "sources are bounded")
        for source in self._sources.values():
            numbers = [source.decided, *(number for _, number in source.held), source.have]
            invariant(numbers == sorted(numbers), "numbers are decided in order")
            positions = [position for position, _ in source.held]
            invariant(positions == sorted(set(positions)), "what is held is held in order")
            invariant(len(source.refusals) <= self._refusals_max, "refusals are forgotten")
