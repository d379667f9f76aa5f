"""
One or two trees in arrays: their nodes, how a branch grows, the path that they make.

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
from byway_planning.dice import Dice
from byway_planning.kernel import describe, kernel
from byway_planning.motion import fastest_point
from byway_planning.search.neighbours import NodeGrid, clear, insert, nearest_k_grid, new_grid
from byway_planning.search.paths import price
from byway_planning.search.sampling import Sampler
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import CAR, DISC, Body

Floats = npt.NDArray[np.float64]
Wholes = npt.NDArray[np.int64]

SPACING_M: Final = 4.0
#: Nodes keep this much more than the hard clearance.
OFF_M: Final = 0.04
NEAREST: Final = 4
HEADING_WEIGHT: Final = 0.6  # of the turning radius, per radian

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


def new_tree(bounds_m: tuple[float, float, float, float], nodes_max: int) -> Tree:
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
def nearest_node(
    body: Body, tree: Tree, forest: Forest, outward: bool, x: float, y: float, h: float
) -> int:
    """The node with the cheapest curve to (or, in the goal's tree, from) a pose."""
    weight = HEADING_WEIGHT * body.turn_radius_m
    found = nearest_k_grid(tree.grid, tree.poses, x, y, h, weight, NEAREST, forest.near)
    best, best_cost = -1, math.inf
    for i in range(found):
        node = forest.near[i]
        _, _, cost = curve_from(body, tree, int(node), outward, x, y, h, forest.word)
        if cost < best_cost:
            best, best_cost = int(node), cost
    return best


@kernel()
def curve_from(
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
def grow(
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
    count, _, _ = curve_from(body, tree, node, outward, x, y, h, forest.word)
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
                    if at > since:  # not where a segment begins
                        piece[parts, 0], piece[parts, 1] = k, sign * (at - since)
                        parts += 1
                    last = _add(tree, body, last, (qx, qy, qh), piece, parts, outward)
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
def meeting_change(body: Body, one: Tree, node: int, two: Tree, end: int) -> float:
    """Cost of the change of direction where two trees meet, if there is one."""
    if body.kind != CAR or one.counts[node] == 0 or two.counts[end] == 0:
        return 0.0
    ahead = one.segments[node, 2 * one.counts[node] - 1]
    back = two.segments[end, 2 * two.counts[end] - 1]
    # Both lead outwards: the vehicle drives one of them the other way round.
    return body.direction_change_m if (ahead < 0.0) == (back < 0.0) else 0.0


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
