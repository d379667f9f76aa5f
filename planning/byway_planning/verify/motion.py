"""Distance of a moving body from everything on the site, for one stretch of motion."""

import math
from typing import Any, Final

from byway_planning.kernel import kernel
from byway_planning.site.solids import Solids
from byway_planning.verify.body import (
    OVERLAP_M,
    Hull,
    Notes,
    disc_distance,
    limits_distance,
    polygon_distance,
    swept_box,
)
from byway_planning.verify.cells import cells_distance, is_blocked
from byway_planning.verify.geometry import bend_of, body_trace

NOTHING: Final = 0
POLYGON: Final = 1
DISC_OBSTACLE: Final = 2
CELL: Final = 3
SITE_LIMITS: Final = 4


@kernel()
def note_near(solids: Solids, notes: Notes, box: Any) -> Any:
    """Note what a box (x, y, x, y) touches. Returns the numbers of polygons and discs."""
    x0, y0, x1, y1 = box
    polygons = 0
    boxes = solids.boxes_m
    for p in range(boxes.shape[0]):
        # written first and counted after: no branch to guess
        notes.polygons[polygons] = p
        apart = (boxes[p, 0] > x1) | (boxes[p, 2] < x0) | (boxes[p, 1] > y1) | (boxes[p, 3] < y0)
        polygons += 0 if apart else 1
    discs = 0
    for d in range(solids.discs_m.shape[0]):
        x, y, r = solids.discs_m[d, 0], solids.discs_m[d, 1], solids.discs_m[d, 2]
        if x - r <= x1 and x + r >= x0 and y - r <= y1 and y + r >= y0:
            notes.discs[discs] = d
            discs += 1
    return polygons, discs


@kernel()
def _world_box(box: Any, x: float, y: float, c: float, s: float, margin: float) -> Any:
    """Bounds on the site of a box in the frame of a pose, grown by a margin."""
    mx, my = 0.5 * (box[0] + box[2]), 0.5 * (box[1] + box[3])
    hx, hy = 0.5 * (box[2] - box[0]), 0.5 * (box[3] - box[1])
    ex, ey = abs(c) * hx + abs(s) * hy + margin, abs(s) * hx + abs(c) * hy + margin
    wx, wy = x + c * mx - s * my, y + s * mx + c * my
    return wx - ex, wy - ey, wx + ex, wy + ey


@kernel()
def _window(solids: Solids, world: Any) -> Any:
    """Cells around a box: first row, last row, first column, last column."""
    tile = solids.tile_cells
    rows, columns = solids.cells_of.shape[0] * tile, solids.cells_of.shape[1] * tile
    r0 = math.floor((world[1] - solids.corner_y_m) / solids.cell_m) - 1.0
    r1 = math.floor((world[3] - solids.corner_y_m) / solids.cell_m) + 1.0
    c0 = math.floor((world[0] - solids.corner_x_m) / solids.cell_m) - 1.0
    c1 = math.floor((world[2] - solids.corner_x_m) / solids.cell_m) + 1.0
    # one row and column of free ground around all tiles, so that their borders count as edges
    first_row, last_row = max(int(r0), -1), min(int(r1), rows)
    first_column, last_column = max(int(c0), -1), min(int(c1), columns)
    return first_row, last_row, first_column, last_column


@kernel()
def stretch_clearance(
    solids: Solids,
    notes: Notes,
    near: Any,
    hull: Hull,
    pose: Any,
    arc: Any,
    care: float,
) -> Any:
    """
    The least distance of the body from anything on a stretch of motion.

    Args:
        near: Numbers of polygons and discs in `notes`.
        pose: (x, y, heading) in the middle of the stretch.
        arc: (curvature, half its length). Where the length is 0, containment is looked at too.
        care: Nothing farther than this counts.

    Returns:
        (distance, or `care`; kind of obstacle; its index).
    """
    x, y, heading = pose
    curvature, half = arc
    # no argument of its own: every kernel below would be compiled once for each constant
    standing = half == 0.0
    outline, traces = hull.outline_m, notes.traces
    bend = bend_of(curvature, half)
    for i in range(outline.shape[0]):
        traces[i, 0], traces[i, 1], traces[i, 2], traces[i, 3] = body_trace(
            bend, outline[i, 0], outline[i, 1]
        )
    c, s = math.cos(heading), math.sin(heading)
    box = swept_box(traces, outline.shape[0], bend)
    place = (bend, box, x, y, c, s)
    best, kind, index = care, NOTHING, -1
    world = _world_box(box, x, y, c, s, care + hull.skin_m)
    x0, y0, x1, y1 = world
    if (
        min(x0 - solids.x_m_min, y0 - solids.y_m_min) < 0.0
        or min(solids.x_m_max - x1, solids.y_m_max - y1) < 0.0
    ):
        distance = limits_distance(solids, hull, traces, place)
        if distance < best:
            best, kind, index = distance, SITE_LIMITS, -1
    boxes = solids.boxes_m
    for i in range(near[0]):
        p = notes.polygons[i]
        if boxes[p, 0] <= x1 and boxes[p, 2] >= x0 and boxes[p, 1] <= y1 and boxes[p, 3] >= y0:
            distance = polygon_distance(solids, p, hull, traces, place, best, standing)
            if distance < best:
                best, kind, index = distance, POLYGON, p
    for i in range(near[1]):
        d = notes.discs[i]
        r = solids.discs_m[d, 2]
        if abs(solids.discs_m[d, 0] - 0.5 * (x0 + x1)) <= 0.5 * (x1 - x0) + r:
            if abs(solids.discs_m[d, 1] - 0.5 * (y0 + y1)) <= 0.5 * (y1 - y0) + r:
                distance = disc_distance(solids, d, hull, place, best, standing)
                if distance < best:
                    best, kind, index = distance, DISC_OBSTACLE, d
    if solids.cells_of.shape[0] > 0:
        window = _window(solids, world)
        if window[1] >= window[0] and window[3] >= window[2]:
            distance, row, column = cells_distance(
                solids, window, hull, notes, place, best, standing
            )
            if distance < best:
                best, kind, index = distance, CELL, _blocked_beside(solids, row, column)
        if standing:
            a, b_ = outline[0, 0], outline[0, 1]
            row = math.floor((y + s * a + c * b_ - solids.corner_y_m) / solids.cell_m)
            column = math.floor((x + c * a - s * b_ - solids.corner_x_m) / solids.cell_m)
            if is_blocked(solids, row, column):
                best, kind, index = OVERLAP_M, CELL, _blocked_beside(solids, row, column)
    return best, kind, index


@kernel()
def _blocked_beside(solids: Solids, row: int, column: int) -> Any:
    """Number (row times columns, plus column) of the blocked cell at the beginning of a run."""
    columns = solids.cells_of.shape[1] * solids.tile_cells
    for dr in (0, -1):
        for dc in (0, -1):
            if is_blocked(solids, row + dr, column + dc):
                return (row + dr) * columns + column + dc
    return -1
