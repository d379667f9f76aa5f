"""
What stands in the way of a taut string: of its straight pieces and of its arcs.

Everything here errs towards "nothing": an obstacle counts only where it is deeper in the way
than GRAZE_M, and a straight piece that grazes any number of corners is free. So no piece of a
path that keeps its distance is ever refused, and what is refused really is blocked.
"""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.bounds.outgrown import Outgrown
from byway_planning.kernel import kernel

Marks = npt.NDArray[np.uint8]
Wholes = npt.NDArray[np.int64]

#: A string may be so much nearer than the disc's radius: far above rounding (coordinates of
#: kilometres lose 1e-12 m), far below what any length would show.
GRAZE_M: Final = 1e-7

#: Directions this close count as one; see `chase.OFF_ARC`.
SAME_TURN_RAD: Final = 1e-5

#: Marks of obstacles.
UNMET: Final = 0
MET: Final = 1  # the string may bend round its corners
LEFT_OUT: Final = 2

#: Not an obstacle: nothing in the way; the limits of the site.
NOTHING: Final = -1
LIMITS: Final = -2

#: Place in the counts of a chase where the work done is summed up.
WORK: Final = 0


@kernel()
def _column(ground: Outgrown, x: float) -> int:
    return min(max(math.floor((x - ground.x_m_min) / ground.side_m), 0), ground.columns - 1)


@kernel()
def _row(ground: Outgrown, y: float) -> int:
    return min(max(math.floor((y - ground.y_m_min) / ground.side_m), 0), ground.rows - 1)


@kernel()
def _end_near(s0: float, n0: float, s1: float, n1: float, at: float, reach: float) -> bool:
    """Is the point (at, 0) nearer than `reach` to the segment (s0, n0) (s1, n1)?"""
    ds, dn = s1 - s0, n1 - n0
    ps, pn = at - s0, -n0
    square = ds * ds + dn * dn
    share = 0.0
    if square > 0.0:
        share = min(max((ps * ds + pn * dn) / square, 0.0), 1.0)
    ps -= share * ds
    pn -= share * dn
    return bool(ps * ps + pn * pn < reach * reach)


@kernel()
def _item_blocks(
    ground: Outgrown, i: int, x: float, y: float, ux: float, uy: float, length: float, radius: float
) -> bool:
    """Is an item nearer than `radius` (and its own) to the segment from (x, y) along (ux, uy)?"""
    reach = radius + ground.items[i, 4]
    ax, ay = ground.items[i, 0] - x, ground.items[i, 1] - y
    bx, by = ground.items[i, 2] - x, ground.items[i, 3] - y
    na, nb = ux * ay - uy * ax, ux * by - uy * bx
    if (na >= reach and nb >= reach) or (na <= -reach and nb <= -reach):
        return False
    sa, sb = ux * ax + uy * ay, ux * bx + uy * by
    # the part of the item that is near the line
    low, high = 0.0, 1.0
    if na != nb:
        one, two = (-reach - na) / (nb - na), (reach - na) / (nb - na)
        low, high = max(low, min(one, two)), min(high, max(one, two))
    one, two = sa + low * (sb - sa), sa + high * (sb - sa)
    first, last = min(one, two), max(one, two)
    if last <= 0.0:
        return _end_near(sa, na, sb, nb, 0.0, reach)
    if first >= length:
        return _end_near(sa, na, sb, nb, length, reach)
    return True


@kernel()
def blocker(
    ground: Outgrown, marks: Marks, counts: Wholes,
    x0: float, y0: float, x1: float, y1: float, radius: float,
) -> int:  # fmt: skip
    """
    Return an obstacle in the way of a disc along a segment, or NOTHING.

    The first on the way is named, one that is already met where several stand in one bucket.
    """
    dx, dy = x1 - x0, y1 - y0
    length = math.hypot(dx, dy)
    if length == 0.0:
        return NOTHING
    ux, uy = dx / length, dy / length
    reach = radius - GRAZE_M
    c, r = _column(ground, x0), _row(ground, y0)
    c1, r1 = _column(ground, x1), _row(ground, y1)
    cs, rs = (1 if c1 > c else -1), (1 if r1 > r else -1)
    # share of the way to the next border in each direction, and from border to border
    side = ground.side_m
    tc = tr = math.inf
    if c1 != c:
        tc = (ground.x_m_min + (c + (1 if cs > 0 else 0)) * side - x0) / dx
    if r1 != r:
        tr = (ground.y_m_min + (r + (1 if rs > 0 else 0)) * side - y0) / dy
    found = NOTHING
    while True:
        b = r * ground.columns + c
        begin, end = ground.bucket_starts[b], ground.bucket_starts[b + 1]
        counts[WORK] += 1 + end - begin
        for e in range(begin, end):
            i = ground.entries[e]
            if _item_blocks(ground, i, x0, y0, ux, uy, length, reach):
                owner = ground.owners[i]
                if marks[owner] == MET:
                    return int(owner)
                if marks[owner] == UNMET:
                    found = int(owner)
        if found != NOTHING or (c == c1 and r == r1):
            return found
        if (tc <= tr and c != c1) or r == r1:
            c += cs
            tc += abs(side / dx)
        else:
            r += rs
            tr += abs(side / dy)


@kernel()
def turn_between(side: int, ax: float, ay: float, bx: float, by: float) -> float:
    """
    Angle from direction a to direction b in [0, 2 pi), counter-clockwise for side +1.

    What is less than a whole turn by a rounding counts as no turn: it errs to the short side.
    """
    angle = math.atan2(side * (ax * by - ay * bx), ax * bx + ay * by)
    if angle < 0.0:
        angle = 0.0 if angle > -2.0 * SAME_TURN_RAD else angle + 2.0 * math.pi
    return angle


@kernel()
def _nearer_block(
    side: int, from_x: float, from_y: float, to_x: float, to_y: float, best: float
) -> float:
    """The turn to a direction where the arc is blocked, if it comes before `best`."""
    angle = turn_between(side, from_x, from_y, to_x, to_y)
    return angle if 0.0 < angle < best else best


@kernel()
def arc_blocker(
    ground: Outgrown, marks: Marks, counts: Wholes, corner: int, side: int,
    from_x: float, from_y: float, turn: float, radius: float,
) -> tuple[int, float]:  # fmt: skip
    """
    What is in the way of a disc that goes round a corner.

    Looked at are the places where it is nearest to an end or to the inside of an item, and
    where it crosses one; the straight pieces are looked at up to both ends of the arc.

    Args:
        from_x, from_y: Outward normal where the arc begins; it goes `turn` radians to `side`.

    Returns:
        An obstacle (or LIMITS, or NOTHING) and the turn at which it is in the way.
    """
    x, y = ground.corners[corner, 0], ground.corners[corner, 1]
    arc = radius + ground.corners[corner, 2]
    found, best = NOTHING, turn
    for r in range(_row(ground, y - arc), _row(ground, y + arc) + 1):
        for c in range(_column(ground, x - arc), _column(ground, x + arc) + 1):
            b = r * ground.columns + c
            begin, end = ground.bucket_starts[b], ground.bucket_starts[b + 1]
            counts[WORK] += 1 + end - begin
            for e in range(begin, end):
                i = ground.entries[e]
                before = best
                best = _item_on_arc(ground, i, x, y, arc, radius, side, from_x, from_y, best)
                if best < before:
                    if marks[ground.owners[i]] == LEFT_OUT:
                        best = before
                    else:
                        found = int(ground.owners[i])
    edge = radius - GRAZE_M + arc
    before = best
    if x - ground.x_m_min < edge:
        best = _nearer_block(side, from_x, from_y, -1.0, 0.0, best)
    if ground.x_m_max - x < edge:
        best = _nearer_block(side, from_x, from_y, 1.0, 0.0, best)
    if y - ground.y_m_min < edge:
        best = _nearer_block(side, from_x, from_y, 0.0, -1.0, best)
    if ground.y_m_max - y < edge:
        best = _nearer_block(side, from_x, from_y, 0.0, 1.0, best)
    if best < before:
        found = LIMITS
    return found, best


@kernel()
def _item_on_arc(
    ground: Outgrown, i: int, x: float, y: float, arc: float, radius: float,
    side: int, from_x: float, from_y: float, best: float,
) -> float:  # fmt: skip
    """The least turn below `best` at which the arc is at its nearest to an item, and too near."""
    reach = radius - GRAZE_M + ground.items[i, 4]
    ax, ay = ground.items[i, 0] - x, ground.items[i, 1] - y
    bx, by = ground.items[i, 2] - x, ground.items[i, 3] - y
    for end in range(2):
        px, py = (ax, ay) if end == 0 else (bx, by)
        square = px * px + py * py
        if 1e-18 < square < (arc + reach) * (arc + reach):
            if abs(math.sqrt(square) - arc) < reach:
                best = _nearer_block(side, from_x, from_y, px, py, best)
    dx, dy = bx - ax, by - ay
    length = math.hypot(dx, dy)
    if length == 0.0:
        return best
    dx /= length
    dy /= length
    foot = -(ax * dx + ay * dy)  # where on the item's line the middle of the arc is nearest
    px, py = ax + foot * dx, ay + foot * dy
    height = math.hypot(px, py)
    if 0.0 < foot < length and height > 1e-9 and abs(height - arc) < reach:
        best = _nearer_block(side, from_x, from_y, px, py, best)
    if height < arc:
        half = math.sqrt(arc * arc - height * height)
        for way in range(2):
            at = -half if way == 0 else half
            if 0.0 < foot + at < length:
                best = _nearer_block(side, from_x, from_y, px + at * dx, py + at * dy, best)
    return best


@kernel()
def room_at(ground: Outgrown, marks: Marks, x: float, y: float) -> float:
    """
    Distance of a point from the nearest item or limit; what is beyond `radius_m` may be missed.

    Negative inside a disc or a run of cells and outside the limits.
    """
    best = min(x - ground.x_m_min, ground.x_m_max - x, y - ground.y_m_min, ground.y_m_max - y)
    b = _row(ground, y) * ground.columns + _column(ground, x)
    for e in range(ground.bucket_starts[b], ground.bucket_starts[b + 1]):
        i = ground.entries[e]
        if marks[ground.owners[i]] == LEFT_OUT:
            continue
        ax, ay = ground.items[i, 0] - x, ground.items[i, 1] - y
        dx, dy = ground.items[i, 2] - x - ax, ground.items[i, 3] - y - ay
        square = dx * dx + dy * dy
        share = 0.0
        if square > 0.0:
            share = min(max(-(ax * dx + ay * dy) / square, 0.0), 1.0)
        best = min(best, math.hypot(ax + share * dx, ay + share * dy) - ground.items[i, 4])
    return float(best)
