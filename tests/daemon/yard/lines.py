"""Hand-made routes and a small vehicle, for the tests of this folder."""

import math
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from bywayd.yard.shapes import Pose, advanced
from bywayd.yard.tracking import Line

CART: Final[dict[str, Any]] = {
    "footprint_m": [(-0.5, -0.5), (1.5, -0.5), (1.5, 0.5), (-0.5, 0.5)],
    "turn_radius_m_min": 2.0,
    "speed_mps_max": 2.0,
    "acceleration_mps2_max": 1.0,
    "deceleration_mps2_max": 1.0,
    "reverse_factor": 1.5,
    "direction_change_m": 2.0,
}
COLUMNS: Final = np.dtype(
    [
        *(("t_s", "f8"), ("x_m", "f8"), ("y_m", "f8"), ("heading_rad", "f8")),
        *(("curvature_per_m", "f8"), ("speed_mps", "f8"), ("gear", "i1")),
    ]
)
ROW_M: Final = 0.25


def table(
    *pieces: tuple[float, float],
    start: Pose = (0.0, 0.0, 0.0),
    from_mps: float = 0.0,
    top_mps: float = 2.0,
    acceleration_mps2: float = 1.0,
    deceleration_mps2: float = 1.0,
) -> npt.NDArray[Any]:
    """
    Return a route of arcs, each (curvature, signed length).

    It begins with a speed, stands at every change of direction and at its end. Times are left 0.
    """
    places: list[tuple[float, float, Pose]] = []  # metres driven, curvature with gear's sign, pose
    stops_m, at_m, pose = [], 0.0, start
    for number, (curvature, signed_m) in enumerate(pieces):
        count = math.ceil(abs(signed_m) / ROW_M)
        for k in range(count):
            there = advanced(pose, curvature, signed_m * k / count)
            places.append((at_m + abs(signed_m) * k / count, number, there))
        at_m += abs(signed_m)
        pose = advanced(pose, curvature, signed_m)
        if number + 1 == len(pieces) or (pieces[number + 1][1] > 0) != (signed_m > 0):
            stops_m.append(at_m)
    places.append((at_m, len(pieces) - 1, pose))
    rows = []
    for row, (done_m, number, there) in enumerate(places):
        before_m = max((stop for stop in stops_m if stop <= done_m), default=0.0)
        left_m = min(stop for stop in stops_m if stop >= done_m) - done_m
        from2 = from_mps**2 if before_m == 0.0 else 0.0
        up = math.sqrt(from2 + 2 * acceleration_mps2 * (done_m - before_m))
        speed = min(top_mps, up, math.sqrt(2 * deceleration_mps2 * left_m))
        gear = 1 if pieces[number][1] > 0 else -1
        is_last = row + 1 == len(places)
        rows.append((0.0, *there, pieces[number][0], gear * speed, 0 if is_last else gear))
    return np.array(rows, COLUMNS)


def arc(start: Pose, curvature: float, signed_m: float, from_mps: float = 0.0) -> Line:
    """Return a line of one arc."""
    return Line(table((curvature, signed_m), start=start, from_mps=from_mps))
