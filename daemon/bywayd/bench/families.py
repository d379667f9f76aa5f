"""
Families with room: where to go is the question, not whether the vehicle fits.

A brick and timber yard of our own invention; see `families_tight` for the narrow ones and for
the list of all.
"""

import math
from typing import Final

import numpy as np

from bywayd.bench.cases import (
    CELL_M,
    Case,
    Ground,
    Lot,
    Pose,
    Rng,
    Size,
    Yard,
    pose_from_middle,
    row_of_packs,
)
from bywayd.bench.vehicles import EVERY

#: Sites of 400 x 400 m take long to fill, and real ones are asked more than once.
BIG_SHARED_BY: Final = 16
BIG_M: Final = 400.0
CLUTTER_COUNT: Final = 400


def _anywhere(rng: Rng, width_m: float, height_m: float, margin_m: float) -> Pose:
    return (
        float(rng.uniform(margin_m, width_m - margin_m)),
        float(rng.uniform(margin_m, height_m - margin_m)),
        float(rng.uniform(-math.pi, math.pi)),
    )


def _apart(
    rng: Rng, width_m: float, height_m: float, size: Size, distance_m: float
) -> tuple[Pose, Pose]:
    """Return two poses so far apart, with room to turn before the limits."""
    margin_m = size.length_m + (1.0 if size.reverses else 2.0 * size.radius_m)
    while True:
        start = _anywhere(rng, width_m, height_m, margin_m)
        goal = _anywhere(rng, width_m, height_m, margin_m)
        if math.dist(start[:2], goal[:2]) >= distance_m:
            return start, goal


def _scatter(rng: Rng, yard: Yard, count: int) -> None:
    """Put so many packs and pallets wherever there is no need to keep free."""
    for _ in range(count):
        length_m, width_m = ((4.2, 1.2), (2.4, 1.2), (1.2, 1.0))[int(rng.integers(3))]
        x, y = rng.uniform(0.0, yard.width_m), rng.uniform(0.0, yard.height_m)
        yard.block(x, y, length_m, width_m, float(rng.uniform(0.0, math.pi)), loose=True)


def open_yard(lot: Lot) -> Case:
    """A yard with some loose packs."""
    rng = lot.rng()
    vehicle, size = lot.vehicle(EVERY)
    stretch = max(1.0, size.length_m / 5.0)
    yard = Yard(64.0 * stretch, 44.0 * stretch)
    start, goal = _apart(rng, yard.width_m, yard.height_m, size, 0.35 * yard.width_m)
    for pose in (start, goal):
        yard.keep_free(pose, size, lead_m=2.0)
    _scatter(rng, yard, int(rng.integers(8, 15)))
    return lot.case(vehicle, start, goal, yard.ground())


def stacks(lot: Lot) -> Case:
    """Rows of stacks; start and goal in two of the aisles."""
    rng = lot.rng()
    vehicle, size = lot.vehicle(EVERY)
    roomy = 1.05 if size.reverses else 1.2
    aisle_m = size.turn_width_m * float(rng.uniform(roomy, 1.5))
    cross_m = size.turn_width_m * float(rng.uniform(roomy, 1.5))
    rows, blocks = int(rng.integers(4, 7)), int(rng.integers(2, 4))
    deep_m, long_m = float(rng.uniform(1.2, 3.0)), float(rng.uniform(10.0, 18.0))
    yard = Yard(blocks * (long_m + cross_m) + cross_m, rows * (deep_m + aisle_m) + aisle_m)
    for row in range(rows):
        y = aisle_m + row * (deep_m + aisle_m)
        for block in range(blocks):
            x = cross_m + block * (long_m + cross_m)
            row_of_packs(rng, yard, x, x + long_m, y, y + deep_m, holes=0.1)
    aisles = rng.choice(rows + 1, 2, replace=False)

    def pose_in(aisle: int) -> Pose:
        slack_m = 0.5 * (aisle_m - size.width_m) - 0.3
        y = aisle * (deep_m + aisle_m) + 0.5 * aisle_m + 0.6 * float(rng.uniform(-slack_m, slack_m))
        # not at the end of a block: whoever cannot reverse could not turn in just before it
        block = int(rng.integers(blocks))
        x = cross_m + block * (long_m + cross_m) + long_m * float(rng.uniform(0.4, 0.6))
        heading_rad = float(rng.choice([0.0, math.pi])) + float(rng.uniform(-0.03, 0.03))
        return pose_from_middle(x, y, heading_rad, size)

    start, goal = (pose_in(int(aisle)) for aisle in aisles)
    return lot.case(vehicle, start, goal, yard.ground())


def maze(lot: Lot) -> Case:
    """Brick walls with one way through, or few: a random spanning tree of a grid (Prim 1957)."""
    rng = lot.rng()
    vehicle, size = lot.vehicle([name for name in EVERY if name != "van"])
    wide_m = max(size.turn_width_m * float(rng.uniform(1.1, 1.35)), size.length_m + 0.8)
    columns, rows, thick_m = 7, 5, 0.3
    pitch_m = wide_m + thick_m
    open_sides = _spanning_tree(rng, columns, rows)
    walls = [
        (a, b)
        for a in range(columns * rows)
        for b in ((a + 1) if (a + 1) % columns else -1, a + columns)
        if 0 <= b < columns * rows and (a, b) not in open_sides
    ]
    for i in rng.choice(len(walls), 3, replace=False):
        open_sides.add(walls[i])
    yard = Yard(columns * pitch_m + thick_m, rows * pitch_m + thick_m)
    for a, b in walls:
        if (a, b) in open_sides:
            continue
        x, y = (b % columns) * pitch_m, (b // columns) * pitch_m
        if b == a + 1:
            yard.span(x, y, x + thick_m, y + pitch_m + thick_m)
        else:
            yard.span(x, y, x + pitch_m + thick_m, y + thick_m)

    def pose_in(cell: int) -> Pose:
        ways = [(b if a == cell else a) - cell for a, b in sorted(open_sides) if cell in (a, b)]
        to = int(rng.choice(ways))
        heading_rad = {1: 0.0, -1: math.pi, columns: 0.5 * math.pi, -columns: -0.5 * math.pi}[to]
        x = (cell % columns) * pitch_m + thick_m + 0.5 * wide_m
        y = (cell // columns) * pitch_m + thick_m + 0.5 * wide_m
        return pose_from_middle(x, y, heading_rad, size)

    start = pose_in(int(rng.integers(rows)) * columns)
    goal = pose_in(int(rng.integers(rows)) * columns + columns - 1)
    return lot.case(vehicle, start, goal, yard.ground())


def _spanning_tree(rng: Rng, columns: int, rows: int) -> set[tuple[int, int]]:
    """Return the pairs of neighbouring cells (lower, higher) between which there is no wall."""
    reached, found = {int(rng.integers(columns * rows))}, set[tuple[int, int]]()
    while len(reached) < columns * rows:
        edges = sorted(
            (cell, cell + step)
            for cell in reached
            for step, inside in (
                (1, cell % columns < columns - 1),
                (-1, cell % columns > 0),
                (columns, cell < columns * (rows - 1)),
                (-columns, cell >= columns),
            )
            if inside and cell + step not in reached
        )
        a, b = edges[int(rng.integers(len(edges)))]
        reached.add(b)
        found.add((min(a, b), max(a, b)))
    return found


def trap(lot: Lot) -> Case:
    """Walls on three sides, open towards the start, and the goal right behind them."""
    rng = lot.rng()
    vehicle, size = lot.vehicle(EVERY)
    unit_m = max(1.0, size.turn_width_m / 3.2)
    mouth_m, deep_m = float(rng.uniform(9.0, 16.0)) * unit_m, float(rng.uniform(9.0, 15.0)) * unit_m
    before_m = 4.0 + 2.5 * size.length_m + 2.0 * size.radius_m
    beside_m = 1.4 * size.turn_width_m
    yard = Yard(before_m + deep_m + before_m, mouth_m + 2.0 * beside_m + 1.0)
    low, high = beside_m, beside_m + mouth_m + 1.0
    back = before_m + deep_m
    yard.span(before_m, low, back, low + 0.5)
    yard.span(before_m, high - 0.5, back, high)
    yard.span(back, low, back + 0.5, high)
    middle = 0.5 * (low + high)

    def pose_at(x: float, heading_rad: float) -> Pose:
        y = middle + 0.25 * mouth_m * float(rng.uniform(-1.0, 1.0))
        return pose_from_middle(x, y, heading_rad, size)

    # whoever cannot reverse must be able to turn away before the walls
    off_m = 0.6 * size.length_m + (0.0 if size.reverses else 2.2 * size.radius_m)
    start = pose_at(before_m - off_m, float(rng.uniform(-0.3, 0.3)))
    goal = pose_at(back + 0.5 * before_m + 1.0, float(rng.uniform(-0.3, 0.3)))
    for pose in (start, goal):
        yard.keep_free(pose, size, lead_m=0.5 * before_m)
    for _ in range(4):  # something to look at on the way in; the way around stays free
        x, y = rng.uniform(before_m, back - 2.0), rng.uniform(low + 1.0, high - 1.0)
        yard.block(float(x), float(y), 1.2, 1.0, float(rng.uniform(0.0, math.pi)), loose=True)
    return lot.case(vehicle, start, goal, yard.ground())


def big(lot: Lot) -> Case:
    """A site of 400 x 400 m with some six hundred stacks."""
    of_site = lot.rng(shared_by=BIG_SHARED_BY)
    pitch_m = float(of_site.uniform(15.5, 16.5))
    count = int(BIG_M / pitch_m)
    stacks_m: list[tuple[float, float, float, float, float]] = []
    for column in range(count):
        for row in range(count):
            if of_site.uniform() < 0.03:
                continue
            length_m, width_m = of_site.uniform(4.0, 9.0), of_site.choice([1.2, 2.4, 3.6])
            x = (column + 0.5) * pitch_m + of_site.uniform(-1.0, 1.0)
            y = (row + 0.5) * pitch_m + of_site.uniform(-1.0, 1.0)
            turned = 0.5 * math.pi * of_site.integers(2) + of_site.uniform(-0.1, 0.1)
            stacks_m.append((float(x), float(y), float(length_m), float(width_m), float(turned)))
    yard = Yard(BIG_M, BIG_M)
    for x, y, length_m, width_m, heading_rad in stacks_m:
        yard.block(x, y, length_m, width_m, heading_rad)
    rng = lot.rng()
    vehicle, size = lot.vehicle(EVERY)
    while True:
        start, goal = _apart(rng, BIG_M, BIG_M, size, 200.0)
        free = Yard(BIG_M, BIG_M)
        for pose in (start, goal):
            free.keep_free(pose, size, lead_m=0.0 if size.reverses else 0.7 * size.radius_m)
        if not any(free.is_kept_free(x, y, 0.5 * math.hypot(a, b)) for x, y, a, b, _ in stacks_m):
            return lot.case(vehicle, start, goal, yard.ground())


def clutter(lot: Lot) -> Case:
    """Four hundred small obstacles; in every third case as cells, as a sensor would tell them."""
    rng = lot.rng()
    vehicle, size = lot.vehicle(EVERY)
    pitch_m = size.width_m + 0.32 * size.radius_m + float(rng.uniform(1.1, 1.5))
    width_m = pitch_m * math.sqrt(1.5 * CLUTTER_COUNT)
    yard = Yard(width_m, width_m / 1.5)
    start, goal = _apart(rng, yard.width_m, yard.height_m, size, 0.5 * width_m)
    for pose in (start, goal):
        yard.keep_free(pose, size, lead_m=0.5 * size.radius_m)
    places: list[tuple[float, float]] = []
    while len(places) < CLUTTER_COUNT:
        x, y = float(rng.uniform(0.0, yard.width_m)), float(rng.uniform(0.0, yard.height_m))
        near = sum(math.hypot(x - a, y - b) < 0.62 * pitch_m for a, b in places)
        half_m = float(rng.uniform(0.1, 0.3))
        if near or yard.is_kept_free(x, y, 1.5 * half_m):
            continue
        places.append((x, y))
        if rng.uniform() < 0.5:
            yard.post(x, y, half_m)
        else:
            yard.block(x, y, 2.0 * half_m, 1.6 * half_m, float(rng.uniform(0.0, math.pi)))
    ground = yard.ground()
    return lot.case(vehicle, start, goal, _as_cells(ground) if lot.number % 3 == 2 else ground)


def _as_cells(ground: Ground) -> Ground:
    """Return the same obstacles as cells: occupied where the middle of a cell is inside one."""
    x0, y0, x1, y1 = ground.limits_m
    columns, rows = int((x1 - x0) / CELL_M), int((y1 - y0) / CELL_M)
    cells = np.zeros((rows, columns), np.uint8)
    rings = list(ground.polygons.values())
    angles = np.linspace(0.0, 2.0 * math.pi, 16, endpoint=False)
    for x, y, radius_m in ground.discs.values():
        rings.append(radius_m * np.column_stack([np.cos(angles), np.sin(angles)]) + (x, y))
    for ring in rings:
        low = np.maximum(((ring.min(axis=0) - (x0, y0)) / CELL_M).astype(int), 0)
        high = ((ring.max(axis=0) - (x0, y0)) / CELL_M).astype(int) + 1
        here = cells[low[1] : high[1], low[0] : high[0]]
        ys = y0 + (low[1] + np.arange(here.shape[0]) + 0.5) * CELL_M
        xs = x0 + (low[0] + np.arange(here.shape[1]) + 0.5) * CELL_M
        inside = np.ones(here.shape, bool)
        for a, b in zip(ring, np.roll(ring, -1, axis=0), strict=True):  # convex, anticlockwise
            cross = (b[0] - a[0]) * (ys[:, None] - a[1]) - (b[1] - a[1]) * (xs[None, :] - a[0])
            inside &= cross >= 0.0
        here[inside] = 1
    return Ground(ground.limits_m, cells=cells)
