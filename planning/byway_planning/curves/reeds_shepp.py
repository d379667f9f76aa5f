"""
Reeds-Shepp curves: the shortest, or cheapest, path of bounded curvature that may reverse.

J. A. Reeds and L. A. Shepp, Optimal paths for a car that goes both forwards and backwards,
Pacific Journal of Mathematics 145(2), 1990: a shortest path is one of 48 words. Twelve of
them begin with a left arc driven forward; the others are those of the goal mirrored (left and
right change places), flipped in time (forward and reverse change places), or both.

How it is computed, as for Dubins curves: the vector from the first to the last circle gives
the middle of the word by its length r and the first arc by its direction theta; the last arc
is what is missing to the heading phi. With complex numbers, t the first heading change:

    L S L            v = r exp(i t)                      L R L     v = 4 sin(u/2) exp(i (t - u/2))
    L S R            v = (u - 2i) exp(i t)               (u < 0: the middle arc in reverse)
    L R(u) | L(u) R  v = 2i exp(i (t - u)) (1 - 2 cos u)
    L | R(u) L(u) | R              v = 2i exp(i t) (exp(iu) - 2)
    L | R(90) S L    v = -(2 + i (2 + u)) exp(i t)       L | R(90) S R     v = -i (2 + u) exp(i t)
    L S R(90) | L    v = (2 + u - 2i) exp(i t)           L S L(90) | R     v = (2 + u) exp(i t)
    L | R(90) S L(90) | R          v = -(2 + i (4 + u)) exp(i t)

(| is a change of direction, S of length u, R and L in the same word of equal angle u.)

What is minimised is the cost: forward length + factor * reverse length + equivalent metres
for each change of direction. It is at least the length, so a lower bound of the length that
is no better than the best cost drops a word; most are dropped by a squared length, before any
arc tangent. Arcs are taken in [0, 2 pi): longer than half a circle they are never part of a
shortest path, but they are where reversing costs more. For the same reason the forward and
backward L R L of Dubins with a long middle arc are in the set when cost is not length.
"""

import math

from byway_planning.curves.reeds_shepp_words import (
    HALF_PI,
    L_R_L,
    L_RL,
    L_RL_R,
    L_RSL,
    L_RSL_R,
    L_RSR,
    LR_L,
    LR_LR,
    LRL,
    LSL,
    LSL_R,
    LSR,
    LSR_L,
    spell,
)
from byway_planning.curves.word import (
    NOTHING,
    TWO_PI,
    Segments,
    ahead,
    behind,
    finish,
    turn_tolerance,
    wrap,
)
from byway_planning.kernel import kernel

# (cost, word, first, middle, last): lengths of the pieces, all >= 0
Found = tuple[float, int, float, float, float]


@kernel()
def _same_side(
    best: Found, side: int, east: float, north: float, phi: float, factor: float, change: float
) -> Found:
    """The words whose last arc turns like the first; (east, north) joins the two circles."""
    square = east * east + north * north
    distance = math.sqrt(square)
    if distance < NOTHING:
        distance, theta = 0.0, 0.0
    else:
        theta = math.atan2(north, east)
    tolerance = turn_tolerance(distance)
    for flip in range(2):  # flipped in time: phi and the eastward distance change sign
        plus, minus = (1.0, factor) if flip == 0 else (factor, 1.0)
        t = theta if flip == 0 or distance == 0.0 else math.pi - theta
        best = _lsl(best, side + flip, distance, t, phi if flip == 0 else -phi, plus, tolerance)
    if abs(phi) + change >= best[0]:
        return best
    if distance <= 4.0:
        bend = 2.0 * math.asin(0.25 * distance)
        for flip in range(2):
            plus, minus = (1.0, factor) if flip == 0 else (factor, 1.0)
            t = theta if flip == 0 else math.pi - theta
            f = phi if flip == 0 else -phi
            best = _three_arcs(best, side + flip, tolerance, bend, t, f, plus, minus, change)
    # Both words with a quarter arc need a straight piece of root(square - 4) - 2.
    room = best[0] - change - HALF_PI + 2.0
    if square >= 8.0 and square - 4.0 < room * room:
        reach = math.sqrt(square - 4.0)
        for flip in range(2):
            plus, minus = (1.0, factor) if flip == 0 else (factor, 1.0)
            t = theta if flip == 0 else math.pi - theta
            f = phi if flip == 0 else -phi
            best = _quarter_same(best, side + flip, tolerance, reach, t, f, plus, minus, change)
    return best


@kernel()
def _lsl(
    best: Found,
    image: int,
    distance: float,
    theta: float,
    phi: float,
    plus: float,
    tolerance: float,
) -> Found:
    if plus * (distance + ahead(phi, tolerance)) >= best[0]:
        return best
    first = ahead(theta, tolerance)
    last = ahead(phi - first, tolerance)
    cost = plus * (first + distance + last)
    if cost < best[0]:
        best = (cost, 4 * LSL + image, first, distance, last)
    return best


@kernel()
def _three_arcs(
    best: Found,
    image: int,
    tolerance: float,
    bend: float,
    theta: float,
    phi: float,
    plus: float,
    minus: float,
    change: float,
) -> Found:
    # L+ R- and then on to the left, forward or back
    if bend + abs(wrap(phi - bend)) + change < best[0]:
        first = ahead(theta + math.pi - 0.5 * bend, tolerance)
        last = ahead(phi - first - bend, tolerance)
        begun = plus * first + minus * bend
        cost = begun + plus * last + 2.0 * change
        if cost < best[0]:
            best = (cost, 4 * L_R_L + image, first, bend, last)
        last = behind(last)
        cost = begun + minus * last + change
        if cost < best[0]:
            best = (cost, 4 * L_RL + image, first, bend, last)
    # L+ R+ and then L-
    if bend + abs(wrap(phi + bend)) + change < best[0]:
        first = ahead(theta + 0.5 * bend, tolerance)
        last = ahead(first - bend - phi, tolerance)
        cost = plus * (first + bend) + minus * last + change
        if cost < best[0]:
            best = (cost, 4 * LR_L + image, first, bend, last)
    return best


@kernel()
def _long_arc(
    best: Found, side: int, east: float, north: float, phi: float, factor: float
) -> Found:
    """L R L without a change of direction; its middle arc is the one above half a circle."""
    square = east * east + north * north
    if square > 16.0 or best[0] <= math.pi:
        return best
    distance = math.sqrt(square)
    middle = TWO_PI - 2.0 * math.asin(0.25 * distance)
    theta = math.atan2(north, east) if distance >= NOTHING else 0.0
    tolerance = turn_tolerance(distance)
    for flip in range(2):
        plus = 1.0 if flip == 0 else factor
        if plus * middle < best[0]:
            t = theta if flip == 0 else math.pi - theta
            f = phi if flip == 0 else -phi
            first = ahead(t + 0.5 * middle, tolerance)
            last = ahead(f - first + middle, tolerance)
            cost = plus * (first + middle + last)
            if cost < best[0]:
                best = (cost, 4 * LRL + side + flip, first, middle, last)
    return best


@kernel()
def _quarter_same(
    best: Found,
    image: int,
    tolerance: float,
    reach: float,
    theta: float,
    phi: float,
    plus: float,
    minus: float,
    change: float,
) -> Found:
    middle = max(0.0, reach - 2.0)
    lean = math.atan2(2.0, reach)
    least = HALF_PI + middle + change
    if least + abs(wrap(phi - HALF_PI)) < best[0]:
        first = ahead(theta + HALF_PI + lean, tolerance)
        last = ahead(first + HALF_PI - phi, tolerance)
        cost = plus * first + minus * (HALF_PI + middle + last) + change
        if cost < best[0]:
            best = (cost, 4 * L_RSL + image, first, middle, last)
    if least + abs(wrap(phi + HALF_PI)) < best[0]:
        first = ahead(theta + lean, tolerance)
        last = ahead(first - HALF_PI - phi, tolerance)
        cost = plus * (first + middle + HALF_PI) + minus * last + change
        if cost < best[0]:
            best = (cost, 4 * LSR_L + image, first, middle, last)
    return best


@kernel()
def _other_side(
    best: Found, side: int, east: float, north: float, phi: float, factor: float, change: float
) -> Found:
    """The words whose last arc turns against the first; (east, north) joins the two circles."""
    square = east * east + north * north
    distance = math.sqrt(square)
    theta = math.atan2(north, east) if distance >= NOTHING else 0.0
    inner = square - 4.0
    outside = inner >= -NOTHING
    turned = abs(phi)
    tangent = math.sqrt(inner) if inner > NOTHING * NOTHING else 0.0
    # both words with an inner tangent: its lean is worth an arc tangent only if one may win
    lean = math.atan2(2.0, tangent) if tangent + turned < best[0] + 0.9 else 0.0
    tolerance = turn_tolerance(distance)
    for flip in range(2):
        plus, minus = (1.0, factor) if flip == 0 else (factor, 1.0)
        t = theta if flip == 0 else math.pi - theta
        f = phi if flip == 0 else -phi
        if outside:
            if plus * (tangent + turned) < best[0]:
                best = _lsr(best, side + flip, tolerance, tangent, t + lean, f, plus)
            best = _quarter_other(best, side + flip, tolerance, distance, t, f, plus, minus, change)
            if square >= 20.0:
                best = _two_quarters(
                    best, side + flip, tolerance, tangent, t + lean, f, plus, minus, change
                )
            if square <= 36.0:
                best = _four_arcs_out(
                    best, side + flip, tolerance, square, t, f, plus, minus, change
                )
        else:
            best = _four_arcs_in(best, side + flip, tolerance, distance, t, f, plus, minus, change)
    return best


@kernel()
def _lsr(
    best: Found, image: int, tolerance: float, tangent: float, angle: float, phi: float, plus: float
) -> Found:
    first = ahead(angle, tolerance)
    last = ahead(first - phi, tolerance)
    cost = plus * (first + tangent + last)
    if cost < best[0]:
        best = (cost, 4 * LSR + image, first, tangent, last)
    return best


@kernel()
def _quarter_other(
    best: Found,
    image: int,
    tolerance: float,
    distance: float,
    theta: float,
    phi: float,
    plus: float,
    minus: float,
    change: float,
) -> Found:
    middle = max(0.0, distance - 2.0)
    # In both words the first and the last arc add up to the same angle.
    if HALF_PI + middle + ahead(phi - HALF_PI, tolerance) + change >= best[0]:
        return best
    first = ahead(theta + HALF_PI, tolerance)
    last = ahead(phi - HALF_PI - first, tolerance)
    cost = plus * first + minus * (HALF_PI + middle + last) + change
    if cost < best[0]:
        best = (cost, 4 * L_RSR + image, first, middle, last)
    first = ahead(theta, tolerance)
    last = ahead(phi - HALF_PI - first, tolerance)
    cost = plus * (first + middle + HALF_PI) + minus * last + change
    if cost < best[0]:
        best = (cost, 4 * LSL_R + image, first, middle, last)
    return best


@kernel()
def _two_quarters(
    best: Found,
    image: int,
    tolerance: float,
    tangent: float,
    angle: float,
    phi: float,
    plus: float,
    minus: float,
    change: float,
) -> Found:
    middle = max(0.0, tangent - 4.0)
    if math.pi + middle + abs(phi) + 2.0 * change >= best[0]:
        return best
    first = ahead(angle + HALF_PI, tolerance)
    last = ahead(first - phi, tolerance)
    cost = plus * (first + last) + minus * (math.pi + middle) + 2.0 * change
    if cost < best[0]:
        best = (cost, 4 * L_RSL_R + image, first, middle, last)
    return best


@kernel()
def _four_arcs_out(
    best: Found,
    image: int,
    tolerance: float,
    square: float,
    theta: float,
    phi: float,
    plus: float,
    minus: float,
    change: float,
) -> Found:
    # the two equal arcs are at least as long as their chords, root((square - 4) / 8) each
    room = best[0] - abs(phi) - 2.0 * change
    if room <= 0.0 or 0.5 * (square - 4.0) >= room * room:
        return best
    cosine = min(1.0, max(-1.0, (20.0 - square) / 16.0))
    bend = math.acos(cosine)
    first = ahead(theta + HALF_PI + math.atan2(math.sin(bend), 2.0 - cosine), tolerance)
    last = ahead(first - phi, tolerance)
    cost = plus * (first + last) + 2.0 * minus * bend + 2.0 * change
    if cost < best[0]:
        best = (cost, 4 * L_RL_R + image, first, bend, last)
    return best


@kernel()
def _four_arcs_in(
    best: Found,
    image: int,
    tolerance: float,
    distance: float,
    theta: float,
    phi: float,
    plus: float,
    minus: float,
    change: float,
) -> Found:
    if abs(phi) + change >= best[0]:
        return best
    bend = math.acos(0.25 * (2.0 + distance))
    if 2.0 * bend + ahead(phi + 2.0 * bend, tolerance) + change >= best[0]:
        return best
    first = ahead(theta + HALF_PI + bend, tolerance)
    last = ahead(phi + 2.0 * bend - first, tolerance)
    cost = plus * (first + bend) + minus * (bend + last) + change
    if cost < best[0]:
        best = (cost, 4 * LR_LR + image, first, bend, last)
    return best


@kernel()
def _cheapest(dx: float, dy: float, phi: float, factor: float, change: float) -> Found:
    """The best word for unit radius and a heading change in [-pi, pi)."""
    s = math.sin(phi)
    c = math.cos(phi)
    best = (math.inf, 0, 0.0, 0.0, 0.0)
    best = _same_side(best, 0, dx - s, dy - 1.0 + c, phi, factor, change)
    best = _same_side(best, 2, dx + s, -dy - 1.0 + c, -phi, factor, change)
    best = _other_side(best, 0, dx + s, dy - 1.0 - c, phi, factor, change)
    best = _other_side(best, 2, dx - s, -dy - 1.0 - c, -phi, factor, change)
    if factor > 1.0 or change > 0.0:
        best = _long_arc(best, 0, dx - s, dy - 1.0 + c, phi, factor)
        best = _long_arc(best, 2, dx + s, -dy - 1.0 + c, -phi, factor)
    return best


@kernel()
def reeds_shepp_length(dx: float, dy: float, dheading: float) -> float:
    """Length of the shortest path for a turning radius of 1."""
    return _cheapest(dx, dy, wrap(dheading), 1.0, 0.0)[0]


@kernel()
def reeds_shepp(
    radius_m: float,
    dx_m: float,
    dy_m: float,
    dheading: float,
    reverse_factor: float,
    direction_change_m: float,
    out: Segments,
) -> tuple[int, float, float]:
    """
    The cheapest path to a goal given in the frame of the start.

    Cost = forward length + reverse_factor * reverse length + direction_change_m for each
    change of direction; with factor 1 and nothing for a change it is the length.

    Writes the segments (see `word`) into the first rows of `out` and returns (count,
    length_m, cost_m). No segment has length 0, so the count is 0 where the goal is the start.
    """
    _, word, first, middle, last = _cheapest(
        dx_m / radius_m,
        dy_m / radius_m,
        wrap(dheading),
        reverse_factor,
        direction_change_m / radius_m,
    )
    count = spell(word, first, middle, last, out)
    return finish(out, count, radius_m, dheading, reverse_factor, direction_change_m)
