"""
Filled rasters of shapes: which cells of a tile a shape overlaps.

Nothing is missed: a cell is filled when an edge runs through it or its middle lies inside. A
shape whose edge lies exactly on a cell border may fill the cell on either side; the raster
only prefilters, exact tests decide near obstacles.
"""

import math

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel

Cells = npt.NDArray[np.uint8]
Points = npt.NDArray[np.float64]


@kernel("rf8[:, ::1]", "f8", "f8", "f8", "u1[:, ::1]")
def fill_polygon_kernel(
    ring: Points, corner_x: float, corner_y: float, cell: float, out: Cells
) -> None:
    """Fill the cells of a square tile that a polygon (n, 2) overlaps."""
    rows, columns = out.shape
    count = ring.shape[0]
    for i in range(count):
        j = i + 1 if i + 1 < count else 0
        ax, ay = (ring[i, 0] - corner_x) / cell, (ring[i, 1] - corner_y) / cell
        bx, by = (ring[j, 0] - corner_x) / cell, (ring[j, 1] - corner_y) / cell
        if ay > by:
            ax, ay, bx, by = bx, by, ax, ay
        first, last = max(math.floor(ay), 0), min(math.floor(by), rows - 1)
        for r in range(first, last + 1):
            if by > ay:
                t0 = max((r - ay) / (by - ay), 0.0)
                t1 = min((r + 1 - ay) / (by - ay), 1.0)
                x0, x1 = ax + (bx - ax) * t0, ax + (bx - ax) * t1
            else:
                x0, x1 = ax, bx
            if x0 > x1:
                x0, x1 = x1, x0
            for c in range(max(math.floor(x0), 0), min(math.floor(x1), columns - 1) + 1):
                out[r, c] = 1
    for r in range(rows):
        y = corner_y + (r + 0.5) * cell
        for i in range(count):  # crossings to the left flip the state of every cell to the right
            j = i + 1 if i + 1 < count else 0
            ay, by = ring[i, 1], ring[j, 1]
            if (ay <= y) != (by <= y):
                x = ring[i, 0] + (ring[j, 0] - ring[i, 0]) * (y - ay) / (by - ay)
                first = max(math.ceil((x - corner_x) / cell - 0.5), 0)
                for c in range(first, columns):
                    out[r, c] ^= 2
        for c in range(columns):
            out[r, c] = 1 if out[r, c] else 0


@kernel("f8", "f8", "f8", "f8", "f8", "f8", "u1[:, ::1]")
def fill_disc_kernel(
    x: float, y: float, radius: float, corner_x: float, corner_y: float, cell: float, out: Cells
) -> None:
    """Fill the cells of a square tile that a disc overlaps."""
    rows, columns = out.shape
    for r in range(rows):
        low = corner_y + r * cell
        dy = max(low - y, 0.0, y - low - cell)
        if dy >= radius:
            continue
        half = math.sqrt(radius * radius - dy * dy)
        first = max(math.floor((x - half - corner_x) / cell), 0)
        last = min(math.floor((x + half - corner_x) / cell), columns - 1)
        for c in range(first, last + 1):
            out[r, c] = 1


@kernel("ru1[:, ::1]", "f8", "f8", "f8", "u1[:, ::1]", "f8", "f8", "f8")
def resample_kernel(
    patch: Cells, px: float, py: float, pcell: float, out: Cells, cx: float, cy: float, cell: float
) -> None:
    """
    Overwrite the cells of a tile whose middle a patch covers.

    Occupied wins over unknown wins over free among the patch cells that a tile cell overlaps;
    a finer tile therefore repeats, a coarser one is on the safe side. Where the patch covers
    only a corner of a tile cell, an occupied one still fills it. 0 free, 1 occupied, 2 unknown.
    Borders that agree within a millionth of a cell count as equal.
    """
    slack = 1e-6
    rows, columns = patch.shape
    for r in range(out.shape[0]):
        y0 = (cy + r * cell - py) / pcell
        y1 = y0 + cell / pcell
        if y1 <= slack or y0 >= rows - slack:
            continue
        r0, r1 = max(math.floor(y0 + slack), 0), min(math.ceil(y1 - slack), rows)
        for c in range(out.shape[1]):
            x0 = (cx + c * cell - px) / pcell
            x1 = x0 + cell / pcell
            if x1 <= slack or x0 >= columns - slack:
                continue
            covered = 0.0 <= (y0 + y1) / 2 < rows and 0.0 <= (x0 + x1) / 2 < columns
            c0, c1 = max(math.floor(x0 + slack), 0), min(math.ceil(x1 - slack), columns)
            value = 0
            for i in range(r0, r1):
                for j in range(c0, c1):
                    p = patch[i, j]
                    if p == 1 or (p == 2 and value == 0):
                        value = p
            if covered or value == 1:
                out[r, c] = value
