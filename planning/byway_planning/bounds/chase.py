"""
The shortest way of a disc among outgrown obstacles: A* over tangents, obstacles met on demand.

The shortest path of a disc's middle is a taut string round the obstacles grown by its radius:
straight pieces tangent to circles around corners, and arcs of these circles. A *bend* is a
place where the string arrives at such a circle, on one side of it; a *hope* is a tangent from a
bend to another circle, or to the goal, that nobody has looked at yet. A* (Hart, Nilsson and
Raphael 1968) takes the hope with the least length so far plus straight distance to the goal and
only then looks whether an obstacle is in its way. If one is that was not met before, its
corners are met now: hopes from all bends to them are added. The search begins knowing no
obstacle at all, and most are never met.

Why the least key among the hopes is a lower bound at every moment. Take the world in which only
the obstacles met so far exist. Its shortest path is no longer than that of the real world. Go
along that path: up to some bend it is covered by bends that were accepted (the same circle and
side, arriving no later on the arc, at no greater length, the arc between being free), and its
next tangent is a hope, for hopes to all circles met are made for all bends; it was not refused,
for tangents and arcs are only refused when an obstacle that is met is in the way. The key of
that hope is at most the length of the path, since the straight distance never overestimates.
So the bound holds when the search is stopped early, it may fall when an obstacle is met (the
greatest value seen counts), and when the goal is reached it is the exact length. All tolerances
admit more tangents than there are.
"""

import math
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.bounds.outgrown import Outgrown
from byway_planning.bounds.sight import (
    GRAZE_M,
    LIMITS,
    MET,
    NOTHING,
    SAME_TURN_RAD,
    UNMET,
    WORK,
    arc_blocker,
    blocker,
    turn_between,
)
from byway_planning.kernel import describe, kernel
from byway_planning.search.heap import pop, push

Floats = npt.NDArray[np.float64]
Whole4 = npt.NDArray[np.int32]

#: Places in `Chase.counts`, after WORK.
BENDS: Final = 1
CORNERS: Final = 2  # corners met
HEAP: Final = 3
HOPES: Final = 4
ROOM_FOR: Final = 5  # hopes that must fit before the search can go on

#: Places in a row of `Chase.bends`: outward normal where the string arrives, length so far, how
#: far along the arc is known to be free, and where it is known to be blocked.
NX: Final = 0
NY: Final = 1
LENGTH: Final = 2
FREE_RAD: Final = 3
BLOCKED_RAD: Final = 4

#: States of a chase.
GOING: Final = 0
ARRIVED: Final = 1
NO_WAY: Final = 2
CRAMPED: Final = 3  # more room is needed: see ROOM_FOR, and twice the bends

#: Tangents this far off the arc of a corner count. Where two circles just touch, the direction
#: between them is only known to the square root of the rounding of their distance.
OFF_ARC: Final = SAME_TURN_RAD
#: A bend that is this much shorter than another in the same place does not count as better.
SAME_M: Final = 1e-12
#: Work of taking one hope, in pairs of circles tried.
HOPE_WORK: Final = 8


class Ends(NamedTuple):
    """What is asked: a disc's radius, and where its middle starts and ends."""

    radius_m: float
    start_x_m: float
    start_y_m: float
    goal_x_m: float
    goal_y_m: float


class Chase(NamedTuple):
    """All state of one search, in arrays that outlast its slices."""

    counts: npt.NDArray[np.int64]  # (6,)
    proven: Floats  # (1,): the greatest lower bound seen
    marks: npt.NDArray[np.uint8]  # (obstacles,): UNMET, MET or LEFT_OUT
    met: Whole4  # (corners,): those of the obstacles met
    last_bend: Whole4  # (2 * corners,): newest bend at a corner and side, -1: none
    bend_at: Whole4  # (bends,): 2 * corner + side; -1: the start
    bend_before: Whole4  # (bends,): the bend before at the same corner and side
    bends: Floats  # (bends, 5)
    keys: Floats  # heap
    values: Whole4
    hope_from: Whole4  # a bend
    hope_to: Whole4  # 2 * corner + side; GOAL
    hope_length: Floats  # on arrival


GOAL: Final = -1

describe(Ends, "f8", "f8", "f8", "f8", "f8")
describe(
    Chase,
    *("i8[::1]", "f8[::1]", "u1[::1]", "i4[::1]", "i4[::1]", "i4[::1]", "i4[::1]"),
    *("f8[:, ::1]", "f8[::1]", "i4[::1]", "i4[::1]", "i4[::1]", "f8[::1]"),
)


@kernel()
def _circle(ground: Outgrown, ends: Ends, at: int) -> tuple[float, float, float, int]:
    """Middle, radius and side (+1 counter-clockwise) of where a hope goes; a point for the goal."""
    if at == GOAL:
        return ends.goal_x_m, ends.goal_y_m, 0.0, 1
    corner = at >> 1
    return (
        ground.corners[corner, 0],
        ground.corners[corner, 1],
        ends.radius_m + ground.corners[corner, 2],
        1 if at & 1 else -1,
    )


@kernel()
def _tangent(
    x0: float, y0: float, w0: float, x1: float, y1: float, w1: float
) -> tuple[float, float, float]:
    """
    Direction and length of the line that passes two circles.

    Args:
        w0, w1: Their radii, positive where the line leaves the circle on its left.

    Returns:
        Unit direction and length; length -1 where there is none.
    """
    vx, vy = x1 - x0, y1 - y0
    square = vx * vx + vy * vy
    across = w0 - w1
    apart = abs(across) - GRAZE_M
    if square < 1e-18 or (apart > 0.0 and square <= apart * apart):
        return 0.0, 0.0, -1.0
    # circles that touch, in a gap just as wide as the disc, are passed between as well
    length = math.sqrt(max(square - across * across, 0.0))
    return (length * vx - across * vy) / square, (length * vy + across * vx) / square, length


@kernel()
def _on_arc(ground: Outgrown, corner: int, nx: float, ny: float) -> bool:
    """Does an outward normal belong to the arc of a corner?"""
    ax, ay = ground.corners[corner, 3], ground.corners[corner, 4]
    bx, by = ground.corners[corner, 5], ground.corners[corner, 6]
    return bool(
        ax * ny - ay * nx >= -OFF_ARC
        and nx * by - ny * bx >= -OFF_ARC
        and nx * (ax + bx) + ny * (ay + by) >= -OFF_ARC
    )


@kernel()
def _hope(ground: Outgrown, ends: Ends, chase: Chase, bend: int, to: int) -> None:
    """Add the tangent from a bend to a circle and side, or to the goal, if there is one."""
    x1, y1, r1, side1 = _circle(ground, ends, to)
    at = chase.bend_at[bend]
    x0, y0, r0, side0 = ends.start_x_m, ends.start_y_m, 0.0, 1
    if at >= 0:
        x0, y0, r0, side0 = _circle(ground, ends, at)
    dx, dy, straight = _tangent(x0, y0, side0 * r0, x1, y1, side1 * r1)
    if straight < 0.0:
        return
    n1x, n1y = side1 * dy, -side1 * dx
    if to >= 0 and not _on_arc(ground, to >> 1, n1x, n1y):
        return
    length = chase.bends[bend, LENGTH] + straight
    if at >= 0:
        n0x, n0y = side0 * dy, -side0 * dx
        corner = at >> 1
        if not _on_arc(ground, corner, n0x, n0y):
            return
        bx, by = chase.bends[bend, NX], chase.bends[bend, NY]
        all_round = ground.corners[corner, 3] == 0.0 and ground.corners[corner, 4] == 0.0
        if not all_round and side0 * (bx * n0y - by * n0x) < -OFF_ARC:
            return  # behind the place of arrival
        turn = turn_between(side0, bx, by, n0x, n0y)
        if turn >= chase.bends[bend, BLOCKED_RAD]:
            return
        length += r0 * turn
    x1 += r1 * n1x
    y1 += r1 * n1y
    if (
        x1 - ground.x_m_min < ends.radius_m - GRAZE_M
        or ground.x_m_max - x1 < ends.radius_m - GRAZE_M
        or y1 - ground.y_m_min < ends.radius_m - GRAZE_M
        or ground.y_m_max - y1 < ends.radius_m - GRAZE_M
    ):
        return
    n = chase.counts[HOPES]
    chase.hope_from[n] = bend
    chase.hope_to[n] = to
    chase.hope_length[n] = length
    chase.counts[HOPES] = n + 1
    key = length + math.hypot(ends.goal_x_m - x1, ends.goal_y_m - y1)
    chase.counts[HEAP] = push(chase.keys, chase.values, chase.counts[HEAP], key, n)


@kernel()
def _meet(ground: Outgrown, ends: Ends, chase: Chase, obstacle: int) -> None:
    """From now on strings may bend round an obstacle."""
    chase.marks[obstacle] = MET
    for corner in range(ground.corner_starts[obstacle], ground.corner_starts[obstacle + 1]):
        chase.met[chase.counts[CORNERS]] = corner
        chase.counts[CORNERS] += 1
        chase.counts[WORK] += 2 * chase.counts[BENDS]
        for bend in range(chase.counts[BENDS]):
            _hope(ground, ends, chase, bend, 2 * corner)
            _hope(ground, ends, chase, bend, 2 * corner + 1)


@kernel()
def _bend(
    ground: Outgrown, ends: Ends, chase: Chase, at: int, nx: float, ny: float, length: float
) -> None:
    """Accept a bend and add its hopes."""
    bend = chase.counts[BENDS]
    chase.counts[BENDS] = bend + 1
    chase.bend_at[bend] = at
    chase.bends[bend, NX], chase.bends[bend, NY] = nx, ny
    chase.bends[bend, LENGTH] = length
    chase.bends[bend, FREE_RAD] = 0.0
    chase.bends[bend, BLOCKED_RAD] = math.inf
    if at >= 0:
        chase.bend_before[bend] = chase.last_bend[at]
        chase.last_bend[at] = bend
    _hope(ground, ends, chase, bend, GOAL)
    corners = chase.counts[CORNERS]
    chase.counts[WORK] += 2 * corners
    for i in range(corners):
        _hope(ground, ends, chase, bend, 2 * chase.met[i])
        _hope(ground, ends, chase, bend, 2 * chase.met[i] + 1)


@kernel()
def _arc_is_free(ground: Outgrown, ends: Ends, chase: Chase, bend: int, turn: float) -> int:
    """Look at the arc from a bend on; return what is in the way, or NOTHING."""
    if turn <= chase.bends[bend, FREE_RAD]:
        return NOTHING
    if turn >= chase.bends[bend, BLOCKED_RAD]:
        return LIMITS  # whatever it was, it is met
    at = chase.bend_at[bend]
    found, where = arc_blocker(
        ground, chase.marks, chase.counts, at >> 1, 1 if at & 1 else -1,
        chase.bends[bend, NX], chase.bends[bend, NY], turn, ends.radius_m,
    )  # fmt: skip
    if found == NOTHING:
        chase.bends[bend, FREE_RAD] = turn
    elif found == LIMITS or chase.marks[found] == MET:
        chase.bends[bend, BLOCKED_RAD] = where
    return int(found)


@kernel()
def _is_covered(
    ground: Outgrown, ends: Ends, chase: Chase, at: int, nx: float, ny: float, length: float
) -> bool:
    """Is there a bend from which all is reached that could be reached from here, no longer?"""
    side = 1 if at & 1 else -1
    corner = at >> 1
    radius = ends.radius_m + ground.corners[corner, 2]
    all_round = ground.corners[corner, 3] == 0.0 and ground.corners[corner, 4] == 0.0
    bend = chase.last_bend[at]
    while bend >= 0:
        bx, by = chase.bends[bend, NX], chase.bends[bend, NY]
        # half of what `_hope` allows: no departure may fall between the two
        if all_round or side * (bx * ny - by * nx) >= -0.5 * OFF_ARC:
            turn = turn_between(side, bx, by, nx, ny)
            if chase.bends[bend, LENGTH] + radius * turn <= length + SAME_M:
                if _arc_is_free(ground, ends, chase, bend, turn) == NOTHING:
                    return True
        bend = chase.bend_before[bend]
    return False


@kernel()
def _look(ground: Outgrown, ends: Ends, chase: Chase, hope: int) -> tuple[int, float, float]:
    """
    Look along a hope: its arc, then its straight piece.

    Returns:
        What is in the way, or NOTHING; and the normal where it arrives.
    """
    bend, to = chase.hope_from[hope], chase.hope_to[hope]
    x1, y1, r1, side1 = _circle(ground, ends, to)
    at = chase.bend_at[bend]
    x0, y0, r0, side0 = ends.start_x_m, ends.start_y_m, 0.0, 1
    if at >= 0:
        x0, y0, r0, side0 = _circle(ground, ends, at)
    dx, dy, _ = _tangent(x0, y0, side0 * r0, x1, y1, side1 * r1)
    n0x, n0y = side0 * dy, -side0 * dx
    n1x, n1y = side1 * dy, -side1 * dx
    if to >= 0 and _is_covered(ground, ends, chase, to, n1x, n1y, chase.hope_length[hope]):
        return LIMITS, n1x, n1y
    if at >= 0:
        turn = turn_between(side0, chase.bends[bend, NX], chase.bends[bend, NY], n0x, n0y)
        found = _arc_is_free(ground, ends, chase, bend, turn)
        if found != NOTHING:
            return found, n1x, n1y
    found = blocker(
        ground, chase.marks, chase.counts,
        x0 + r0 * n0x, y0 + r0 * n0y, x1 + r1 * n1x, y1 + r1 * n1y, ends.radius_m,
    )  # fmt: skip
    return found, n1x, n1y


@kernel(Outgrown, Ends, Chase, "i8")
def chase_kernel(ground: Outgrown, ends: Ends, chase: Chase, work_until: int) -> int:
    """
    Go on with a search until `work_until` units of work are done in all.

    One unit is a pair of circles tried, or an item looked at: about 10 ns.

    Returns:
        GOING, ARRIVED (then the bound is the exact length), NO_WAY, or CRAMPED.
    """
    counts = chase.counts
    if counts[BENDS] == 0:
        _bend(ground, ends, chase, -1, 0.0, 0.0, 0.0)
    while counts[HEAP] > 0:
        key, hope = chase.keys[0], chase.values[0]
        chase.proven[0] = max(chase.proven[0], key)
        if counts[WORK] >= work_until:
            return GOING
        room = min(chase.hope_length.shape[0] - counts[HOPES], chase.keys.shape[0] - counts[HEAP])
        if counts[BENDS] == chase.bend_at.shape[0] or room <= 2 * counts[CORNERS]:
            counts[ROOM_FOR] = 2 * counts[CORNERS] + 1
            return CRAMPED
        counts[WORK] += HOPE_WORK
        found, nx, ny = _look(ground, ends, chase, hope)
        if found >= 0 and chase.marks[found] == UNMET:
            corners = ground.corner_starts[found + 1] - ground.corner_starts[found]
            counts[ROOM_FOR] = 2 * corners * counts[BENDS]
            if room < counts[ROOM_FOR]:
                return CRAMPED
        to = chase.hope_to[hope]
        if found == NOTHING and to == GOAL:
            return ARRIVED
        counts[HEAP] = pop(chase.keys, chase.values, counts[HEAP])
        if found == NOTHING:
            _bend(ground, ends, chase, to, nx, ny, chase.hope_length[hope])
        elif found >= 0 and chase.marks[found] == UNMET:
            _meet(ground, ends, chase, found)
    chase.proven[0] = math.inf
    return NO_WAY
