"""
Dubins curves: the shortest path of bounded curvature that never reverses.

L. E. Dubins, On curves of minimal length with a constraint on average curvature, and with
prescribed initial and terminal positions and tangents, American Journal of Mathematics 79,
1957. The shortest path is one of LSL, RSR, LSR, RSL, LRL, RLR with arcs below a full circle.

How it is computed: with the start at the origin, a word that begins with L has its first
circle around i (complex numbers), one that ends with L has its last circle around
p + i exp(i phi), one that ends with R around p - i exp(i phi). The vector between the two
centres gives the middle piece by its length and the first arc by its direction; the last arc
is what is missing to the heading. Words that begin with R are those of the mirrored goal.
"""

import math

from byway_planning.curves.word import (
    NOTHING,
    TWO_PI,
    Segments,
    ahead,
    finish,
    put,
    turn_tolerance,
)
from byway_planning.kernel import kernel

# (length, word, first, middle, last); the word is 2 * shape + (1 if it begins with R)
Found = tuple[float, int, float, float, float]

_LSL = 0
_LSR = 1
_LRL = 2


@kernel()
def _same_side(best: Found, mirrored: int, east: float, north: float, phi: float) -> Found:
    """LSL; (east, north) leads from the first to the last circle."""
    square = east * east + north * north
    distance = math.sqrt(square)
    tolerance = turn_tolerance(distance)
    whole = ahead(phi, tolerance)
    if distance + whole >= best[0]:
        return best
    if distance < NOTHING:
        return whole, 2 * _LSL + mirrored, 0.0, 0.0, whole
    theta = math.atan2(north, east)
    first = ahead(theta, tolerance)
    last = ahead(phi - first, tolerance)
    length = first + distance + last
    if length < best[0]:
        best = (length, 2 * _LSL + mirrored, first, distance, last)
    return best


@kernel()
def _three_arcs(best: Found, mirrored: int, east: float, north: float, phi: float) -> Found:
    """LRL with the middle arc above half a circle: the other solution is never shortest."""
    square = east * east + north * north
    if square > 16.0 or best[0] <= math.pi:
        return best
    distance = math.sqrt(square)
    middle = TWO_PI - 2.0 * math.asin(0.25 * distance)
    if middle >= best[0]:
        return best
    tolerance = turn_tolerance(distance)
    theta = math.atan2(north, east) if distance >= NOTHING else 0.0
    first = ahead(theta + 0.5 * middle, tolerance)
    last = ahead(phi - first + middle, tolerance)
    length = first + middle + last
    if length < best[0]:
        best = (length, 2 * _LRL + mirrored, first, middle, last)
    return best


@kernel()
def _other_side(best: Found, mirrored: int, east: float, north: float, phi: float) -> Found:
    """LSR: the straight piece is the inner tangent of the two circles."""
    square = east * east + north * north
    inner = square - 4.0
    if inner < -NOTHING or inner >= best[0] * best[0]:
        return best
    middle = math.sqrt(inner) if inner > NOTHING * NOTHING else 0.0
    tolerance = turn_tolerance(math.sqrt(square))
    first = ahead(math.atan2(north, east) + math.atan2(2.0, middle), tolerance)
    last = ahead(first - phi, tolerance)
    length = first + middle + last
    if length < best[0]:
        best = (length, 2 * _LSR + mirrored, first, middle, last)
    return best


@kernel()
def _shortest(dx: float, dy: float, phi: float) -> Found:
    s = math.sin(phi)
    c = math.cos(phi)
    best = (math.inf, 0, 0.0, 0.0, 0.0)
    best = _same_side(best, 0, dx - s, dy - 1.0 + c, phi)
    best = _same_side(best, 1, dx + s, -dy - 1.0 + c, -phi)
    best = _other_side(best, 0, dx + s, dy - 1.0 - c, phi)
    best = _other_side(best, 1, dx - s, -dy - 1.0 - c, -phi)
    best = _three_arcs(best, 0, dx - s, dy - 1.0 + c, phi)
    return _three_arcs(best, 1, dx + s, -dy - 1.0 + c, -phi)


@kernel()
def dubins_length(dx: float, dy: float, dheading: float) -> float:
    """Length of the shortest forward path for a turning radius of 1."""
    return _shortest(dx, dy, dheading)[0]


@kernel()
def dubins(
    radius_m: float, dx_m: float, dy_m: float, dheading: float, out: Segments
) -> tuple[int, float, float]:
    """
    The shortest forward path to a goal given in the frame of the start.

    Writes its segments (see `word`) into the first rows of `out` and returns (count,
    length_m, cost_m); the cost is the length. No segment has length 0, so the count is 0
    where the goal is the start.
    """
    _, word, first, middle, last = _shortest(dx_m / radius_m, dy_m / radius_m, dheading)
    left = -1.0 if word % 2 == 1 else 1.0
    shape = word // 2
    count = put(out, 0, left, first)
    count = put(out, count, -left if shape == _LRL else 0.0, middle)
    count = put(out, count, -left if shape == _LSR else left, last)
    return finish(out, count, radius_m, dheading, 1.0, 0.0)
