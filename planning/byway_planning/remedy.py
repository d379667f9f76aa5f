"""
What would have to move for there to be a way.

Squares of a coarse grid each know which obstacles keep a disc from standing there. The cheapest
way over all of them, where every obstacle on it costs far more than any detour, names a set of
obstacles; those that can stay after all are left out again, one by one. With the others gone
the disc gets through: reach is taken so large that it is free between the middles of squares
too. The set is not proved to be the smallest (that is a hard problem: Hauser, The minimum
constraint removal problem with three robotics applications, 2014), and a way for the inscribed
disc may still be none for the whole vehicle.
"""

import math
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
import numpy.typing as npt
from scipy import ndimage

from byway_planning.kernel import kernel
from byway_planning.search.heap import pop, push
from byway_planning.site.snapshot import Snapshot
from byway_planning.site.solids import Solids
from byway_planning.verify.geometry import is_inside, point_to_segment

Floats = npt.NDArray[np.float64]
Wholes = npt.NDArray[np.int32]
Point = tuple[float, float]

SIDE_M_MIN: Final = 0.2
SQUARES_MAX: Final = 1_000_000
#: What one obstacle costs, in metres: more than a detour over any site.
OBSTACLE_M: Final = 1e5
#: An obstacle in cells is called so.
CELLS: Final = "cells"
#: Squares that are larger than this share of the disc would close ways that are open.
COARSEST: Final = 0.6
#: What `remedy` takes, and what it takes for each square.
OVERHEAD_S: Final = 0.002
SQUARE_S: Final = 2e-7


@dataclass(frozen=True)
class Movable:
    """An obstacle that would have to move: a layer's, by id; or a heap of cells, by a point."""

    layer: str
    obstacle: str
    x_m: float  # where the way leads through it
    y_m: float


@dataclass(frozen=True)
class Remedy:
    """
    A small set of obstacles without which a disc gets from start to goal, and its way.

    Not proved to be the smallest set, nor that the whole vehicle can drive there.
    """

    movables: tuple[Movable, ...]  # empty: the disc gets through as it is, the vehicle may not
    way_m: Floats  # (n, 2) corners of the way of the disc's middle
    disc_radius_m: float

    def moved(self, x_m: float, y_m: float) -> "Remedy":
        """Return the same in coordinates with another origin."""
        movables = (replace(m, x_m=m.x_m + x_m, y_m=m.y_m + y_m) for m in self.movables)
        return Remedy(tuple(movables), self.way_m + np.array([x_m, y_m]), self.disc_radius_m)


def squares_in(seconds: float) -> int:
    """Return how fine a grid can be looked at in this time."""
    return min(SQUARES_MAX, int(max(seconds - OVERHEAD_S, 0.0) / SQUARE_S))


def remedy(
    snapshot: Snapshot,
    left_out: frozenset[str],
    start: Point,
    goal: Point,
    radius_m: float,
    squares_max: int = SQUARES_MAX,
) -> Remedy | None:
    """
    Look for a set of obstacles whose removal opens a way for a disc.

    Args:
        start, goal: Of its middle, site-local metres.
        radius_m: Of the disc, with the clearance.
        squares_max: How fine the grid may be, which takes time; see `squares_in`.

    Returns:
        None when the limits of the site are in the way, or the grid is too coarse for the disc.
    """
    solids = snapshot.solids(left_out)
    side, shape = _grid(snapshot, squares_max)
    if side > COARSEST * radius_m:
        return None
    corner = (solids.x_m_min, solids.y_m_min)
    ends = [_square(point, corner, side, shape) for point in (start, goal)]
    reach = radius_m + side * math.sqrt(0.5)
    heaps, heap_count = _heaps(solids, corner, side, shape, reach)
    polygons, discs = len(solids.boxes_m), len(solids.discs_m)
    place = np.array([*corner, side, *start, *goal, radius_m, reach])
    firsts = np.zeros(shape[0] * shape[1] + 1, np.int32)
    pairs = np.empty(0, np.int32)
    touching_kernel(solids, heaps, place, polygons + discs, firsts, pairs)
    np.cumsum(firsts, out=firsts)
    pairs = np.empty(int(firsts[-1]), np.int32)
    touching_kernel(solids, heaps, place, polygons + discs, firsts, pairs)
    fixed = np.zeros(polygons + discs + heap_count + 1, np.uint8)
    inside = _inside(solids, corner, side, shape, radius_m, place)
    way, chosen = _through(firsts, pairs, inside, ends, shape, fixed, OBSTACLE_M)
    if way is None:
        return None
    fixed[:] = 1
    fixed[chosen] = 0
    for one in chosen:  # which of them can stay?
        fixed[one] = 1
        other, _ = _through(firsts, pairs, inside, ends, shape, fixed, 0.0)
        if other is None:
            fixed[one] = 0
    way, _ = _through(firsts, pairs, inside, ends, shape, fixed, 0.0)
    if way is None:
        return None
    gone = [int(one) for one in chosen if fixed[one] == 0]
    rows, columns = np.divmod(way, shape[1])
    middles = np.column_stack([corner[0] + (columns + 0.5) * side, corner[1] + (rows + 0.5) * side])
    corners = np.vstack([start, _corners(middles), goal])
    named = tuple(
        _named(snapshot, solids, one, _crossing(way, middles, firsts, pairs, one)) for one in gone
    )
    return Remedy(named, corners, radius_m)


def _grid(snapshot: Snapshot, squares_max: int) -> tuple[float, tuple[int, int]]:
    """Side of a square; rows and columns over the limits of the site."""
    x0, y0, x1, y1 = snapshot.settings.limits_m
    side = max(SIDE_M_MIN, math.sqrt((x1 - x0) * (y1 - y0) / max(squares_max, 1)))
    return side, (max(1, math.ceil((y1 - y0) / side)), max(1, math.ceil((x1 - x0) / side)))


def _square(point: Point, corner: Point, side: float, shape: tuple[int, int]) -> int:
    row = min(max(int((point[1] - corner[1]) / side), 0), shape[0] - 1)
    column = min(max(int((point[0] - corner[0]) / side), 0), shape[1] - 1)
    return row * shape[1] + column


def _inside(
    solids: Solids,
    corner: Point,
    side: float,
    shape: tuple[int, int],
    radius_m: float,
    place: Floats,
) -> npt.NDArray[np.uint8]:
    """Squares where the limits of the site leave room; the ends always have it."""
    y = corner[1] + (np.arange(shape[0]) + 0.5) * side
    x = corner[0] + (np.arange(shape[1]) + 0.5) * side
    fits_y = (y - radius_m >= solids.y_m_min) & (y + radius_m <= solids.y_m_max)
    fits_x = (x - radius_m >= solids.x_m_min) & (x + radius_m <= solids.x_m_max)
    inside = (fits_y[:, None] & fits_x).astype(np.uint8)
    for px, py in (place[3:5], place[5:7]):
        near = (abs(y - py) <= 1.5 * side)[:, None] & (abs(x - px) <= 1.5 * side)
        inside[near] = 1
    return inside.ravel()


def _heaps(
    solids: Solids, corner: Point, side: float, shape: tuple[int, int], reach: float
) -> tuple[Wholes, int]:
    """Number the heaps of blocked cells, by the squares that they keep the disc from; 0: none."""
    near = np.zeros(shape, np.uint8)
    if (solids.cells_of != -1).any():
        near_cells_kernel(solids, np.array([*corner, side, reach]), near)
    labels, count = ndimage.label(near, structure=np.ones((3, 3)))
    return labels.astype(np.int32).ravel(), int(count)


@kernel(Solids, "f8[::1]", "u1[:, ::1]")
def near_cells_kernel(solids: Solids, place: Floats, near: npt.NDArray[np.uint8]) -> None:
    """Mark the squares whose middles are within reach of a blocked cell."""
    corner_x, corner_y, side, reach = place[0], place[1], place[2], place[3]
    rows, columns = near.shape
    n, cell = solids.tile_cells, solids.cell_m
    for tr in range(solids.cells_of.shape[0]):
        for tc in range(solids.cells_of.shape[1]):
            at = solids.cells_of[tr, tc]
            if at == -1:
                continue
            for i in range(n * n):
                if at >= 0 and solids.cells[at + i] == 0:
                    continue
                x = solids.corner_x_m + (tc * n + i % n + 0.5) * cell
                y = solids.corner_y_m + (tr * n + i // n + 0.5) * cell
                r0 = max(int((y - reach - cell - corner_y) / side), 0)
                r1 = min(int((y + reach + cell - corner_y) / side), rows - 1)
                c0 = max(int((x - reach - cell - corner_x) / side), 0)
                c1 = min(int((x + reach + cell - corner_x) / side), columns - 1)
                for r in range(r0, r1 + 1):
                    dy = max(abs(corner_y + (r + 0.5) * side - y) - 0.5 * cell, 0.0)
                    for c in range(c0, c1 + 1):
                        dx = max(abs(corner_x + (c + 0.5) * side - x) - 0.5 * cell, 0.0)
                        if dx * dx + dy * dy < reach * reach:
                            near[r, c] = 1


@kernel()
def _polygon_distance(solids: Solids, i: int, x: float, y: float) -> float:
    first, last = solids.starts[i], solids.starts[i + 1]
    if is_inside(solids.vertices_m, first, last, x, y):
        return 0.0
    best = math.inf
    before = last - 1
    for j in range(first, last):
        p, q = solids.vertices_m[before], solids.vertices_m[j]
        best = min(best, point_to_segment(x, y, p[0], p[1], q[0], q[1]))
        before = j
    return best


@kernel()
def _note(firsts: Wholes, pairs: Wholes, square: int, who: int) -> None:
    """Count a pair, or write it: `firsts` points behind the place of each square's next."""
    if pairs.shape[0] == 0:
        firsts[square] += 1
    else:
        firsts[square] -= 1
        pairs[firsts[square]] = who


@kernel()
def _reach_at(place: Floats, x: float, y: float) -> float:
    """Reach from the middle of a square; next to the ends the disc stands where it stands."""
    side = place[2]
    for k in (3, 5):
        if abs(x - place[k]) <= 1.5 * side and abs(y - place[k + 1]) <= 1.5 * side:
            return float(max(place[7] - 2.2 * side, 0.0))
    return float(place[8])


@kernel(Solids, "i4[::1]", "f8[::1]", "i8", "i4[::1]", "i4[::1]")
def touching_kernel(
    solids: Solids, heaps: Wholes, place: Floats, known: int, firsts: Wholes, pairs: Wholes
) -> None:
    """
    List by squares who keeps the disc from standing there.

    Called twice: with no `pairs` it counts into `firsts`; then, with their running sums, it
    writes the numbers of the obstacles: polygons, discs, heaps from `known` on.
    """
    corner_x, corner_y, side, reach = place[0], place[1], place[2], place[8]
    columns = math.ceil((solids.x_m_max - solids.x_m_min) / side)
    columns = max(columns, 1)
    rows = (firsts.shape[0] - 1) // columns
    polygons = solids.boxes_m.shape[0]
    for i in range(polygons + solids.discs_m.shape[0]):
        if i < polygons:
            x0, y0 = solids.boxes_m[i, 0], solids.boxes_m[i, 1]
            x1, y1 = solids.boxes_m[i, 2], solids.boxes_m[i, 3]
        else:
            disc = solids.discs_m[i - polygons]
            x0, y0, x1, y1 = (
                disc[0] - disc[2],
                disc[1] - disc[2],
                disc[0] + disc[2],
                disc[1] + disc[2],
            )
            if disc[2] <= 0.0:
                continue
        if not x0 <= x1:
            continue  # a slot whose obstacle is gone
        r0 = max(int(max((y0 - reach - corner_y) / side, 0.0)), 0)
        r1 = int(min((y1 + reach - corner_y) / side, rows - 1.0))
        c0 = max(int(max((x0 - reach - corner_x) / side, 0.0)), 0)
        c1 = int(min((x1 + reach - corner_x) / side, columns - 1.0))
        for r in range(r0, r1 + 1):
            y = corner_y + (r + 0.5) * side
            for c in range(c0, c1 + 1):
                x = corner_x + (c + 0.5) * side
                if i < polygons:
                    distance = _polygon_distance(solids, i, x, y)
                else:
                    disc = solids.discs_m[i - polygons]
                    distance = math.hypot(x - disc[0], y - disc[1]) - disc[2]
                if distance < _reach_at(place, x, y):
                    _note(firsts, pairs, r * columns + c, i)
    for square in range(heaps.shape[0]):
        if heaps[square] > 0:
            x = corner_x + (square % columns + 0.5) * side
            y = corner_y + (square // columns + 0.5) * side
            if _reach_at(place, x, y) == reach:
                _note(firsts, pairs, square, known + heaps[square])


def _through(
    firsts: Wholes,
    pairs: Wholes,
    inside: npt.NDArray[np.uint8],
    ends: list[int],
    shape: tuple[int, int],
    fixed: npt.NDArray[np.uint8],
    obstacle_m: float,
) -> tuple[Wholes | None, Wholes]:
    """Return the squares of the cheapest way, None if there is none, and who is on it."""
    before = np.empty(shape[0] * shape[1], np.int32)
    found = cheapest_kernel(
        firsts, pairs, inside, fixed, shape[1], ends[0], ends[1], obstacle_m, before
    )
    if not found:
        return None, np.empty(0, np.int32)
    squares = [ends[1]]
    while squares[-1] != ends[0]:
        squares.append(int(before[squares[-1]]))
    way = np.array(squares[::-1], np.int32)
    on_it = [pairs[firsts[square] : firsts[square + 1]] for square in way]
    return way, np.unique(np.concatenate(on_it))


@kernel(
    *("i4[::1]", "i4[::1]", "u1[::1]", "u1[::1]", "i8", "i8", "i8", "f8", "i4[::1]"),
    allocates=True,
)
def cheapest_kernel(
    firsts: Wholes,
    pairs: Wholes,
    inside: npt.NDArray[np.uint8],
    fixed: npt.NDArray[np.uint8],
    columns: int,
    start: int,
    goal: int,
    obstacle_m: float,
    before: Wholes,
) -> bool:
    """
    Dijkstra over squares; coming to an obstacle that was not on the square before costs extra.

    Args:
        fixed: Obstacles that cannot be passed at all.
        before: Receives the square before each one on its cheapest way.
    """
    count = inside.shape[0]
    costs = np.full(count, math.inf)
    keys, values = np.empty(8 * count + 8), np.empty(8 * count + 8, np.int32)
    costs[start] = 0.0
    size = push(keys, values, 0, 0.0, start)
    while size > 0:
        cost, at = keys[0], int(values[0])
        size = pop(keys, values, size)
        if at == goal:
            return True
        if cost > costs[at]:
            continue
        column = at % columns
        for dr in (-1, 0, 1):
            for dc in (-1, 0, 1):
                to = at + dr * columns + dc
                if to < 0 or to >= count or not 0 <= column + dc < columns or inside[to] == 0:
                    continue
                new = cost + math.sqrt(float(dr * dr + dc * dc))
                closed = False
                for k in range(firsts[to], firsts[to + 1]):
                    who = pairs[k]
                    closed |= fixed[who] == 1
                    known = False
                    for m in range(firsts[at], firsts[at + 1]):
                        known |= pairs[m] == who
                    if not known:
                        new += obstacle_m
                if not closed and new < costs[to] - 1e-9:
                    costs[to] = new
                    before[to] = at
                    size = push(keys, values, size, new, to)
    return False


def _corners(middles: Floats) -> Floats:
    """Leave out what lies on a straight line between its neighbours."""
    if len(middles) < 3:
        return middles
    steps = np.diff(middles, axis=0)
    bends = np.abs(np.diff(steps, axis=0)).max(axis=1) > 1e-9
    kept: Floats = middles[np.concatenate([[True], bends, [True]])]
    return kept


def _crossing(way: Wholes, middles: Floats, firsts: Wholes, pairs: Wholes, one: int) -> Point:
    """Half way along the stretch on which the way leads through an obstacle."""
    on_it = [i for i, at in enumerate(way) if one in pairs[firsts[at] : firsts[at + 1]]]
    x, y = middles[on_it[len(on_it) // 2]]
    return float(x), float(y)


def _named(snapshot: Snapshot, solids: Solids, one: int, place: Point) -> Movable:
    polygons, discs = len(solids.boxes_m), len(solids.discs_m)
    if one < polygons:
        return Movable(*snapshot.name_of("polygon", one), *place)
    if one < polygons + discs:
        return Movable(*snapshot.name_of("disc", one - polygons), *place)
    return Movable(_layer_at(snapshot, place), CELLS, *place)


def _layer_at(snapshot: Snapshot, place: Point) -> str:
    """The layer with the blocked cell that is nearest to a place."""
    cell_m = snapshot.settings.cell_m
    best, name = math.inf, ""
    for layer, settings in snapshot.layers().items():
        for (x, y), cells in snapshot.cells(layer):
            blocked = cells != 0 if settings.unknown_blocks else cells == 1
            rows, columns = np.nonzero(blocked)
            if len(rows):
                dx = x + (columns + 0.5) * cell_m - place[0]
                dy = y + (rows + 0.5) * cell_m - place[1]
                apart = float((dx * dx + dy * dy).min())
                if apart < best:
                    best, name = apart, layer
    return name
