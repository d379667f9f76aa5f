"""
A route as a line to follow, and a controller that keeps a vehicle on it.

The vehicle is a kinematic bicycle with ideal steering: it turns with the curvature it is told,
at once, but no tighter than its own limit. Its pose is integrated, never taken from the route,
so a route that no vehicle could follow would be seen here.
"""

import bisect
import math
from dataclasses import dataclass
from typing import Any, Final, NamedTuple

import numpy.typing as npt

from bywayd.yard.shapes import Pose, advanced, wrapped

#: Vehicles steer a little tighter than they are planned with; otherwise a controller at the
#: limit of its steering could correct to one side only.
STEERING_RESERVE: Final = 1.08
#: Feedback on sideways offset and heading error, per metre driven: critically damped would be
#: heading = 2 sqrt(offset); this settles within about six metres.
OFFSET_GAIN_PER_M2: Final = 0.35
HEADING_GAIN_PER_M: Final = 1.2
#: The slowest that a vehicle goes when it is not to stand.
CREEP_MPS: Final = 0.02


class Line:
    """
    A route table, asked by metres driven.

    Args:
        table: Structured array with x_m, y_m, heading_rad, curvature_per_m, speed_mps, gear.
        found: What it was found as, for who has to name it to the daemon again.

    Between two rows the motion is the arc with the curvature of the first, and the square of the
    speed changes evenly with the distance.
    """

    def __init__(self, table: npt.NDArray[Any], found: Any = None) -> None:
        self.found = found
        # Plain lists: single elements of numpy arrays cost ten times as much.
        self._poses: list[Pose] = list(
            zip(*(table[name].tolist() for name in ("x_m", "y_m", "heading_rad")), strict=True)
        )
        self._curvatures: list[float] = table["curvature_per_m"].tolist()
        self._speeds: list[float] = [abs(speed) for speed in table["speed_mps"].tolist()]
        self._gears: list[int] = table["gear"].tolist()
        self._at_m = [0.0]
        for row in range(len(self._poses) - 1):
            self._at_m.append(self._at_m[-1] + self._row_length_m(row))
        self.length_m = self._at_m[-1]
        changes = [row for row in range(1, len(self._gears) - 1) if self._turns_round(row)]
        #: Where the vehicle stops: at every change of direction, and at the end.
        self.stops_m = [*(self._at_m[row] for row in changes), self.length_m]

    def _turns_round(self, row: int) -> bool:
        return self._gears[row] != self._gears[row - 1]

    def _row_length_m(self, row: int) -> float:
        (ax, ay, a_rad), (bx, by, b_rad) = self._poses[row], self._poses[row + 1]
        chord_m = math.hypot(bx - ax, by - ay)
        half_rad = 0.5 * wrapped(b_rad - a_rad)
        return chord_m * (half_rad / math.sin(half_rad) if abs(half_rad) > 1e-6 else 1.0)

    def _row_at(self, at_m: float) -> int:
        return min(max(bisect.bisect_right(self._at_m, at_m) - 1, 0), max(len(self._at_m) - 2, 0))

    def gear_at(self, at_m: float) -> int:
        """Return 1 or -1; at a change of direction, that of what follows."""
        return self._gears[self._row_at(at_m)] or 1

    def curvature_at(self, at_m: float) -> float:
        """Return the curvature of the steering, per metre."""
        return self._curvatures[self._row_at(at_m)]

    def pose_at(self, at_m: float) -> Pose:
        """Return the pose after so many metres; before and beyond the ends, the ends."""
        row = self._row_at(at_m)
        within_m = min(max(at_m, 0.0), self.length_m) - self._at_m[row]
        return advanced(self._poses[row], self._curvatures[row], self._gears[row] * within_m)

    def speed_at(self, at_m: float) -> float:
        """Return the planned speed, never negative."""
        if len(self._at_m) == 1:
            return 0.0
        row = self._row_at(at_m)
        length_m = self._at_m[row + 1] - self._at_m[row]
        share = min(1.0, max(0.0, (at_m - self._at_m[row]) / length_m)) if length_m > 0 else 1.0
        return math.sqrt((1 - share) * self._speeds[row] ** 2 + share * self._speeds[row + 1] ** 2)

    def stop_after(self, at_m: float) -> float:
        """Return where the vehicle stops next, strictly after `at_m` unless that is the end."""
        after = bisect.bisect_right(self.stops_m, at_m)
        return self.stops_m[min(after, len(self.stops_m) - 1)]

    def cost_left(self, at_m: float, reverse_factor: float, direction_change_m: float) -> float:
        """Return what the rest of the route costs, in metres."""
        first = self._row_at(at_m)
        cost_m = 0.0
        for row in range(first, len(self._at_m) - 1):
            row_m = self._at_m[row + 1] - max(self._at_m[row], at_m)
            cost_m += max(0.0, row_m) * (reverse_factor if self._gears[row] < 0 else 1.0)
            if row > first and self._turns_round(row):
                cost_m += direction_change_m
        return cost_m

    def places(self, from_m: float, to_m: float, step_m: float) -> list[float]:
        """Return places from one to the other, both included, at most a step apart."""
        count = max(1, math.ceil((to_m - from_m) / step_m - 1e-9))
        return [from_m + (to_m - from_m) * k / count for k in range(count + 1)]


@dataclass(frozen=True)
class Abilities:
    """What a vehicle can do. Decelerations are positive."""

    speed_mps_max: float
    acceleration_mps2: float
    deceleration_mps2: float
    curvature_per_m_max: float


def next_step(
    line: Line, at_m: float, speed_mps: float, may_go_to_m: float, can: Abilities, dt_s: float
) -> tuple[float, float]:
    """
    Return the speed at the end of the next step, and the metres driven in it.

    As planned, but able to stop at `may_go_to_m` and at the next stop of the line. A vehicle that
    is slower than planned, because it had to wait, speeds up as fast as it can. When it could
    stop in time before the step it can after it, braking no harder than it is able to.
    """
    left_m = min(may_go_to_m, line.stop_after(at_m)) - at_m
    if left_m <= 0.0:
        return 0.0, 0.0
    braked_mps = speed_mps - can.deceleration_mps2 * dt_s
    wanted_mps = speed_mps + can.acceleration_mps2 * dt_s
    for _ in range(2):  # the plan where the step will end, which depends on the speed chosen
        planned_mps = line.speed_at(at_m + 0.5 * (speed_mps + wanted_mps) * dt_s)
        # Where the plan says zero the rest of a centimetre still has to be driven.
        wanted_mps = min(wanted_mps, max(planned_mps, braked_mps, CREEP_MPS))
    # The largest v with v^2 / (2 d) + (speed + v) / 2 dt <= left: it stops in what is left then.
    half_mps = 0.5 * can.deceleration_mps2 * dt_s
    room_m = left_m - 0.5 * speed_mps * dt_s
    root = half_mps * half_mps + 2 * can.deceleration_mps2 * room_m
    stoppable_mps = math.sqrt(root) - half_mps if root > 0.0 else 0.0
    new_mps = max(0.0, min(wanted_mps, stoppable_mps))
    return new_mps, min(0.5 * (speed_mps + new_mps) * dt_s, left_m)


class Way(NamedTuple):
    """What to steer, and where the vehicle is beside the place that it should be at."""

    curvature_per_m: float
    ahead_m: float  # along the way of driving
    offset_m: float  # to the left of the line


def steer(line: Line, at_m: float, moved_m: float, pose: Pose, can: Abilities) -> Way:
    """
    Return the curvature to drive for the next `moved_m`.

    The curvature of the line, its mean over the step, with linear feedback on the offset from
    the line and the heading error; per metre driven rather than per second, so that errors
    settle over the same distance at any speed.
    """
    x_m, y_m, heading_rad = line.pose_at(at_m)
    gear = line.gear_at(at_m)
    c, s = math.cos(heading_rad), math.sin(heading_rad)
    east_m, north_m = pose[0] - x_m, pose[1] - y_m
    ahead_m, offset_m = c * east_m + s * north_m, c * north_m - s * east_m
    turned_rad = wrapped(pose[2] - heading_rad)
    curvature = 0.0
    if moved_m > 1e-6:
        curvature = wrapped(line.pose_at(at_m + moved_m)[2] - heading_rad) / (gear * moved_m)
    curvature -= OFFSET_GAIN_PER_M2 * offset_m + gear * HEADING_GAIN_PER_M * turned_rad
    most = STEERING_RESERVE * can.curvature_per_m_max
    return Way(min(max(curvature, -most), most), gear * ahead_m, offset_m)
