"""
The live site: obstacles and cells in layers, from which snapshots are published.

One owner (the surveyor, or a script) changes it; everybody else reads the snapshots. A change
is checked before it is made, so a refused one leaves the site as it was. Publishing recomputes
the tiles that changed and the distances around them, writes them to fresh blocks, and makes new
tables; the blocks of the revision before stay until `release_before` says that nobody reads it.
"""

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from byway_planning.site.memory import Memory, MemoryFull
from byway_planning.site.raster import resample_kernel
from byway_planning.site.records import Records
from byway_planning.site.scene import OPEN
from byway_planning.site.settings import LayerSettings, SiteSettings
from byway_planning.site.shapes import ID_BYTES_MAX, PolygonShape, Shape, SiteError
from byway_planning.site.snapshot import Handle, Snapshot, handle_for, store_tables
from byway_planning.site.solids import ALL_CELLS, NO_CELLS
from byway_planning.site.tiles import Cells, Rasters, Tile, TileBlocks, field_block_floats

#: Rows or columns of one patch; 4096 cells of 0.1 m are more than any sensor sees at once.
PATCH_CELLS_MAX = 4096
UNKNOWN = 2


@dataclass
class _Published:
    """Where the newest snapshot keeps what one tile contributes; offset 0: nowhere."""

    field: int = 0
    edges: int = 0
    cells: int = 0


@dataclass
class _Layer:
    index: int
    settings: LayerSettings
    cells: dict[Tile, Cells] = field(default_factory=dict)
    places: dict[Tile, int] = field(default_factory=dict)  # published copies of the cells


class SiteModel:
    """See the module text."""

    def __init__(self, settings: SiteSettings, memory: Memory | None = None) -> None:
        self.settings = settings
        self.memory = memory or Memory.private()
        self.revision = 0
        self._layers: dict[str, _Layer] = {}
        self._records = Records()
        self._rasters = Rasters(settings)
        #: Obstacles by tile: all and only those whose box touches the tile, outlines not.
        self._by_tile: dict[Tile, dict[tuple[int, str], Shape]] = {}
        self._dirty: set[Tile] = set()
        self._dirty_cells: set[tuple[str, Tile]] = set()
        self._changed = True
        rows, columns = settings.tiles
        self._field_of = np.full((rows, columns), OPEN, np.int64)
        self._edges_of = np.full((rows, columns), NO_CELLS, np.int64)
        self._cells_of = np.full((rows, columns), NO_CELLS, np.int64)
        self._published: dict[Tile, _Published] = {}
        #: Sizes of the tile blocks of the newest snapshot, by offset.
        self._sizes: dict[int, int] = {}
        self._tables: list[int] = []
        #: Blocks written since the last publish that went through.
        self._unpublished: set[int] = set()
        #: Blocks that the next revision no longer reads (kept over a failed publish).
        self._retiring: list[int] = []
        #: (revision from which on they are not read, offsets), oldest first.
        self._retired: list[tuple[int, list[int]]] = []
        self._snapshot: Snapshot | None = None

    # -- changes ----------------------------------------------------------------------------

    def declare(self, name: str, settings: LayerSettings) -> None:
        """Make a layer, or do nothing when it is there with these settings."""
        self._check_id(name, "layer")
        layer = self._layers.get(name)
        if layer is not None:
            if layer.settings != settings:
                raise SiteError(
                    "layer_mismatch",
                    f"layer {name!r} exists with {layer.settings}, not {settings}",
                )
            return
        self._layers[name] = _Layer(len(self._layers), settings)
        self._changed = True
        if settings.unknown_blocks:
            rows, columns = self.settings.tiles
            self._dirty |= {(r, c) for r in range(rows) for c in range(columns)}

    def put(self, layer: str, obstacle_id: str, shape: Shape) -> None:
        """Add an obstacle to a layer, or replace the one of that id."""
        owner = self._layer(layer)
        self._check_id(obstacle_id, "obstacle")
        x0, y0, x1, y1 = shape.box_m
        a0, b0, a1, b1 = self.settings.limits_m
        if x1 < a0 or x0 > a1 or y1 < b0 or y0 > b1:
            raise SiteError(
                "outside_limits",
                f"obstacle {obstacle_id!r} spans {shape.box_m}, the site only {(a0, b0, a1, b1)}",
            )
        self.drop(layer, obstacle_id)
        self._records.put(owner.index, obstacle_id, shape)
        self._changed = True
        if not owner.settings.outlines_only:
            for tile in self._tiles_of(shape):
                self._by_tile.setdefault(tile, {})[owner.index, obstacle_id] = shape
                self._dirty.add(tile)

    def drop(self, layer: str, obstacle_id: str) -> bool:
        """Remove an obstacle; tell whether there was one."""
        owner = self._layer(layer)
        shape = self._records.drop(owner.index, obstacle_id)
        if shape is None:
            return False
        self._changed = True
        if not owner.settings.outlines_only:
            for tile in self._tiles_of(shape):
                here = self._by_tile[tile]
                del here[owner.index, obstacle_id]
                if not here:
                    del self._by_tile[tile]
                self._dirty.add(tile)
        return True

    def clear(self, layer: str) -> None:
        """Forget all obstacles and cells of a layer."""
        owner = self._layer(layer)
        for name in self._records.names(owner.index):
            self.drop(layer, name)
        for tile in owner.cells:
            self._dirty.add(tile)
            self._dirty_cells.add((layer, tile))
            self._changed = True
        owner.cells.clear()

    def patch(self, layer: str, corner_m: tuple[float, float], cell_m: float, cells: Cells) -> None:
        """
        Overwrite a rectangle of cells.

        Args:
            corner_m: Lower left corner of the patch.
            cell_m: Side of a patch cell; a patch that does not fit the site's own cells is
                resampled, occupied before unknown before free.
            cells: Shape (rows, columns), row 0 at the lowest y; 0 free, 1 occupied, 2 unknown.
        """
        owner = self._layer(layer)
        if owner.settings.outlines_only:
            raise SiteError("outlines_only", f"layer {layer!r} holds outlines only, no cells")
        patch = self._checked_patch(corner_m, cell_m, cells)
        height, width = patch.shape[0] * cell_m, patch.shape[1] * cell_m
        x, y = corner_m
        a0, b0, a1, b1 = self.settings.limits_m
        if x >= a1 or y >= b1 or x + width <= a0 or y + height <= b0:
            raise SiteError(
                "outside_limits",
                f"the patch spans x {x} to {x + width}, y {y} to {y + height}; the site only "
                f"{(a0, b0, a1, b1)}",
            )
        side = self.settings.tile_cells
        for tile in self._tiles_in(x, y, x + width, y + height):
            old = owner.cells.get(tile)
            if old is None:
                base = UNKNOWN if owner.settings.unknown_blocks else 0
                old = np.full((side, side), base, np.uint8)
            new = old.copy()
            tx, ty = self._rasters.corner_m(tile)
            resample_kernel(patch, x, y, cell_m, new, tx, ty, self.settings.cell_m)
            if tile not in owner.cells or (new != old).any():
                owner.cells[tile] = new
                self._dirty.add(tile)
                self._dirty_cells.add((layer, tile))
                self._changed = True

    @staticmethod
    def _checked_patch(corner_m: tuple[float, float], cell_m: float, cells: Cells) -> Cells:
        patch = np.array(cells)
        if patch.ndim != 2 or patch.size == 0:
            raise SiteError("bad_cells", f"a patch has rows and columns, got shape {patch.shape}")
        if max(patch.shape) > PATCH_CELLS_MAX:
            raise SiteError(
                "too_large", f"a patch may have {PATCH_CELLS_MAX} rows and columns at most, "
                f"got {patch.shape}"
            )  # fmt: skip
        if not np.isfinite([*corner_m, cell_m]).all() or not 0.001 <= cell_m <= 100.0:
            raise SiteError(
                "not_finite", f"corner_m {corner_m} and cell_m {cell_m} must be finite, the cell "
                f"between 0.001 and 100 m"
            )  # fmt: skip
        if patch.dtype != np.uint8 or patch.max() > UNKNOWN:
            raise SiteError(
                "bad_cells",
                f"cells are uint8: 0 free, 1 occupied, 2 unknown; got {patch.dtype} up to "
                f"{patch.max()}",
            )
        patch = np.ascontiguousarray(patch)
        patch.flags.writeable = False
        return patch

    # -- publishing -------------------------------------------------------------------------

    def publish(self) -> Snapshot:
        """
        Return the newest snapshot; its revision is one higher when anything changed.

        Raises:
            MemoryFull: When the changes do not fit; they stay pending.
        """
        if not self._changed and self._snapshot is not None:
            return self._snapshot
        self._publish_rasters()
        self._publish_cells()
        places = store_tables(self.memory, self._contents())
        self._retiring += self._tables
        self._tables = [offset for offset, _ in places.values()]
        self.revision += 1
        self._retired.append((self.revision, self._retiring))
        self._retiring = []
        self._unpublished.clear()
        layers = {name: layer.settings for name, layer in self._layers.items()}
        handle = handle_for(self.revision, self.settings, layers, places)
        self._snapshot = Snapshot(self.memory.buffer, handle)
        self._changed = False
        return self._snapshot

    def release_before(self, revision: int) -> None:
        """Give back the memory that only snapshots older than `revision` read."""
        while self._retired and self._retired[0][0] <= revision:
            for offset in self._retired.pop(0)[1]:
                self.memory.give_back(offset)

    def _publish_rasters(self) -> None:
        rows, columns = self.settings.tiles
        around: set[Tile] = set()
        for tile in sorted(self._dirty):
            shapes = self._by_tile.get(tile, {})
            blocks = self._rasters.rebuild(tile, shapes.values(), self._blocked(tile))
            place = self._published.setdefault(tile, _Published())
            self._edges_of[tile] = self._swap(place, "edges", blocks.edges)
            self._cells_of[tile] = self._swap(place, "cells", blocks.cells)
            if blocks.all_cells:
                self._cells_of[tile] = ALL_CELLS
            r, c = tile
            around |= {
                (i, j)
                for i in range(max(r - 1, 0), min(r + 2, rows))
                for j in range(max(c - 1, 0), min(c + 2, columns))
            }
        for row, first, last in _runs(sorted(around)):
            for column, blocks in self._rasters.fields(row, first, last):
                tile = (row, column)
                place = self._published.setdefault(tile, _Published())
                offset = self._swap(place, "field", blocks.field)
                self._field_of[tile] = offset if blocks.field is not None else blocks.field_state
        self._rasters.update_far(self._dirty)
        self._dirty.clear()

    def _swap(
        self,
        place: _Published,
        what: str,
        block: npt.NDArray[np.generic] | None,
    ) -> int:
        """Publish a block in place of the tile's last one; return its offset in elements."""
        old = getattr(place, what)
        if old:
            self._retire(old)
            setattr(place, what, 0)  # before anything that can fail
        if block is None:
            return NO_CELLS
        offset = self._keep(block)
        setattr(place, what, offset)
        return offset // block.itemsize

    def _keep(self, block: npt.NDArray[np.generic]) -> int:
        offset = self.memory.store(block)
        self._sizes[offset] = block.nbytes
        self._unpublished.add(offset)
        return offset

    def _retire(self, offset: int) -> None:
        """Forget a block: later, when nobody reads it, or at once when nobody ever did."""
        del self._sizes[offset]
        if offset in self._unpublished:
            self._unpublished.remove(offset)
            self.memory.give_back(offset)
        else:
            self._retiring.append(offset)

    def _publish_cells(self) -> None:
        for name, tile in sorted(self._dirty_cells):
            layer = self._layers[name]
            old = layer.places.pop(tile, None)
            if old is not None:
                self._retire(old)
            if tile in layer.cells:
                layer.places[tile] = self._keep(layer.cells[tile])
        self._dirty_cells.clear()

    def _contents(self) -> dict[str, npt.NDArray[np.generic]]:
        columns = self.settings.tiles[1]
        cells = [
            (layer.index, tile[0] * columns + tile[1], offset)
            for layer in self._layers.values()
            for tile, offset in layer.places.items()
        ]
        records = self._records
        return {
            "field_of": self._field_of.reshape(-1),
            "edges_of": self._edges_of.reshape(-1),
            "cells_of": self._cells_of.reshape(-1),
            "far_m": self._rasters.far_m.reshape(-1),
            "vertices": records.vertices.view,
            "starts": records.starts.view,
            "boxes": records.boxes.view,
            "polygon_layers": records.polygon_layers.view,
            "polygon_names": records.polygon_names.view,
            "discs": records.discs.view,
            "disc_layers": records.disc_layers.view,
            "disc_names": records.disc_names.view,
            "layer_cells": np.array(cells, np.int64).reshape(-1, 3),
            "tile_blocks": np.array(list(self._sizes.items()), np.int64).reshape(-1, 2),
        }

    def _blocked(self, tile: Tile) -> Cells | None:
        """Blocked cells of a tile, over all rastered layers; None when there is none."""
        side = self.settings.tile_cells
        found: Cells | None = None
        for layer in self._layers.values():
            cells = layer.cells.get(tile)
            if cells is None:
                if not layer.settings.unknown_blocks:
                    continue
                blocked = np.ones((side, side), np.uint8)
            elif layer.settings.unknown_blocks:
                blocked = (cells != 0).astype(np.uint8)
            else:
                blocked = (cells == 1).astype(np.uint8)
            found = blocked if found is None else found | blocked
        return found if found is not None and found.any() else None

    # -- recovery ---------------------------------------------------------------------------

    @classmethod
    def recover(cls, memory: Memory, handle: Handle, in_use: list[Handle]) -> "SiteModel":
        """
        Go on from a published snapshot after its owner died.

        Args:
            memory: The shared memory, freshly opened.
            handle: The newest snapshot that was published.
            in_use: Snapshots that others still read, and whose memory must not be touched
                until `release_before` frees them.
        """
        snapshot = Snapshot.attach(memory, handle)
        blocks = snapshot.blocks()
        for other in in_use:
            blocks |= Snapshot.attach(memory, other).blocks()
        memory.adopt(blocks)
        model = cls(snapshot.settings, memory)
        for name, settings in snapshot.layers().items():
            model.declare(name, settings)
        for layer, name, shape in snapshot.obstacles():
            model.put(layer, name, shape)
        for name, owner in model._layers.items():
            for corner, cells in snapshot.cells(name):
                # By its middle: a corner belongs to its neighbours as well.
                x, y = (c + snapshot.settings.tile_m / 2 for c in corner)
                tile = model._tiles_in(x, y, x, y)[0]
                owner.cells[tile] = cells.copy()
                model._dirty.add(tile)
                model._dirty_cells.add((name, tile))
        model.revision = snapshot.revision
        model._snapshot = snapshot
        # Everything is published afresh; what the predecessor wrote goes when nobody reads it.
        model._retired.append((snapshot.revision + 1, list(blocks)))
        return model

    # -- places -----------------------------------------------------------------------------

    def _layer(self, name: str) -> _Layer:
        if name not in self._layers:
            known = ", ".join(sorted(self._layers)) or "none"
            raise SiteError("unknown_layer", f"there is no layer {name!r}; known: {known}")
        return self._layers[name]

    @staticmethod
    def _check_id(name: str, what: str) -> None:
        raw = name.encode()
        if not 0 < len(raw) <= ID_BYTES_MAX or b"\0" in raw:
            raise SiteError(
                "too_large",
                f"the id of a {what} has 1 to {ID_BYTES_MAX} bytes and no zero byte; "
                f"{name[:80]!r} has {len(raw)}",
            )

    def _tiles_in(self, x0: float, y0: float, x1: float, y1: float) -> list[Tile]:
        """Tiles that a box touches, its border included."""
        s = self.settings
        rows, columns = s.tiles
        c0 = int(np.floor((x0 - s.limits_m[0]) / s.tile_m - 1e-9))
        c1 = int(np.floor((x1 - s.limits_m[0]) / s.tile_m + 1e-9))
        r0 = int(np.floor((y0 - s.limits_m[1]) / s.tile_m - 1e-9))
        r1 = int(np.floor((y1 - s.limits_m[1]) / s.tile_m + 1e-9))
        return [
            (r, c)
            for r in range(max(r0, 0), min(r1, rows - 1) + 1)
            for c in range(max(c0, 0), min(c1, columns - 1) + 1)
        ]

    def _tiles_of(self, shape: Shape) -> list[Tile]:
        """Tiles that a shape may touch: those of its box, less what lies beside long edges."""
        tiles = self._tiles_in(*shape.box_m)
        if len(tiles) <= 9 or not isinstance(shape, PolygonShape):
            return tiles
        side = self.settings.tile_m
        ring = shape.vertices_m
        ahead = np.roll(ring, -1, axis=0)
        length = np.hypot(*(ahead - ring).T)
        normal = np.column_stack([ring[:, 1] - ahead[:, 1], ahead[:, 0] - ring[:, 0]])
        normal /= np.maximum(length, 1e-12)[:, None]
        convex = _is_convex(ring)
        kept = []
        for tile in tiles:
            x, y = self._rasters.corner_m(tile)
            middle = np.array([x + side / 2, y + side / 2])
            # Inside distance to each edge's line; a convex shape misses a tile that lies beyond
            # one of them as a whole.
            inside = ((middle - ring) * normal).sum(axis=1)
            reach = np.abs(normal).sum(axis=1) * side / 2 + 1e-6
            if not convex or (inside >= -reach).all():
                kept.append(tile)
        return kept


def _is_convex(ring: npt.NDArray[np.float64]) -> bool:
    d = np.roll(ring, -1, axis=0) - ring
    e = np.roll(d, -1, axis=0)
    return bool((d[:, 0] * e[:, 1] - d[:, 1] * e[:, 0] >= -1e-12).all())


def _runs(tiles: list[Tile]) -> Iterator[tuple[int, int, int]]:
    """Cut sorted tiles into runs (row, first column, last column) of neighbours, up to 16 long."""
    i = 0
    while i < len(tiles):
        j = i
        row, first = tiles[i]
        while (
            j + 1 < len(tiles)
            and tiles[j + 1] == (row, tiles[j][1] + 1)
            and tiles[j + 1][1] - first < 16
        ):
            j += 1
        yield row, first, tiles[j][1]
        i = j + 1


__all__ = ["MemoryFull", "SiteModel", "TileBlocks", "field_block_floats"]
