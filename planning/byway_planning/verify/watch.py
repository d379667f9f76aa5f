"""
The clearance along a table part by part, for routes that are looked at again and again.

A part is a stretch of rows of some metres. Its answer holds until something changes near it, or
the vehicle has passed the place that it names.
"""

from typing import Any, Final

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel
from byway_planning.site.solids import Solids
from byway_planning.verify.body import Hull, Notes
from byway_planning.verify.drive import BLOCKED, FREE, keep_clear, near_rows
from byway_planning.verify.geometry import driven
from byway_planning.verify.motion import stretch_clearance

Floats = npt.NDArray[np.float64]
Wholes = npt.NDArray[np.int64]
Flags = npt.NDArray[np.uint8]

#: Columns of an answer: FREE or BLOCKED, then what `drive` reports: least clearance, place along
#: the route, pose there, distance, kind, index.
ANSWER: Final = 9
CODE: Final = 0
PLACE: Final = 2
#: A place that was passed by less than this is still ahead: it is told as closely.
PASSED_M: Final = 2e-3


@kernel()
def _is_near(box: Floats, changed: Floats) -> bool:
    for i in range(changed.shape[0]):
        if changed[i, 0] <= box[2] and changed[i, 2] >= box[0]:
            if changed[i, 1] <= box[3] and changed[i, 3] >= box[1]:
                return True
    return False


@kernel()
def _pose_at(rows: Floats, arcs: Floats, along: Floats, first: int, last: int, at: float) -> Any:
    """The pose at a place between two rows."""
    i = first
    while i < last - 1 and along[i + 1] <= at:
        i += 1
    into = at - along[i]
    length = into if arcs[i] >= 0.0 else -into
    return driven(rows[i, 1], rows[i, 2], rows[i, 3], rows[i, 4], length)


@kernel()
def _look(
    solids: Solids,
    notes: Notes,
    hull: Hull,
    rows: Floats,
    arcs: Floats,
    along: Floats,
    part: Any,
    need: float,
    answer: Floats,
) -> None:
    """Check one part, (first row, last row, from where along the route), and write the answer."""
    first, last, begin = part
    found = answer[1:]
    near, _ = near_rows(solids, notes, rows, arcs, first, hull.reach_m + hull.skin_m + need)
    pose = _pose_at(rows, arcs, along, first, last, begin)
    distance, kind, index = stretch_clearance(solids, notes, near, hull, pose, (0.0, 0.0), need)
    found[0] = need
    if distance < need:
        found[0], found[1], found[5], found[6], found[7] = distance, begin, distance, kind, index
        found[2], found[3], found[4] = pose
        answer[CODE] = BLOCKED
        return
    inside = rows[first : last + 1]
    skip = begin - along[first]
    answer[CODE] = keep_clear(solids, notes, hull, inside, arcs[first:last], need, skip, found)
    if answer[CODE] == BLOCKED:
        found[1] += along[first]


@kernel(
    *(Solids, Notes, Hull, Hull, "f8[:, ::1]", "f8[::1]", "f8[::1]", "i8[::1]"),
    *("rf8[:, ::1]", "u1[::1]", "f8[:, ::1]", "f8[::1]", "f8[:, ::1]"),
)
def watch_kernel(
    solids: Solids,
    notes: Notes,
    hull: Hull,
    lenient: Hull,
    rows: Floats,
    arcs: Floats,
    along: Floats,
    parts: Wholes,
    boxes: Floats,
    due: Flags,
    changed: Floats,
    settings: Floats,
    answers: Floats,
) -> int:
    """
    Look at what is ahead and may be another than it was.

    Args:
        hull: The body. lenient: the body drawn in, for the way out of a start that is too near.
        rows: The table; arcs: signed lengths between its rows; along: their running sum.
        parts: Row at which each part begins, and the last row.
        boxes: (parts, 4) around all that the body comes near to in each part.
        due: Parts whose answers do not count; kept up to date here.
        changed: (n, 4) boxes around what has changed.
        settings: Where along the route the vehicle is, clearance to be kept, where the way out
            of the start ends, clearance to be kept on that.
        answers: (parts, ANSWER), kept up to date here.

    Returns:
        The first part that is blocked ahead of the vehicle, or -1.
    """
    from_m, need, out_m, lenient_need = settings[0], settings[1], settings[2], settings[3]
    count = parts.shape[0] - 1
    for p in range(count):
        if due[p] == 0 and _is_near(boxes[p], changed):
            due[p] = 1
    for p in range(count):
        first, last = int(parts[p]), int(parts[p + 1])
        if along[last] <= from_m and p < count - 1:
            continue
        if answers[p, CODE] == BLOCKED and answers[p, PLACE] < from_m - PASSED_M:
            due[p] = 1
        if due[p] == 1:
            part = (first, last, min(max(from_m, along[first]), along[last]))
            if along[last] <= out_m:
                _look(solids, notes, lenient, rows, arcs, along, part, lenient_need, answers[p])
            else:
                _look(solids, notes, hull, rows, arcs, along, part, need, answers[p])
            due[p] = 0
        if answers[p, CODE] == BLOCKED:
            return p
    return -1


__all__ = ["ANSWER", "CODE", "FREE", "watch_kernel"]
