"""
A layer of a site as its owner keeps it: the cells that it has, and when they were scanned.

A tile whose cells are all as if nobody had spoken of them takes no memory. In a layer that
forgets, each cell has a stamp, and each tile is looked at when the first of its cells is due,
but not over and over: what is due in the next moments waits, and is forgotten with the rest.
"""

import math
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.site.scans import fade_kernel
from byway_planning.site.settings import LayerSettings
from byway_planning.site.tiles import Cells, Tile

Stamps = npt.NDArray[np.float64]

UNKNOWN: Final = 2
#: A tile is looked at no more often than this part of the time after which its cells are due.
PATIENCE: Final = 0.05


@dataclass
class Layer:
    """See the module text."""

    index: int
    settings: LayerSettings
    side: int  # cells along a tile
    cells: dict[Tile, Cells] = field(default_factory=dict)
    #: When each cell was last scanned, for a layer that forgets; inf: never.
    stamps: dict[Tile, Stamps] = field(default_factory=dict)
    #: When a tile is to be looked at, and not later than the first of those.
    due_s: dict[Tile, float] = field(default_factory=dict)
    first_due_s: float = math.inf
    #: Recovered cells whose stamps are lost: they count as scanned at the next `carry`.
    lost_stamps: bool = False

    def base(self) -> Cells:
        """Return what a tile without cells stands for."""
        fill = UNKNOWN if self.settings.unknown_blocks else 0
        return np.full((self.side, self.side), fill, np.uint8)

    def cells_of(self, tile: Tile) -> Cells:
        """Return the cells of a tile, not to be written to."""
        cells = self.cells.get(tile)
        return self.base() if cells is None else cells

    def keep(self, tile: Tile, cells: Cells) -> None:
        """Make these the cells of a tile."""
        if (cells == self.base()).all():
            self.cells.pop(tile, None)
        else:
            self.cells[tile] = cells

    def forget_stamps(self) -> None:
        """Let all cells hold for ever."""
        self.stamps.clear()
        self.due_s.clear()
        self.first_due_s = math.inf
        self.lost_stamps = False

    def stamps_for(self, tile: Tile, at_s: float) -> Stamps:
        """Return the stamps of a tile, some of which are to become `at_s`; none if all holds."""
        if self.settings.decay_s is None:
            return np.empty((0, 0))
        if tile not in self.stamps:
            self.stamps[tile] = np.full((self.side, self.side), math.inf)
        self._look_at(tile, min(self.due_s.get(tile, math.inf), at_s + self.settings.decay_s))
        return self.stamps[tile]

    def _look_at(self, tile: Tile, due_s: float) -> None:
        self.due_s[tile] = due_s
        self.first_due_s = min(self.first_due_s, due_s)

    def next_due_s(self, now_s: float) -> float | None:
        """Return when something is to be forgotten, from `now_s` on; None for never."""
        if self.lost_stamps:
            return now_s
        return max(now_s, self.first_due_s) if self.first_due_s < math.inf else None

    def faded(self, now_s: float) -> Iterator[tuple[Tile, Cells]]:
        """Yield tiles with cells that are forgotten by now, and what they are then."""
        decay_s = self.settings.decay_s
        if decay_s is None:
            return
        if self.lost_stamps:
            self.lost_stamps = False
            for tile, cells in self.cells.items():
                stamps = self.stamps_for(tile, now_s)
                stamps[(cells != self.base()) & (stamps == math.inf)] = now_s
        if self.first_due_s > now_s:
            return
        for tile in [tile for tile, due_s in self.due_s.items() if due_s <= now_s]:
            cells = self.cells_of(tile).copy()
            _, first_s = fade_kernel(cells, self.stamps[tile], now_s - decay_s, UNKNOWN)
            if first_s == math.inf:
                del self.stamps[tile], self.due_s[tile]
            else:
                self.due_s[tile] = max(first_s, now_s - (1.0 - PATIENCE) * decay_s) + decay_s
            yield tile, cells
        self.first_due_s = min(self.due_s.values(), default=math.inf)
