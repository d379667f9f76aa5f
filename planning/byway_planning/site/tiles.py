"""
From the shapes and cells in a tile to the blocks that a search reads.

Owner of the rasters: which cells of each tile are filled, kept so that a change recomputes
only the tile it touches and, for distances, the tiles within reach of cells that changed.
"""

from collections.abc import Iterable, Iterator
from typing import Any, TypeVar

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel
from byway_planning.site.distance import corners_kernel, distances_kernel, grown_kernel
from byway_planning.site.edges import (
    bucket_kernel,
    cell_outlines_kernel,
    cells_around_kernel,
    polygon_items,
    rings_around_kernel,
)
from byway_planning.site.raster import changed_span_kernel, fill_disc_kernel, fill_polygon_kernel
from byway_planning.site.scene import FAR_PER_TILE, OPEN, SOLID
from byway_planning.site.settings import SiteSettings
from byway_planning.site.shapes import PolygonShape, Shape
from byway_planning.site.solids import ALL_CELLS, NO_CELLS
from byway_planning.site.tables import Table

Cells = npt.NDArray[np.uint8]
Floats4 = npt.NDArray[np.float32]
Floats8 = npt.NDArray[np.float64]
Wholes = npt.NDArray[np.int64]
Tile = tuple[int, int]
Span = tuple[int, int, int, int]
Scalar = TypeVar("Scalar", bound=np.generic)

#: Coarse cells that the far clearance reaches.
FAR_REACH = 24
#: Root, factor and product are rounded to float32, each by up to 6e-8 of the value; a clearance
#: must not come out larger than it is.
ROUNDED_DOWN = 1.0 - 3e-7


@kernel(
    *("rf4[:, ::1]", "ri8[:, ::1]", "i8", "f8", "f8", "i8"),
    *("rf4[::1]", "ri8[::1]", "f4[:, ::1]", "i8[::1]"),
)
def field_blocks_kernel(
    distances: Floats4,
    places: Wholes,
    side: int,
    cell: float,
    cut_off: float,
    room: int,
    published: Floats4,
    old: Wholes,
    blocks: Floats4,
    states: Wholes,
) -> None:
    """
    Make the field blocks (see Scene) of tiles whose distances changed.

    Args:
        distances: Lattice distances in cells, of a window.
        places: By tile: first row, last row, first column, last column of the part of its
            lattice that changed; row and column in the window of its lower left corner.
        side: Cells along one side of a tile.
        cut_off: Metres from which on a distance says "out of reach".
        room: Cells along one side of a room.
        published: Where the blocks lie that the tiles have so far.
        old: By tile: its block so far, or OPEN, or SOLID.
        blocks: By tile: filled with the new block.
        states: By tile: OPEN or SOLID when the block is not needed, otherwise 0.
    """
    n = side + 1
    for t in range(len(old)):
        block = blocks[t]
        for i in range(len(block)):
            if old[t] >= 0:
                block[i] = published[old[t] + i]
            else:
                block[i] = 0.0 if old[t] == SOLID else cut_off
        for r in range(places[t, 0], places[t, 1] + 1):
            for c in range(places[t, 2], places[t, 3] + 1):
                block[r * n + c] = distances[places[t, 4] + r, places[t, 5] + c] * cell
        largest = _fill_rooms(block, places[t], side, room)
        if largest == 0.0:
            states[t] = SOLID
        elif not _any_below(block[: n * n], np.float32(cut_off)):
            states[t] = OPEN
        else:
            states[t] = 0


@kernel()
def _fill_rooms(block: Floats4, place: Wholes, side: int, room: int) -> Any:
    """Renew both levels of rooms of a block around a place; return the largest distance of all."""
    n = side + 1
    squares = side // room
    rooms = block[n * n :]
    for r in range(max(place[0] - 1, 0) // room, min(place[1] // room + 1, squares)):
        for c in range(max(place[2] - 1, 0) // room, min(place[3] // room + 1, squares)):
            best = np.float32(0.0)
            for i in range(r * room, (r + 1) * room + 1):
                for j in range(c * room, (c + 1) * room + 1):
                    d = block[i * n + j]
                    best = d if d > best else best
            rooms[r * squares + c] = best
    largest = np.float32(0.0)
    for r in range(squares // 4):
        for c in range(squares // 4):
            best = np.float32(0.0)
            for i in range(4 * r, 4 * r + 4):
                for j in range(4 * c, 4 * c + 4):
                    best = max(best, rooms[i * squares + j])
            rooms[squares * squares + r * (squares // 4) + c] = best
            largest = max(largest, best)
    return largest


@kernel()
def _any_below(values: Floats4, bound: Any) -> bool:
    for value in values:  # noqa: SIM110 - any() of a generator does not compile
        if value < bound:
            return True
    return False


class Rasters:
    """Filled cells of every tile that has any; see the module text."""

    def __init__(self, settings: SiteSettings) -> None:
        self.settings = settings
        rows, columns = settings.tiles
        self._filled: dict[Tile, Cells] = {}
        self._nothing = np.zeros((settings.tile_cells, settings.tile_cells), np.uint8)
        #: Distances to be recomputed: by tile, first and last row, first and last column of its
        #: lattice. Kept until the owner clears it, because the new blocks may find no room.
        self.stale: dict[Tile, Span] = {}
        self._stale_far: set[Tile] = set()
        self._far_filled = np.zeros((rows * FAR_PER_TILE, columns * FAR_PER_TILE), np.uint8)
        self.far = Table(np.float32)
        self.far.append(np.full(self._far_filled.size, FAR_REACH * self._coarse_m * ROUNDED_DOWN))
        side = settings.tile_cells
        self._outlines = np.empty((2 * side * side + 2 * side, 5))
        self._sorted = np.empty((4096, 5))

    @property
    def _coarse_m(self) -> float:
        return self.settings.tile_m / FAR_PER_TILE

    # -- raster and edges ---------------------------------------------------------------------

    def rebuild(
        self, tile: Tile, shapes: Iterable[Shape], blocked: Cells | None
    ) -> tuple[Wholes | None, Cells | None, int]:
        """
        Recompute the raster and the edges of one tile.

        Args:
            shapes: Obstacles that may touch the tile.
            blocked: Blocked cells of patches (n, n), or None.

        Returns:
            The edge block (see `edges`) or None, the blocked cells as a block or None, and
            where there is none: NO_CELLS or ALL_CELLS.
        """
        shapes = list(shapes)
        self._fill(tile, shapes, blocked)
        edges = self._edges(tile, shapes, blocked)
        if blocked is None or not blocked.any():
            return edges, None, NO_CELLS
        if blocked.all():
            return edges, None, ALL_CELLS
        return edges, blocked, 0

    def refill(self, tile: Tile, shapes: Iterable[Shape], blocked: Cells | None) -> None:
        """Recompute the raster of a tile whose blocks are published already."""
        self._fill(tile, list(shapes), blocked)
        self._far_filled[self._coarse_part(tile)] = self._coarse(tile)
        self.stale.clear()
        self._stale_far.clear()

    def _fill(self, tile: Tile, shapes: list[Shape], blocked: Cells | None) -> None:
        s = self.settings
        x, y = self.settings.corner_m(tile)
        filled = np.zeros((s.tile_cells, s.tile_cells), np.uint8)
        if blocked is not None:
            filled |= blocked
        for shape in shapes:
            if isinstance(shape, PolygonShape):
                fill_polygon_kernel(shape.vertices_m, x, y, s.cell_m, filled)
            else:
                fill_disc_kernel(shape.x_m, shape.y_m, shape.radius_m, x, y, s.cell_m, filled)
        before = self._filled.get(tile, self._nothing)
        r0, r1, c0, c1 = changed_span_kernel(_read_only(before), _read_only(filled))
        if r0 < 0:
            return
        if filled.any():
            self._filled[tile] = filled
        else:
            del self._filled[tile]
        self._stale_far.add(tile)
        r, c = tile[0] * s.tile_cells, tile[1] * s.tile_cells
        self._spoil((r + r0, r + r1, c + c0, c + c1))

    def _spoil(self, cells: Span) -> None:
        """Note as stale what cells that changed, counted over the whole site, are nearest to."""
        side, reach = self.settings.tile_cells, self.settings.reach_cells
        r0, r1, c0, c1 = (
            cells[0] - reach + 1,
            cells[1] + reach,
            cells[2] - reach + 1,
            cells[3] + reach,
        )
        rows, columns = self.settings.tiles
        for i in range(max(-(-r0 // side) - 1, 0), min(r1 // side, rows - 1) + 1):
            for j in range(max(-(-c0 // side) - 1, 0), min(c1 // side, columns - 1) + 1):
                s0, s1, t0, t1 = self.stale.get((i, j), (side, 0, side, 0))
                self.stale[i, j] = (
                    min(s0, max(r0 - i * side, 0)),
                    max(s1, min(r1 - i * side, side)),
                    min(t0, max(c0 - j * side, 0)),
                    max(t1, min(c1 - j * side, side)),
                )

    def _edges(self, tile: Tile, shapes: list[Shape], blocked: Cells | None) -> Wholes | None:
        x, y = self.settings.corner_m(tile)
        side = self.settings.bucket_side
        bucket_m = self.settings.tile_m / side
        around = np.zeros(side * side, np.int64)
        parts: list[Floats8] = []
        if blocked is not None:
            cells = _read_only(blocked)
            count = cell_outlines_kernel(cells, x, y, self.settings.cell_m, self._outlines)
            parts.append(self._outlines[:count].copy())
            cells_around_kernel(cells, around)
        for shape in shapes:
            if isinstance(shape, PolygonShape):
                parts.append(polygon_items(shape.vertices_m))
                rings_around_kernel(shape.vertices_m, x, y, bucket_m, around)
            else:
                parts.append(np.array([[shape.x_m, shape.y_m] * 2 + [shape.radius_m]]))
        if not parts:
            return None
        items = _read_only(np.concatenate(parts))
        starts = np.zeros(side * side + 1, np.int64)
        total = bucket_kernel(items, x, y, bucket_m, starts, self._sorted)
        if total > len(self._sorted):
            self._sorted = np.empty((2 * total, 5))
            bucket_kernel(items, x, y, bucket_m, starts, self._sorted)
        if total == 0:
            return None
        return np.concatenate([starts, around, self._sorted[:total].reshape(-1).view(np.int64)])

    # -- distances ----------------------------------------------------------------------------

    def windows(self) -> Iterator[tuple[list[Tile], Floats4, Wholes]]:
        """Yield tiles with stale distances, a window of new ones, and `places` in it (above)."""
        side, reach = self.settings.tile_cells, self.settings.reach_cells
        for tiles in _groups(sorted(self.stale)):
            places = np.array([(*self.stale[t], t[0] * side, t[1] * side) for t in tiles])
            row, column = (places[:, 4] + places[:, 0]).min(), (places[:, 5] + places[:, 2]).min()
            height = (places[:, 4] + places[:, 1]).max() - row + 1
            width = (places[:, 5] + places[:, 3]).max() - column + 1
            places[:, 4] -= row
            places[:, 5] -= column
            # Lattice points within reach around the window, and the cells around those.
            grow = reach + 1
            cells = np.zeros((height + 2 * grow - 1, width + 2 * grow - 1), np.uint8)
            self._paste(cells, int(row) - grow, int(column) - grow)
            marks = np.empty((height + 2 * reach, width + 2 * reach), np.uint8)
            corners_kernel(_read_only(cells), marks)
            distances = np.empty((height, width), np.float32)
            distances_kernel(_read_only(marks), reach, distances)
            yield tiles, distances, places

    def _paste(self, window: Cells, row0: int, column0: int) -> None:
        """Copy filled cells into a window whose lower left cell is (row0, column0)."""
        side = self.settings.tile_cells
        height, width = window.shape
        for tr in range(row0 // side, (row0 + height - 1) // side + 1):
            for tc in range(column0 // side, (column0 + width - 1) // side + 1):
                filled = self._filled.get((tr, tc))
                if filled is None:
                    continue
                r, c = tr * side - row0, tc * side - column0
                r0, r1 = max(r, 0), min(r + side, height)
                c0, c1 = max(c, 0), min(c + side, width)
                window[r0:r1, c0:c1] = filled[r0 - r : r1 - r, c0 - c : c1 - c]

    # -- far clearance ------------------------------------------------------------------------

    def _coarse_part(self, tile: Tile) -> tuple[slice, slice]:
        k = FAR_PER_TILE
        return slice(tile[0] * k, (tile[0] + 1) * k), slice(tile[1] * k, (tile[1] + 1) * k)

    def _coarse(self, tile: Tile) -> Cells:
        """Which coarse cells (k, k) of a tile hold anything."""
        k = FAR_PER_TILE
        filled = self._filled.get(tile)
        if filled is None:
            return np.zeros((k, k), np.uint8)
        step = self.settings.tile_cells // k
        coarse: Cells = filled.reshape(k, step, k, step).max(axis=(1, 3))
        return coarse

    def update_far(self) -> None:
        """Recompute the coarse clearance around tiles whose raster changed."""
        boxes: list[list[int]] = []
        for tile in sorted(self._stale_far):
            part, coarse = self._coarse_part(tile), self._coarse(tile)
            if (self._far_filled[part] == coarse).all():
                continue
            self._far_filled[part] = coarse
            _include(boxes, tile, 2 * FAR_REACH // FAR_PER_TILE)
        self._stale_far.clear()
        for box in boxes:
            self._update_far_in(*box)

    def _update_far_in(self, row: int, column: int, last_row: int, last_column: int) -> None:
        k = FAR_PER_TILE
        height, width = self._far_filled.shape
        r0, r1 = max(row * k - FAR_REACH, 0), min((last_row + 1) * k + FAR_REACH, height)
        c0, c1 = max(column * k - FAR_REACH, 0), min((last_column + 1) * k + FAR_REACH, width)
        # Any point of a cell is at least as far from any point of another as their borders are:
        # hypot(max(|dx| - 1, 0), max(|dy| - 1, 0)), which is the distance to the grown mask.
        grow = FAR_REACH + 1
        cells = np.zeros((r1 - r0 + 2 * grow, c1 - c0 + 2 * grow), np.uint8)
        below, left = max(grow - r0, 0), max(grow - c0, 0)  # what of it lies outside the site
        inner = self._far_filled[max(r0 - grow, 0) : r1 + grow, max(c0 - grow, 0) : c1 + grow]
        cells[below : below + inner.shape[0], left : left + inner.shape[1]] = inner
        grown = np.empty((r1 - r0 + 2 * FAR_REACH, c1 - c0 + 2 * FAR_REACH), np.uint8)
        grown_kernel(_read_only(cells), grown)
        out = np.empty((r1 - r0, c1 - c0), np.float32)
        distances_kernel(_read_only(grown), FAR_REACH, out)
        out *= self._coarse_m * ROUNDED_DOWN
        self.far.write_window(width, r0, c0, out)


def _groups(tiles: list[Tile]) -> Iterator[list[Tile]]:
    """Cut sorted tiles into groups of neighbours, up to 4 x 4, whose distances are made at once."""
    left = dict.fromkeys(tiles)
    for row, column in tiles:
        if (row, column) in left:
            near = ((row + i, column + j) for i in range(4) for j in range(-3, 4))
            group: list[Tile] = []
            for tile in near:
                if tile in left and tile[1] < min([column, *(t[1] for t in group)]) + 4:
                    group.append(tile)
                    del left[tile]
            yield group


def _include(boxes: list[list[int]], tile: Tile, gap: int) -> None:
    """Put a tile into the first box (row, column, last row, last column) within a gap of it."""
    for box in boxes:
        if box[0] - gap <= tile[0] <= box[2] + gap and box[1] - gap <= tile[1] <= box[3] + gap:
            box[0], box[2] = min(box[0], tile[0]), max(box[2], tile[0])
            box[1], box[3] = min(box[1], tile[1]), max(box[3], tile[1])
            return
    boxes.append([*tile, *tile])


def _read_only(array: npt.NDArray[Scalar]) -> npt.NDArray[Scalar]:
    view = array.view()
    view.flags.writeable = False
    return view
