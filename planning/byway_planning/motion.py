"""
Is there room for the body all along a motion?

Where there is much room, by conservative advancement (Mirtich 1996, common practice since): the
excess at one pose proves the next stretch free, because no point of the body moves faster than a
known rate. Where there is little, steps would become as small as the gap, so whole stretches are
tested at once: between two poses the body stays inside the convex hull of both, grown by how far
its points swing out of the chords that they end on. Where that hull is full of something that a
concave body drives around, single poses decide after all. Nothing is missed between samples
either way.
"""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.collision import (
    CONTACT_M,
    exact_outlines,
    exact_raster,
    pose_excess,
    pose_free,
    quick_excess,
)
from byway_planning.curves.word import advance
from byway_planning.kernel import kernel
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import Body

Points = npt.NDArray[np.float64]

#: A step that the distance field alone proves is taken when it is at least this long.
LEAP_M: Final = 0.3
#: First stretches swing out by at most this; it is a compromise between few stretches and few
#: that fail for their swing alone.
SWING_M: Final = 0.015
#: A stretch this short that still fails counts as contact.
STRETCH_M_MIN: Final = 0.0005
HULL_MAX: Final = 128


@kernel()
def fastest_point(body: Body, curvature: float) -> float:
    """How far, at most, a point of the body moves while its origin moves one metre."""
    fastest = 1.0
    if curvature != 0.0:
        for i in range(body.outline_m.shape[0]):
            px, py = body.outline_m[i, 0], body.outline_m[i, 1]
            fastest = max(fastest, math.hypot(1.0 - curvature * py, curvature * px))
    return fastest


@kernel()
def swept_hull(
    outline: Points, curvature: float, length: float, points: Points, hull: Points
) -> int:
    """
    The convex hull of an outline before and after an arc, in the frame before.

    Andrew's monotone chain (1979). Args: points, hull: room for 2 n and 2 n + 2 rows.
    """
    n = outline.shape[0]
    tx, ty, turn = advance(0.0, 0.0, 0.0, curvature, length)
    c, s = math.cos(turn), math.sin(turn)
    count = 0
    for i in range(2 * n):
        if i < n:
            px, py = outline[i, 0], outline[i, 1]
        else:
            qx, qy = outline[i - n, 0], outline[i - n, 1]
            px, py = tx + c * qx - s * qy, ty + s * qx + c * qy
        j = count
        while j > 0 and (
            points[j - 1, 0] > px or (points[j - 1, 0] == px and points[j - 1, 1] > py)
        ):
            points[j, 0], points[j, 1] = points[j - 1, 0], points[j - 1, 1]
            j -= 1
        points[j, 0], points[j, 1] = px, py
        count += 1
    k = 0
    for side in range(2):
        floor = k + 1 if side == 1 else 2
        for step in range(count):
            i = step if side == 0 else count - 1 - step
            if side == 1 and step == 0:
                continue
            px, py = points[i, 0], points[i, 1]
            while k >= floor:
                ux, uy = hull[k - 1, 0] - hull[k - 2, 0], hull[k - 1, 1] - hull[k - 2, 1]
                vx, vy = px - hull[k - 2, 0], py - hull[k - 2, 1]
                if ux * vy - uy * vx > 0.0:
                    break
                k -= 1
            hull[k, 0], hull[k, 1] = px, py
            k += 1
    return max(k - 1, 1)


@kernel()
def _stretch_free(
    scene: Scene,
    body: Body,
    pose: tuple[float, float, float],
    curvature: float,
    length: float,
    swing: float,
    points: Points,
    hull: Points,
) -> bool:
    """Is there room for the hull of the body at both ends of an arc, grown by its swing?"""
    n = swept_hull(body.outline_m, curvature, length, points, hull)
    x, y, h = pose
    c, s = math.cos(h), math.sin(h)
    wanted = body.clearance_m + CONTACT_M + swing
    cap = wanted * (1.0 + 1e-12)
    best = exact_raster(scene, hull[:n], body.skin_m, x, y, c, s, cap)
    if scene.outline_discs.shape[0] > 0 and best > wanted:
        reach = abs(length) * fastest_point(body, curvature)
        best = exact_outlines(scene, body, hull[:n], x, y, c, s, reach, best)
    return best > wanted


@kernel(allocates=True)
def _near_free(
    scene: Scene,
    body: Body,
    pose: tuple[float, float, float],
    curvature: float,
    length: float,
    rate: float,
) -> float:
    """
    Sweep an arc in stretches until it is through or there is much room again.

    Returns:
        The arc length that is proved free; -1 at a contact; -2 where even a short stretch fails
        though the poses at its ends do not.
    """
    x, y, heading = pose
    total = abs(length)
    sign = 1.0 if length >= 0.0 else -1.0
    longest = math.inf
    if curvature != 0.0:
        # A point on a circle of radius rate / curvature swings out by about its chord squared
        # over eight radii.
        longest = math.sqrt(8.0 * SWING_M / (rate * abs(curvature)))
    points = np.empty((HULL_MAX, 2))
    hull = np.empty((HULL_MAX + 2, 2))
    at = 0.0
    stretch = longest
    px, py, ph = x, y, heading
    while True:
        stretch = min(stretch, total - at)
        while True:
            swing = 0.0
            if curvature != 0.0:
                quarter = 0.25 * stretch * abs(curvature)
                swing = rate / abs(curvature) * 2.0 * math.sin(quarter) ** 2
            if _stretch_free(
                scene, body, (px, py, ph), curvature, sign * stretch, swing, points, hull
            ):
                break
            if stretch <= STRETCH_M_MIN:
                return -2.0
            stretch *= 0.5
            qx, qy, qh = advance(x, y, heading, curvature, sign * (at + stretch))
            if not pose_free(scene, body, qx, qy, qh):
                return -1.0
        at += stretch
        if at >= total:
            return total
        stretch = min(2.0 * stretch, longest)
        px, py, ph = advance(x, y, heading, curvature, sign * at)
        if _room(scene, body, px, py, ph, rate) >= min(LEAP_M, total - at):
            return at


@kernel()
def _room(scene: Scene, body: Body, x: float, y: float, heading: float, rate: float) -> float:
    """How far the distance field alone proves a motion free; -inf where it proves a contact."""
    quick = quick_excess(scene, body, x, y, math.cos(heading), math.sin(heading), LEAP_M * rate)
    if quick > CONTACT_M:
        return quick / rate
    return quick if quick == -math.inf else 0.0


@kernel()
def motion_free(
    scene: Scene, body: Body, x: float, y: float, heading: float, curvature: float, length: float
) -> bool:
    """Is an arc free between its ends? The poses at both ends are taken for checked."""
    total = abs(length)
    sign = 1.0 if length >= 0.0 else -1.0
    rate = fastest_point(body, curvature)
    at = 0.0
    while at < total:
        px, py, ph = advance(x, y, heading, curvature, sign * at)
        room = _room(scene, body, px, py, ph, rate)
        if room == -math.inf:
            return False
        if room >= min(LEAP_M, total - at):
            at += room
            continue
        swept = _near_free(scene, body, (px, py, ph), curvature, sign * (total - at), rate)
        if swept == -2.0 and not _is_convex(body.outline_m):
            return _steps_free(scene, body, (px, py, ph), curvature, sign * (total - at), rate)
        if swept < 0.0:
            return False
        at += swept
    return True


@kernel()
def _is_convex(outline: Points) -> bool:
    n = outline.shape[0]
    for i in range(n):
        j, k = (i + 1) % n, (i + 2) % n
        dx, dy = outline[j, 0] - outline[i, 0], outline[j, 1] - outline[i, 1]
        if dx * (outline[k, 1] - outline[j, 1]) - dy * (outline[k, 0] - outline[j, 0]) < 0.0:
            return False
    return True


@kernel()
def _steps_free(
    scene: Scene,
    body: Body,
    pose: tuple[float, float, float],
    curvature: float,
    length: float,
    rate: float,
) -> bool:
    """Is an arc free, by conservative advancement on the exact excess alone?"""
    total = abs(length)
    sign = 1.0 if length >= 0.0 else -1.0
    at = 0.0
    while at < total:
        px, py, ph = advance(pose[0], pose[1], pose[2], curvature, sign * at)
        excess = pose_excess(scene, body, px, py, ph)
        if excess <= CONTACT_M:
            return False
        at += excess / rate
    return True


@kernel()
def motion_reach(
    scene: Scene, body: Body, x: float, y: float, heading: float, curvature: float, length: float
) -> float:
    """
    How far an arc can be driven, in metres of arc length >= 0, before contact.

    The whole |length| when the excess is above CONTACT_M all the way, both ends included.
    Otherwise less, up to where the excess is no more than CONTACT_M, and never below its half.
    """
    total = abs(length)
    sign = 1.0 if length >= 0.0 else -1.0
    rate = fastest_point(body, curvature)
    at = 0.0
    while True:
        px, py, ph = advance(x, y, heading, curvature, sign * at)
        excess = pose_excess(scene, body, px, py, ph)
        if excess <= CONTACT_M:
            return min(at, total * (1.0 - 1e-12))
        if at >= total:
            return total
        at = min(at + (excess - 0.5 * CONTACT_M) / rate, total)


@kernel()
def segments_free(
    scene: Scene, body: Body, x: float, y: float, heading: float, segments: Points, count: int
) -> bool:
    """
    Are the segments (curvature, signed length) of a curve free, driven from a pose?

    The pose at its start is taken for checked, the one at its end is not.
    """
    # Ends of segments first: an obstacle is as likely there as anywhere else.
    px, py, ph = x, y, heading
    for i in range(count):
        px, py, ph = advance(px, py, ph, segments[i, 0], segments[i, 1])
        if not pose_free(scene, body, px, py, ph):
            return False
    for i in range(count):
        if not motion_free(scene, body, x, y, heading, segments[i, 0], segments[i, 1]):
            return False
        x, y, heading = advance(x, y, heading, segments[i, 0], segments[i, 1])
    return True
