"""What a search is asked: one scene, one body, one start, one goal, and what guides the way."""

import math
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from byway_planning.collision import pose_excess
from byway_planning.curves.steer import steer
from byway_planning.curves.word import advance
from byway_planning.kernel import kernel
from byway_planning.motion import segments_free
from byway_planning.search.floods import GUIDE_CELLS, PROOF_CELLS, Flood, FloodGround
from byway_planning.search.lengths import Lengths, lengths_of
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import DISC, Body

Floats = npt.NDArray[np.float64]


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
    """Length of the shortest curve from start to goal in an empty world."""
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


@kernel(Scene, Body, "rf8[::1]")
def excess_kernel(scene: Scene, body: Body, pose: Floats) -> float:
    """`pose_excess` of one pose."""
    return float(pose_excess(scene, body, pose[0], pose[1], pose[2]))


@dataclass
class Question:
    """Everything that the searches share; read by all, changed by none."""

    scene: Scene
    body: Body
    start: Floats  # (3,) read-only
    goal: Floats
    seed: int
    ground: FloodGround
    lengths: Lengths = field(init=False)
    to_goal: Flood = field(init=False)  # flood from the goal: what is left to go
    to_start: Flood = field(init=False)
    shortest_m: float = field(init=False)  # of the disc over the grid; inf: proved unreachable

    def __post_init__(self) -> None:
        self.lengths = lengths_of(self.body.kind)
        start, goal = self.middle_of(self.start), self.middle_of(self.goal)
        for slack in (GUIDE_CELLS, PROOF_CELLS):
            self.slack_cells = slack
            self.to_goal, self.shortest_m = self.ground.flood(
                goal, start, slack_cells=slack, stretch=1.3
            )
            if self.shortest_m < math.inf:
                break
        if self.shortest_m < math.inf:
            self.to_start, _ = self.ground.flood(
                start, goal, slack_cells=self.slack_cells, stretch=1.3
            )

    def middle_of(self, pose: Floats) -> tuple[float, float]:
        """Return where the middle of the inscribed disc is at a pose."""
        b = self.body
        c, s = math.cos(pose[2]), math.sin(pose[2])
        return (
            float(pose[0] + c * b.inner_x_m - s * b.inner_y_m),
            float(pose[1] + s * b.inner_x_m + c * b.inner_y_m),
        )

    def direct(self) -> Floats | None:
        """Return the path of the cheapest curve, when it is free."""
        rows = np.zeros((5, 5))
        count = direct_kernel(self.scene, self.body, self.start, self.goal, rows)
        if count < 0:
            return None
        if count == 0:
            return np.array([[*self.start, 0.0, 0.0]])
        return rows[:count]

    def direct_length_m(self) -> float:
        """
        Return a lower bound of any path's cost: the shortest curve in an empty world.

        Length, not cost: with dear reversing the cheapest path may be no Reeds-Shepp word.
        """
        return float(direct_length_kernel(self.body, self.start, self.goal))
