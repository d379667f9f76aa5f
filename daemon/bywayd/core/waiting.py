"""
Replans that no worker is at yet, and which of them is next.

At most one waits for each unit; those whose unit has another one at work wait for that. Those
that had a worker and lost it go first: their time is running out, and they have been promised.
So do new routes for vehicles that drive towards something.
Otherwise first come, first served as long as the line is short. When it is longer than there are
workers, newest first: in an overload the oldest are about to be too late anyway, and serving
them first would make every answer late (measured: at 1.5 times capacity, first come first served
completes none to 15 % of what it could, newest first 88 %).

Refused: nearest deadline first. Under overload it lets every deadline slip.
"""

from __future__ import annotations

from collections.abc import Container, Iterator

from bywayd.core.docket import Docket
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import invariant


class WaitingRoom:
    """Owned by dispatch. Holds all and only dockets in phase "waiting"."""

    __slots__ = ("_again", "_by_unit", "_line", "_patience_ratio", "_places", "_workers")

    def __init__(self, workers: int, places: int, patience_ratio: float) -> None:
        # -- fixed -----------------------------------------------------------------------------
        self._workers = workers
        self._places = places
        self._patience_ratio = patience_ratio
        # -- state -----------------------------------------------------------------------------
        #: In order of arrival, by request id.
        self._line: dict[str, Docket] = {}
        #: The same ones by unit.
        self._by_unit: dict[str, Docket] = {}
        #: Those that go first.
        self._again: dict[str, Docket] = {}

    def __len__(self) -> int:
        return len(self._line) + len(self._again)

    def __iter__(self) -> Iterator[Docket]:
        yield from self._again.values()
        yield from self._line.values()

    @property
    def is_full(self) -> bool:
        """Whether nobody else should wait."""
        return len(self._line) >= self._places

    def of_unit(self, unit: str) -> Docket | None:
        """Return the newcomer of this unit that waits, if there is one."""
        return self._by_unit.get(unit)

    def holds(self, docket: Docket) -> bool:
        """Whether this one waits here."""
        return docket.id in self._line or docket.id in self._again

    def enter(self, docket: Docket) -> None:
        """Take in a newcomer."""
        unit = docket.slot
        invariant(unit not in self._by_unit, "one replan of a unit waits", docket.story)
        self._line[docket.id] = docket
        self._by_unit[unit] = docket

    def return_to(self, docket: Docket) -> None:
        """Take in one that has lost its worker, or that a vehicle in motion waits for."""
        self._again[docket.id] = docket

    def leave(self, docket: Docket) -> None:
        """Let one go, wherever it goes."""
        if self._again.pop(docket.id, None) is None:
            del self._line[docket.id]
            del self._by_unit[docket.slot]

    def next(self, busy_units: Container[str]) -> Docket | None:
        """Return whose turn it is, leaving out newcomers of units that have one at work."""
        for docket in self._again.values():
            return docket
        crowded = len(self._line) > self._workers
        for docket in reversed(self._line.values()) if crowded else self._line.values():
            if docket.slot not in busy_units:
                return docket
        return None

    def patience_ends(self, docket: Docket, budget: Duration) -> Instant:
        """
        Return until when others may go on improving their routes while this one waits.

        A share of its budget, and the smaller the more wait: none at all in a full room.
        """
        room_left = 1.0 - min(1.0, len(self) / self._places)
        return docket.times.arrived + budget.times(self._patience_ratio * room_left)

    def check(self) -> None:
        """Stop with a `Defect` if somebody could be forgotten."""
        for docket in self:
            invariant(docket.phase == "waiting", "who waits is in phase waiting", docket.story)
        invariant(
            {d.slot: d for d in self._line.values()} == self._by_unit,
            "each unit's waiting replan is known by its unit",
        )
