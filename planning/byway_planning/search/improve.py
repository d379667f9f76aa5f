"""
Making a found path shorter, for as long as time is left.

Two moves, tried on random stretches: the shortest curve across the stretch, and two curves by
way of a pose near the path (a pose of the path with noise). The first removes detours, the
second bends the path towards obstacle corners and finds better places to change direction.
Cheap tests come first: straight distance, then the curve's cost, and the sweep last.
"""

import math
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.collision import pose_free
from byway_planning.curves.steer import steer
from byway_planning.curves.word import advance
from byway_planning.dice import Dice, normal, uniform
from byway_planning.kernel import describe, kernel
from byway_planning.motion import segments_free
from byway_planning.search.paths import (
    ELEMENTS_MAX,
    Course,
    append,
    copy_course,
    cost_along,
    element_at,
    new_course,
    pose_along,
    price,
    sum_up,
)
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import CAR, DISC, Body

Floats = npt.NDArray[np.float64]

#: A try must gain at least this much to count.
GAIN_M: Final = 1e-6
VIA_SHARE: Final = 0.7
ANYWHERE_SHARE: Final = 0.35

TRIES: Final = 0
IDLE: Final = 1  # tries since the last gain
GAINS: Final = 2


class Polish(NamedTuple):
    """State of the improvement of one path."""

    course: Course
    spare: Course
    first: Floats  # (5, 2) segments of the curve to the via pose, or of the whole shortcut
    second: Floats  # (5, 2) segments of the curve from the via pose
    marks: npt.NDArray[np.int64]
    dice: Dice


describe(Polish, Course, Course, "f8[:, ::1]", "f8[:, ::1]", "i8[::1]", "u8[::1]")


def new_polish(dice: Dice) -> Polish:
    """Make room for improving one path; load the path into `.course`."""
    return Polish(
        new_course(), new_course(), np.zeros((5, 2)), np.zeros((5, 2)), np.zeros(3, np.int64), dice
    )


@kernel()
def _toward(kind: int, ax: float, ay: float, ah: float, bx: float, by: float) -> float:
    """Heading at the start of the curve from a to b: a disc just looks where it goes."""
    return math.atan2(by - ay, bx - ax) if kind == DISC else ah


@kernel()
def _change_cost(body: Body, before: float, after: float) -> float:
    if body.kind == CAR and (before < 0.0) != (after < 0.0):
        return body.direction_change_m
    return 0.0


@kernel()
def _join(
    body: Body,
    polish: Polish,
    sa: float,
    sb: float,
    ia: int,
    ib: int,
    counts: tuple[int, int],
    a: tuple[float, float, float],
    via: tuple[float, float, float],
    b: tuple[float, float, float],
) -> None:
    """Replace the stretch sa..sb by the curves in `first` and `second`."""
    course, spare = polish.course, polish.spare
    spare.used[0] = 0
    for i in range(ia):
        r = course.rows[i]
        append(spare, r[0], r[1], r[2], r[3], r[4])
    r = course.rows[ia]
    part = sa - course.lengths[ia]
    append(spare, r[0], r[1], r[2], r[3], part if r[4] >= 0.0 else -part)
    turned = 0.0
    for leg in range(2):
        segments = polish.first if leg == 0 else polish.second
        x, y, h = a if leg == 0 else via
        if leg == 1 and body.kind != DISC:
            h = a[2] + turned  # keep the heading continuous
        if body.kind == DISC:
            ex, ey, _ = via if leg == 0 and counts[1] > 0 else b
            h = _toward(DISC, x, y, h, ex, ey)
        for i in range(counts[leg]):
            append(spare, x, y, h, segments[i, 0], segments[i, 1])
            turned += segments[i, 0] * segments[i, 1]
            x, y, h = advance(x, y, h, segments[i, 0], segments[i, 1])
    # Headings behind the stretch may differ by whole turns from what the new curves end with.
    full = 0.0
    if body.kind != DISC:
        full = 2.0 * math.pi * math.floor((a[2] + turned - b[2]) / (2.0 * math.pi) + 0.5)
    r = course.rows[ib]
    rest = course.lengths[ib + 1] - sb
    append(spare, b[0], b[1], b[2] + full, r[3], rest if r[4] >= 0.0 else -rest)
    for i in range(ib + 1, course.used[0]):
        r = course.rows[i]
        append(spare, r[0], r[1], r[2] + (full if body.kind != DISC else 0.0), r[3], r[4])
    sum_up(body, spare)
    copy_course(spare, course)


@kernel()
def _stretch(body: Body, course: Course, dice: Dice) -> tuple[float, float]:
    """Draw a stretch of the path."""
    total = course.lengths[course.used[0]]
    if uniform(dice) < ANYWHERE_SHARE:
        u, v = uniform(dice) * total, uniform(dice) * total
        sa, sb = min(u, v), max(u, v)
    else:
        longest = 8.0 * body.turn_radius_m + 10.0
        span = 0.5 * math.exp(uniform(dice) * math.log(longest / 0.5))
        sa = uniform(dice) * total - span / 2
        sb = sa + span
    clip = uniform(dice)
    if clip < 0.05:
        sb -= sa
        sa = 0.0
    elif clip > 0.95:
        sa += total - sb
        sb = total
    return max(sa, 0.0), min(sb, total)


@kernel()
def _try_once(scene: Scene, body: Body, polish: Polish) -> bool:
    course, dice = polish.course, polish.dice
    sa, sb = _stretch(body, course, dice)
    if sb - sa < 0.05:
        return False
    ia, ib = element_at(course, sa), element_at(course, sb)
    before = cost_along(body, course, ib, sb) - cost_along(body, course, ia, sa)
    ax, ay, ah = pose_along(course, ia, sa)
    bx, by, bh = pose_along(course, ib, sb)
    if math.hypot(bx - ax, by - ay) >= before - GAIN_M:
        return False
    vx, vy, vh = bx, by, bh
    n1 = n2 = 0
    radius, factor, change = body.turn_radius_m, body.reverse_factor, body.direction_change_m
    if uniform(dice) < VIA_SHARE:
        sv = sa + (0.15 + 0.7 * uniform(dice)) * (sb - sa)
        vx, vy, vh = pose_along(course, element_at(course, sv), sv)
        sigma = 0.01 * math.exp(uniform(dice) * math.log(100.0))
        vx += sigma * normal(dice)
        vy += sigma * normal(dice)
        vh += 0.4 * sigma * normal(dice)
        if math.hypot(vx - ax, vy - ay) + math.hypot(bx - vx, by - vy) >= before - GAIN_M:
            return False
        n1, _, c1 = steer(body.kind, radius, factor, change, ax, ay, ah, vx, vy, vh, polish.first)
        if c1 + math.hypot(bx - vx, by - vy) >= before - GAIN_M:
            return False
        n2, _, c2 = steer(body.kind, radius, factor, change, vx, vy, vh, bx, by, bh, polish.second)
        cost = c1 + c2
        if n1 > 0 and n2 > 0:
            cost += _change_cost(body, polish.first[n1 - 1, 1], polish.second[0, 1])
    else:
        n1, _, cost = steer(body.kind, radius, factor, change, ax, ay, ah, bx, by, bh, polish.first)
    if n1 == 0 and n2 == 0:
        return False
    first = polish.first[0, 1] if n1 > 0 else polish.second[0, 1]
    last = polish.second[n2 - 1, 1] if n2 > 0 else polish.first[n1 - 1, 1]
    if sa > 0.0:
        cost += _change_cost(body, course.rows[ia, 4], first)
    if sb < course.lengths[course.used[0]]:
        cost += _change_cost(body, last, course.rows[ib, 4])
    if cost >= before - GAIN_M or course.used[0] + 12 > ELEMENTS_MAX:
        return False
    if n2 > 0 and not pose_free(scene, body, vx, vy, vh):
        return False
    h1 = _toward(body.kind, ax, ay, ah, vx, vy)
    if not segments_free(scene, body, ax, ay, h1, polish.first, n1):
        return False
    h2 = _toward(body.kind, vx, vy, vh, bx, by)
    if n2 > 0 and not segments_free(scene, body, vx, vy, h2, polish.second, n2):
        return False
    _join(body, polish, sa, sb, ia, ib, (n1, n2), (ax, ay, ah), (vx, vy, vh), (bx, by, bh))
    return True


@kernel(Scene, Body, Polish, "i8", "i8")
def improve_kernel(scene: Scene, body: Body, polish: Polish, tries: int, idle_max: int) -> int:
    """
    Try to shorten the path, at most so often.

    Args:
        idle_max: Stop after so many tries without a gain (counted over calls).

    Returns:
        How many tries were made.
    """
    marks = polish.marks
    done = 0
    while done < tries and marks[IDLE] < idle_max:
        done += 1
        marks[TRIES] += 1
        if _try_once(scene, body, polish):
            marks[IDLE] = 0
            marks[GAINS] += 1
        else:
            marks[IDLE] += 1
    return done


__all__ = ["GAINS", "IDLE", "TRIES", "Polish", "improve_kernel", "new_polish", "price"]
