"""
Distance of a moving body from the blocked cells of the site.

A cell is a closed square. Only the edges between blocked and free cells are looked at, joined
into runs, along rows and upright, so that a straight wall of cells costs one edge a side.
"""

import math
from typing import Any

import numpy as np

from byway_planning.kernel import kernel
from byway_planning.site.solids import ALL_CELLS, NO_CELLS, Solids
from byway_planning.verify.body import Hull, Notes, edge_if_near, point_distance


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
def _run_distance(
    solids: Solids, run: Any, hull: Hull, notes: Notes, place: Any, care: float, standing: bool
) -> Any:
    """Distance of the moving body from a run (row, column, row, column) of cell edges."""
    bend, box, x, y, c, s = place
    px = solids.corner_x_m + run[1] * solids.cell_m - x
    py = solids.corner_y_m + run[0] * solids.cell_m - y
    qx = solids.corner_x_m + run[3] * solids.cell_m - x
    qy = solids.corner_y_m + run[2] * solids.cell_m - y
    ax, ay, bx, by = c * px + s * py, c * py - s * px, c * qx + s * qy, c * qy - s * qx
    best = edge_if_near(hull, notes.traces, bend, box, (ax, ay, bx, by), care, standing)
    # an edge looks after its second end only, and a run has no edge before it
    skin = hull.skin_m
    return min(best, point_distance(hull, bend, ax, ay, min(care, best) + skin) - skin)


@kernel()
def _copy_row(solids: Solids, row: int, first: int, last: int, into: Any) -> Any:
    """
    Copy the cells first..last of a row into `into`, whose first place is column -1.

    Outside all tiles is free. Returns (whether one blocks, whether all do).
    """
    tile = solids.tile_cells
    tile_rows, tile_columns = solids.cells_of.shape
    some, every = np.uint8(0), np.uint8(1)
    inside = 0 <= row < tile_rows * tile
    column = first
    while column <= last:
        if not inside or column < 0 or column >= tile_columns * tile:
            begin, end = NO_CELLS, (0 if column < 0 and inside else last + 1)
        else:
            begin = solids.cells_of[row // tile, column // tile]
            end = (column // tile + 1) * tile
        end = min(end, last + 1)
        # slices, because loops over them are compiled into wide instructions
        target = into[column + 1 : end + 1]
        if begin < 0:
            fill = np.uint8(1) if begin == ALL_CELLS else np.uint8(0)
            for i in range(end - column):
                target[i] = fill
            some, every = np.uint8(some | fill), np.uint8(every & fill)
        else:
            at = begin + row % tile * tile + column % tile
            source = solids.cells[at : at + end - column]
            for i in range(end - column):
                cell = source[i]
                target[i] = cell
                some, every = np.uint8(some | cell), np.uint8(every & cell)
        column = end
    return some != 0, every != 0


@kernel()
def _band(solids: Solids, place: Any, reach: float) -> Any:
    """What `_columns` needs to cut the box of a stretch, grown by a reach, into rows of cells."""
    _, box, x, y, c, s = place
    mx, my = 0.5 * (box[0] + box[2]), 0.5 * (box[1] + box[3])
    hx, hy = 0.5 * (box[2] - box[0]) + reach, 0.5 * (box[3] - box[1]) + reach
    # middle of the box in cells, half its sides in cells, direction of its x axis
    column = (x + c * mx - s * my - solids.corner_x_m) / solids.cell_m
    row = (y + s * mx + c * my - solids.corner_y_m) / solids.cell_m
    return column, row, hx / solids.cell_m, hy / solids.cell_m, c, s


@kernel()
def _columns(band: Any, row: int, first: int, last: int) -> Any:
    """The columns of a row that a band touches, one more each way, within first..last."""
    column, middle, hx, hy, c, s = band
    below, above = row - 1.0 - middle, row + 1.0 - middle  # the row and the edges below it
    low, high = -np.inf, np.inf
    if abs(c) > 1e-6:  # between the ends of the box: |c dx + s dy| <= hx
        slope = -s / c
        low = max(low, min(slope * below, slope * above) - hx / abs(c))
        high = min(high, max(slope * below, slope * above) + hx / abs(c))
    if abs(s) > 1e-6:  # between its sides: |c dy - s dx| <= hy
        slope = c / s
        low = max(low, min(slope * below, slope * above) - hy / abs(s))
        high = min(high, max(slope * below, slope * above) + hy / abs(s))
    if low > high:
        return first, first - 1
    low = min(max(math.floor(column + low) - 1.0, float(first)), last + 1.0)
    high = max(min(math.floor(column + high) + 1.0, float(last)), first - 1.0)
    return int(low), int(high)


@kernel()
def _level_edges(
    solids: Solids,
    row: int,
    columns: Any,
    rows: Any,
    hull: Hull,
    notes: Notes,
    place: Any,
    how: Any,
) -> Any:
    """The nearest run of edges between a row and the one before: (distance, its column)."""
    here, before = rows
    care, standing = how
    first, last = columns
    best, at_column = np.inf, -1
    one, other = here[first + 1 : last + 2], before[first + 1 : last + 2]
    differ = np.uint8(0)
    for i in range(last + 1 - first):
        differ = np.uint8(differ | (one[i] ^ other[i]))
    if differ == 0:
        return best, at_column
    i = 0
    while i <= last - first:
        if one[i] == other[i]:
            i += 1
            continue
        begin = i
        while i <= last - first and one[i] != other[i]:
            i += 1
        run = (row, first + begin, row, first + i)
        distance = _run_distance(solids, run, hull, notes, place, min(care, best), standing)
        if distance < best:
            best, at_column = distance, first + begin
    return best, at_column


@kernel()
def _upright_edges(
    solids: Solids,
    row: int,
    columns: Any,
    scan: Any,
    hull: Hull,
    notes: Notes,
    place: Any,
    how: Any,
) -> Any:
    """
    Begin, go on with and end the runs of upright edges at a row.

    `scan` is (cells of the row, first and last column of this row and the one before, whether
    no row follows). Returns (distance, row, column) of the nearest run that ended, and by how
    much the number of open runs grew.
    """
    here, least, most, ends = scan
    care, standing = how
    first, last = columns
    best, at_row, at_column, opened = np.inf, -1, -1, 0
    for column in range(least, most + 1):
        begun = notes.runs[column + 1]
        upright = first < column <= last and here[column + 1] != here[column]
        if upright and begun < 0:
            begun = row
            notes.runs[column + 1] = row
            opened += 1
        if begun >= 0 and (ends or not upright):
            run = (begun, column, row + 1 if upright else row, column)
            distance = _run_distance(solids, run, hull, notes, place, min(care, best), standing)
            if distance < best:
                best, at_row, at_column = distance, begun, column
            notes.runs[column + 1] = -1
            opened -= 1
    return best, at_row, at_column, opened


@kernel()
def cells_distance(
    solids: Solids, window: Any, hull: Hull, notes: Notes, place: Any, care: float, standing: bool
) -> Any:
    """
    Distance of the moving body from the blocked cells in a window.

    `window` is (first row, last row, first column, last column). Returns (distance, row,
    column) of the run that is nearest; the distance is inf if all are clear by `care`.
    """
    row_first, row_last, column_first, column_last = window
    band = _band(solids, place, care + hull.skin_m)
    best, at_row, at_column = np.inf, -1, -1
    open_runs = 0
    flat_before, some_before = False, False
    first, last = _columns(band, row_first, column_first, column_last)
    least, most = first, last
    for row in range(row_first, row_last + 1):
        here, before = notes.rows[row & 1], notes.rows[(row + 1) & 1]
        # as far as the next row will want to look back
        next_first, next_last = _columns(band, row + 1, column_first, column_last)
        some, every = _copy_row(solids, row, min(first, next_first), max(last, next_last), here)
        flat = some == every
        how = (min(care, best), standing)
        if row > row_first and not (flat and flat_before and some == some_before):
            distance, column = _level_edges(
                solids, row, (first, last), (here, before), hull, notes, place, how
            )
            if distance < best:
                best, at_row, at_column = distance, row, column
        if not flat or open_runs > 0:
            scan = (here, min(least, first), max(most, last), row == row_last)
            distance, began, column, opened = _upright_edges(
                solids, row, (first, last), scan, hull, notes, place, how
            )
            open_runs += opened
            if distance < best:
                best, at_row, at_column = distance, began, column
        flat_before, some_before = flat, some
        least, most, first, last = first, last, next_first, next_last
    return best, at_row, at_column
