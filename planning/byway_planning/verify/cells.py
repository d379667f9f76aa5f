"""
Distance of a moving body from the blocked cells of the site.

A cell is a closed square. Only the edges between blocked and free cells are looked at, joined
into runs, along rows and upright, so that a straight wall of cells costs one edge a side.
"""

from typing import Any

import numpy as np

from byway_planning.kernel import kernel
from byway_planning.site.solids import ALL_CELLS, NO_CELLS, Solids
from byway_planning.verify.body import Hull, Notes, edge_if_near


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
    edge = (c * px + s * py, c * py - s * px, c * qx + s * qy, c * qy - s * qx)
    return edge_if_near(hull, notes.traces, bend, box, edge, True, care, standing)


@kernel()
def _copy_row(solids: Solids, row: int, first: int, count: int, into: Any) -> Any:
    """
    Copy `count` cells of a row, from column `first` on, into `into`; outside all tiles is free.

    Returns (whether one blocks, whether all do).
    """
    tile = solids.tile_cells
    tile_rows, tile_columns = solids.cells_of.shape
    some, every = False, True
    tr = row // tile if row >= 0 else -1
    at = 0
    while at < count:
        column = first + at
        tc = column // tile if column >= 0 else -1
        if column < 0:
            size = min(-column, count - at)
        elif tc >= tile_columns:
            size = count - at
        else:
            size = min((tc + 1) * tile - column, count - at)
        begin = np.int64(NO_CELLS)
        if 0 <= tr < tile_rows and 0 <= tc < tile_columns:
            begin = solids.cells_of[tr, tc]
        if begin < 0:
            fill = np.uint8(1) if begin == ALL_CELLS else np.uint8(0)
            for i in range(at, at + size):
                into[i] = fill
            some |= begin == ALL_CELLS
            every &= begin == ALL_CELLS
        else:
            source = begin + (row - tr * tile) * tile + column - tc * tile - at
            high, low = np.uint8(0), np.uint8(1)
            for i in range(at, at + size):
                cell = np.uint8(1) if solids.cells[source + i] != 0 else np.uint8(0)
                into[i] = cell
                high = high | cell
                low = low & cell
            some |= high != 0
            every &= low != 0
        at += size
    return some, every


@kernel()
def cells_distance(
    solids: Solids, window: Any, hull: Hull, notes: Notes, place: Any, care: float, standing: bool
) -> Any:
    """
    Distance of the moving body from the blocked cells in a window.

    The edges between blocked and free cells are joined into runs, along rows and upright, so
    that a straight wall of cells costs two edges. Returns (distance, row, column) of the run
    that is nearest; the distance is inf if all are clear by `care`.
    """
    row_first, row_last, column_first, column_count = window
    best, at_row, at_column = np.inf, -1, -1
    now, before = 0, 1
    open_runs = 0
    notes.rows[before, :column_count] = 0
    notes.runs[:column_count] = -1
    some_before, every_before = False, False
    for row in range(row_first, row_last + 1):
        some, every = _copy_row(solids, row, column_first, column_count, notes.rows[now])
        flat = some == every and some_before == every_before and some == some_before
        if row > row_first and not flat:
            i = 0
            while i < column_count:
                if notes.rows[now, i] == notes.rows[before, i]:
                    i += 1
                    continue
                begin = i
                while i < column_count and notes.rows[now, i] != notes.rows[before, i]:
                    i += 1
                run = (row, column_first + begin, row, column_first + i)
                distance = _run_distance(solids, run, hull, notes, place, min(care, best), standing)
                if distance < best:
                    best, at_row, at_column = distance, row, column_first + begin
        last = row == row_last
        if some != every or open_runs > 0:
            for i in range(1, column_count):
                upright = notes.rows[now, i] != notes.rows[now, i - 1]
                if upright and notes.runs[i] < 0:
                    notes.runs[i] = row
                    open_runs += 1
                if notes.runs[i] >= 0 and (last or not upright):
                    end = row + 1 if upright else row
                    run = (notes.runs[i], column_first + i, end, column_first + i)
                    distance = _run_distance(
                        solids, run, hull, notes, place, min(care, best), standing
                    )
                    if distance < best:
                        best, at_row, at_column = distance, run[0], run[1]
                    notes.runs[i] = -1
                    open_runs -= 1
        now, before = before, now
        some_before, every_before = some, every
    return best, at_row, at_column
