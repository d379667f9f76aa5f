"""
Lattice search: A* over a grid of position and heading, moving by short arcs.

States are real poses, reached by arcs of a fixed length at full, no and full opposite lock
(Barraquand and Latombe 1993); cells of position and heading only say which poses count as the
same, so every motion stays exact. Weighted (Pohl 1970), lazy (a motion is swept when its end
is taken from the heap, not when it is found), resumable, and able to run from the goal against
the direction of driving: whichever end is tight decides, so the race runs both.
"""

import math
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.collision import pose_free
from byway_planning.curves.steer import steer
from byway_planning.curves.word import advance, wrap
from byway_planning.kernel import describe, kernel
from byway_planning.motion import motion_free, segments_free
from byway_planning.search.floods import Flood, flood_m
from byway_planning.search.heap import pop, push
from byway_planning.search.lengths import Lengths, guessed_length
from byway_planning.search.method import EXHAUSTED, FOUND, FULL, RUNNING
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import CAR, DISC, Body

Floats = npt.NDArray[np.float64]
Wholes = npt.NDArray[np.int64]
Whole4 = npt.NDArray[np.int32]

# What the knobs are, by place.
CELL: Final = 0  # metres of a position cell
HEADINGS: Final = 1  # heading cells in a turn
ARC: Final = 2  # metres of a move
WEIGHT: Final = 3  # of the heuristic
CHANGE: Final = 4  # metres that a change of direction costs in this search
BOUND: Final = 5  # children whose estimate is not below this are dropped
TRUST: Final = 6  # share of the heuristic that counts against the bound
KNOBS: Final = 7

# What the marks are, by place.
SENSE: Final = 0  # 1 from the start, -1 from the goal against the direction of driving
NODES: Final = 1
HEAP: Final = 2
STAMP: Final = 3  # entries of the table with another stamp are empty
EXPANSIONS: Final = 4
SINCE_SHOT: Final = 5
FOUND_NODE: Final = 6
FOUND_COUNT: Final = 7
STATES: Final = 8  # states checked
MARKS: Final = 9

PROBES_MAX: Final = 64


class Lattice(NamedTuple):
    """The whole state of one search; see `new_lattice`."""

    knobs: Floats
    marks: Wholes
    root: Floats  # (3,) pose that the search grows from
    target: Floats  # (3,) pose that it looks for
    poses: Floats  # (n, 3)
    driven: Floats  # (n,) cost from the root
    parents: Whole4  # (n,)
    moves: npt.NDArray[np.int8]  # (n,) number of the move that led here
    keys: Floats  # heap
    entries: Whole4  # heap: node numbers
    table: Wholes  # closed states: cell numbers
    stamps: Whole4
    shot: Floats  # (5, 2) segments of the curve that ends the search, in driving direction


describe(
    Lattice,
    *("f8[::1]", "i8[::1]", "f8[::1]", "f8[::1]", "f8[:, ::1]", "f8[::1]", "i4[::1]"),
    *("i1[::1]", "f8[::1]", "i4[::1]", "i8[::1]", "i4[::1]", "f8[:, ::1]"),
)


def new_lattice(nodes_max: int) -> Lattice:
    """Make room for a search of at most `nodes_max` nodes; `restart` sets it up."""
    size = 1 << (nodes_max - 1).bit_length()
    return Lattice(
        knobs=np.zeros(KNOBS),
        marks=np.zeros(MARKS, np.int64),
        root=np.zeros(3),
        target=np.zeros(3),
        poses=np.empty((nodes_max, 3)),
        driven=np.empty(nodes_max),
        parents=np.empty(nodes_max, np.int32),
        moves=np.empty(nodes_max, np.int8),
        keys=np.empty(nodes_max),
        entries=np.empty(nodes_max, np.int32),
        table=np.empty(size, np.int64),
        stamps=np.zeros(size, np.int32),
        shot=np.zeros((5, 2)),
    )


def restart(
    lattice: Lattice,
    *,
    backward: bool,
    start: Floats,
    goal: Floats,
    cell_m: float,
    headings: int,
    arc_m: float,
    weight: float,
    change_m: float,
    bound_m: float = math.inf,
    trust: float = 0.92,
) -> None:
    """Set up a search in arrays that may have served another one before."""
    lattice.knobs[:] = (cell_m, headings, arc_m, weight, change_m, bound_m, trust)
    stamp = lattice.marks[STAMP] + 1
    lattice.marks[:] = 0
    lattice.marks[STAMP] = stamp
    lattice.marks[SENSE] = -1 if backward else 1
    lattice.marks[FOUND_NODE] = -1
    lattice.root[:] = goal if backward else start
    lattice.target[:] = start if backward else goal
    lattice.poses[0] = lattice.root
    lattice.driven[0] = 0.0
    lattice.parents[0] = -1
    lattice.moves[0] = -1
    lattice.keys[0] = 0.0
    lattice.entries[0] = 0
    lattice.marks[NODES] = 1
    lattice.marks[HEAP] = 1


@kernel()
def _cell_number(lattice: Lattice, x: float, y: float, heading: float) -> int:
    cell = lattice.knobs[CELL]
    count = int(lattice.knobs[HEADINGS])
    i = math.floor((x - lattice.root[0]) / cell + 0.5)
    j = math.floor((y - lattice.root[1]) / cell + 0.5)
    k = math.floor(heading / (2.0 * math.pi) * count + 0.5) % count
    return int(((i + 65536) * 131072 + (j + 65536)) * 512 + k)


@kernel()
def _place_of(lattice: Lattice, number: int) -> int:
    """Where a closed state is in the table, or ~place where it would go."""
    size = lattice.table.shape[0]
    h = np.uint64(number) * np.uint64(0x9E3779B97F4A7C15)
    at = int(h >> np.uint64(20)) & (size - 1)
    stamp = lattice.marks[STAMP]
    while lattice.stamps[at] == stamp:
        if lattice.table[at] == number:
            return int(at)
        at = (at + 1) & (size - 1)
    return int(~at)


@kernel()
def _move(kind: int, radius: float, arc: float, number: int) -> tuple[float, float, float]:
    """Curvature, signed length and turn on the spot of a move, as it is driven."""
    if kind == DISC:
        return 0.0, arc, number * math.pi / 4.0
    side = number % 3 - 1
    return side / radius, arc if number < 3 else -arc, 0.0


@kernel()
def _estimate(
    lattice: Lattice, body: Body, flood: Flood, lengths: Lengths, x: float, y: float, heading: float
) -> float:
    """Cost from a pose to the target, roughly; inf where the flood did not come."""
    c, s = math.cos(heading), math.sin(heading)
    there = flood_m(
        flood,
        x + c * body.inner_x_m - s * body.inner_y_m,
        y + s * body.inner_x_m + c * body.inner_y_m,
    )
    if there == math.inf:
        return there
    t = lattice.target
    if lattice.marks[SENSE] > 0:
        curve = guessed_length(lengths, body.turn_radius_m, x, y, heading, t[0], t[1], t[2])
    else:
        curve = guessed_length(lengths, body.turn_radius_m, t[0], t[1], t[2], x, y, heading)
    return max(there, curve)


@kernel()
def _shoot(scene: Scene, body: Body, lattice: Lattice, node: int) -> bool:
    """Try the curve between a node and the target; keep it when it is free."""
    p, t = lattice.poses[node], lattice.target
    if lattice.marks[SENSE] > 0:
        ax, ay, ah, bx, by, bh = p[0], p[1], p[2], t[0], t[1], t[2]
    else:
        ax, ay, ah, bx, by, bh = t[0], t[1], t[2], p[0], p[1], p[2]
    count, _length, cost = steer(
        body.kind,
        body.turn_radius_m,
        body.reverse_factor,
        body.direction_change_m,
        *(ax, ay, ah, bx, by, bh),
        lattice.shot,
    )
    came = lattice.moves[node]
    if body.kind == CAR and count > 0 and came >= 0:
        beside = lattice.shot[0, 1] if lattice.marks[SENSE] > 0 else lattice.shot[count - 1, 1]
        if (came >= 3) != (beside < 0.0):
            cost += body.direction_change_m
    if lattice.driven[node] + cost >= lattice.knobs[BOUND]:
        return False
    if body.kind == DISC and count > 0:
        ah = math.atan2(by - ay, bx - ax)
    if not segments_free(scene, body, ax, ay, ah, lattice.shot, count):
        return False
    lattice.marks[FOUND_NODE] = node
    lattice.marks[FOUND_COUNT] = count
    return True


@kernel()
def _sweep(scene: Scene, body: Body, lattice: Lattice, node: int) -> bool:
    """Is the motion from a node's parent free? The node itself was checked when it was found."""
    parent = lattice.parents[node]
    if parent < 0:
        return True
    k, length, turn = _move(body.kind, body.turn_radius_m, lattice.knobs[ARC], lattice.moves[node])
    p = lattice.poses[parent]
    if lattice.marks[SENSE] < 0:
        length = -length
    heading = turn if body.kind == DISC else p[2]
    return motion_free(scene, body, p[0], p[1], heading, k, length)


@kernel()
def _expand(
    scene: Scene, body: Body, lattice: Lattice, flood: Flood, lengths: Lengths, node: int
) -> None:
    """Push the children of a node that have room and promise to stay below the bound."""
    knobs, marks = lattice.knobs, lattice.marks
    x, y, heading = lattice.poses[node, 0], lattice.poses[node, 1], lattice.poses[node, 2]
    came = int(lattice.moves[node])
    moves = 8 if body.kind == DISC else (6 if body.kind == CAR else 3)
    sense = 1.0 if marks[SENSE] > 0 else -1.0
    for m in range(moves):
        k, length, turn = _move(body.kind, body.turn_radius_m, knobs[ARC], m)
        start = turn if body.kind == DISC else heading
        cx, cy, ch = advance(x, y, start, k, sense * length)
        ch = wrap(ch)
        if _place_of(lattice, _cell_number(lattice, cx, cy, ch)) >= 0:
            continue
        ahead = _estimate(lattice, body, flood, lengths, cx, cy, ch)
        if ahead == math.inf:
            continue
        cost = knobs[ARC] * (body.reverse_factor if body.kind == CAR and m >= 3 else 1.0)
        if body.kind == CAR and came >= 0 and (came >= 3) != (m >= 3):
            cost += knobs[CHANGE]
        cost += lattice.driven[node]
        if cost + knobs[TRUST] * ahead >= knobs[BOUND]:
            continue
        marks[STATES] += 1
        if not pose_free(scene, body, cx, cy, ch):
            continue
        child = int(marks[NODES])
        lattice.poses[child, 0], lattice.poses[child, 1], lattice.poses[child, 2] = cx, cy, ch
        lattice.driven[child] = cost
        lattice.parents[child] = node
        lattice.moves[child] = m
        marks[NODES] += 1
        key = cost + knobs[WEIGHT] * ahead
        marks[HEAP] = push(lattice.keys, lattice.entries, marks[HEAP], key, child)


@kernel(Scene, Body, Lattice, Flood, Lengths, "i8")
def advance_lattice_kernel(
    scene: Scene, body: Body, lattice: Lattice, flood: Flood, lengths: Lengths, iterations: int
) -> int:
    """
    Expand at most so many states.

    Args:
        flood: From the target, over the same ground.

    Returns:
        RUNNING, FOUND (see `path_of`), EXHAUSTED (nothing is left to expand) or FULL.
    """
    marks = lattice.marks
    done = 0
    while done < iterations:
        if marks[HEAP] == 0:
            return EXHAUSTED
        if marks[NODES] + 8 > lattice.poses.shape[0]:
            return FULL
        node = int(lattice.entries[0])
        marks[HEAP] = pop(lattice.keys, lattice.entries, marks[HEAP])
        x, y, h = lattice.poses[node, 0], lattice.poses[node, 1], lattice.poses[node, 2]
        number = _cell_number(lattice, x, y, h)
        place = _place_of(lattice, number)
        if place >= 0 or not _sweep(scene, body, lattice, node):
            continue
        lattice.table[~place] = number
        lattice.stamps[~place] = marks[STAMP]
        done += 1
        marks[EXPANSIONS] += 1
        marks[SINCE_SHOT] += 1
        ahead = _estimate(lattice, body, flood, lengths, x, y, h)
        if marks[SINCE_SHOT] * 3.0 >= ahead or marks[EXPANSIONS] == 1:
            marks[SINCE_SHOT] = 0
            if _shoot(scene, body, lattice, node):
                return FOUND
        _expand(scene, body, lattice, flood, lengths, node)
    return RUNNING


@kernel(Lattice, Body, "f8[:, ::1]")
def trace_kernel(lattice: Lattice, body: Body, out: Floats) -> int:
    """
    Write the path of a search that ended with FOUND, in driving direction.

    Args:
        out: Shape (n, 5); with too few rows nothing is written.

    Returns:
        How many rows the path has.
    """
    backward = lattice.marks[SENSE] < 0
    last = int(lattice.marks[FOUND_NODE])
    depth = 0
    node = last
    while lattice.parents[node] >= 0:
        depth += 1
        node = int(lattice.parents[node])
    shot = int(lattice.marks[FOUND_COUNT])
    if depth + shot > out.shape[0]:
        return depth + shot
    node = last
    for i in range(depth):
        parent = int(lattice.parents[node])
        k, length, turn = _move(
            body.kind, body.turn_radius_m, lattice.knobs[ARC], lattice.moves[node]
        )
        # From the root the moves come out last first; from the goal in the order of driving,
        # each begun at the child.
        row = shot + i if backward else depth - 1 - i
        begin = node if backward else parent
        out[row, 0], out[row, 1] = lattice.poses[begin, 0], lattice.poses[begin, 1]
        out[row, 2] = turn if body.kind == DISC else lattice.poses[begin, 2]
        out[row, 3], out[row, 4] = k, length
        node = parent
    p = lattice.target if backward else lattice.poses[last]
    q = lattice.poses[last] if backward else lattice.target
    x, y, heading = p[0], p[1], p[2]
    if body.kind == DISC:
        heading = math.atan2(q[1] - y, q[0] - x)
    for i in range(shot):
        row = i if backward else depth + i
        k, length = lattice.shot[i, 0], lattice.shot[i, 1]
        out[row, 0], out[row, 1], out[row, 2] = x, y, heading
        out[row, 3], out[row, 4] = k, length
        x, y, heading = advance(x, y, heading, k, length)
    return depth + shot


def path_of(lattice: Lattice, body: Body) -> Floats:
    """Return the path (n, 5) of a search that ended with FOUND; empty where root is target."""
    out = np.empty((256, 5))
    count = trace_kernel(lattice, body, out)
    if count > len(out):
        out = np.empty((count, 5))
        trace_kernel(lattice, body, out)
    return out[:count]
