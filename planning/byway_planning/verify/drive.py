"""
The body's clearance along a whole table, and at a single pose.

Rows that lie on one arc are joined into stretches of at most STRETCH_M and STRETCH_RAD. What is
near is chosen by boxes: once for every PART_M of the way, then for each stretch.
"""

from typing import Any, Final

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel
from byway_planning.site.solids import Solids
from byway_planning.verify.body import Hull, Notes
from byway_planning.verify.geometry import BEND_PER_M_MIN, driven, turned
from byway_planning.verify.motion import NOTHING, note_near, stretch_clearance

Floats = npt.NDArray[np.float64]

STRETCH_M: Final = 2.0
STRETCH_RAD: Final = 1.0  # the wedge test of arcs needs less than pi
PART_M: Final = 12.0
SAME_ARC: Final = 1e-8  # m and rad: rows closer than this to an arc lie on it
PLACE_M: Final = 1e-3  # how closely the place of a fault is told
CREEP_M: Final = 5e-3  # steps out of an overlap; its running maximum is taken at these
FALL_M: Final = 1e-6  # by so much may the clearance fall on the way out
BULGE_M: Final = 0.3  # arcs between rows leave the box of the rows by less

FREE: Final = 0
BLOCKED: Final = 1
START_NEAR: Final = 2


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
            solids, notes, near, hull, middle, (curvature, abs(half)), need, False
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


@kernel(Solids, Notes, Hull, "f8", "f8", "f8", "f8", "f8[::1]")
def pose_clearance(
    solids: Solids,
    notes: Notes,
    hull: Hull,
    x: float,
    y: float,
    heading: float,
    care: float,
    found: Floats,
) -> None:
    """Report (see `_report`) what is nearest to the body at a pose, if nearer than `care`."""
    margin = hull.reach_m + hull.skin_m + care
    near = note_near(solids, notes, (x - margin, y - margin, x + margin, y + margin))
    pose = (x, y, heading)
    distance, kind, index = stretch_clearance(
        solids, notes, near, hull, pose, (0.0, 0.0), care, True
    )
    _report(found, 0.0, pose, distance, kind, index)
    found[0] = distance


@kernel(Solids, Notes, Hull, "f8[:, ::1]", "f8[::1]", "f8", "f8", "f8[::1]")
def drive(
    solids: Solids,
    notes: Notes,
    hull: Hull,
    rows: Floats,
    arcs: Floats,
    need: float,
    from_m: float,
    found: Floats,
) -> int:
    """
    Drive a table from the arc length `from_m` on, and keep `need` from everything.

    `found[0]` says up to where clearances matter and becomes the least one met. Returns FREE,
    START_NEAR (nearer than `need` already where it begins) or BLOCKED; then the rest of
    `found` tells where and by what.
    """
    n = rows.shape[0]
    s_m, i, part_end = 0.0, 0, 0
    near = (0, 0)
    begun = False
    while i < n - 1 or not begun:
        if i >= part_end:
            margin = hull.reach_m + hull.skin_m + max(found[0], need) + BULGE_M
            part_end, box = _part_box(rows, arcs, i, margin)
            near = note_near(solids, notes, box)
        curvature = rows[i, 4]
        j, length = i + 1, 0.0
        if i < n - 1:
            j, length = _stretch_at(rows, arcs, i, part_end)
        if i < n - 1 and s_m + abs(length) < from_m:
            s_m += abs(length)
            i = j
            continue
        skipped = min(max(from_m - s_m, 0.0), abs(length))
        if length < 0.0:
            skipped = -skipped
        first = driven(rows[i, 1], rows[i, 2], rows[i, 3], curvature, skipped)
        if not begun:
            begun = True
            distance, kind, index = stretch_clearance(
                solids, notes, near, hull, first, (0.0, 0.0), max(found[0], need), True
            )
            found[0] = min(found[0], distance)
            if distance < need:
                _report(found, s_m + abs(skipped), first, distance, kind, index)
                return START_NEAR
        half = 0.5 * (length - skipped)
        middle = driven(first[0], first[1], first[2], curvature, half)
        arc = (curvature, abs(half))
        distance, kind, index = stretch_clearance(
            solids, notes, near, hull, middle, arc, max(found[0], need), False
        )
        found[0] = min(found[0], distance)
        if distance < need:
            arc = (curvature, length - skipped)
            there = _begin_below(solids, notes, near, hull, first, arc, need)
            pose = driven(first[0], first[1], first[2], curvature, there)
            _report(found, s_m + abs(skipped + there), pose, distance, kind, index)
            return BLOCKED
        s_m += abs(length)
        i = j
    return FREE


@kernel(Solids, Notes, Hull, Hull, "f8[:, ::1]", "f8[::1]", "f8", "f8", "f8[::1]")
def creep_out(
    solids: Solids,
    notes: Notes,
    hull: Hull,
    drawn_in: Hull,
    rows: Floats,
    arcs: Floats,
    need: float,
    depth: float,
    found: Floats,
) -> int:
    """
    Drive a table from a start nearer than `need`, until `need` is reached.

    `drawn_in` is the body drawn in by `depth`; its distance less `depth` is the clearance,
    negative in an overlap, and may never fall below the highest one reached so far. Returns
    FREE, with `found[0]` the least clearance and `found[1]` the arc length at which `need` is
    kept, or BLOCKED, reported as by `drive`.
    """
    care = need + depth + CREEP_M
    x, y, heading = rows[0, 1], rows[0, 2], rows[0, 3]
    margin = hull.reach_m + hull.skin_m + care + PART_M
    near = note_near(solids, notes, (x - margin, y - margin, x + margin, y + margin))
    pose = (x, y, heading)
    distance, kind, index = stretch_clearance(
        solids, notes, near, drawn_in, pose, (0.0, 0.0), care, True
    )
    top = distance - depth
    found[0] = top
    if distance <= 0.0:
        _report(found, 0.0, pose, top, kind, index)
        return BLOCKED
    s_m = 0.0
    for i in range(rows.shape[0] - 1):
        if abs(rows[i, 1] - x) + abs(rows[i, 2] - y) > PART_M - BULGE_M:
            x, y = rows[i, 1], rows[i, 2]
            near = note_near(solids, notes, (x - margin, y - margin, x + margin, y + margin))
        curvature = rows[i, 4]
        steps = max(int(np.ceil(abs(arcs[i]) / CREEP_M)), 1)
        step = arcs[i] / steps
        for k in range(steps):
            middle = driven(rows[i, 1], rows[i, 2], rows[i, 3], curvature, (k + 0.5) * step)
            end = driven(rows[i, 1], rows[i, 2], rows[i, 3], curvature, (k + 1) * step)
            s_m += abs(step)
            distance, kind, index = stretch_clearance(
                solids, notes, near, drawn_in, middle, (curvature, 0.5 * abs(step)), care, False
            )
            if distance - depth < top - FALL_M:
                _report(found, s_m, end, distance - depth, kind, index)
                return BLOCKED
            distance, kind, index = stretch_clearance(
                solids, notes, near, hull, end, (0.0, 0.0), need, True
            )
            if kind == NOTHING:
                found[1] = s_m
                return FREE
            reached, _, _ = stretch_clearance(
                solids, notes, near, drawn_in, end, (0.0, 0.0), care, False
            )
            top = max(top, reached - depth)
    _report(found, s_m, (rows[-1, 1], rows[-1, 2], rows[-1, 3]), top, kind, index)
    return BLOCKED
