"""
PRM, checked lazily: a graph of poses in which a path is looked for before its curves are tested.

Kavraki, Svestka, Latombe and Overmars, Probabilistic roadmaps for path planning in
high-dimensional configuration spaces, 1996; lazily after Bohlin and Kavraki, Path planning using
lazy PRM, 2000; with as many neighbours as make it go on towards the optimum, k = e (1 + 1/d) log n
(Karaman and Frazzoli 2011; d = 2 for a disc, 3 for a car).

Poses are tested when they are drawn, curves only when the cheapest way leads over them: most
curves of a roadmap are never asked about. A way with a blocked curve is looked for again without
it; when all of a way is free it is a path, and the roadmap grows on to better it.

Curves are one way: a forward-only car has another one back. What a change of direction between
two curves costs is not seen by the search in the graph; it is in the cost of the path.
"""

import math
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.collision import pose_free
from byway_planning.curves.steer import steer
from byway_planning.curves.word import advance
from byway_planning.dice import Dice, new_dice
from byway_planning.kernel import describe, kernel
from byway_planning.motion import segments_free
from byway_planning.search.floods import Flood
from byway_planning.search.forest import HEADING_WEIGHT
from byway_planning.search.heap import pop, push
from byway_planning.search.method import FOUND, FULL, RUNNING
from byway_planning.search.neighbours import (
    NodeGrid,
    clear,
    insert,
    nearest_k_grid,
    new_grid,
    within_radius_grid,
)
from byway_planning.search.paths import path_cost
from byway_planning.search.question import Question
from byway_planning.search.sampling import Sampler, draw
from byway_planning.search.trees import TRUST, flooded, sampler_for
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import DISC, FORWARD_CAR, Body

Floats = npt.NDArray[np.float64]
Wholes = npt.NDArray[np.int64]
Links = npt.NDArray[np.int32]

NODES_MAX: Final = 4000
#: Nodes that a new one is tried with.
NEAR_MAX: Final = 2048
#: In turning radii, for what cannot reverse.
FORWARD_REACH: Final = 2.5
#: Ways out of a node; a new one takes the place of the dearest.
WAYS_MAX: Final = 48
#: Poses of the first roadmap, and how much it grows by whenever no way is left, or one was found.
FIRST_NODES: Final = 100
GROWTH: Final = 1.3
START_NODE: Final = 0
GOAL_NODE: Final = 1

UNTESTED: Final = 0
FREE: Final = 1
BLOCKED: Final = 2

# Marks, by place.
PHASE: Final = 0
WANTED: Final = 1  # nodes, before the next search
OPEN: Final = 2  # entries of the heap
CHECKED_TO: Final = 3  # node of the way up to which, from the goal, its curves are free
BROKEN: Final = 4  # 1 when a curve of the way that is checked is blocked
STATES: Final = 5
MARKS: Final = 6

GROWING: Final = 0
SEARCHING: Final = 1
CHECKING: Final = 2
#: What adding a pose costs, and what testing a curve does, in expansions.
SAMPLE_WORK: Final = 12
CHECK_WORK: Final = 2


class Roadmap(NamedTuple):
    """Poses, the ways between them, and a search that can stop anywhere."""

    poses: Floats  # (n, 3)
    ways: Links  # (n, WAYS_MAX) where they lead
    costs: Floats  # (n, WAYS_MAX)
    states: npt.NDArray[np.int8]  # (n, WAYS_MAX)
    counts: Links  # (n,) ways out of a node
    used: Wholes  # (1,)
    grid: NodeGrid
    reached: Floats  # (n,) cost from the start in the search that is running
    before: Links  # (n,) node before
    by: Links  # (n,) which of its ways
    keys: Floats
    values: Links
    marks: Wholes
    sampler: Sampler
    dice: Dice
    sample: Floats  # (3,)
    word: Floats  # (5, 2)
    near: Wholes  # (NEAR_MAX,)
    prices: Floats  # (NEAR_MAX,)


describe(
    Roadmap,
    *("f8[:, ::1]", "i4[:, ::1]", "f8[:, ::1]", "i1[:, ::1]", "i4[::1]", "i8[::1]", NodeGrid),
    *("f8[::1]", "i4[::1]", "i4[::1]", "f8[::1]", "i4[::1]", "i8[::1]", Sampler, "u8[::1]"),
    *("f8[::1]", "f8[:, ::1]", "i8[::1]", "f8[::1]"),
)


def new_roadmap(
    bounds_m: tuple[float, float, float, float], sampler: Sampler, seed: int
) -> Roadmap:
    """Return an empty roadmap; plant the two ends with `begin_kernel`."""
    n = NODES_MAX
    return Roadmap(
        np.empty((n, 3)),
        np.empty((n, WAYS_MAX), np.int32),
        np.empty((n, WAYS_MAX)),
        np.empty((n, WAYS_MAX), np.int8),
        np.zeros(n, np.int32),
        np.zeros(1, np.int64),
        new_grid(bounds_m, n, 2.5),
        np.empty(n),
        np.empty(n, np.int32),
        np.empty(n, np.int32),
        np.empty(n * WAYS_MAX),
        np.empty(n * WAYS_MAX, np.int32),
        np.zeros(MARKS, np.int64),
        sampler,
        new_dice(seed),
        np.zeros(3),
        np.zeros((5, 2)),
        np.zeros(NEAR_MAX, np.int64),
        np.zeros(NEAR_MAX),
    )


@kernel()
def _curve(body: Body, p: Floats, q: Floats, out: Floats) -> tuple[int, float, float]:
    return steer(
        body.kind,
        body.turn_radius_m,
        body.reverse_factor,
        body.direction_change_m,
        *(p[0], p[1], p[2], q[0], q[1], q[2]),
        out,
    )


@kernel()
def _lead(map_: Roadmap, a: int, b: int, cost: float) -> None:
    """Make a way from one node to another, untested."""
    slot = map_.counts[a]
    if slot == WAYS_MAX:
        slot = 0
        for i in range(1, WAYS_MAX):
            if map_.costs[a, i] > map_.costs[a, slot]:
                slot = i
        if map_.costs[a, slot] <= cost:
            return
    else:
        map_.counts[a] = slot + 1
    map_.ways[a, slot] = b
    map_.costs[a, slot] = cost
    map_.states[a, slot] = UNTESTED


@kernel()
def _candidates(body: Body, map_: Roadmap, pose: Floats, wanted: int) -> int:
    """
    Write to `near` the nodes that are worth a curve; returns how many.

    What cannot reverse drives a circle to most of the nodes close by, so all within some turning
    radii are looked at: with the nearest alone more poses make such a roadmap no better.
    """
    weight = HEADING_WEIGHT * body.turn_radius_m
    x, y, h = pose[0], pose[1], pose[2]
    if body.kind != FORWARD_CAR:
        return nearest_k_grid(map_.grid, map_.poses, x, y, h, weight, 2 * wanted, map_.near)
    reach = FORWARD_REACH * body.turn_radius_m
    found = within_radius_grid(map_.grid, map_.poses, x, y, h, 0.0, reach, map_.near)
    if found < wanted:
        return nearest_k_grid(map_.grid, map_.poses, x, y, h, weight, wanted, map_.near)
    return int(min(found, map_.near.shape[0]))


@kernel()
def _add(body: Body, map_: Roadmap, pose: Floats) -> None:
    """Add a node with ways to and from those that are nearest by their curves."""
    n = int(map_.used[0])
    for i in range(3):
        map_.poses[n, i] = pose[i]
    map_.counts[n] = 0
    d = 2.0 if body.kind == DISC else 3.0
    wanted = min(math.ceil(math.e * (1.0 + 1.0 / d) * math.log(n + 1.0)), WAYS_MAX)
    found = _candidates(body, map_, pose, wanted)
    for outward in range(2):
        for i in range(found):
            other = map_.poses[map_.near[i]]
            a, b = (map_.poses[n], other) if outward else (other, map_.poses[n])
            _, _, map_.prices[i] = _curve(body, a, b, map_.word)
        for _ in range(min(wanted, found)):
            best = 0
            for i in range(1, found):
                if map_.prices[i] < map_.prices[best]:
                    best = i
            cost, other_node = map_.prices[best], int(map_.near[best])
            map_.prices[best] = math.inf
            if outward:
                _lead(map_, n, other_node, cost)
            else:
                _lead(map_, other_node, n, cost)
    map_.used[0] = n + 1
    insert(map_.grid, n, pose[0], pose[1])


@kernel(Body, Roadmap, "rf8[::1]", "rf8[::1]")
def begin_kernel(body: Body, map_: Roadmap, start: Floats, goal: Floats) -> None:
    """Empty a roadmap but for its two ends."""
    clear(map_.grid)
    map_.used[0] = 0
    for i in range(3):
        map_.sample[i] = start[i]
    _add(body, map_, map_.sample)
    for i in range(3):
        map_.sample[i] = goal[i]
    _add(body, map_, map_.sample)
    map_.marks[PHASE] = GROWING
    map_.marks[WANTED] = FIRST_NODES


@kernel()
def _begin_search(map_: Roadmap) -> None:
    for i in range(map_.used[0]):
        map_.reached[i] = math.inf
    map_.reached[START_NODE] = 0.0
    map_.before[START_NODE] = -1
    map_.marks[OPEN] = push(map_.keys, map_.values, 0, 0.0, START_NODE)
    map_.marks[PHASE] = SEARCHING


@kernel()
def _grow_more(map_: Roadmap) -> None:
    map_.marks[WANTED] = int(map_.used[0] * GROWTH) + 1
    map_.marks[PHASE] = GROWING


@kernel()
def _ahead(body: Body, map_: Roadmap, to_goal: Flood, node: int) -> float:
    """What is left to go from a node, by distance and by the flood."""
    p, goal = map_.poses[node], map_.poses[GOAL_NODE]
    straight = math.hypot(goal[0] - p[0], goal[1] - p[1])
    return max(straight, TRUST * flooded(body, to_goal, p[0], p[1], p[2]))


@kernel()
def _expand(body: Body, map_: Roadmap, to_goal: Flood, bound: float) -> None:
    """Take one entry off the heap: A*, which looks at a node again when it gets cheaper."""
    marks = map_.marks
    if marks[OPEN] == 0 or map_.keys[0] >= bound:
        _grow_more(map_)
        return
    key, node = map_.keys[0], int(map_.values[0])
    marks[OPEN] = pop(map_.keys, map_.values, int(marks[OPEN]))
    if node == GOAL_NODE:
        marks[CHECKED_TO] = GOAL_NODE
        marks[BROKEN] = 0
        marks[PHASE] = CHECKING
        return
    if key > map_.reached[node] + _ahead(body, map_, to_goal, node) + 1e-9:
        return  # reached more cheaply since
    for i in range(map_.counts[node]):
        if map_.states[node, i] == BLOCKED:
            continue
        to = map_.ways[node, i]
        cost = map_.reached[node] + map_.costs[node, i]
        if cost < map_.reached[to]:
            ahead = cost + _ahead(body, map_, to_goal, int(to))
            if ahead < bound and marks[OPEN] < map_.keys.shape[0]:
                map_.reached[to] = cost
                map_.before[to] = node
                map_.by[to] = i
                marks[OPEN] = push(map_.keys, map_.values, int(marks[OPEN]), ahead, int(to))


@kernel()
def _check_one(scene: Scene, body: Body, map_: Roadmap) -> bool:
    """
    Test one curve of the way, from the goal on; True when all of it is free.

    The others are tested as well when one is blocked: the next way would lead over them.
    """
    node = int(map_.marks[CHECKED_TO])
    if node == START_NODE:
        if map_.marks[BROKEN] == 0:
            return True
        _begin_search(map_)
        return False
    parent, way = int(map_.before[node]), int(map_.by[node])
    map_.marks[CHECKED_TO] = parent
    if map_.states[parent, way] == FREE:
        return False
    p, q = map_.poses[parent], map_.poses[node]
    count, _, _ = _curve(body, p, q, map_.word)
    heading = math.atan2(q[1] - p[1], q[0] - p[0]) if body.kind == DISC else p[2]
    if segments_free(scene, body, p[0], p[1], heading, map_.word, count):
        map_.states[parent, way] = FREE
    else:
        map_.states[parent, way] = BLOCKED
        map_.marks[BROKEN] = 1
    return False


@kernel(Scene, Body, Roadmap, Flood, "f8", "i8")
def advance_roadmap_kernel(
    scene: Scene, body: Body, map_: Roadmap, to_goal: Flood, bound: float, iterations: int
) -> int:
    """Do so much work; FOUND when all of a way is free, FULL when there is no room for poses."""
    marks = map_.marks
    work = 0
    while work < iterations:
        if marks[PHASE] == GROWING:
            if map_.used[0] >= map_.poses.shape[0]:
                return FULL
            if map_.used[0] >= marks[WANTED]:
                _begin_search(map_)
                continue
            work += SAMPLE_WORK
            draw(map_.sampler, map_.sample)
            marks[STATES] += 1
            s = map_.sample
            if pose_free(scene, body, s[0], s[1], s[2]):
                _add(body, map_, s)
        elif marks[PHASE] == SEARCHING:
            work += 1
            _expand(body, map_, to_goal, bound)
        else:
            work += CHECK_WORK
            if _check_one(scene, body, map_):
                _grow_more(map_)
                return FOUND
    return RUNNING


@kernel(Body, Roadmap, "f8[:, ::1]")
def trace_roadmap_kernel(body: Body, map_: Roadmap, out: Floats) -> int:
    """Write the way that was found last; returns its rows, of which only those fit are written."""
    rows = 0
    node = GOAL_NODE
    while node != START_NODE:  # counted first: it comes out last first
        parent = int(map_.before[node])
        count, _, _ = _curve(body, map_.poses[parent], map_.poses[node], map_.word)
        rows += count
        node = parent
    if rows > out.shape[0]:
        return rows
    at = rows
    node = GOAL_NODE
    while node != START_NODE:
        parent = int(map_.before[node])
        p, q = map_.poses[parent], map_.poses[node]
        count, _, _ = _curve(body, p, q, map_.word)
        at -= count
        x, y, h = p[0], p[1], p[2]
        if body.kind == DISC:
            h = math.atan2(q[1] - y, q[0] - x)
        for i in range(count):
            k, length = map_.word[i, 0], map_.word[i, 1]
            out[at + i, 0], out[at + i, 1], out[at + i, 2] = x, y, h
            out[at + i, 3], out[at + i, 4] = k, length
            x, y, h = advance(x, y, h, k, length)
        node = parent
    return rows


class LazyRoadmap:
    """`prm`: see the module text; goes on finding better paths."""

    name = "prm"

    def __init__(self, question: Question, sampler: str = "halton") -> None:
        self._q = question
        scene = question.scene
        bounds = (scene.x_m_min, scene.y_m_min, scene.x_m_max, scene.y_m_max)
        self._map = new_roadmap(bounds, sampler_for(question, sampler), question.seed + 3)
        self._best_m = math.inf
        self.restart(math.inf)

    def restart(self, bound_m: float) -> None:
        """Start over with new samples, looking for paths that cost less than the bound."""
        self._best_m = bound_m
        self._path = np.empty((0, 5))
        begin_kernel(self._q.body, self._map, self._q.start, self._q.goal)

    def advance(self, iterations: int) -> int:
        q = self._q
        bound_m = self._best_m
        status = int(
            advance_roadmap_kernel(q.scene, q.body, self._map, q.to_goal, bound_m, iterations)
        )
        if status == FOUND:
            path = self._traced()
            cost = path_cost(path, q.body)
            if cost >= self._best_m:
                return RUNNING  # changes of direction between its curves made it dearer
            self._best_m, self._path = cost, path
        return status

    def path(self) -> Floats:
        return self._path

    def _traced(self) -> Floats:
        out = np.empty((512, 5))
        count = trace_roadmap_kernel(self._q.body, self._map, out)
        if count > len(out):
            out = np.empty((count, 5))
            trace_roadmap_kernel(self._q.body, self._map, out)
        return out[:count]

    @property
    def node_count(self) -> int:
        """Poses of the roadmap."""
        return int(self._map.used[0])

    @property
    def states_checked(self) -> int:
        return int(self._map.marks[STATES])
