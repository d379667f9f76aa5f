"""
Rapidly exploring random trees: one (LaValle 1998), or one from each end (Kuffner and LaValle 2000).

Nodes are joined by the vehicle's own curves, and every node keeps the curve that was driven: a
curve computed again from stored poses may be another one (ties, arcs of almost a full turn).
Long curves are cut into nodes a few metres apart, so that later ones can branch off half way,
and end short of contact: a node that touches an obstacle can hardly be left again.

For a node of the goal's tree the stored segments lead outwards, from its parent to it; the
vehicle drives them the other way round.
"""

import math
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.collision import CONTACT_M, pose_excess
from byway_planning.curves.steer import steer
from byway_planning.curves.word import advance
from byway_planning.dice import Dice, new_dice, normal, uniform
from byway_planning.kernel import describe, kernel
from byway_planning.motion import fastest_point
from byway_planning.search.floods import UNREACHED, Flood, flood_m
from byway_planning.search.method import FOUND, FULL, RUNNING
from byway_planning.search.neighbours import NodeGrid, clear, insert, nearest_k_grid, new_grid
from byway_planning.search.paths import price
from byway_planning.search.question import Question
from byway_planning.search.sampling import Sampler, draw, new_sampler
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import CAR, DISC, Body

Floats = npt.NDArray[np.float64]
Wholes = npt.NDArray[np.int64]

NODES_MAX: Final = 6000
SPACING_M: Final = 4.0
#: Nodes keep this much more than the hard clearance.
OFF_M: Final = 0.04
NEAREST: Final = 4
HEADING_WEIGHT: Final = 0.6  # of the turning radius, per radian
ROOT_SHARE: Final = 0.1  # of the samples near a root
GOAL_BIAS: Final = 0.08  # common practice: 5 to 10 %
CORRIDOR_SHARE: Final = 0.5
CORRIDOR_STRETCH: Final = 1.1
TRUST: Final = 0.92

# Marks of a search, by place.
TURN: Final = 0  # whose turn it is: tree 0 (start) or 1 (goal)
STATES: Final = 1
MEET_A: Final = 2  # node of the start's tree that the path leaves from
MEET_B: Final = 3  # node of the goal's tree that it goes on with; -1 with a single tree
MARKS: Final = 4


class Tree(NamedTuple):
    """Nodes of one tree."""

    poses: Floats  # (n, 3)
    costs: Floats  # (n,) from the root, driven in the right direction
    parents: npt.NDArray[np.int32]
    counts: npt.NDArray[np.int8]  # segments of the curve that leads to a node
    segments: Floats  # (n, 10): curvature and signed length, one after the other
    used: Wholes  # (1,)
    grid: NodeGrid


describe(Tree, "f8[:, ::1]", "f8[::1]", "i4[::1]", "i1[::1]", "f8[:, ::1]", "i8[::1]", NodeGrid)


class Forest(NamedTuple):
    """State of a search with one or two trees."""

    a: Tree
    b: Tree
    marks: Wholes
    sampler: Sampler
    dice: Dice
    sample: Floats  # (3,)
    word: Floats  # (5, 2)
    piece: Floats  # (5, 2)
    near: Wholes  # (NEAREST,)


describe(
    Forest,
    *(Tree, Tree, "i8[::1]", Sampler, "u8[::1]", "f8[::1]", "f8[:, ::1]", "f8[:, ::1]", "i8[::1]"),
)


def _new_tree(bounds_m: tuple[float, float, float, float], nodes_max: int) -> Tree:
    return Tree(
        np.empty((nodes_max, 3)),
        np.empty(nodes_max),
        np.empty(nodes_max, np.int32),
        np.empty(nodes_max, np.int8),
        np.empty((nodes_max, 10)),
        np.zeros(1, np.int64),
        new_grid(bounds_m, nodes_max, 2.5),
    )


@kernel(Tree, "rf8[::1]")
def plant_kernel(tree: Tree, root: Floats) -> None:
    """Make a tree of its root alone."""
    clear(tree.grid)
    for i in range(3):
        tree.poses[0, i] = root[i]
    tree.costs[0] = 0.0
    tree.parents[0] = -1
    tree.counts[0] = 0
    tree.used[0] = 1
    insert(tree.grid, 0, root[0], root[1])


@kernel()
def _nearest(
    body: Body, tree: Tree, forest: Forest, outward: bool, x: float, y: float, h: float
) -> int:
    """The node with the cheapest curve to (or, in the goal's tree, from) a pose."""
    weight = HEADING_WEIGHT * body.turn_radius_m
    found = nearest_k_grid(tree.grid, tree.poses, x, y, h, weight, NEAREST, forest.near)
    best, best_cost = -1, math.inf
    for i in range(found):
        node = forest.near[i]
        _, _, cost = _curve(body, tree, int(node), outward, x, y, h, forest.word)
        if cost < best_cost:
            best, best_cost = int(node), cost
    return best


@kernel()
def _curve(
    body: Body, tree: Tree, node: int, outward: bool, x: float, y: float, h: float, out: Floats
) -> tuple[int, float, float]:
    """The curve between a node and a pose as segments that lead away from the node."""
    p = tree.poses[node]
    radius, factor, change = body.turn_radius_m, body.reverse_factor, body.direction_change_m
    if outward:
        return steer(body.kind, radius, factor, change, p[0], p[1], p[2], x, y, h, out)
    n, length, cost = steer(body.kind, radius, factor, change, x, y, h, p[0], p[1], p[2], out)
    if body.kind == DISC:  # a straight line, the same from either end
        return n, length, cost
    for i in range((n + 1) // 2):
        j = n - 1 - i
        k0, l0, k1, l1 = out[i, 0], out[i, 1], out[j, 0], out[j, 1]
        out[i, 0], out[i, 1] = k1, -l1
        out[j, 0], out[j, 1] = k0, -l0
    return n, length, cost


@kernel()
def _add(
    tree: Tree,
    body: Body,
    parent: int,
    pose: tuple[float, float, float],
    piece: Floats,
    count: int,
    outward: bool,
) -> int:
    n = int(tree.used[0])
    tree.poses[n, 0], tree.poses[n, 1], tree.poses[n, 2] = pose
    cost = tree.costs[parent]
    for i in range(count):
        length = piece[i, 1]
        cost += price(body, length if outward or body.kind == DISC else -length)
        if i > 0 and body.kind == CAR and (length < 0.0) != (piece[i - 1, 1] < 0.0):
            cost += body.direction_change_m
        tree.segments[n, 2 * i], tree.segments[n, 2 * i + 1] = piece[i, 0], length
    before = int(tree.counts[parent])
    if before > 0 and body.kind == CAR and count > 0:
        if (tree.segments[parent, 2 * before - 1] < 0.0) != (piece[0, 1] < 0.0):
            cost += body.direction_change_m
    tree.costs[n] = cost
    tree.parents[n] = parent
    tree.counts[n] = count
    tree.used[0] = n + 1
    insert(tree.grid, n, pose[0], pose[1])
    return n


@kernel()
def _grow(
    scene: Scene,
    body: Body,
    tree: Tree,
    forest: Forest,
    node: int,
    outward: bool,
    x: float,
    y: float,
    h: float,
) -> tuple[int, bool]:
    """
    Drive from a node along the curve to a pose, adding nodes on the way.

    Returns (the last node added or the node itself, whether the pose was reached).
    """
    count, _, _ = _curve(body, tree, node, outward, x, y, h, forest.word)
    p = tree.poses[node]
    px, py, ph = p[0], p[1], p[2]
    if body.kind == DISC and count > 0:
        ph = math.atan2(y - py, x - px)
    piece, parts, along = forest.piece, 0, 0.0
    last = node
    for i in range(count):
        k, length = forest.word[i, 0], forest.word[i, 1]
        sign = 1.0 if length >= 0.0 else -1.0
        total, at, since = abs(length), 0.0, 0.0
        rate = fastest_point(body, k)
        good = 0.0  # where a node could stand
        while at < total:
            qx, qy, qh = advance(px, py, ph, k, sign * at)
            excess = pose_excess(scene, body, qx, qy, qh)
            forest.marks[STATES] += 1
            if excess <= CONTACT_M:
                if good > since and tree.used[0] < tree.poses.shape[0]:
                    piece[parts, 0], piece[parts, 1] = k, sign * (good - since)
                    pose = advance(px, py, ph, k, sign * good)
                    last = _add(tree, body, last, pose, piece, parts + 1, outward)
                return last, False
            if excess > OFF_M:
                good = at
                if along + at - since >= SPACING_M and tree.used[0] + 1 < tree.poses.shape[0]:
                    piece[parts, 0], piece[parts, 1] = k, sign * (at - since)
                    last = _add(tree, body, last, (qx, qy, qh), piece, parts + 1, outward)
                    parts, along, since = 0, 0.0, at
            at += excess / rate
        piece[parts, 0], piece[parts, 1] = k, sign * (total - since)
        along += total - since
        parts += 1
        px, py, ph = advance(px, py, ph, k, length)
    if parts > 0:
        if pose_excess(scene, body, x, y, h) <= CONTACT_M or tree.used[0] >= tree.poses.shape[0]:
            return last, False
        last = _add(tree, body, last, (x, y, h), piece, parts, outward)
    return last, True


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
        near = _nearest(body, one, forest, from_start, x, y, h)
        node, _ = _grow(scene, body, one, forest, near, from_start, x, y, h)
        if node == near:
            continue
        p = one.poses[node]
        if one.costs[node] + TRUST * _left(body, left, p[0], p[1], p[2]) >= bound:
            continue
        other = _nearest(body, two, forest, not from_start, p[0], p[1], p[2])
        end, met = _grow(scene, body, two, forest, other, not from_start, p[0], p[1], p[2])
        cost = one.costs[node] + two.costs[end] + _meeting_change(body, one, node, two, end)
        if met and cost < bound:
            marks[MEET_A] = node if from_start else end
            marks[MEET_B] = end if from_start else node
            return FOUND
    return RUNNING


@kernel()
def _meeting_change(body: Body, one: Tree, node: int, two: Tree, end: int) -> float:
    """Cost of the change of direction where two trees meet, if there is one."""
    if body.kind != CAR or one.counts[node] == 0 or two.counts[end] == 0:
        return 0.0
    ahead = one.segments[node, 2 * one.counts[node] - 1]
    back = two.segments[end, 2 * two.counts[end] - 1]
    # Both lead outwards: the vehicle drives one of them the other way round.
    return body.direction_change_m if (ahead < 0.0) == (back < 0.0) else 0.0


@kernel()
def _left(body: Body, flood: Flood, x: float, y: float, h: float) -> float:
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
    """RRT: so many samples, the goal among them by the sampler's bias."""
    marks = forest.marks
    tree = forest.a
    for _ in range(iterations):
        if tree.used[0] + 64 > tree.poses.shape[0]:
            return FULL
        draw(forest.sampler, forest.sample)
        x, y, h = forest.sample[0], forest.sample[1], forest.sample[2]
        near = _nearest(body, tree, forest, True, x, y, h)
        node, reached = _grow(scene, body, tree, forest, near, True, x, y, h)
        if reached and x == goal[0] and y == goal[1] and tree.costs[node] < bound:
            marks[MEET_A], marks[MEET_B] = node, -1
            return FOUND
    return RUNNING


@kernel(Forest, Body, "f8[:, ::1]")
def trace_forest_kernel(forest: Forest, body: Body, out: Floats) -> int:
    """Write the path of a search that ended with FOUND; returns its rows (see `trace_kernel`)."""
    rows = 0
    for write in range(2):
        if write == 1 and rows > out.shape[0]:
            return rows
        at = rows
        node = int(forest.marks[MEET_A])
        total = 0
        while node > 0:  # the start's tree comes out last first
            parent = int(forest.a.parents[node])
            n = int(forest.a.counts[node])
            total += n
            node = parent
        if write == 1:
            at = total
            node = int(forest.marks[MEET_A])
            while node > 0:
                parent = int(forest.a.parents[node])
                n = int(forest.a.counts[node])
                at -= n
                p = forest.a.poses[parent]
                x, y, h = p[0], p[1], p[2]
                if body.kind == DISC:
                    q = forest.a.poses[node]
                    h = math.atan2(q[1] - y, q[0] - x)
                for i in range(n):
                    k = forest.a.segments[node, 2 * i]
                    length = forest.a.segments[node, 2 * i + 1]
                    out[at + i, 0], out[at + i, 1], out[at + i, 2] = x, y, h
                    out[at + i, 3], out[at + i, 4] = k, length
                    x, y, h = advance(x, y, h, k, length)
                node = parent
            at = total
        node = int(forest.marks[MEET_B])
        while node > 0:
            parent = int(forest.b.parents[node])
            n = int(forest.b.counts[node])
            if write == 1:
                p = forest.b.poses[node]
                x, y, h = p[0], p[1], p[2]
                if body.kind == DISC:
                    q = forest.b.poses[parent]
                    h = math.atan2(q[1] - y, q[0] - x)
                for i in range(n - 1, -1, -1):
                    k = forest.b.segments[node, 2 * i]
                    length = forest.b.segments[node, 2 * i + 1]
                    if body.kind != DISC:
                        length = -length
                    out[at, 0], out[at, 1], out[at, 2] = x, y, h
                    out[at, 3], out[at, 4] = k, length
                    x, y, h = advance(x, y, h, k, length)
                    at += 1
            else:
                total += n
            node = parent
        if write == 0:
            rows = total
    return rows


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


class Trees:
    """What the searches by trees share: making, tracing, statistics."""

    def __init__(self, question: Question, sampler: str, nodes_max: int = NODES_MAX) -> None:
        self._q = question
        scene = question.scene
        bounds = (scene.x_m_min, scene.y_m_min, scene.x_m_max, scene.y_m_max)
        reversing = question.body.kind == CAR
        cells, weights = (None, None)
        if sampler == "corridor":
            cells, weights = corridor_of(question)
        self._forest = Forest(
            _new_tree(bounds, nodes_max),
            _new_tree(bounds, nodes_max),
            np.zeros(MARKS, np.int64),
            new_sampler(
                sampler,
                bounds,
                seed=question.seed + 2,
                goal=(float(question.goal[0]), float(question.goal[1]), float(question.goal[2])),
                share=GOAL_BIAS if sampler == "goal_biased" else CORRIDOR_SHARE,
                cells=cells,
                weights=weights,
                turned_share=0.15 if reversing else 0.0,
            ),
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
