"""
Obstacle edges by place.

Everything that the exact test needs is an *item*: a segment grown by a radius, as a row
(x0, y0, x1, y1, radius). Polygon edges and the outlines of blocked cells have radius 0 and the
obstacle on their left, a disc is a point with its radius. A tile is cut into square buckets,
and an item is listed, by value, in every bucket that it touches, so a test near one place reads
memory that lies together.

Whether a place lies inside an obstacle cannot be told from the edges around it, since obstacles
overlap. So every bucket knows how many polygons and blocked cells hold its *reference point*;
the edges crossed on the way from there to the place, all of the same bucket, tell the rest.

An edge block is a row of 8-byte words: where the items of each bucket begin (side^2 + 1 whole
numbers), how many obstacles hold its reference point (side^2), then the items.
"""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel

Items = npt.NDArray[np.float64]
Cells = npt.NDArray[np.uint8]
Counts = npt.NDArray[np.int64]

#: Items that touch a bucket's border belong to both sides, rounding included.
BORDER_M: Final = 1e-9
#: Where in its bucket the reference point lies: no corner of a shape drawn on round numbers, and
#: no border of a cell, has such a coordinate.
REFERENCE_X: Final = 0.4370160244488211
REFERENCE_Y: Final = 0.5857864376269049


@kernel("ru1[:, ::1]", "f8", "f8", "f8", "f8[:, ::1]")
def cell_outlines_kernel(
    cells: Cells, corner_x: float, corner_y: float, cell: float, out: Items
) -> int:
    """
    Outline the marked cells of a tile, cells on the left of each segment, straight runs joined.

    Args:
        cells: Shape (rows, columns), nonzero where blocked; outside counts as free.
        out: At least (2 * rows * columns + rows + columns, 5).

    Returns:
        How many items were written.
    """
    rows, columns = cells.shape
    n = 0
    for across in range(2):
        lines, places = (rows, columns) if across == 0 else (columns, rows)
        for line in range(lines + 1):
            begin, side = 0, 0
            for place in range(places + 1):
                now = (
                    0  # which side of the line is blocked: 1 after it, -1 before it, 0 both or none
                )
                if place < places:
                    if across == 0:
                        before = line > 0 and cells[line - 1, place] != 0
                        after = line < lines and cells[line, place] != 0
                    else:
                        before = line > 0 and cells[place, line - 1] != 0
                        after = line < lines and cells[place, line] != 0
                    now = int(after) - int(before)
                if now == side:
                    continue
                if side != 0:
                    # eastward with the cells above, northward with the cells to the west
                    forward = side == 1 if across == 0 else side == -1
                    first, last = (begin, place) if forward else (place, begin)
                    if across == 0:
                        out[n, 0], out[n, 1] = corner_x + first * cell, corner_y + line * cell
                        out[n, 2], out[n, 3] = corner_x + last * cell, corner_y + line * cell
                    else:
                        out[n, 0], out[n, 1] = corner_x + line * cell, corner_y + first * cell
                        out[n, 2], out[n, 3] = corner_x + line * cell, corner_y + last * cell
                    out[n, 4] = 0.0
                    n += 1
                begin, side = place, now
    return n


@kernel()
def _touches(item: Items, x0: float, y0: float, side: float) -> bool:
    """Does a segment grown by its radius touch a square? Errs towards yes near corners."""
    grow = item[4] + BORDER_M
    ax, ay, bx, by = item[0], item[1], item[2], item[3]
    if max(ax, bx) + grow < x0 or min(ax, bx) - grow > x0 + side:
        return False
    if max(ay, by) + grow < y0 or min(ay, by) - grow > y0 + side:
        return False
    nx, ny = ay - by, bx - ax  # across the segment
    length = math.hypot(nx, ny)
    if length == 0.0:
        return True
    middle = (nx * (x0 + side / 2 - ax) + ny * (y0 + side / 2 - ay)) / length
    half = (abs(nx) + abs(ny)) * side / 2 / length
    return bool(abs(middle) <= half + grow)


@kernel("rf8[:, ::1]", "f8", "f8", "f8", "i8[::1]", "f8[:, ::1]")
def bucket_kernel(
    items: Items, corner_x: float, corner_y: float, bucket: float, starts: Counts, out: Items
) -> int:
    """
    Sort items into the square buckets of a tile.

    Args:
        items: Shape (n, 5).
        bucket: Side of a bucket, metres.
        starts: Shape (side * side + 1,), filled: bucket b holds out[starts[b]:starts[b + 1]].
        out: Room for the sorted items; when it is too small nothing is written.

    Returns:
        How many items the buckets hold together.
    """
    buckets = len(starts) - 1
    side = round(math.sqrt(buckets))
    starts[:] = 0
    for fill in range(2):
        if fill == 1:
            total = 0
            for b in range(buckets):
                n = starts[b + 1]
                starts[b + 1] = total  # where the next item of bucket b goes
                total += n
            if total > out.shape[0]:
                return total
        for i in range(items.shape[0]):
            item = items[i]
            grow = item[4] + BORDER_M
            c0 = math.floor((min(item[0], item[2]) - grow - corner_x) / bucket)
            c1 = math.floor((max(item[0], item[2]) + grow - corner_x) / bucket)
            r0 = math.floor((min(item[1], item[3]) - grow - corner_y) / bucket)
            r1 = math.floor((max(item[1], item[3]) + grow - corner_y) / bucket)
            for r in range(max(r0, 0), min(r1, side - 1) + 1):
                for c in range(max(c0, 0), min(c1, side - 1) + 1):
                    if _touches(item, corner_x + c * bucket, corner_y + r * bucket, bucket):
                        b = r * side + c
                        if fill == 0:
                            starts[b + 1] += 1
                        else:
                            for k in range(5):
                                out[starts[b + 1], k] = item[k]
                            starts[b + 1] += 1
    return int(starts[buckets])


@kernel("rf8[:, ::1]", "f8", "f8", "f8", "i8[::1]")
def rings_around_kernel(
    ring: Items, corner_x: float, corner_y: float, bucket: float, around: Counts
) -> None:
    """Add 1 for every bucket of a tile whose reference point lies in a polygon (n, 2)."""
    side = round(math.sqrt(len(around)))
    n = ring.shape[0]
    for r in range(side):
        y = corner_y + (r + REFERENCE_Y) * bucket
        for c in range(side):
            x = corner_x + (c + REFERENCE_X) * bucket
            inside = False
            ax, ay = ring[n - 1, 0], ring[n - 1, 1]
            for i in range(n):
                bx, by = ring[i, 0], ring[i, 1]
                if (ay <= y) != (by <= y) and x < ax + (bx - ax) * (y - ay) / (by - ay):
                    inside = not inside
                ax, ay = bx, by
            if inside:
                around[r * side + c] += 1


@kernel("ru1[:, ::1]", "i8[::1]")
def cells_around_kernel(cells: Cells, around: Counts) -> None:
    """Add 1 for every bucket of a tile whose reference point lies in a marked cell."""
    side = round(math.sqrt(len(around)))
    bucket = cells.shape[0] / side  # in cells
    for r in range(side):
        for c in range(side):
            if cells[int((r + REFERENCE_Y) * bucket), int((c + REFERENCE_X) * bucket)]:
                around[r * side + c] += 1


@kernel()
def item_crossed(
    x0: float, y0: float, x1: float, y1: float, rx: float, ry: float, px: float, py: float
) -> int:
    """
    How many obstacles more the way from r over (rx, py) to p is in, for crossing one edge.

    A point on a line counts as below it and to its left, on both parts of the way, so that
    nothing is counted twice or not at all where the way bends.
    """
    count = 0
    if (x0 <= rx) != (x1 <= rx):
        y = y0 + (y1 - y0) * (rx - x0) / (x1 - x0)
        if (y <= ry) != (y <= py):
            count += 1 if (x1 > x0) == (py > ry) else -1
    if (y0 <= py) != (y1 <= py):
        x = x0 + (x1 - x0) * (py - y0) / (y1 - y0)
        if (x <= rx) != (x <= px):
            count += 1 if (y1 < y0) == (px > rx) else -1
    return count


def polygon_items(ring: npt.NDArray[np.float64]) -> Items:
    """Return the edges of a ring (n, 2) as items (n, 5)."""
    items = np.zeros((len(ring), 5))
    items[:, :2] = ring
    items[:-1, 2:4] = ring[1:]
    items[-1, 2:4] = ring[0]
    return items
