"""
RRT*: a tree that rewires itself (Karaman and Frazzoli, Sampling-based algorithms for optimal
motion planning, International Journal of Robotics Research 30, 2011).

It grows like the single tree of `trees`: with the same samples both have the same vertices. But
every new node takes the cheapest parent among the nodes near it, and becomes the parent of those
that it makes cheaper, so that costs go on towards the optimum where a plain tree stalls.

Near is within gamma (log n / n)^(1 / (d + 1)), at most `NEAR_M_MAX`, with the published
gamma = 2 (1 + 1/d)^(1/d) (mu / zeta)^(1/d) for the space that is searched: x and y for a disc
(d = 2); x, y and heading for a car (d = 3), in the distance of `neighbours`, whose unit ball has
the volume 2 pi / (3 w) with w metres a radian. mu is that of the sampled rectangle, or of the
informed set once there is a path: more than the free space, which only makes the radius larger.
The exponent is the corrected one (Solovey et al., Revisiting the asymptotic optimality of RRT*,
arXiv 1909.09688, 2020).

Once there is a path of cost c, only poses can better it whose distances from start and goal add up
to less than c (Gammell et al., Informed RRT*, 2014): samples are drawn from that ellipse. It
holds for every cost here, as cost is never less than length.

What is promised: with more samples the cost goes to the least, almost surely, where cost is
length. Where changes of direction cost extra this is not proved: what a node's parent drove
last counts for the node's own cost, and the tree remembers one parent a node.
"""

import math
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.dice import uniform
from byway_planning.kernel import describe, kernel
from byway_planning.motion import segments_free
from byway_planning.search.forest import (
    HEADING_WEIGHT,
    MEET_A,
    MEET_B,
    Forest,
    Tree,
    curve_from,
    grow,
    nearest_node,
)
from byway_planning.search.method import FOUND, FULL, RUNNING
from byway_planning.search.neighbours import within_radius_grid
from byway_planning.search.paths import price
from byway_planning.search.question import Question
from byway_planning.search.sampling import GOAL_BIASED, draw
from byway_planning.search.trees import GOAL_BIAS, Trees
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import CAR, DISC, Body

Floats = npt.NDArray[np.float64]
Wholes = npt.NDArray[np.int64]
Links = npt.NDArray[np.int32]

NODES_MAX: Final = 24_000
#: Nodes near a new one that are looked at; the radius is such that there are rarely more.
NEAR_MAX: Final = 512
#: Curves are not longer than this: a node sees what is about.
NEAR_M_MAX: Final = 12.0
NOBODY: Final = -1
#: A rewiring must gain at least this much, so that rounding never makes circles.
GAIN_M: Final = 1e-9
#: Draws for one sample inside the informed set, before one outside is taken and wasted.
DRAWS_MAX: Final = 32


class Family(NamedTuple):
    """Who is whose child in a tree, and what rewiring needs."""

    eldest: Links  # (n,) first child of a node
    next_sibling: Links  # (n,)
    todo: Links  # (n,) nodes whose costs are to be summed up again
    near: Wholes  # (NEAR_MAX,)
    word: Floats  # (5, 2)
    best: Floats  # (1,) cost of the cheapest path told so far
    goal_node: Wholes  # (1,)


describe(Family, "i4[::1]", "i4[::1]", "i4[::1]", "i8[::1]", "f8[:, ::1]", "f8[::1]", "i8[::1]")


@kernel()
def near_radius_m(body: Body, area_m2: float, count: int) -> float:
    """How far from a new node others are near, among so many nodes in an area."""
    if count < 2:
        return NEAR_M_MAX
    # The measure of the space over that of the unit ball: of a disc in the plane; of all headings
    # in the distance |position| + weight |heading|, whose ball has the volume 2 pi / (3 weight).
    d, share = 2.0, area_m2 / math.pi
    if body.kind != DISC:
        d, share = 3.0, 3.0 * area_m2 * HEADING_WEIGHT * body.turn_radius_m
    gamma = 2.0 * (1.0 + 1.0 / d) ** (1.0 / d) * share ** (1.0 / d)
    return float(min(gamma * (math.log(count) / count) ** (1.0 / (d + 1.0)), NEAR_M_MAX))


@kernel()
def _adopt(family: Family, parent: int, child: int) -> None:
    family.next_sibling[child] = family.eldest[parent]
    family.eldest[parent] = child


@kernel()
def _leave(family: Family, parent: int, child: int) -> None:
    at = family.eldest[parent]
    if at == child:
        family.eldest[parent] = family.next_sibling[child]
        return
    while family.next_sibling[at] != child:
        at = family.next_sibling[at]
    family.next_sibling[at] = family.next_sibling[child]


@kernel()
def _cost_of(tree: Tree, body: Body, node: int) -> float:
    """Cost of a node by way of its parent, from the word that leads to it."""
    parent = tree.parents[node]
    cost = float(tree.costs[parent])
    before = 0.0
    if tree.counts[parent] > 0:
        before = tree.segments[parent, 2 * tree.counts[parent] - 1]
    for i in range(tree.counts[node]):
        length = tree.segments[node, 2 * i + 1]
        cost += price(body, length)
        if body.kind == CAR and before != 0.0 and (length < 0.0) != (before < 0.0):
            cost += body.direction_change_m
        before = length
    return cost


@kernel()
def _sum_up_below(tree: Tree, body: Body, family: Family, node: int) -> None:
    """Costs of all that descend from a node, anew."""
    count = 1
    family.todo[0] = node
    while count > 0:
        count -= 1
        child = family.eldest[family.todo[count]]
        while child != NOBODY:
            tree.costs[child] = _cost_of(tree, body, child)
            family.todo[count] = child
            count += 1
            child = family.next_sibling[child]


@kernel()
def _change_m(tree: Tree, body: Body, parent: int, first: float) -> float:
    """What it costs to go on from a node with a segment of this sign."""
    if body.kind != CAR or tree.counts[parent] == 0:
        return 0.0
    before = tree.segments[parent, 2 * tree.counts[parent] - 1]
    return body.direction_change_m if (first < 0.0) != (before < 0.0) else 0.0


@kernel()
def _try_parent(
    scene: Scene, body: Body, tree: Tree, family: Family, parent: int, child: int
) -> bool:
    """Make a node the parent of another, if that is free and makes it cheaper."""
    p, q = tree.poses[parent], tree.poses[child]
    gain = tree.costs[child] - tree.costs[parent] - GAIN_M
    if math.hypot(q[0] - p[0], q[1] - p[1]) >= gain:
        return False
    word = family.word
    count, _, cost = curve_from(body, tree, parent, True, q[0], q[1], q[2], word)
    if count == 0 or cost + _change_m(tree, body, parent, word[0, 1]) >= gain:
        return False
    heading = p[2]
    if body.kind == DISC:
        heading = math.atan2(q[1] - p[1], q[0] - p[0])
    if not segments_free(scene, body, p[0], p[1], heading, word, count):
        return False
    _leave(family, tree.parents[child], child)
    tree.parents[child] = parent
    tree.counts[child] = count
    for i in range(count):
        tree.segments[child, 2 * i], tree.segments[child, 2 * i + 1] = word[i, 0], word[i, 1]
    _adopt(family, parent, child)
    tree.costs[child] = _cost_of(tree, body, child)
    _sum_up_below(tree, body, family, child)
    return True


@kernel()
def _rewire(
    scene: Scene, body: Body, tree: Tree, family: Family, node: int, radius_m: float
) -> None:
    """Give a new node its cheapest parent, then make it the parent of those that gain by it."""
    p = tree.poses[node]
    x, y, h = p[0], p[1], p[2]
    weight = HEADING_WEIGHT * body.turn_radius_m
    found = within_radius_grid(tree.grid, tree.poses, x, y, h, weight, radius_m, family.near)
    found = min(found, NEAR_MAX)
    for i in range(found):
        other = family.near[i]
        if other != node:
            _try_parent(scene, body, tree, family, other, node)
    for i in range(found):
        other = family.near[i]
        if other not in (node, 0):
            _try_parent(scene, body, tree, family, node, other)


@kernel()
def _informed_draw(body: Body, forest: Forest, start: Floats, goal: Floats, cost: float) -> None:
    """A sample that may lie on a path cheaper than `cost`."""
    sample = forest.sample
    apart = math.hypot(goal[0] - start[0], goal[1] - start[1])
    bounds = forest.sampler.bounds_m
    area = (bounds[2] - bounds[0]) * (bounds[3] - bounds[1])
    wide = math.sqrt(max(cost * cost - apart * apart, 0.0))
    inside = 0.25 * math.pi * cost * wide
    for _ in range(DRAWS_MAX):
        if inside < 0.5 * area:
            # From the unit disc, stretched and turned (Gammell et al. 2014).
            r, a = math.sqrt(uniform(forest.dice)), 2.0 * math.pi * uniform(forest.dice)
            u, v = 0.5 * cost * r * math.cos(a), 0.5 * wide * r * math.sin(a)
            c, s = 1.0, 0.0
            if apart > 0.0:
                c, s = (goal[0] - start[0]) / apart, (goal[1] - start[1]) / apart
            sample[0] = 0.5 * (start[0] + goal[0]) + c * u - s * v
            sample[1] = 0.5 * (start[1] + goal[1]) + s * u + c * v
            sample[2] = math.pi * (2.0 * uniform(forest.dice) - 1.0)
            if bounds[0] <= sample[0] <= bounds[2] and bounds[1] <= sample[1] <= bounds[3]:
                return
        else:
            draw(forest.sampler, sample)
            there = math.hypot(sample[0] - start[0], sample[1] - start[1])
            if there + math.hypot(goal[0] - sample[0], goal[1] - sample[1]) < cost:
                return


@kernel(Scene, Body, Forest, Family, "rf8[::1]", "rf8[::1]", "f8", "b1", "i8")
def grow_star_kernel(
    scene: Scene,
    body: Body,
    forest: Forest,
    family: Family,
    start: Floats,
    goal: Floats,
    bound: float,
    informed: bool,
    iterations: int,
) -> int:
    """RRT*: so many samples; FOUND when the goal has become cheaper, FULL when there is no room."""
    marks, tree, sample = forest.marks, forest.a, forest.sample
    bounds = forest.sampler.bounds_m
    area = (bounds[2] - bounds[0]) * (bounds[3] - bounds[1])
    for _ in range(iterations):
        if tree.used[0] + 64 > tree.poses.shape[0]:
            return FULL
        known = family.goal_node[0] != NOBODY
        aimed = forest.sampler.kind != GOAL_BIASED and uniform(forest.dice) < GOAL_BIAS
        searched = area
        if known and informed:
            cost = min(family.best[0], bound)
            apart = math.hypot(goal[0] - start[0], goal[1] - start[1])
            ellipse = 0.25 * math.pi * cost * math.sqrt(max(cost * cost - apart * apart, 0.0))
            searched = min(area, ellipse)
            _informed_draw(body, forest, start, goal, cost)
        elif aimed:
            for i in range(3):
                sample[i] = goal[i]
        else:
            draw(forest.sampler, sample)
        x, y, h = sample[0], sample[1], sample[2]
        is_goal = x == goal[0] and y == goal[1]
        if is_goal and known:
            continue
        before = tree.used[0]
        near = nearest_node(body, tree, forest, True, x, y, h)
        _, reached = grow(scene, body, tree, forest, near, True, x, y, h)
        for node in range(before, tree.used[0]):
            family.eldest[node] = NOBODY
            _adopt(family, tree.parents[node], node)
        if is_goal and reached and tree.used[0] > before:
            family.goal_node[0] = tree.used[0] - 1
        for node in range(before, tree.used[0]):
            radius = near_radius_m(body, searched, int(tree.used[0]))
            _rewire(scene, body, tree, family, node, radius)
        end = family.goal_node[0]
        if end != NOBODY and tree.costs[end] < min(family.best[0] - GAIN_M, bound):
            family.best[0] = tree.costs[end]
            marks[MEET_A], marks[MEET_B] = end, -1
            return FOUND
    return RUNNING


class StarTree(Trees):
    """`rrt_star`: one tree from the start that rewires itself; goes on finding better paths."""

    name = "rrt_star"

    def __init__(
        self, question: Question, sampler: str = "uniform", *, informed: bool = True
    ) -> None:
        self._informed = informed
        self._family = Family(
            np.full(NODES_MAX, NOBODY, np.int32),
            np.full(NODES_MAX, NOBODY, np.int32),
            np.zeros(NODES_MAX, np.int32),
            np.zeros(NEAR_MAX, np.int64),
            np.zeros((5, 2)),
            np.zeros(1),
            np.zeros(1, np.int64),
        )
        super().__init__(question, sampler, NODES_MAX)

    def restart(self, bound_m: float) -> None:
        """Start over with new samples, looking for paths that cost less than the bound."""
        super().restart(bound_m)
        self._family.eldest[0] = self._family.next_sibling[0] = NOBODY
        self._family.best[0] = math.inf
        self._family.goal_node[0] = NOBODY

    def advance(self, iterations: int) -> int:
        q = self._q
        return int(
            grow_star_kernel(
                q.scene,
                q.body,
                self._forest,
                self._family,
                q.start,
                q.goal,
                self._bound_m,
                self._informed,
                iterations,
            )
        )
