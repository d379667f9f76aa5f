"""
The obstacles of one revision as a taut string meets them: items, corners, buckets.

An *item* is a segment grown by a radius of its own: an edge of a polygon (0), a disc (a point
with the disc's radius), a straight run of blocked cells (from the middle of the first to the
middle of the last, with half a cell). Whoever asks grows all of them further by the radius of
the disc that is to pass. A string among the grown items can only bend round a *corner*: a
convex vertex of a polygon, a disc, the end of a run. There it touches an arc of a circle, whose
outward normals turn counter-clockwise from a first to a last direction.

All items lie inside the obstacles, so what keeps clear of the obstacles keeps clear of them.
Of blocked cells only those with a free neighbour count, and no more than RUNS_MAX runs: to
leave an obstacle out makes no path longer.
"""

import math
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import describe, kernel
from byway_planning.site.solids import ALL_CELLS, NO_CELLS, Solids

Floats = npt.NDArray[np.float64]
Whole4 = npt.NDArray[np.int32]
Marks = npt.NDArray[np.uint8]

#: Runs of cells that are looked at; 40 bytes each. More come only from megapixels of speckle.
RUNS_MAX: Final = 200_000
#: Buckets at most; a sight line over a site then crosses some hundreds of them.
BUCKETS_MAX: Final = 65_536
#: Least side of a bucket: below, most items would be listed in many.
BUCKET_M_MIN: Final = 1.5
#: Discs that are left out stand farther away than this.
_NOWHERE_M: Final = 1e11
#: What is nearer than this to a bucket's border belongs to both sides, rounding included.
BORDER_M: Final = 1e-6


class Outgrown(NamedTuple):
    """
    Items, corners and buckets of the obstacles of one revision; see the module text.

    Obstacles are numbered: polygons as in `Solids`, then its discs, then runs of cells. All
    arrays are read-only, site-local metres.
    """

    items: Floats  # (m, 5): x0, y0, x1, y1, radius
    owners: Whole4  # (m,): the obstacle of an item
    corners: Floats  # (k, 7): x, y, radius, first normal (2), last normal (2); normals of 0: all
    corner_starts: Whole4  # (obstacles + 1,): corners of an obstacle lie together
    bucket_starts: Whole4  # (rows * columns + 1,)
    entries: Whole4  # items of bucket after bucket
    rows: int
    columns: int
    side_m: float  # of a bucket
    radius_m: float  # the buckets serve discs up to this radius
    x_m_min: float  # limits of the site, and corner of bucket (0, 0)
    y_m_min: float
    x_m_max: float
    y_m_max: float


describe(
    Outgrown,
    *("rf8[:, ::1]", "ri4[::1]", "rf8[:, ::1]", "ri4[::1]", "ri4[::1]", "ri4[::1]"),
    *("i8", "i8", "f8", "f8", "f8", "f8", "f8", "f8"),
)


def outgrown(solids: Solids, radius_m: float) -> Outgrown:
    """
    Prepare the obstacles of one revision for lower bounds.

    Args:
        solids: All obstacles; what a request leaves out may stay in, it is told later.
        radius_m: The largest disc that will be asked for.
    """
    polygons, discs = len(solids.boxes_m), len(solids.discs_m)
    runs = _runs(solids)
    most = len(solids.vertices_m) + discs + len(runs)
    items, owners = np.empty((most, 5)), np.empty(most, np.int32)
    corners = np.empty((len(solids.vertices_m) + discs + 2 * len(runs), 7))
    corner_starts = np.empty(polygons + discs + len(runs) + 1, np.int32)
    count = shapes_kernel(solids, runs, 0.5 * solids.cell_m, items, owners, corners, corner_starts)
    items, owners, corners = items[:count], owners[:count], corners[: corner_starts[-1]]
    side_m, rows, columns = _bucket_grid(solids, count)
    starts = np.empty(rows * columns + 1, np.int32)
    entries = np.empty(6 * count + 1024, np.int32)
    while True:
        needed = place_kernel(
            items, radius_m + BORDER_M, solids.x_m_min, solids.y_m_min, side_m, rows, columns,
            starts, entries,
        )  # fmt: skip
        if needed <= len(entries):
            break
        entries = np.empty(needed, np.int32)
    arrays = (items, owners, corners, corner_starts, starts, entries[:needed])
    for array in arrays:
        array.flags.writeable = False
    return Outgrown(
        *arrays, rows, columns, side_m, radius_m,
        solids.x_m_min, solids.y_m_min, solids.x_m_max, solids.y_m_max,
    )  # fmt: skip


def _bucket_grid(solids: Solids, count: int) -> tuple[float, int, int]:
    """Side, rows and columns of buckets: about two for each item."""
    width, height = solids.x_m_max - solids.x_m_min, solids.y_m_max - solids.y_m_min
    wanted = min(max(2 * count, 16), BUCKETS_MAX)
    side_m = max(BUCKET_M_MIN, math.sqrt(width * height / wanted))
    side_m = max(side_m, max(width, height) / BUCKETS_MAX)
    return side_m, math.ceil(height / side_m), math.ceil(width / side_m)


def _runs(solids: Solids) -> Floats:
    if (solids.cells_of == NO_CELLS).all():
        return np.empty((0, 4))
    edges = np.empty((solids.tile_cells, solids.tile_cells), np.uint8)
    room = 4096
    while True:
        runs = np.empty((room, 4))
        count = runs_kernel(solids, edges, runs)
        if count <= room or room >= RUNS_MAX:
            return runs[: min(count, room)]
        room = min(count, RUNS_MAX)


@kernel()
def is_blocked(solids: Solids, row: int, column: int) -> bool:
    """Whether a cell blocks; outside all tiles is free."""
    tile = solids.tile_cells
    tile_rows, tile_columns = solids.cells_of.shape
    if row < 0 or column < 0 or row >= tile_rows * tile or column >= tile_columns * tile:
        return False
    begin = solids.cells_of[row // tile, column // tile]
    if begin < 0:
        return bool(begin == ALL_CELLS)
    return bool(solids.cells[begin + row % tile * tile + column % tile] != 0)


@kernel()
def _mark_edges(solids: Solids, tr: int, tc: int, edges: Marks) -> bool:
    """Mark the cells of a tile that block and have a free one beside them; are there any?"""
    tile = solids.tile_cells
    begin = solids.cells_of[tr, tc]
    some = False
    for r in range(tile):
        for c in range(tile):
            edges[r, c] = 0
            # most cells are free: look at them as quickly as can be
            if begin >= 0 and solids.cells[begin + r * tile + c] == 0:
                continue
            if begin == ALL_CELLS and 0 < r < tile - 1 and 0 < c < tile - 1:
                continue
            row, column = tr * tile + r, tc * tile + c
            if not (
                is_blocked(solids, row - 1, column)
                and is_blocked(solids, row + 1, column)
                and is_blocked(solids, row, column - 1)
                and is_blocked(solids, row, column + 1)
            ):
                edges[r, c] = 1
                some = True
    return some


@kernel(Solids, "u1[:, ::1]", "f8[:, ::1]")
def runs_kernel(solids: Solids, edges: Marks, out: Floats) -> int:
    """
    Straight runs of blocked cells that have a free neighbour, tile by tile.

    Args:
        edges: One tile of cells, for the work.
        out: Receives x0, y0, x1, y1, the middles of the first and the last cell.

    Returns:
        How many there are; no more than `out` has room for are written.
    """
    tile = solids.tile_cells
    n = 0
    for tr in range(solids.cells_of.shape[0]):
        for tc in range(solids.cells_of.shape[1]):
            if solids.cells_of[tr, tc] != NO_CELLS and _mark_edges(solids, tr, tc, edges):
                for line in range(tile):
                    n = _runs_of_line(solids, edges, tr * tile, tc * tile, line, False, out, n)
                    n = _runs_of_line(solids, edges, tr * tile, tc * tile, line, True, out, n)
    return n


@kernel()
def _runs_of_line(
    solids: Solids, edges: Marks, row: int, column: int, line: int, upright: bool,
    out: Floats, n: int,
) -> int:  # fmt: skip
    """The runs in one row (or column) of the tile that begins at (row, column)."""
    tile = solids.tile_cells
    begin = -1
    for place in range(tile + 1):
        edge = False
        if place < tile:
            edge = edges[place, line] != 0 if upright else edges[line, place] != 0
        if edge and begin < 0:
            begin = place
        elif not edge and begin >= 0:
            last = place - 1
            # a cell alone in its row is told by its column, unless it is alone there too
            if last > begin or (not upright and not _beside(edges, line, begin)):
                if n < out.shape[0]:
                    r0, c0 = (begin, line) if upright else (line, begin)
                    r1, c1 = (last, line) if upright else (line, last)
                    out[n, 0] = solids.corner_x_m + (column + c0 + 0.5) * solids.cell_m
                    out[n, 1] = solids.corner_y_m + (row + r0 + 0.5) * solids.cell_m
                    out[n, 2] = solids.corner_x_m + (column + c1 + 0.5) * solids.cell_m
                    out[n, 3] = solids.corner_y_m + (row + r1 + 0.5) * solids.cell_m
                n += 1
            begin = -1
    return n


@kernel()
def _beside(edges: Marks, row: int, column: int) -> bool:
    """Does a marked cell have one above or below, in its tile, with which it forms a run?"""
    below = row > 0 and edges[row - 1, column] != 0
    above = row + 1 < edges.shape[0] and edges[row + 1, column] != 0
    return bool(below or above)


@kernel()
def _put_item(
    items: Floats, owners: Whole4, n: int, ax: float, ay: float, bx: float, by: float,
    radius: float, owner: int,
) -> int:  # fmt: skip
    items[n, 0], items[n, 1], items[n, 2], items[n, 3], items[n, 4] = ax, ay, bx, by, radius
    owners[n] = owner
    return n + 1


@kernel()
def _put_corner(
    corners: Floats, k: int, x: float, y: float, radius: float,
    first_x: float, first_y: float, last_x: float, last_y: float,
) -> int:  # fmt: skip
    corners[k, 0], corners[k, 1], corners[k, 2] = x, y, radius
    corners[k, 3], corners[k, 4], corners[k, 5], corners[k, 6] = first_x, first_y, last_x, last_y
    return k + 1


@kernel(
    *(Solids, "rf8[:, ::1]", "f8", "f8[:, ::1]", "i4[::1]", "f8[:, ::1]", "i4[::1]"),
)
def shapes_kernel(
    solids: Solids, runs: Floats, run_radius: float,
    items: Floats, owners: Whole4, corners: Floats, corner_starts: Whole4,
) -> int:  # fmt: skip
    """
    Write items and corners of polygons, discs and runs.

    Returns:
        How many items were written.
    """
    n = k = 0
    polygons, discs = solids.boxes_m.shape[0], solids.discs_m.shape[0]
    for p in range(polygons):
        corner_starts[p] = k
        if solids.boxes_m[p, 0] <= solids.boxes_m[p, 2]:
            n, k = _polygon(solids, p, items, owners, corners, n, k)
    for d in range(discs):
        corner_starts[polygons + d] = k
        x, y, radius = solids.discs_m[d, 0], solids.discs_m[d, 1], solids.discs_m[d, 2]
        if radius > 0.0 and abs(x) < _NOWHERE_M and abs(y) < _NOWHERE_M:
            n = _put_item(items, owners, n, x, y, x, y, radius, polygons + d)
            k = _put_corner(corners, k, x, y, radius, 0.0, 0.0, 0.0, 0.0)
    for i in range(runs.shape[0]):
        owner = polygons + discs + i
        corner_starts[owner] = k
        ax, ay, bx, by = runs[i, 0], runs[i, 1], runs[i, 2], runs[i, 3]
        n = _put_item(items, owners, n, ax, ay, bx, by, run_radius, owner)
        length = math.hypot(bx - ax, by - ay)
        if length == 0.0:
            k = _put_corner(corners, k, ax, ay, run_radius, 0.0, 0.0, 0.0, 0.0)
        else:
            left_x, left_y = (ay - by) / length, (bx - ax) / length
            k = _put_corner(corners, k, ax, ay, run_radius, left_x, left_y, -left_x, -left_y)
            k = _put_corner(corners, k, bx, by, run_radius, -left_x, -left_y, left_x, left_y)
    corner_starts[polygons + discs + runs.shape[0]] = k
    return n


@kernel()
def _polygon(
    solids: Solids, p: int, items: Floats, owners: Whole4, corners: Floats, n: int, k: int
) -> tuple[int, int]:
    """Edges and convex vertices of a polygon, which is counter-clockwise."""
    begin, end = solids.starts[p], solids.starts[p + 1]
    ax, ay = solids.vertices_m[end - 2, 0], solids.vertices_m[end - 2, 1]
    bx, by = solids.vertices_m[end - 1, 0], solids.vertices_m[end - 1, 1]
    for i in range(begin, end):
        cx, cy = solids.vertices_m[i, 0], solids.vertices_m[i, 1]
        n = _put_item(items, owners, n, bx, by, cx, cy, 0.0, p)
        ux, uy, vx, vy = bx - ax, by - ay, cx - bx, cy - by
        if ux * vy - uy * vx > 0.0:
            u, v = math.hypot(ux, uy), math.hypot(vx, vy)
            k = _put_corner(corners, k, bx, by, 0.0, uy / u, -ux / u, vy / v, -vx / v)
        ax, ay, bx, by = bx, by, cx, cy
    return n, k


@kernel(
    *("rf8[:, ::1]", "f8", "f8", "f8", "f8", "i8", "i8", "i4[::1]", "i4[::1]"),
)
def place_kernel(
    items: Floats, margin: float, corner_x: float, corner_y: float, side: float,
    rows: int, columns: int, starts: Whole4, entries: Whole4,
) -> int:  # fmt: skip
    """
    List every item in all buckets that it touches when it is grown by its radius and `margin`.

    Returns:
        How many entries there are; when `entries` is too small nothing is written to it.
    """
    starts[:] = 0
    total = 0
    for fill in range(2):
        if fill == 1:
            for b in range(rows * columns):
                count = starts[b + 1]
                starts[b + 1] = total  # where the next entry of bucket b goes
                total += count
            if total > entries.shape[0]:
                return total
        for i in range(items.shape[0]):
            ax, ay, bx, by = items[i, 0], items[i, 1], items[i, 2], items[i, 3]
            grow = items[i, 4] + margin
            c0 = max(math.floor((min(ax, bx) - grow - corner_x) / side), 0)
            c1 = min(math.floor((max(ax, bx) + grow - corner_x) / side), columns - 1)
            r0 = max(math.floor((min(ay, by) - grow - corner_y) / side), 0)
            r1 = min(math.floor((max(ay, by) + grow - corner_y) / side), rows - 1)
            nx, ny = ay - by, bx - ax  # across the item
            length = math.hypot(nx, ny)
            reach = (abs(nx) + abs(ny)) * side / 2.0 + grow * length
            offset = nx * (corner_x + side / 2.0 - ax) + ny * (corner_y + side / 2.0 - ay)
            for r in range(r0, r1 + 1):
                for c in range(c0, c1 + 1):
                    # errs towards listing an item beyond its ends
                    if abs(offset + (nx * c + ny * r) * side) <= reach:
                        b = r * columns + c
                        if fill == 1:
                            entries[starts[b + 1]] = i
                        starts[b + 1] += 1
    return total
