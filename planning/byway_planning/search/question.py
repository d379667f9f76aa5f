"""What a search is asked: one scene, one body, one start, one goal, and what guides the way."""

import math
from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.collision import pose_excess
from byway_planning.curves.steer import steer
from byway_planning.curves.word import advance
from byway_planning.kernel import kernel
from byway_planning.motion import segments_free
from byway_planning.search.floods import (
    GUIDE_CELLS,
    PROOF_CELLS,
    Flood,
    FloodGround,
    FloodRoom,
    flood_m,
)
from byway_planning.search.lengths import Lengths, lengths_of
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import DISC, FORWARD_CAR, Body

Floats = npt.NDArray[np.float64]

#: Floods run on until this much past the other end: what lies farther is no good detour.
STRETCH: Final = 1.3
#: And so much farther, in turning radii, for what cannot reverse: it may have to drive a circle
#: between places that are next to each other. Without, of 95 short trips among posts 4 were not
#: found within the same work, and the slowest tenth took more than 4 instead of 1.3 ms.
CIRCLE: Final = math.pi


@kernel(Scene, Body, "rf8[::1]", "rf8[::1]", "f8[:, ::1]", allocates=True)
def direct_kernel(scene: Scene, body: Body, start: Floats, goal: Floats, out: Floats) -> int:
    """
    The cheapest curve from start to goal as a path (5, 5), if it is free.

    Returns:
        Its elements; -1 when it is not free.
    """
    segments = np.empty((5, 2))
    count, _, _ = steer(
        body.kind,
        body.turn_radius_m,
        body.reverse_factor,
        body.direction_change_m,
        *(start[0], start[1], start[2], goal[0], goal[1], goal[2]),
        segments,
    )
    x, y, h = start[0], start[1], start[2]
    if body.kind == DISC and count > 0:
        h = math.atan2(goal[1] - y, goal[0] - x)
    if not segments_free(scene, body, x, y, h, segments, count):
        return -1
    for i in range(count):
        out[i, 0], out[i, 1], out[i, 2] = x, y, h
        out[i, 3], out[i, 4] = segments[i, 0], segments[i, 1]
        x, y, h = advance(x, y, h, segments[i, 0], segments[i, 1])
    return int(count)


@kernel(Body, "rf8[::1]", "rf8[::1]", allocates=True)
def direct_length_kernel(body: Body, start: Floats, goal: Floats) -> float:
    """
    Length of the shortest curve from start to goal in an empty world: a bound of any cost.

    Length, not cost: with dear reversing the cheapest path may be no Reeds-Shepp word.
    """
    segments = np.empty((5, 2))
    _, length, _ = steer(
        body.kind,
        body.turn_radius_m,
        1.0,
        0.0,
        *(start[0], start[1], start[2], goal[0], goal[1], goal[2]),
        segments,
    )
    return float(length)


@kernel(Flood, "f8", "f8")
def flood_length_kernel(flood: Flood, x: float, y: float) -> float:
    """`flood_m`, for callers outside the kernels."""
    return float(flood_m(flood, x, y))


@kernel(Scene, Body, "rf8[::1]")
def excess_kernel(scene: Scene, body: Body, pose: Floats) -> float:
    """`pose_excess` of one pose."""
    return float(pose_excess(scene, body, pose[0], pose[1], pose[2]))


def middle_of(body: Body, pose: Floats) -> tuple[float, float]:
    """Return where the middle of the inscribed disc is at a pose."""
    c, s = math.cos(pose[2]), math.sin(pose[2])
    return (
        float(pose[0] + c * body.inner_x_m - s * body.inner_y_m),
        float(pose[1] + s * body.inner_x_m + c * body.inner_y_m),
    )


@dataclass(frozen=True)
class Guide:
    """A flood from the goal, and the ground that it ran over."""

    ground: FloodGround
    room: FloodRoom
    to_goal: Flood
    slack_cells: float
    reached: bool  # False: proved, no disc of the inscribed radius gets from start to goal


def _beyond_m(body: Body) -> float:
    return CIRCLE * body.turn_radius_m if body.kind == FORWARD_CAR else 0.0


def guide_for(
    ground: FloodGround, room: FloodRoom, body: Body, start: Floats, goal: Floats
) -> Guide:
    """Flood from the goal until past the start: over what can mostly be driven, else over all."""
    for slack in (GUIDE_CELLS, PROOF_CELLS):
        flood, length_m = ground.flood(
            middle_of(body, goal),
            middle_of(body, start),
            room,
            slack_cells=slack,
            stretch=STRETCH,
            beyond_m=_beyond_m(body),
        )
        if length_m < math.inf:
            break
    return Guide(ground, room, flood, slack, length_m < math.inf)


@dataclass
class Question:
    """Everything that the searches share; read by all, changed by none."""

    scene: Scene
    body: Body
    start: Floats  # (3,) read-only
    goal: Floats
    seed: int
    guide: Guide

    @property
    def to_goal(self) -> Flood:
        """Flood from the goal: what is left to go."""
        return self.guide.to_goal

    @cached_property
    def to_start(self) -> Flood:
        """Flood from the start, for searches that grow from the goal."""
        flood, _ = self.guide.ground.flood(
            middle_of(self.body, self.start),
            middle_of(self.body, self.goal),
            self.guide.room,
            slack_cells=self.guide.slack_cells,
            stretch=STRETCH,
            beyond_m=_beyond_m(self.body),
        )
        return flood

    @cached_property
    def lengths(self) -> Lengths:
        """Unit curve lengths of this kind of vehicle."""
        return lengths_of(self.body.kind)

    def direct(self) -> Floats | None:
        """Return the path of the cheapest curve, when it is free."""
        rows = np.zeros((5, 5))
        count = direct_kernel(self.scene, self.body, self.start, self.goal, rows)
        if count < 0:
            return None
        if count == 0:
            return np.array([[*self.start, 0.0, 0.0]])
        return rows[:count]
