"""
Scratch memory of searches, kept from one plan to the next.

Fresh memory costs a page fault at every first touch, which is more than the searching itself in
an easy case. What a workshop holds never shows in a result: searches set up what they use.
"""

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Final

import numpy as np

from byway_planning.dice import new_dice
from byway_planning.search.floods import FloodRoom
from byway_planning.search.improve import Polish, new_polish
from byway_planning.search.lattice import Lattice, new_lattice

#: Nodes of one lattice; at 100 bytes each, pages that no search touches cost nothing.
NODES_MAX: Final = 250_000


class Workshop:
    """Lattices and polishes, handed out in order of demand."""

    def __init__(self) -> None:
        self._lattices: list[Lattice] = []
        self._polishes: list[Polish] = []
        self.floods = FloodRoom()
        self._lattices_used = 0
        self._polishes_used = 0

    def take_all_back(self) -> None:
        """Everything may be handed out again."""
        self._lattices_used = self._polishes_used = 0

    def lattice(self) -> Lattice:
        """Hand out a lattice, to be set up with `restart`."""
        if self._lattices_used == len(self._lattices):
            self._lattices.append(new_lattice(NODES_MAX))
        self._lattices_used += 1
        return self._lattices[self._lattices_used - 1]

    def polish(self, seed: int) -> Polish:
        """Hand out room for improving a path, with a random state of its own."""
        if self._polishes_used == len(self._polishes):
            self._polishes.append(new_polish(new_dice(0)))
        polish = self._polishes[self._polishes_used]
        self._polishes_used += 1
        polish.marks[:] = 0
        np.copyto(polish.dice, new_dice(seed))
        return polish


_IDLE: Final[list[Workshop]] = []


@contextmanager
def borrowed() -> Iterator[Workshop]:
    """Lend a workshop of this process; each caller at a time has its own."""
    workshop = _IDLE.pop() if _IDLE else Workshop()
    try:
        yield workshop
    finally:
        workshop.take_all_back()
        _IDLE.append(workshop)
