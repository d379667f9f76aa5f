"""
From the shapes and cells in a tile to the blocks that a search reads.

Owner of the rasters: which cells of each tile are filled, kept so that a change recomputes
only the tiles it touches and, for distances, their neighbours.
"""

from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import TypeVar

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel
from byway_planning.site.distance import corners_kernel, distances_kernel
from byway_planning.site.edges import bucket_kernel, cell_outlines_kernel, polygon_items
from byway_planning.site.raster import fill_disc_kernel, fill_polygon_kernel
from byway_planning.site.scene import FAR_PER_TILE, OPEN, SOLID
from byway_planning.site.settings import SiteSettings
from byway_planning.site.shapes import PolygonShape, Shape

Cells = npt.NDArray[np.uint8]
Tile = tuple[int, int]
Scalar = TypeVar("Scalar", bound=np.generic)

#: Coarse cells that the far clearance reaches.
FAR_REACH = 24


@kernel("rf4[:, ::1]", "i8", "i8", "f8", "i8", "f4[::1]")
def field_block_kernel(
    distances: npt.NDArray[np.float32],
    side: int,
    first: int,
    cell: float,
    room: int,
    out: npt.NDArray[np.float32],
) -> bool:
    """
    Fill the field block of a tile (see Scene) from distances in cells around it.

    Args:
        distances: Lattice distances in cells; the tile's corner (0, 0) is at [first row, first].
        side: Cells along one side of the tile.
        first: Lattice column of the tile's corner; its lattice row is that of the whole window.
        out: The block.

    Returns:
        Whether any distance is below the cut-off (the largest value of the window).
    """
    margin = (distances.shape[0] - side - 1) // 2
    n = side + 1
    reach = np.float32(0.0)
    low = np.float32(1e30)
    for r in range(n):
        for c in range(n):
            d = distances[margin + r, first + c]
            low = min(low, d)
            reach = max(reach, d)
            out[r * n + c] = d * cell
    base = n * n
    for level in range(2):
        size = room if level == 0 else 4 * room
        squares = side // size
        for r in range(squares):
            for c in range(squares):
                best = np.float32(0.0)
                for i in range(r * size, (r + 1) * size + 1):
                    for j in range(c * size, (c + 1) * size + 1):
                        best = max(best, out[i * n + j])
                out[base + r * squares + c] = best
        base += squares * squares
    return bool(low < reach or low == 0.0)


def field_block_floats(settings: SiteSettings) -> int:
    """Return how many float32 a field block holds."""
    side, room = settings.tile_cells, settings.room_cells
    return (side + 1) ** 2 + (side // room) ** 2 + (side // (4 * room)) ** 2


@dataclass
class TileBlocks:
    """What one tile contributes to a snapshot; None: nothing."""

    field: npt.NDArray[np.float32] | None = None
    field_state: int = OPEN  # OPEN or SOLID when there is no field
    edges: npt.NDArray[np.int64] | None = None  # bucket starts, then items as 8-byte words
    cells: Cells | None = None  # blocked cells of patches
    all_cells: bool = False


@dataclass
class Rasters:
    """Filled cells of every tile that has any; see the module text."""

    settings: SiteSettings
    filled: dict[Tile, Cells] = field(default_factory=dict)

    def __post_init__(self) -> None:
        rows, columns = self.settings.tiles
        self.far_filled = np.zeros((rows * FAR_PER_TILE, columns * FAR_PER_TILE), np.uint8)
        self.far_m = np.full(self.far_filled.shape, self._far_reach_m(), np.float32)
        side = self.settings.tile_cells
        self._room = np.empty((2 * side * side + 2 * side, 5))
        self._sorted = np.empty((4096, 5))

    def _far_reach_m(self) -> float:
        return FAR_REACH * self.settings.tile_m / FAR_PER_TILE

    def corner_m(self, tile: Tile) -> tuple[float, float]:
        s = self.settings
        return s.limits_m[0] + tile[1] * s.tile_m, s.limits_m[1] + tile[0] * s.tile_m

    def rebuild(self, tile: Tile, shapes: Iterable[Shape], blocked: Cells | None) -> TileBlocks:
        """
        Recompute the raster and the edges of one tile.

        Args:
            shapes: Obstacles that may touch the tile.
            blocked: Blocked cells of patches (n, n), or None.
        """
        s = self.settings
        x, y = self.corner_m(tile)
        filled = np.zeros((s.tile_cells, s.tile_cells), np.uint8)
        parts: list[npt.NDArray[np.float64]] = []
        if blocked is not None:
            filled |= blocked
            count = cell_outlines_kernel(_read_only(blocked), x, y, s.cell_m, self._room)
            parts.append(self._room[:count].copy())
        for shape in shapes:
            if isinstance(shape, PolygonShape):
                fill_polygon_kernel(shape.vertices_m, x, y, s.cell_m, filled)
                parts.append(polygon_items(shape.vertices_m))
            else:
                fill_disc_kernel(shape.x_m, shape.y_m, shape.radius_m, x, y, s.cell_m, filled)
                parts.append(np.array([[shape.x_m, shape.y_m] * 2 + [shape.radius_m]]))
        if filled.any():
            self.filled[tile] = filled
        else:
            self.filled.pop(tile, None)
        blocks = TileBlocks(edges=self._edges(parts, x, y))
        if blocked is not None and blocked.any():
            blocks.all_cells = bool(blocked.all())
            blocks.cells = None if blocks.all_cells else blocked
        return blocks

    def _edges(
        self, parts: list[npt.NDArray[np.float64]], x: float, y: float
    ) -> npt.NDArray[np.int64] | None:
        if not parts:
            return None
        items = _read_only(np.concatenate(parts))
        side = self.settings.bucket_side
        starts = np.zeros(side * side + 1, np.int64)
        bucket_m = self.settings.tile_m / side
        total = bucket_kernel(items, x, y, bucket_m, starts, self._sorted)
        if total > len(self._sorted):
            self._sorted = np.empty((2 * total, 5))
            bucket_kernel(items, x, y, bucket_m, starts, self._sorted)
        if total == 0:
            return None
        return np.concatenate([starts, self._sorted[:total].reshape(-1).view(np.int64)])

    def fields(self, row: int, first: int, last: int) -> list[tuple[int, TileBlocks]]:
        """Recompute the distances of the tiles first..last of a row of tiles."""
        s = self.settings
        side, reach = s.tile_cells, s.reach_cells
        count = last - first + 1
        window = np.zeros((side + 2 * reach, count * side + 2 * reach), np.uint8)
        self._paste(window, row * side - reach, first * side - reach)
        if not window.any():
            return [(column, TileBlocks(field_state=OPEN)) for column in range(first, last + 1)]
        lattice = np.empty((window.shape[0] + 1, window.shape[1] + 1), np.uint8)
        corners_kernel(_read_only(window), lattice)
        distances = np.empty(lattice.shape, np.float32)
        distances_kernel(_read_only(lattice), reach, distances)
        found = []
        for i in range(count):
            block = np.empty(field_block_floats(s), np.float32)
            begin = reach + i * side
            near = field_block_kernel(
                _read_only(distances), side, begin, s.cell_m, s.room_cells, block
            )
            if not near:
                found.append((first + i, TileBlocks(field_state=OPEN)))
            elif not block.any():
                found.append((first + i, TileBlocks(field_state=SOLID)))
            else:
                found.append((first + i, TileBlocks(field=block)))
        return found

    def _paste(self, window: Cells, row0: int, column0: int) -> None:
        """Copy filled cells into a window whose lower left cell is (row0, column0)."""
        side = self.settings.tile_cells
        height, width = window.shape
        for tr in range(row0 // side, (row0 + height - 1) // side + 1):
            for tc in range(column0 // side, (column0 + width - 1) // side + 1):
                filled = self.filled.get((tr, tc))
                if filled is None:
                    continue
                r, c = tr * side - row0, tc * side - column0
                r0, r1 = max(r, 0), min(r + side, height)
                c0, c1 = max(c, 0), min(c + side, width)
                window[r0:r1, c0:c1] = filled[r0 - r : r1 - r, c0 - c : c1 - c]

    def update_far(self, tiles: Iterable[Tile]) -> None:
        """Recompute the coarse clearance around tiles whose raster changed."""
        k = FAR_PER_TILE
        rows, columns = [], []
        for row, column in tiles:
            filled = self.filled.get((row, column))
            part = 0
            if filled is not None:
                step = self.settings.tile_cells // k
                part = filled.reshape(k, step, k, step).max(axis=(1, 3))
            self.far_filled[row * k : (row + 1) * k, column * k : (column + 1) * k] = part
            rows.append(row)
            columns.append(column)
        if not rows:
            return
        height, width = self.far_filled.shape
        r0 = max(min(rows) * k - FAR_REACH - 1, 0)
        r1 = min((max(rows) + 1) * k + FAR_REACH + 1, height)
        c0 = max(min(columns) * k - FAR_REACH - 1, 0)
        c1 = min((max(columns) + 1) * k + FAR_REACH + 1, width)
        w0, w1 = max(r0 - FAR_REACH - 1, 0), min(r1 + FAR_REACH + 1, height)
        v0, v1 = max(c0 - FAR_REACH - 1, 0), min(c1 + FAR_REACH + 1, width)
        # Any point of a cell is at least as far from any point of another as their borders are:
        # hypot(max(|dx| - 1, 0), max(|dy| - 1, 0)), which is the distance to the grown mask.
        mask = np.pad(self.far_filled[w0:w1, v0:v1], 1)
        grown = mask.copy()
        grown[1:] |= mask[:-1]
        grown[:-1] |= mask[1:]
        mask = grown.copy()
        grown[:, 1:] |= mask[:, :-1]
        grown[:, :-1] |= mask[:, 1:]
        inner = np.ascontiguousarray(grown[1:-1, 1:-1])
        out = np.empty(inner.shape, np.float32)
        distances_kernel(_read_only(inner), FAR_REACH, out)
        coarse_m = self.settings.tile_m / k
        self.far_m[r0:r1, c0:c1] = out[r0 - w0 : r1 - w0, c0 - v0 : c1 - v0] * coarse_m


def _read_only(array: npt.NDArray[Scalar]) -> npt.NDArray[Scalar]:
    view = array.view()
    view.flags.writeable = False
    return view
