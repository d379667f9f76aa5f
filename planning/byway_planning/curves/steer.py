"""The local planner of each kind of vehicle: its cheapest curve between two poses."""

import math

from byway_planning.curves.dubins import dubins
from byway_planning.curves.reeds_shepp import reeds_shepp
from byway_planning.curves.straight import straight
from byway_planning.curves.word import Segments
from byway_planning.kernel import kernel
from byway_planning.vehicles.body import CAR, FORWARD_CAR


@kernel()
def steer(
    kind: int,
    radius_m: float,
    reverse_factor: float,
    direction_change_m: float,
    ax_m: float,
    ay_m: float,
    aheading_rad: float,
    bx_m: float,
    by_m: float,
    bheading_rad: float,
    out: Segments,
) -> tuple[int, float, float]:
    """
    The cheapest curve from pose a to pose b, in an empty world.

    Args:
        kind: CAR (Reeds-Shepp), FORWARD_CAR (Dubins) or DISC (a straight line).
        radius_m: Least turning radius; not looked at for a disc.
        out: Shape (5, 2) at least; receives curvature_per_m and signed length_m per segment.

    Returns:
        (count, length_m, cost_m). The count is 0 where b is a. For a disc the headings do not
        count and the direction of its one segment is that of the points.
    """
    dx = bx_m - ax_m
    dy = by_m - ay_m
    if kind != CAR and kind != FORWARD_CAR:
        return straight(dx, dy, out)
    c = math.cos(aheading_rad)
    s = math.sin(aheading_rad)
    east = c * dx + s * dy
    north = c * dy - s * dx
    turn = bheading_rad - aheading_rad
    if kind == FORWARD_CAR:
        return dubins(radius_m, east, north, turn, out)
    return reeds_shepp(radius_m, east, north, turn, reverse_factor, direction_change_m, out)
