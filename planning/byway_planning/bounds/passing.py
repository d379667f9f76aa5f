"""
What every route must do at least, told of a vehicle alone: curves, and discs that pass with it.

A disc that lies inside the body goes with it, and as the body keeps its clearance, the middle
of the disc keeps radius + clearance from every obstacle. The disc around the vehicle's origin
measures the length of the route itself. Where the origin lies near the rear of the body that
disc is small, so a second one, as large as any inside the body and as near to the origin as
such a disc can be, tells more of gaps that the body does not fit through. Its middle, at (x, y)
in the vehicle's frame, moves sqrt((1 - k y)^2 + (k x)^2) times as fast as the origin in a curve
of curvature k; as |k| is at most 1 / R, the route is no shorter than its way divided by the
greatest such factor (the *stretch*).
"""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.curves.steer import steer
from byway_planning.kernel import kernel
from byway_planning.vehicles.body import CAR, DISC, FORWARD_CAR, Body

Floats = npt.NDArray[np.float64]

#: The exact check of a route lets it come so much nearer than its clearance.
CHECKED_M: Final = 1e-6
#: The second disc has this share of the largest radius: all but what rounding may have cost.
LARGEST: Final = 0.999
#: It is looked at when it is so much larger than the first; else it tells nothing new.
LARGER_M: Final = 0.02


@kernel()
def _depth(body: Body, x: float, y: float) -> float:
    """Distance of a point from the edge of the body; negative outside."""
    outline = body.outline_m
    n = outline.shape[0]
    if n < 3:
        return float(body.skin_m - math.hypot(outline[0, 0] - x, outline[0, 1] - y))
    best = math.inf
    inside = False
    before = n - 1
    for i in range(n):
        ax, ay = outline[before, 0] - x, outline[before, 1] - y
        bx, by = outline[i, 0] - x, outline[i, 1] - y
        dx, dy = bx - ax, by - ay
        share = min(max(-(ax * dx + ay * dy) / (dx * dx + dy * dy), 0.0), 1.0)
        best = min(best, math.hypot(ax + share * dx, ay + share * dy))
        if (ay > 0.0) != (by > 0.0) and (ax * by - bx * ay > 0.0) == (by > ay):
            inside = not inside
        before = i
    # the radius that the body states may be a trifle too small; nothing here is above it
    return float(min((best if inside else -best) + body.skin_m, body.inner_radius_m))


@kernel(Body, "f8[:, ::1]")
def passing_kernel(body: Body, out: Floats) -> int:
    """
    Discs inside the body.

    Args:
        out: (2, 4) receives x, y, radius, stretch.

    Returns:
        How many there are, 1 or 2. The first is around the origin; its radius is negative
        where the origin lies outside the body.
    """
    out[0, 0] = out[0, 1] = 0.0
    out[0, 2], out[0, 3] = _depth(body, 0.0, 0.0), 1.0
    if body.kind == DISC or body.inner_radius_m <= out[0, 2] + LARGER_M:
        return 1
    # The least step from the origin towards the largest disc that brings nearly its radius. Any
    # point would do, as its own depth is taken: that the depth grows on the way is only likely.
    low, high = 0.0, 1.0
    for _ in range(30):
        middle = 0.5 * (low + high)
        if _depth(body, middle * body.inner_x_m, middle * body.inner_y_m) >= (
            LARGEST * body.inner_radius_m
        ):
            high = middle
        else:
            low = middle
    x, y = high * body.inner_x_m, high * body.inner_y_m
    bend = 1.0 / body.turn_radius_m
    out[1, 0], out[1, 1], out[1, 2] = x, y, _depth(body, x, y)
    out[1, 3] = math.hypot(1.0 + bend * abs(y), bend * x)
    return 2


@kernel("i8", "f8", "rf8[:, ::1]", "f8[:, ::1]")
def curve_kernel(kind: int, turn_radius_m: float, poses: Floats, segments: Floats) -> float:
    """
    Length of the shortest curve of a kind of vehicle in an empty world.

    Args:
        poses: (2, 3) start and goal.
        segments: (5, 2), for the work.
    """
    _, length, _ = steer(
        *(kind, turn_radius_m, 1.0, 0.0),
        *(poses[0, 0], poses[0, 1], poses[0, 2], poses[1, 0], poses[1, 1], poses[1, 2]),
        segments,
    )
    return float(length)


def curve_lengths_m(body: Body, poses: Floats) -> tuple[float, float, float]:
    """
    Return the lengths of the shortest curves in an empty world.

    Args:
        poses: (2, 3) start and goal, read-only.

    Returns:
        That of any curve; of one driven forward only; of one driven in reverse only (inf where
        the vehicle does not reverse).
    """
    segments = np.empty((5, 2))
    any_m = curve_kernel(body.kind, body.turn_radius_m, poses, segments)
    if body.kind != CAR:
        return any_m, any_m, math.inf
    turned = poses + np.array([0.0, 0.0, math.pi])
    turned.flags.writeable = False
    forward_m = curve_kernel(FORWARD_CAR, body.turn_radius_m, poses, segments)
    reverse_m = curve_kernel(FORWARD_CAR, body.turn_radius_m, turned, segments)
    return any_m, forward_m, reverse_m


def passing_discs(body: Body) -> list[tuple[float, float, float, float]]:
    """Return x_m, y_m, radius_m and stretch of the discs that pass with the body."""
    rows = np.empty((2, 4))
    count = passing_kernel(body, rows)
    return [(row[0], row[1], row[2], row[3]) for row in rows[:count].tolist()]


def passing_radius_m(body: Body) -> float:
    """
    Radius of the largest disc that lower bounds for this body look at: prepare for this one.

    Not above `inner_radius_m` and the clearance together. Negative or 0 where there is none.
    """
    return max(disc[2] for disc in passing_discs(body)) + body.clearance_m - CHECKED_M
