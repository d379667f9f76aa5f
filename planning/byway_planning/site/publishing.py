"""
From changed tiles to a snapshot: the blocks and tables that readers see, and when they go.

Owner of everything in the shared memory. A revision is drafted as a whole: new blocks are
written beside those that readers may be reading, then the tables that name them. When memory
runs out on the way the draft is taken back, and the next attempt starts from the same changes.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from byway_planning.site.memory import Memory, MemoryFull
from byway_planning.site.scene import OPEN, field_block_floats
from byway_planning.site.settings import SiteSettings
from byway_planning.site.shapes import Shape
from byway_planning.site.snapshot import TABLES, Snapshot
from byway_planning.site.solids import NO_CELLS
from byway_planning.site.tables import Edition, Table
from byway_planning.site.tiles import Cells, Floats4, Rasters, Tile, Wholes, field_blocks_kernel

#: What lies in a tile: the obstacles that may touch it and its blocked cells, if any.
Content = Callable[[Tile], tuple[list[Shape], Cells | None]]
#: Bytes of one element that an offset in a table of tiles counts.
UNITS = {"field_of": 4, "edges_of": 8, "cells_of": 1}
NO_LAYER = (-1, -1, 0)


@dataclass
class _Draft:
    """What has been done for a revision that is not out yet."""

    fresh: list[int] = field(default_factory=list)
    replaced: list[int] = field(default_factory=list)
    #: (table, row, value before), to be gone through from the end.
    undo: list[tuple[Table, int, npt.ArrayLike]] = field(default_factory=list)
    slots: dict[tuple[int, int], int | None] = field(default_factory=dict)


class Publisher:
    """See the module text."""

    def __init__(self, settings: SiteSettings, memory: Memory, tables: Mapping[str, Table]) -> None:
        self._settings = settings
        self._memory = memory
        self._rasters = Rasters(settings)
        rows, columns = settings.tiles
        self._of_tiles = {name: Table(np.int64) for name in UNITS}
        for name, table in self._of_tiles.items():
            table.append(np.full(rows * columns, OPEN if name == "field_of" else NO_CELLS))
        self._layer_cells = Table(np.int64, 3)
        #: Row of `layer_cells` by (layer, tile index), and the rows that are free.
        self._slots: dict[tuple[int, int], int] = {}
        self._free_slots: list[int] = []
        self._tables = {
            **self._of_tiles,
            "far_m": self._rasters.far,
            **tables,
            "layer_cells": self._layer_cells,
        }
        #: (revision from which on they are not read, blocks, editions), oldest first.
        self._retired: list[tuple[int, list[int], list[tuple[Table, Edition]]]] = []

    def publish(
        self,
        revision: int,
        tiles: set[Tile],
        content: Content,
        layer_cells: Mapping[tuple[int, Tile], Cells | None],
    ) -> dict[str, tuple[int, int]]:
        """
        Write a revision; return where each table lies and how many rows it has.

        Args:
            revision: Its number.
            tiles: Tiles that changed.
            content: Tells what is in a tile.
            layer_cells: By layer and tile: cells that changed, None where there are none now.

        Raises:
            MemoryFull: Nothing has changed then, and the same call may be made again.
        """
        draft = _Draft()
        try:
            self._draft_tiles(draft, tiles, content)
            self._draft_layer_cells(draft, layer_cells)
            places = {
                name: (self._tables[name].prepare(self._memory), self._tables[name].count)
                for name in TABLES
            }
            self._check_reserve(draft)
        except MemoryFull:
            self._withdraw(draft)
            raise
        self._commit(revision, draft)
        return places

    def release_before(self, revision: int) -> None:
        """Give back the memory that only snapshots older than `revision` read."""
        while self._retired and self._retired[0][0] <= revision:
            _, blocks, editions = self._retired.pop(0)
            for offset in blocks:
                self._memory.give_back(offset)
            for table, edition in editions:
                table.give_back(edition, self._memory)

    # -- one revision -------------------------------------------------------------------------

    def _draft_tiles(self, draft: _Draft, tiles: set[Tile], content: Content) -> None:
        for tile in sorted(tiles):
            edges, cells, cells_state = self._rasters.rebuild(tile, *content(tile))
            self._swap(draft, "edges_of", tile, edges, NO_CELLS)
            self._swap(draft, "cells_of", tile, cells, cells_state)
        self._rasters.update_far()
        for window in self._rasters.windows():
            self._draft_fields(draft, *window)

    def _draft_fields(
        self, draft: _Draft, tiles: list[Tile], distances: Floats4, places: Wholes
    ) -> None:
        s, table = self._settings, self._of_tiles["field_of"]
        old = np.array([table[self._index(tile)] for tile in tiles], np.int64)
        states = np.zeros(len(tiles), np.int64)
        blocks = np.empty((len(tiles), field_block_floats(s)), np.float32)
        buffer = self._memory.buffer
        published = buffer[: len(buffer) // 4 * 4].view(np.float32)
        cut_off_m = s.reach_cells * s.cell_m
        field_blocks_kernel(
            distances, places, s.tile_cells, s.cell_m, cut_off_m, s.room_cells, published, old,
            blocks, states,
        )  # fmt: skip
        for tile, block, state in zip(tiles, blocks, states.tolist(), strict=True):
            self._swap(draft, "field_of", tile, block if state == 0 else None, state)

    def _check_reserve(self, draft: _Draft) -> None:
        """
        Let no tile grow that would leave no room to make the site smaller.

        What makes it smaller is written beside the old as well: tables in new editions.
        """
        taken = sum(map(self._memory.size_of, draft.fresh))
        given_back = sum(map(self._memory.size_of, draft.replaced))
        if taken <= given_back:
            return
        largest = max(table.wanted_bytes for table in self._tables.values())
        if self._memory.is_short or not self._memory.has_room_for(largest):
            raise MemoryFull("the site has little room left, and only for what makes it smaller")

    def _swap(
        self,
        draft: _Draft,
        name: str,
        tile: Tile,
        block: npt.NDArray[np.generic] | None,
        state: int,
    ) -> None:
        """Publish a block, or a state without one, in place of what a tile had."""
        old = self._of_tiles[name][self._index(tile)]
        if block is not None:
            state = self._store(draft, block) // UNITS[name]
        self._set(draft, name, tile, old, state)

    def _set(self, draft: _Draft, name: str, tile: Tile, old: int, new: int) -> None:
        if new == old:
            return
        table, row = self._of_tiles[name], self._index(tile)
        draft.undo.append((table, row, old))
        if old >= 0:
            draft.replaced.append(old * UNITS[name])
        table[row] = new

    def _store(self, draft: _Draft, block: npt.NDArray[np.generic]) -> int:
        offset = self._memory.store(block)
        draft.fresh.append(offset)
        return offset

    def _draft_layer_cells(
        self, draft: _Draft, layer_cells: Mapping[tuple[int, Tile], Cells | None]
    ) -> None:
        table = self._layer_cells
        for (layer, tile), cells in layer_cells.items():
            key = (layer, self._index(tile))
            slot = self._slots.get(key)
            if slot is not None:
                before = table.view[slot].copy()
                draft.undo.append((table, slot, before))
                draft.replaced.append(int(before[2]))
            if cells is None:
                if slot is not None:
                    table[slot] = NO_LAYER
                    draft.slots[key] = None
                continue
            offset = self._store(draft, cells)
            if slot is None:
                slot = self._free_slots.pop() if self._free_slots else table.append(NO_LAYER)
                draft.undo.append((table, slot, NO_LAYER))
                draft.slots[key] = slot
            table[slot] = (*key, offset)

    def _withdraw(self, draft: _Draft) -> None:
        for table, row, value in reversed(draft.undo):
            table[row] = value
        for offset in draft.fresh:
            self._memory.give_back(offset)
        self._free_slots += [slot for slot in draft.slots.values() if slot is not None]
        for table in self._tables.values():
            table.withdraw(self._memory)

    def _commit(self, revision: int, draft: _Draft) -> None:
        for key, slot in draft.slots.items():
            if slot is None:
                self._free_slots.append(self._slots.pop(key))
            else:
                self._slots[key] = slot
        editions = []
        for table in self._tables.values():
            old = table.commit()
            if old is not None:
                editions.append((table, old))
        self._rasters.stale.clear()
        self._retired.append((revision, draft.replaced, editions))

    def _index(self, tile: Tile) -> int:
        return tile[0] * self._settings.tiles[1] + tile[1]

    # -- recovery -----------------------------------------------------------------------------

    def adopt(
        self, snapshot: Snapshot, in_use: list[Snapshot], tiles: set[Tile], content: Content
    ) -> None:
        """
        Go on from what a predecessor published.

        Args:
            snapshot: The newest snapshot, with which the tiles' content agrees.
            in_use: Older ones that are still being read; `release_before` of the newest
                revision gives back what only they read.
            tiles: Tiles that have any content.
        """
        own = snapshot.blocks()
        blocks = dict(own)
        for other in in_use:
            blocks |= other.blocks()
        self._memory.adopt(blocks)
        for name, table in self._of_tiles.items():
            table.write(0, snapshot.table(name))
        for slot, (layer, tile, offset) in enumerate(snapshot.table("layer_cells").tolist()):
            self._layer_cells.append((layer, tile, offset))
            if layer >= 0:
                self._slots[layer, tile] = slot
            else:
                self._free_slots.append(slot)
        for tile in tiles:
            self._rasters.refill(tile, *content(tile))
        self._rasters.far.write(0, snapshot.table("far_m"))
        for name, (offset, size) in snapshot.table_blocks().items():
            self._tables[name].adopt(offset, size)
        self._retired.append((snapshot.revision, [b for b in blocks if b not in own], []))
