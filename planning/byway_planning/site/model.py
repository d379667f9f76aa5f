"""
The live site: obstacles and cells in layers, from which snapshots are published.

One owner (the surveyor, or a script) changes it; everybody else reads the snapshots. A change
is checked before it is made, so a refused one leaves the site as it was. Publishing recomputes
the tiles that changed and the distances around them, writes them to fresh blocks, and makes new
tables; the blocks of the revision before stay until `release_before` says that nobody reads it.
"""

import math
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from byway_planning.site.memory import Memory
from byway_planning.site.publishing import Publisher
from byway_planning.site.raster import resample_kernel
from byway_planning.site.records import Records
from byway_planning.site.settings import LayerSettings, SiteSettings
from byway_planning.site.shapes import ID_BYTES_MAX, PolygonShape, Shape, SiteError
from byway_planning.site.snapshot import Handle, Snapshot, handle_for
from byway_planning.site.tiles import Cells, Tile

#: Rows or columns of one patch; 4096 cells of 0.1 m are more than any sensor sees at once.
PATCH_CELLS_MAX = 4096
#: A millimetre is finer than any sensor, and bounds how many patch cells a tile cell looks at.
PATCH_CELL_M_MIN = 0.001
PATCH_CELL_M_MAX = 100.0
UNKNOWN = 2


@dataclass
class _Layer:
    index: int
    settings: LayerSettings
    cells: dict[Tile, Cells] = field(default_factory=dict)


class SiteModel:
    """See the module text."""

    def __init__(self, settings: SiteSettings, memory: Memory | None = None) -> None:
        self.settings = settings
        self.memory = memory or Memory.private()
        self.revision = 0
        self._layers: dict[str, _Layer] = {}
        self._records = Records()
        #: Obstacles by tile: all and only those that may touch the tile, outlines not.
        self._by_tile: dict[Tile, dict[tuple[int, str], Shape]] = {}
        self._publisher = Publisher(settings, self.memory, self._records)
        #: What the newest snapshot does not show yet: tiles, and cells of layers in tiles.
        self._dirty: set[Tile] = set()
        self._dirty_cells: set[tuple[str, Tile]] = set()
        self._changed = True
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
                resampled, occupied before unknown before free. Cells of the site that it covers
                only in part can only get worse by it.
            cells: Shape (rows, columns), row 0 at the lowest y; 0 free, 1 occupied, 2 unknown.

        Raises:
            SiteError: unknown_layer, outlines_only, bad_cells, too_large, not_finite or
                outside_limits (when all of it lies outside).
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
        # What a tile without cells stands for; no tile is kept for that.
        base = np.full((side, side), UNKNOWN if owner.settings.unknown_blocks else 0, np.uint8)
        for tile in self._tiles_in(x, y, x + width, y + height):
            old = owner.cells.get(tile, base)
            new = old.copy()
            tx, ty = self.settings.corner_m(tile)
            resample_kernel(patch, x, y, cell_m, new, tx, ty, self.settings.cell_m)
            if (new == old).all():
                continue
            if (new == base).all():
                del owner.cells[tile]
            else:
                owner.cells[tile] = new
            self._dirty.add(tile)
            self._dirty_cells.add((layer, tile))
            self._changed = True

    @staticmethod
    def _checked_patch(corner_m: tuple[float, float], cell_m: float, cells: Cells) -> Cells:
        try:
            patch = np.array(cells)
        except ValueError as fault:
            raise SiteError("bad_cells", f"a patch has rows and columns: {fault}") from None
        if patch.ndim != 2 or patch.size == 0:
            raise SiteError("bad_cells", f"a patch has rows and columns, got shape {patch.shape}")
        if max(patch.shape) > PATCH_CELLS_MAX:
            raise SiteError(
                "too_large", f"a patch may have {PATCH_CELLS_MAX} rows and columns at most, "
                f"got {patch.shape}"
            )  # fmt: skip
        if not np.isfinite([*corner_m, cell_m]).all():
            raise SiteError("not_finite", f"corner_m {corner_m} and cell_m {cell_m} must be finite")
        if not PATCH_CELL_M_MIN <= cell_m <= PATCH_CELL_M_MAX:
            raise SiteError(
                "bad_cells",
                f"cell_m lies between {PATCH_CELL_M_MIN} and {PATCH_CELL_M_MAX} m, got {cell_m}",
            )
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
        places = self._publisher.publish(
            self.revision + 1,
            self._dirty,
            self._content,
            {
                (self._layers[name].index, tile): self._layers[name].cells.get(tile)
                for name, tile in sorted(self._dirty_cells)
            },
        )
        self.revision += 1
        self._dirty.clear()
        self._dirty_cells.clear()
        self._changed = False
        layers = {name: layer.settings for name, layer in self._layers.items()}
        handle = handle_for(self.revision, self.settings, layers, places)
        self._snapshot = Snapshot(self.memory.buffer, handle, self.settings)
        return self._snapshot

    def release_before(self, revision: int) -> None:
        """Give back the memory that only snapshots older than `revision` read."""
        self._publisher.release_before(revision)

    def _content(self, tile: Tile) -> tuple[list[Shape], Cells | None]:
        return list(self._by_tile.get(tile, {}).values()), self._blocked(tile)

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
        model = cls(snapshot.settings, memory)
        for name, settings in snapshot.layers().items():
            model._layers[name] = _Layer(len(model._layers), settings)
        for layer, name, shape in snapshot.obstacles():
            model.put(layer, name, shape)
        for name, owner in model._layers.items():
            for corner, cells in snapshot.cells(name):
                # By its middle: a corner belongs to its neighbours as well.
                x, y = (c + snapshot.settings.tile_m / 2 for c in corner)
                tile = model._tiles_in(x, y, x, y)[0]
                owner.cells[tile] = cells.copy()
        others = [Snapshot.attach(memory, each) for each in in_use]
        model._publisher.adopt(snapshot, others, model._filled_tiles(), model._content)
        model.revision = snapshot.revision
        model._snapshot = snapshot
        model._dirty.clear()
        model._changed = False
        return model

    def _filled_tiles(self) -> set[Tile]:
        if any(layer.settings.unknown_blocks for layer in self._layers.values()):
            return set(self._tiles_in(*self.settings.limits_m))
        return set(self._by_tile).union(*(layer.cells for layer in self._layers.values()))

    # -- places -----------------------------------------------------------------------------

    def _layer(self, name: str) -> _Layer:
        if name not in self._layers:
            known = ", ".join(sorted(self._layers)) or "none"
            raise SiteError("unknown_layer", f"there is no layer {name!r}; known: {known}")
        return self._layers[name]

    @staticmethod
    def _check_id(name: str, what: str) -> None:
        try:
            size = 0 if "\0" in name else len(name.encode())
        except UnicodeEncodeError:
            size = 0
        if not 0 < size <= ID_BYTES_MAX:
            raise SiteError(
                "too_large",
                f"the id of a {what} has 1 to {ID_BYTES_MAX} bytes of text without zeros, not "
                f"{name[:80]!r}",
            )

    def _tiles_in(self, x0: float, y0: float, x1: float, y1: float) -> list[Tile]:
        """Tiles that a box touches, its border included."""
        s = self.settings
        rows, columns = s.tiles
        c0 = math.floor((x0 - s.limits_m[0]) / s.tile_m - 1e-9)
        c1 = math.floor((x1 - s.limits_m[0]) / s.tile_m + 1e-9)
        r0 = math.floor((y0 - s.limits_m[1]) / s.tile_m - 1e-9)
        r1 = math.floor((y1 - s.limits_m[1]) / s.tile_m + 1e-9)
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
            x, y = self.settings.corner_m(tile)
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
