"""
Exact distances for `verify`: what a moving polygon sweeps, in closed form.

A stretch of motion is an arc of constant curvature. It is looked at in the frame of the pose
in its middle, where the vehicle comes from sigma = -half and goes to sigma = +half, and where
coordinates are small, so nothing is lost to rounding. In that frame every point of the body
moves on a circle around the turning centre (0, 1/curvature), and in the frame of the body every
point of an obstacle moves on a circle around the same centre, the other way round. Two edges
that do not cross at first are nearest, at every moment, at a vertex of one of them, so the
least distance over the whole stretch is that of a vertex's circular trace from an edge: no
sampling, no iteration, no step size.

This module shares nothing with the search and its collision tests, on purpose.
"""

import math
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel

Floats = npt.NDArray[np.float64]

#: Below this curvature (radius 330 km) a trace is taken for its chord: circles that large lose
#: digits. The sagitta of a row of 0.3 m is then under 4e-8 m, and is taken off the distance.
BEND_PER_M_MIN: Final = 3e-6


@kernel()
def turned(angle_rad: float) -> float:
    """The same angle between -pi and pi."""
    return angle_rad - 2.0 * math.pi * math.floor(angle_rad / (2.0 * math.pi) + 0.5)


@kernel()
def driven(x: float, y: float, heading: float, curvature: float, length: float) -> Any:
    """The pose after a signed length along an arc: its chord, and twice the chord's angle."""
    half_turn = 0.5 * curvature * length
    chord = length
    if half_turn != 0.0:
        chord = length * math.sin(half_turn) / half_turn
    along = heading + half_turn
    return x + chord * math.cos(along), y + chord * math.sin(along), heading + 2.0 * half_turn


@kernel()
def point_to_segment(x: float, y: float, px: float, py: float, qx: float, qy: float) -> float:
    dx, dy = qx - px, qy - py
    square = dx * dx + dy * dy
    ratio = 0.0
    if square > 0.0:
        ratio = min(max(((x - px) * dx + (y - py) * dy) / square, 0.0), 1.0)
    ex, ey = px + ratio * dx - x, py + ratio * dy - y
    return math.sqrt(ex * ex + ey * ey)


@kernel()
def segments_cross(
    ax: float, ay: float, bx: float, by: float, px: float, py: float, qx: float, qy: float
) -> bool:
    """Whether two segments cross; a touch may count either way, its distance is 0 anyhow."""
    a_side = (qx - px) * (ay - py) - (qy - py) * (ax - px)
    b_side = (qx - px) * (by - py) - (qy - py) * (bx - px)
    p_side = (bx - ax) * (py - ay) - (by - ay) * (px - ax)
    q_side = (bx - ax) * (qy - ay) - (by - ay) * (qx - ax)
    return (a_side > 0.0) != (b_side > 0.0) and (p_side > 0.0) != (q_side > 0.0)


@kernel()
def segment_to_segment(
    ax: float, ay: float, bx: float, by: float, px: float, py: float, qx: float, qy: float
) -> float:
    if segments_cross(ax, ay, bx, by, px, py, qx, qy):
        return 0.0
    return min(
        min(point_to_segment(ax, ay, px, py, qx, qy), point_to_segment(bx, by, px, py, qx, qy)),
        min(point_to_segment(px, py, ax, ay, bx, by), point_to_segment(qx, qy, ax, ay, bx, by)),
    )


@kernel()
def arc_to_segment(arc: Any, mx: float, my: float, ends: Any, edge: Any) -> float:
    """
    Distance of a circular trace from an edge.

    Args:
        arc: (y of the turning centre, cosine of half the angle of the trace); below pi / 2.
        mx, my: Middle of the trace.
        ends: (x, y, x, y) of its ends.
        edge: (x, y, x, y).

    The nearest pair is an end of one and any point of the other, or an edge point straight
    above the centre, or a crossing. A point lies in the wedge of the trace when its direction
    from the centre is within half the angle of the middle's; outside the wedge the trace's own
    ends are nearest.
    """
    cy, cos_half = arc
    ax, ay, bx, by = ends
    px, py, qx, qy = edge
    ux, uy = mx, my - cy
    radius = math.sqrt(ux * ux + uy * uy)
    wedge = radius * cos_half
    best = min(point_to_segment(ax, ay, px, py, qx, qy), point_to_segment(bx, by, px, py, qx, qy))
    wx, wy = px, py - cy
    away = math.sqrt(wx * wx + wy * wy)
    if wx * ux + wy * uy >= away * wedge:
        best = min(best, abs(away - radius))
    vx, vy = qx, qy - cy
    away = math.sqrt(vx * vx + vy * vy)
    if vx * ux + vy * uy >= away * wedge:
        best = min(best, abs(away - radius))
    dx, dy = qx - px, qy - py
    square = dx * dx + dy * dy
    if square <= 0.0:
        return best
    foot = -(wx * dx + wy * dy) / square  # of the centre, as a ratio along the edge
    fx, fy = wx + foot * dx, wy + foot * dy
    height = math.sqrt(fx * fx + fy * fy)
    if height >= radius:
        if 0.0 < foot < 1.0 and fx * ux + fy * uy >= height * wedge:
            best = min(best, height - radius)
        return best
    reach = math.sqrt((radius * radius - height * height) / square)
    for ratio in (foot - reach, foot + reach):
        if 0.0 <= ratio <= 1.0:
            if (wx + ratio * dx) * ux + (wy + ratio * dy) * uy >= radius * wedge:
                return 0.0
    return best


@kernel()
def trace_to_segment(bend: Any, mx: float, my: float, ends: Any, edge: Any) -> Any:
    """Distance of a trace (see `bend_of`) from an edge; never more than the true one."""
    curved, cy, cos_half, sagitta = bend[:4]
    if curved:
        return arc_to_segment((cy, cos_half), mx, my, ends, edge)
    ax, ay, bx, by = ends
    px, py, qx, qy = edge
    return segment_to_segment(ax, ay, bx, by, px, py, qx, qy) - sagitta


@kernel()
def trace_if_near(bend: Any, mx: float, my: float, ends: Any, edge: Any, care: float) -> Any:
    """The same, or inf if their boxes already are apart by more than `care`."""
    ax, ay, bx, by = ends
    px, py, qx, qy = edge
    # half a chord times this is its sagitta: an arc below a right angle stays that near to it
    care += 0.5 * (abs(bx - ax) + abs(by - ay)) * bend[7]
    if max(min(ax, bx) - max(px, qx), min(px, qx) - max(ax, bx)) > care:
        return np.inf
    if max(min(ay, by) - max(py, qy), min(py, qy) - max(ay, by)) > care:
        return np.inf
    return trace_to_segment(bend, mx, my, ends, edge)


@kernel()
def bend_of(curvature: float, half: float) -> Any:
    """
    What the traces of a stretch have in common; half of its turn is below a right angle.

    Returns (whether they are circles, y of the turning centre, cosine of half the turn,
    sagitta lost where a chord is taken for a circle, sine of half the turn, x and y of the
    vehicle's origin at the far end, tangent of a quarter of the turn).
    """
    turn = curvature * half
    chord = half
    if turn != 0.0:
        chord = half * math.sin(0.5 * turn) / (0.5 * turn)
    end_x, end_y = chord * math.cos(0.5 * turn), chord * math.sin(0.5 * turn)
    curved = abs(curvature) >= BEND_PER_M_MIN
    cy = 1.0 / curvature if curved else 0.0
    sagitta = 0.0 if curved else 0.51 * abs(curvature) * half * half
    swell = abs(math.tan(0.5 * turn))
    return curved, cy, math.cos(turn), sagitta, math.sin(turn), end_x, end_y, swell


@kernel()
def body_trace(bend: Any, x: float, y: float) -> Any:
    """Where a point of the body is at the beginning and at the end of a stretch."""
    _, _, c, _, s, end_x, end_y, _ = bend
    return (
        c * x + s * y - end_x,
        c * y - s * x + end_y,
        c * x - s * y + end_x,
        s * x + c * y + end_y,
    )


@kernel()
def obstacle_trace(bend: Any, x: float, y: float) -> Any:
    """The same for a point of the ground, seen from the body."""
    _, _, c, _, s, end_x, end_y, _ = bend
    v = y - end_y
    u, w = x + end_x, x - end_x
    return c * u - s * v, s * u + c * v, c * w + s * v, c * v - s * w


@kernel()
def is_inside(ring: Floats, first: int, last: int, x: float, y: float) -> bool:
    """Whether a point lies inside the polygon of the vertices first:last (crossing number)."""
    inside = False
    j = last - 1
    for i in range(first, last):
        if (ring[i, 1] > y) != (ring[j, 1] > y):
            across = ring[j, 0] - ring[i, 0]
            if x < ring[i, 0] + across * (y - ring[i, 1]) / (ring[j, 1] - ring[i, 1]):
                inside = not inside
        j = i
    return inside
