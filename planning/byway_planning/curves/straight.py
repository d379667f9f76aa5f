"""The curve of a disc: the straight line."""

import math

from byway_planning.curves.word import Segments
from byway_planning.kernel import kernel


@kernel()
def straight(dx_m: float, dy_m: float, out: Segments) -> tuple[int, float, float]:
    """
    The one segment to a point, of curvature 0; none if the point is where we are.

    Returns (count, length_m, cost_m).
    """
    length = math.hypot(dx_m, dy_m)
    if length == 0.0:
        return 0, 0.0, 0.0
    out[0, 0] = 0.0
    out[0, 1] = length
    return 1, length, length
