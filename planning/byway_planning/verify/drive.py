"""
The body's clearance along a whole table, and at a single pose.

Rows that lie on one arc are joined into stretches of at most STRETCH_M and STRETCH_RAD. What is
near is chosen by boxes: once for every PART_M of the way, then for each stretch.
"""

import math
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel
from byway_planning.site.solids import Solids
from byway_planning.verify.body import Hull, Notes
from byway_planning.verify.geometry import BEND_PER_M_MIN, driven, turned
from byway_planning.verify.motion import NOTHING, note_near, stretch_clearance

Floats = npt.NDArray[np.float64]

STRETCH_M: Final = 3.0
STRETCH_RAD: Final = 0.6  # arcs below a right angle, with boxes that fit them
PART_M: Final = 12.0
SAME_ARC: Final = 1e-8  # m and rad: rows closer than this to an arc lie on it
PLACE_M: Final = 1e-3  # how closely the place of a fault is told
CREEP_M: Final = 0.02  # steps out of an overlap; the running maximum is taken at their ends
FALL_M: Final = 1e-6  # by so much may the clearance fall on the way out
BULGE_M: Final = 0.3  # arcs between rows leave the box of the rows by less

FREE: Final = 0
BLOCKED: Final = 1


@kernel()
def _stretch_at(rows: Floats, arcs: Floats, i: int, end: int) -> Any:
    """The stretch that begins at row i, up to row `end` at most: (row after it, length)."""
    x, y, heading, curvature = rows[i, 1], rows[i, 2], rows[i, 3], rows[i, 4]
    length = arcs[i]
    j = i + 1
    bent = abs(curvature) >= BEND_PER_M_MIN or curvature == 0.0
    while j < end and bent and rows[j, 4] == curvature and arcs[j] * length >= 0.0:
        longer = length + arcs[j]
        if abs(longer) > STRETCH_M or abs(curvature * longer) > STRETCH_RAD:
            break
        px, py, turn = driven(x, y, heading, curvature, length)
        if max(abs(px - rows[j, 1]), abs(py - rows[j, 2])) > SAME_ARC:
            break
        if abs(turned(turn - rows[j, 3])) > SAME_ARC:
            break
        length = longer
        j += 1
    return j, length


@kernel()
def _part_box(rows: Floats, arcs: Floats, i: int, margin: float) -> Any:
    """Bounds of the rows from i on for PART_M, grown by a margin, and the first row after."""
    n = rows.shape[0]
    x0, y0, x1, y1 = rows[i, 1], rows[i, 2], rows[i, 1], rows[i, 2]
    way = 0.0
    j = i
    while j < n - 1 and (way <= PART_M or j == i):
        way += abs(arcs[j])
        j += 1
        x0, x1 = min(x0, rows[j, 1]), max(x1, rows[j, 1])
        y0, y1 = min(y0, rows[j, 2]), max(y1, rows[j, 2])
    return j, (x0 - margin, y0 - margin, x1 + margin, y1 + margin)


@kernel()
def _begin_below(
    solids: Solids, notes: Notes, near: Any, hull: Hull, pose: Any, arc: Any, need: float
) -> float:
    """
    How far along a stretch the clearance first falls below `need`, to PLACE_M.

    `pose` is its beginning, `arc` (curvature, signed length); it does fall below on it.
    """
    x, y, heading = pose
    curvature, length = arc
    low, high = 0.0, length
    while abs(high - low) > PLACE_M:
        half = 0.25 * (high - low)
        middle = driven(x, y, heading, curvature, low + half)
        _, kind, _ = stretch_clearance(
            solids, notes, near, hull, middle, (curvature, abs(half)), need
        )
        if kind != NOTHING:
            high = low + 2.0 * half
        else:
            low = low + 2.0 * half
    return low


@kernel()
def _report(found: Floats, s_m: float, pose: Any, distance: float, kind: int, index: int) -> None:
    """found: least clearance, arc length, x, y, heading, distance there, kind, index."""
    found[1] = s_m
    found[2], found[3], found[4] = pose
    found[5], found[6], found[7] = distance, kind, index


@kernel()
def near_rows(solids: Solids, notes: Notes, rows: Floats, arcs: Floats, i: int, m: float) -> Any:
    """Note what is nearer than m to the rows from i on for PART_M. Returns them, and their end."""
    end, box = _part_box(rows, arcs, i, m)
    return note_near(solids, notes, box), end


@kernel()
def _creep_out(
    solids: Solids, notes: Notes, hulls: Any, rows: Floats, arcs: Floats, need: Any, found: Floats
) -> Any:
    """
    Drive from a start that is too near until the clearance is kept; see `drive`.

    `hulls` are the body and the body drawn in by a depth, `need` the clearance and the depth.
    The distance of the second less the depth is a clearance that is negative in an overlap;
    it may never fall below the highest one reached so far. Returns (FREE, arc length at which
    the clearance is kept) or (BLOCKED, anything), then reported.
    """
    body, drawn_in = hulls
    need_m, depth = need
    care = need_m + depth + CREEP_M
    margin = body.reach_m + body.skin_m + care + BULGE_M
    near, part_end = near_rows(solids, notes, rows, arcs, 0, margin)
    pose = (rows[0, 1], rows[0, 2], rows[0, 3])
    distance, kind, index = stretch_clearance(solids, notes, near, drawn_in, pose, (0.0, 0.0), care)
    top = distance - depth
    _report(found, 0.0, pose, top, kind, index)
    if found[0] < 0.0:  # an overlap: by how much
        found[0] = top
    if distance <= 0.0:
        return BLOCKED, 0.0
    s_m = 0.0
    for i in range(rows.shape[0] - 1):
        if i >= part_end:
            near, part_end = near_rows(solids, notes, rows, arcs, i, margin)
        curvature = rows[i, 4]
        steps = max(math.ceil(abs(arcs[i]) / CREEP_M), 1)
        step = arcs[i] / steps
        for k in range(steps):
            middle = driven(rows[i, 1], rows[i, 2], rows[i, 3], curvature, (k + 0.5) * step)
            end = driven(rows[i, 1], rows[i, 2], rows[i, 3], curvature, (k + 1) * step)
            s_m += abs(step)
            distance, kind, index = stretch_clearance(
                solids, notes, near, drawn_in, middle, (curvature, 0.5 * abs(step)), care
            )
            _report(found, s_m, end, distance - depth, kind, index)
            if distance - depth < top - FALL_M:
                return BLOCKED, 0.0
            _, kind, index = stretch_clearance(solids, notes, near, body, end, (0.0, 0.0), need_m)
            if kind == NOTHING:
                return FREE, s_m
            reached, _, _ = stretch_clearance(solids, notes, near, drawn_in, end, (0.0, 0.0), care)
            top = max(top, reached - depth)
    found[6], found[7] = kind, index
    return BLOCKED, 0.0


@kernel()
def keep_clear(
    solids: Solids,
    notes: Notes,
    hull: Hull,
    rows: Floats,
    arcs: Floats,
    need: float,
    from_m: float,
    found: Floats,
) -> int:
    """Drive from the arc length `from_m` on and keep `need` from everything; see `drive`."""
    n = rows.shape[0]
    s_m, i, part_end = 0.0, 0, 0
    near = (0, 0)
    while i < n - 1:
        if i >= part_end:
            margin = hull.reach_m + hull.skin_m + max(found[0], need) + BULGE_M
            near, part_end = near_rows(solids, notes, rows, arcs, i, margin)
        j, length = _stretch_at(rows, arcs, i, part_end)
        curvature = rows[i, 4]
        if s_m + abs(length) > from_m:
            skipped = math.copysign(max(from_m - s_m, 0.0), length)
            pieces = max(math.ceil(abs(curvature * (length - skipped)) / STRETCH_RAD), 1)
            piece = (length - skipped) / pieces
            for k in range(pieces):
                at = skipped + k * piece
                middle = driven(rows[i, 1], rows[i, 2], rows[i, 3], curvature, at + 0.5 * piece)
                distance, kind, index = stretch_clearance(
                    solids,
                    notes,
                    near,
                    hull,
                    middle,
                    (curvature, 0.5 * abs(piece)),
                    max(found[0], need),
                )
                found[0] = min(found[0], distance)
                if distance < need:
                    first = driven(rows[i, 1], rows[i, 2], rows[i, 3], curvature, at)
                    arc = (curvature, piece)
                    there = _begin_below(solids, notes, near, hull, first, arc, need)
                    pose = driven(first[0], first[1], first[2], curvature, there)
                    _report(found, s_m + abs(at + there), pose, distance, kind, index)
                    return BLOCKED
        s_m += abs(length)
        i = j
    return FREE


@kernel(Solids, Notes, Hull, Hull, "f8", "f8[:, ::1]", "f8[::1]", "f8", "f8[::1]")
def drive(
    solids: Solids,
    notes: Notes,
    body: Hull,
    drawn_in: Hull,
    depth: float,
    rows: Floats,
    arcs: Floats,
    need: float,
    found: Floats,
) -> int:
    """
    Drive a table and keep `need` from everything.

    A start that is nearer is left as `_creep_out` says, if the body drawn in by `depth` is
    free there. `found[0]` says up to where clearances matter and becomes the least one met.
    Returns FREE or BLOCKED; then, or where there is one row only, the rest of `found` tells
    where and by what (see `_report`).
    """
    care = max(found[0], need)
    near, _ = near_rows(solids, notes, rows, arcs, 0, body.reach_m + body.skin_m + care)
    pose = (rows[0, 1], rows[0, 2], rows[0, 3])
    distance, kind, index = stretch_clearance(solids, notes, near, body, pose, (0.0, 0.0), care)
    found[0] = distance
    _report(found, 0.0, pose, distance, kind, index)
    from_m = 0.0
    if distance < need:
        if rows.shape[0] == 1:
            return BLOCKED
        code, from_m = _creep_out(solids, notes, (body, drawn_in), rows, arcs, (need, depth), found)
        if code == BLOCKED:
            return BLOCKED
    return keep_clear(solids, notes, body, rows, arcs, need, from_m, found)
