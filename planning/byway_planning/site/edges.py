"""
Obstacle edges by place.

Everything that the exact test needs is an *item*: a segment grown by a radius, as a row
(x0, y0, x1, y1, radius). Polygon edges and the outlines of blocked cells have radius 0, a disc
is a point with its radius. A tile is cut into square buckets, and an item is listed, by value,
in every bucket that it touches, so a test near one place reads memory that lies together.
"""

import math

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel

Items = npt.NDArray[np.float64]
Cells = npt.NDArray[np.uint8]
Wholes = npt.NDArray[np.int64]

#: Items that touch a bucket's border belong to both sides, rounding included.
BORDER_M = 1e-9


@kernel("ru1[:, ::1]", "f8", "f8", "f8", "f8[:, ::1]")
def cell_outlines_kernel(
    cells: Cells, corner_x: float, corner_y: float, cell: float, out: Items
) -> int:
    """
    Outline the marked cells of a tile with segments, straight runs joined.

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
            begin = -1
            for place in range(places + 1):
                edge = False
                if place < places:
                    if across == 0:
                        before = line > 0 and cells[line - 1, place] != 0
                        after = line < lines and cells[line, place] != 0
                    else:
                        before = line > 0 and cells[place, line - 1] != 0
                        after = line < lines and cells[place, line] != 0
                    edge = before != after
                if edge and begin < 0:
                    begin = place
                elif not edge and begin >= 0:
                    if across == 0:
                        out[n, 0], out[n, 1] = corner_x + begin * cell, corner_y + line * cell
                        out[n, 2], out[n, 3] = corner_x + place * cell, corner_y + line * cell
                    else:
                        out[n, 0], out[n, 1] = corner_x + line * cell, corner_y + begin * cell
                        out[n, 2], out[n, 3] = corner_x + line * cell, corner_y + place * cell
                    out[n, 4] = 0.0
                    n += 1
                    begin = -1
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
    items: Items, corner_x: float, corner_y: float, bucket: float, starts: Wholes, out: Items
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


def polygon_items(ring: npt.NDArray[np.float64]) -> Items:
    """Return the edges of a ring (n, 2) as items (n, 5)."""
    items = np.zeros((len(ring), 5))
    items[:, :2] = ring
    items[:, 2:4] = np.roll(ring, -1, axis=0)
    return items
