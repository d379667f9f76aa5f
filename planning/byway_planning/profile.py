"""
The fastest speeds along a path, at rest wherever the vehicle has to turn round.

Curvature is constant along a path element, so its speed limit is too, and the fastest profile
is known in closed form: per element accelerate, hold, brake. Only the speeds at the element
boundaries have to be found, by one pass forward (what can be reached) and one backward (what
can still be braked), the classic two passes of time-optimal path following (Bobrow, Dubowsky
and Gibson 1985; here with limits that do not depend on speed, where two passes are exact).

Steering may step from one element to the next: there is no limit of the steering rate yet. At
a boundary the limit is the lower one of the two elements.
"""

import math
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from byway_planning.curves.word import wrap
from byway_planning.kernel import kernel
from byway_planning.vehicles.body import DISC, Limits

Floats = npt.NDArray[np.float64]

CORNER_RAD: Final = 1e-6  # a disc stops where its direction of travel jumps by more
SLACK_RATIO: Final = 1e-9  # rounding allowed to a start speed that can just be braked

PROFILE_FOUND: Final = 0
FASTER_THAN_BEND: Final = 1
CANNOT_STOP: Final = 2


class StartTooFast(ValueError):
    """The start speed is above what the path allows, or cannot be braked in time."""


@kernel()
def speed_cap_mps(curvature_per_m: float, length_m: float, limits: Limits) -> float:
    """Highest speed on a path element of this curvature and signed length."""
    cap = limits.speed_mps_max if length_m >= 0.0 else limits.reverse_speed_mps_max
    if curvature_per_m != 0.0:
        cap = min(cap, math.sqrt(limits.lateral_acceleration_mps2_max / abs(curvature_per_m)))
    return cap


@kernel()
def stops_between(path: Floats, i: int, kind: int) -> Any:
    """Whether the vehicle stands between the elements i - 1 and i of a path."""
    if kind != DISC:
        return (path[i - 1, 4] < 0.0) != (path[i, 4] < 0.0)
    before_rad = path[i - 1, 2] + path[i - 1, 3] * path[i - 1, 4]
    return abs(wrap(path[i, 2] - before_rad)) > CORNER_RAD


@kernel("rf8[:, ::1]", "i8", Limits, "f8", "f8[::1]")
def node_speeds(path: Floats, kind: int, limits: Limits, start_mps: float, speeds: Floats) -> Any:
    """
    Fill `speeds` (n + 1): the highest speed at the start of each of n elements and at the end.

    `start_mps` is the magnitude of the start speed. No element has length 0. Returns one of
    the three codes at the head of the module.
    """
    n = path.shape[0]
    a, b = limits.acceleration_mps2_max, limits.deceleration_mps2_max
    cap = speed_cap_mps(path[0, 3], path[0, 4], limits)
    if start_mps > cap * (1.0 + SLACK_RATIO):
        return FASTER_THAN_BEND
    speeds[0] = start_mps
    for i in range(1, n):
        before, cap = cap, speed_cap_mps(path[i, 3], path[i, 4], limits)
        reached = math.sqrt(speeds[i - 1] ** 2 + 2.0 * a * abs(path[i - 1, 4]))
        speeds[i] = 0.0 if stops_between(path, i, kind) else min(reached, min(before, cap))
    speeds[n] = 0.0
    for i in range(n - 1, 0, -1):
        speeds[i] = min(speeds[i], math.sqrt(speeds[i + 1] ** 2 + 2.0 * b * abs(path[i, 4])))
    braked = math.sqrt(speeds[1] ** 2 + 2.0 * b * abs(path[0, 4]))
    return PROFILE_FOUND if start_mps <= braked * (1.0 + SLACK_RATIO) else CANNOT_STOP


@kernel()
def peak_between(
    length_m: float, enter_mps: float, leave_mps: float, cap_mps: float, limits: Limits
) -> Any:
    """
    The fastest way through one element: accelerate, hold, brake.

    Returns (arc length where acceleration ends, arc length where braking begins, speed
    between them). The peak without a cap solves v^2 = enter^2 + 2 a s = leave^2 + 2 b (L - s).
    """
    a, b = limits.acceleration_mps2_max, limits.deceleration_mps2_max
    peak = math.sqrt((2.0 * a * b * length_m + b * enter_mps**2 + a * leave_mps**2) / (a + b))
    peak = min(peak, cap_mps)
    gained_m = min(max((peak**2 - enter_mps**2) / (2.0 * a), 0.0), length_m)
    braked_m = min(max((peak**2 - leave_mps**2) / (2.0 * b), 0.0), length_m - gained_m)
    return gained_m, length_m - braked_m, peak


def stopping_distance_m(speed_mps: float, limits: Limits) -> float:
    """
    Return the distance in which a vehicle stops from a speed, in either direction.

    Raises:
        ValueError: If the speed is not finite.
    """
    if not math.isfinite(speed_mps):
        raise ValueError(f"speed_mps must be finite, got {speed_mps}")
    return speed_mps**2 / (2.0 * limits.deceleration_mps2_max)


def check_profile(code: int, start_speed_mps: float, limits: Limits) -> None:
    """Raise StartTooFast, in words, for any code of `node_speeds` but PROFILE_FOUND."""
    if code == FASTER_THAN_BEND:
        raise StartTooFast(
            f"start_speed_mps {start_speed_mps} is above the limit of the path's first element; "
            "begin with an element that allows this speed"
        )
    if code == CANNOT_STOP:
        raise StartTooFast(
            f"start_speed_mps {start_speed_mps} needs "
            f"{stopping_distance_m(start_speed_mps, limits):.3f} m to stop, and the path asks for "
            "a stop or a lower speed before that; make its first leg longer"
        )
