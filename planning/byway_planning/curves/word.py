"""
What all curves share: angles, poses along arcs, and words written as segments.

A *word* is a row of at most five arcs and straight lines, driven forward or in reverse. As
segments it is an array with one row each: curvature of the steering (per metre, left
positive) and signed length (negative in reverse); heading change = curvature * signed length.
"""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel

Segments = npt.NDArray[np.float64]

SEGMENTS_MAX: Final = 5  # C|C90 S C90|C has five

TWO_PI: Final = 2.0 * math.pi

#: A straight piece or a distance between circles below this many radii is rounding: nothing a
#: vehicle can do, and with it go the loops and micro manoeuvres that rounding would ask for.
NOTHING: Final = 1e-11


@kernel()
def wrap(angle: float) -> float:
    """The same angle in [-pi, pi)."""
    wrapped = angle - TWO_PI * math.floor((angle + math.pi) * (1.0 / TWO_PI))
    # the quotient may round across the edge
    if wrapped >= math.pi:
        wrapped -= TWO_PI
    elif wrapped < -math.pi:
        wrapped += TWO_PI
    return wrapped


@kernel()
def ahead(angle: float, tolerance: float) -> float:
    """The same angle in [0, 2 pi); within the tolerance of a full turn, or of none, it is 0."""
    turned = angle - TWO_PI * math.floor(angle * (1.0 / TWO_PI))
    if turned < tolerance or turned > TWO_PI - tolerance:
        return 0.0
    return turned


@kernel()
def behind(turned: float) -> float:
    """What is left of a full turn, in the other direction; nothing is left of 0."""
    return TWO_PI - turned if turned > 0.0 else 0.0


@kernel()
def turn_tolerance(distance: float) -> float:
    """
    How far an arc of a word may be off because of rounding, in radians.

    The distance is the one between the first and the last circle, in radii: turning the word
    by an angle moves its end by that much times the angle, so the end moves by at most 1e-12
    radii and some rounding. Arcs this close to nothing, or to a full circle, are left out.
    """
    return min(1e-9, 4e-15 + 1e-12 / distance) if distance > 0.0 else 1e-9


@kernel()
def advance(
    x_m: float, y_m: float, heading_rad: float, curvature_per_m: float, length_m: float
) -> tuple[float, float, float]:
    """Pose after an arc of this signed length; the heading is not wrapped."""
    turn = curvature_per_m * length_m
    half = 0.5 * turn
    # The chord of the arc: exact for any curvature, without the difference of two large
    # circle coordinates.
    chord = length_m if half == 0.0 else length_m * (math.sin(half) / half)
    return (
        x_m + chord * math.cos(heading_rad + half),
        y_m + chord * math.sin(heading_rad + half),
        heading_rad + turn,
    )


@kernel()
def put(out: Segments, count: int, curvature: float, length: float) -> int:
    """Append a segment, unless it is empty; one that goes on like the last one lengthens it."""
    if length == 0.0:
        return count
    if count > 0:
        last = count - 1
        if out[last, 0] == curvature and (out[last, 1] > 0.0) == (length > 0.0):
            out[last, 1] += length
            return count
    out[count, 0] = curvature
    out[count, 1] = length
    return count + 1


@kernel()
def finish(
    out: Segments,
    count: int,
    radius_m: float,
    dheading: float,
    reverse_factor: float,
    direction_change_m: float,
) -> tuple[int, float, float]:
    """
    Turn the segments of a word of unit radius into metres.

    What rounding left of the heading change goes to the longest arc, where it moves the end
    least. Returns (count, length_m, cost_m).
    """
    turned = 0.0
    longest = -1
    for i in range(count):
        turned += out[i, 0] * out[i, 1]
        if out[i, 0] != 0.0 and (longest < 0 or abs(out[i, 1]) > abs(out[longest, 1])):
            longest = i
    if longest >= 0:
        out[longest, 1] += wrap(dheading - turned) / out[longest, 0]
    length = 0.0
    cost = 0.0
    for i in range(count):
        out[i, 0] /= radius_m
        out[i, 1] *= radius_m
        piece = abs(out[i, 1])
        length += piece
        cost += piece if out[i, 1] > 0.0 else reverse_factor * piece
        if i > 0 and (out[i, 1] > 0.0) != (out[i - 1, 1] > 0.0):
            cost += direction_change_m
    return count, length, cost
