"""
Rapidly exploring random trees: one (LaValle 1998), or one from each end (Kuffner and LaValle 2000).

What a tree is, and how a branch of it grows, is in `forest`.
"""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.dice import new_dice, normal, uniform
from byway_planning.kernel import kernel
from byway_planning.search.floods import UNREACHED, Flood, flood_m
from byway_planning.search.forest import (
    MARKS,
    MEET_A,
    MEET_B,
    NEAREST,
    STATES,
    TURN,
    Forest,
    grow,
    meeting_change,
    nearest_node,
    new_tree,
    plant_kernel,
    trace_forest_kernel,
)
from byway_planning.search.method import FOUND, FULL, RUNNING
from byway_planning.search.question import Question
from byway_planning.search.sampling import GOAL_BIASED, Sampler, draw, new_sampler
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import CAR, Body

Floats = npt.NDArray[np.float64]

NODES_MAX: Final = 6000
ROOT_SHARE: Final = 0.1  # of the samples near a root
GOAL_BIAS: Final = 0.08  # common practice: 5 to 10 %
CORRIDOR_SHARE: Final = 0.5
CORRIDOR_STRETCH: Final = 1.1
TRUST: Final = 0.92


@kernel()
def _draw_sample(body: Body, forest: Forest) -> None:
    if uniform(forest.dice) < ROOT_SHARE:
        tree = forest.a if uniform(forest.dice) < 0.5 else forest.b
        if tree.used[0] > 0:
            spread = 2.0 * max(body.turn_radius_m, body.outer_radius_m)
            forest.sample[0] = tree.poses[0, 0] + spread * normal(forest.dice)
            forest.sample[1] = tree.poses[0, 1] + spread * normal(forest.dice)
            forest.sample[2] = math.pi * (2.0 * uniform(forest.dice) - 1.0)
            return
    draw(forest.sampler, forest.sample)


@kernel(Scene, Body, Forest, Flood, Flood, "f8", "i8")
def grow_two_kernel(
    scene: Scene,
    body: Body,
    forest: Forest,
    to_goal: Flood,
    to_start: Flood,
    bound: float,
    iterations: int,
) -> int:
    """RRT-Connect: so many samples; FOUND when the trees met, FULL when there is no room."""
    marks = forest.marks
    for _ in range(iterations):
        for tree in (forest.a, forest.b):
            if tree.used[0] + 64 > tree.poses.shape[0]:
                return FULL
        from_start = marks[TURN] == 0
        marks[TURN] = 1 - marks[TURN]
        one = forest.a if from_start else forest.b
        two = forest.b if from_start else forest.a
        left = to_goal if from_start else to_start
        _draw_sample(body, forest)
        x, y, h = forest.sample[0], forest.sample[1], forest.sample[2]
        near = nearest_node(body, one, forest, from_start, x, y, h)
        node, _ = grow(scene, body, one, forest, near, from_start, x, y, h)
        if node == near:
            continue
        p = one.poses[node]
        if one.costs[node] + TRUST * flooded(body, left, p[0], p[1], p[2]) >= bound:
            continue
        other = nearest_node(body, two, forest, not from_start, p[0], p[1], p[2])
        end, met = grow(scene, body, two, forest, other, not from_start, p[0], p[1], p[2])
        cost = one.costs[node] + two.costs[end] + meeting_change(body, one, node, two, end)
        if met and cost < bound:
            marks[MEET_A] = node if from_start else end
            marks[MEET_B] = end if from_start else node
            return FOUND
    return RUNNING


@kernel()
def flooded(body: Body, flood: Flood, x: float, y: float, h: float) -> float:
    """What is left to go from a pose, as the inscribed disc was flooded."""
    c, s = math.cos(h), math.sin(h)
    return flood_m(
        flood,
        x + c * body.inner_x_m - s * body.inner_y_m,
        y + s * body.inner_x_m + c * body.inner_y_m,
    )


@kernel(Scene, Body, Forest, "rf8[::1]", "f8", "i8")
def grow_one_kernel(
    scene: Scene, body: Body, forest: Forest, goal: Floats, bound: float, iterations: int
) -> int:
    """
    RRT: so many samples, the goal among them.

    A sampler without a bias of its own gets the customary one: nothing else ends the search.
    """
    marks = forest.marks
    tree = forest.a
    for _ in range(iterations):
        if tree.used[0] + 64 > tree.poses.shape[0]:
            return FULL
        if forest.sampler.kind != GOAL_BIASED and uniform(forest.dice) < GOAL_BIAS:
            for i in range(3):
                forest.sample[i] = goal[i]
        else:
            draw(forest.sampler, forest.sample)
        x, y, h = forest.sample[0], forest.sample[1], forest.sample[2]
        near = nearest_node(body, tree, forest, True, x, y, h)
        node, reached = grow(scene, body, tree, forest, near, True, x, y, h)
        if reached and x == goal[0] and y == goal[1] and tree.costs[node] < bound:
            marks[MEET_A], marks[MEET_B] = node, -1
            return FOUND
    return RUNNING


def corridor_of(question: Question) -> tuple[Floats, Floats]:
    """Return cells (n, 5) and weights along which the flooded ways lead (see `sampling`)."""
    goal, start = question.to_goal, question.to_start
    both = goal.cost.astype(np.int64) + start.cost
    reached = (goal.cost < UNREACHED) & (start.cost < UNREACHED)
    if not reached.any():
        return np.empty((0, 5)), np.empty(0)
    rows, columns = np.nonzero(reached & (both <= CORRIDOR_STRETCH * both[reached].min()))
    padded = np.pad(goal.cost, 1, constant_values=UNREACHED)
    steps = [(dr, dc) for dr in (-1, 0, 1) for dc in (-1, 0, 1) if dr or dc]
    around = np.stack([padded[rows + 1 + dr, columns + 1 + dc] for dr, dc in steps])
    down = np.array(steps, float)[around.argmin(axis=0)]
    side = goal.side_m
    cells = np.column_stack(
        [
            goal.corner_x_m + (columns + 0.5) * side,
            goal.corner_y_m + (rows + 0.5) * side,
            np.full(len(rows), side),
            np.arctan2(down[:, 0], down[:, 1]),
            np.full(len(rows), 0.5),
        ]
    )
    return cells, np.ones(len(rows))


def sampler_for(question: Question, name: str) -> Sampler:
    """Return a sampler by its name, set up for a question."""
    scene = question.scene
    cells, weights = corridor_of(question) if name == "corridor" else (None, None)
    x_m, y_m, heading_rad = (float(value) for value in question.goal)
    return new_sampler(
        name,
        (scene.x_m_min, scene.y_m_min, scene.x_m_max, scene.y_m_max),
        seed=question.seed + 2,
        goal=(x_m, y_m, heading_rad),
        share=GOAL_BIAS if name == "goal_biased" else CORRIDOR_SHARE,
        cells=cells,
        weights=weights,
        turned_share=0.15 if question.body.kind == CAR else 0.0,
    )


class Trees:
    """What the searches by trees share: making, tracing, statistics."""

    def __init__(self, question: Question, sampler: str, nodes_max: int = NODES_MAX) -> None:
        self._q = question
        scene = question.scene
        bounds = (scene.x_m_min, scene.y_m_min, scene.x_m_max, scene.y_m_max)
        self._forest = Forest(
            new_tree(bounds, nodes_max),
            new_tree(bounds, nodes_max),
            np.zeros(MARKS, np.int64),
            sampler_for(question, sampler),
            new_dice(question.seed + 3),
            np.zeros(3),
            np.zeros((5, 2)),
            np.zeros((5, 2)),
            np.zeros(NEAREST, np.int64),
        )
        self.restart(math.inf)

    def restart(self, bound_m: float) -> None:
        """Start over with new samples, looking for paths that cost less than the bound."""
        self._bound_m = bound_m
        plant_kernel(self._forest.a, self._q.start)
        plant_kernel(self._forest.b, self._q.goal)

    @property
    def states_checked(self) -> int:
        return int(self._forest.marks[STATES])

    @property
    def node_count(self) -> int:
        """Nodes of both trees."""
        return int(self._forest.a.used[0] + self._forest.b.used[0])

    def path(self) -> Floats:
        out = np.empty((512, 5))
        count = trace_forest_kernel(self._forest, self._q.body, out)
        if count > len(out):
            out = np.empty((count, 5))
            trace_forest_kernel(self._forest, self._q.body, out)
        return out[:count]


class ConnectedTrees(Trees):
    """`rrt_connect`: a tree from each end, grown towards each other."""

    name = "rrt_connect"

    def __init__(self, question: Question, sampler: str = "corridor") -> None:
        super().__init__(question, sampler)

    def advance(self, iterations: int) -> int:
        q = self._q
        return int(
            grow_two_kernel(
                q.scene, q.body, self._forest, q.to_goal, q.to_start, self._bound_m, iterations
            )
        )


class SingleTree(Trees):
    """`rrt`: one tree from the start, drawn to the goal by the sampler's bias."""

    name = "rrt"

    def __init__(self, question: Question, sampler: str = "goal_biased") -> None:
        super().__init__(question, sampler, 4 * NODES_MAX)

    def advance(self, iterations: int) -> int:
        q = self._q
        return int(
            grow_one_kernel(q.scene, q.body, self._forest, q.goal, self._bound_m, iterations)
        )
