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
    for i in range(count):  # an edge flips the state of every cell whose middle is to its right
        j = i + 1 if i + 1 < count else 0
        ax, ay, bx, by = ring[i, 0], ring[i, 1], ring[j, 0], ring[j, 1]
        first = max(math.floor((min(ay, by) - corner_y) / cell - 0.5), 0)
        last = min(math.floor((max(ay, by) - corner_y) / cell + 0.5), rows - 1)
        for r in range(first, last + 1):
            y = corner_y + (r + 0.5) * cell
            if (ay <= y) != (by <= y):
                x = ax + (bx - ax) * (y - ay) / (by - ay)
                for c in range(max(math.ceil((x - corner_x) / cell - 0.5), 0), columns):
                    out[r, c] ^= 2
    for r in range(rows):
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
    Overwrite the cells of a tile that a patch covers.

    A cell whose middle the patch covers takes the worst of the patch cells that it overlaps,
    occupied before unknown before free, so a finer tile repeats and a coarser one is on the safe
    side. One whose middle it does not cover can only become occupied. Borders that agree within
    a millionth of a patch cell count as equal. 0 free, 1 occupied, 2 unknown.
    """
    slack = 1e-6
    rows, columns = patch.shape
    ratio = cell / pcell
    first_row, last_row = _covered((cy - py) / pcell, ratio, rows, out.shape[0])
    first, last = _covered((cx - px) / pcell, ratio, columns, out.shape[1])
    for r in range(first_row, last_row + 1):
        y0 = (cy - py) / pcell + r * ratio
        y1 = y0 + ratio
        r0, r1 = max(math.floor(y0 + slack), 0), min(math.ceil(y1 - slack), rows)
        row_inside = slack < 0.5 * (y0 + y1) < rows - slack
        for c in range(first, last + 1):
            x0 = (cx - px) / pcell + c * ratio
            x1 = x0 + ratio
            c0, c1 = max(math.floor(x0 + slack), 0), min(math.ceil(x1 - slack), columns)
            if r0 >= r1 or c0 >= c1:
                continue
            inside = row_inside and slack < 0.5 * (x0 + x1) < columns - slack
            value = 0 if inside else out[r, c]
            for i in range(r0, r1):
                for j in range(c0, c1):
                    if patch[i, j] == 1 or (patch[i, j] == 2 and value == 0 and inside):
                        value = patch[i, j]
            out[r, c] = value


@kernel("ru1[:, ::1]", "rf8[::1]", "u1[:, ::1]", "f8", "f8", "f8")
def resample_turned_kernel(
    patch: Cells, place: Points, out: Cells, cx: float, cy: float, cell: float
) -> None:
    """
    The same for a patch that is turned about its corner.

    Args:
        place: x, y of the corner, side of a patch cell, heading of the rows.

    Two squares overlap unless a line along a side of either keeps them apart; the sides of the
    patch give the range of its cells that are looked at, those of the tile are tested.
    """
    slack = 1e-6
    rows, columns = patch.shape
    pcell = place[2]
    c, s = math.cos(place[3]) / pcell, math.sin(place[3]) / pcell
    half = 0.5 * cell * (abs(c) + abs(s))  # of a tile's cell, along a side of the patch
    apart = 0.5 * cell / pcell + 0.5 * pcell * (abs(c) + abs(s)) - slack
    cosine, sine = pcell * c, pcell * s
    for row in range(out.shape[0]):
        for column in range(out.shape[1]):
            dx = cx + (column + 0.5) * cell - place[0]
            dy = cy + (row + 0.5) * cell - place[1]
            u, v = c * dx + s * dy, c * dy - s * dx  # of its middle, in cells of the patch
            j0, j1 = math.floor(u - half + slack), math.ceil(u + half - slack)
            i0, i1 = math.floor(v - half + slack), math.ceil(v + half - slack)
            j0, j1, i0, i1 = max(j0, 0), min(j1, columns), max(i0, 0), min(i1, rows)
            if i0 >= i1 or j0 >= j1:
                continue
            inside = slack < u < columns - slack and slack < v < rows - slack
            value = 0 if inside else out[row, column]
            for i in range(i0, i1):
                for j in range(j0, j1):
                    a, b = j + 0.5 - u, i + 0.5 - v
                    if abs(cosine * a - sine * b) >= apart or abs(sine * a + cosine * b) >= apart:
                        continue
                    if patch[i, j] == 1 or (patch[i, j] == 2 and value == 0 and inside):
                        value = patch[i, j]
            out[row, column] = value


@kernel()
def _covered(begin: float, ratio: float, extent: int, count: int) -> tuple[int, int]:
    """First and last of `count` tile cells that a patch may overlap along one axis."""
    first = max(math.floor(-begin / ratio) - 1, 0)
    last = min(math.ceil((extent - begin) / ratio) + 1, count - 1)
    return first, last


@kernel("ru1[:, ::1]", "ru1[:, ::1]")
def changed_span_kernel(before: Cells, after: Cells) -> tuple[int, int, int, int]:
    """First and last row, first and last column in which two rasters differ; -1 if they do not."""
    rows, columns = before.shape
    r0, r1, c0, c1 = -1, -1, columns, -1
    for r in range(rows):
        differs = False
        for c in range(columns):
            differs |= before[r, c] != after[r, c]
        if differs:
            r0, r1 = r if r0 < 0 else r0, r
            for c in range(columns):
                if before[r, c] != after[r, c]:
                    c0, c1 = min(c0, c), max(c1, c)
    return r0, r1, c0, c1
