"""The disc's shortest way: against exact lengths, against another visibility graph, and laws."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.planning.bounds.bound_scenes import (
    ALL_WORK,
    WIDE,
    bound_of,
    box,
    disc,
    graph_length,
    moved,
    random_polygons,
    solids_of,
)

from byway_planning import Site
from byway_planning.bounds import LowerBound, bound, outgrown
from byway_planning.bounds.chase import CORNERS
from byway_planning.bounds.sight import MET
from byway_planning.vehicles import footprint

SMALL_M = 1e-4
HEXAGON = [(math.cos(k * math.pi / 3), math.sin(k * math.pi / 3)) for k in range(6)]
TRAP = [
    *((1.0, -2.0), (4.0, -2.0), (4.0, 2.0), (1.0, 2.0), (1.0, 1.5), (3.5, 1.5)),
    *((3.5, -1.5), (1.0, -1.5)),
]
SQUARE = box(0.0, 0.0, 2.0, 2.0)

# shortest_paths.csv, obstacle cases for a point: exact lengths, confirmed there by a visibility
# graph of shapely to 1e-12
POINT_CASES = {
    "square_front": ([SQUARE], (-3, 0), (3, 0), 6.472135955000),
    "square_touching": ([SQUARE], (-1, 0), (1, 0), 4.0),
    "square_diag": ([SQUARE], (-3, -3), (3, 3), 8.944271909999),
    "square_offset": ([SQUARE], (-3, 0.5), (3, 0.5), 6.123105625618),
    "wall_end": ([box(0.0, -1.5, 0.002, 7.0)], (-3, 0), (4, 0), 8.077960818022),
    "two_squares_slalom": (
        [box(2.5, -4.0, 1.0, 10.0), box(5.5, 4.0, 1.0, 10.0)], (0, 0), (8, 0), 9.300563079746,
    ),
    "u_trap": ([TRAP], (2, 0), (8, 0), 9.774911592732),
    "triangle": ([[(0, 0), (4, 0), (2, 3)]], (-1, 1), (5, 1), 6.828427124746),
    "hexagon": ([HEXAGON], (-2, 0), (2, 0), 4.464101615138),
}  # fmt: skip

# shortest_paths.csv, a point round a disc: tangents and an arc, closed form
DISC_CASES = [
    (1.0, (-2, 0), (2, 0), 4.511299166334),
    (1.0, (-1, 0), (1, 0), 3.141592653590),
    (1.0, (-3, 0), (3, 0), 6.336528068401),
    (2.0, (-3, 0), (0, 5), 5.830951894845),
    (1.0, (-2, 0.5), (2, 0.5), 4.128483236037),
    (1.5, (-4, -1), (3, 2), 7.806882838188),
]


@pytest.mark.parametrize("case", POINT_CASES)
def test_a_point_round_polygons(case):
    """A point is a tiny disc among polygons drawn in by its radius: it goes a little shorter."""
    polygons, start, goal, exact_m = POINT_CASES[case]
    drawn_in = [footprint.shrunk(np.array(ring, float), SMALL_M) for ring in polygons]
    found_m = bound_of(solids_of(drawn_in), disc(SMALL_M), start, goal)
    assert exact_m - 10.0 * SMALL_M < found_m <= exact_m + 1e-9


@pytest.mark.parametrize(("obstacle_m", "start", "goal", "exact_m"), DISC_CASES)
def test_a_point_round_a_disc(obstacle_m, start, goal, exact_m):
    solids = solids_of([], [(0.0, 0.0, obstacle_m - SMALL_M)])
    found_m = bound_of(solids, disc(SMALL_M), start, goal)
    assert found_m <= exact_m + 1e-9
    assert found_m == pytest.approx(exact_m, abs=1e-5)


def test_a_disc_round_a_disc():
    """shortest_paths.csv: disc R=1, robot radius 0.5, from (-3, 0) to (3, 0)."""
    found_m = bound_of(solids_of([], [(0.0, 0.0, 1.0)]), disc(0.5), (-3, 0), (3, 0))
    assert found_m == pytest.approx(6.766948749502, abs=1e-9)


def test_a_disc_round_a_square():
    """shortest_paths.csv: square [-1,1]^2, robot radius 0.5, from (-3, 0) to (3, 0)."""
    found_m = bound_of(solids_of([SQUARE]), disc(0.5), (-3, 0), (3, 0))
    assert found_m == pytest.approx(7.048059958440, abs=1e-9)


@pytest.mark.parametrize("seed", range(10))
def test_between_graphs_of_larger_and_of_smaller_obstacles(seed):
    """The exact length lies between what two visibility graphs of shapely find."""
    polygons = random_polygons(seed, 6)
    start, goal, radius_m = (-12.0, 0.5), (12.0, -0.5), 0.3 + 0.06 * seed
    found_m = bound_of(solids_of(polygons), disc(radius_m), start, goal)
    assert graph_length(polygons, radius_m, start, goal, outer=False) - 1e-6 <= found_m
    assert found_m <= graph_length(polygons, radius_m, start, goal, outer=True) + 1e-9
    assert found_m > math.dist(start, goal) + 1e-3, "a scene without a detour shows nothing"


def test_the_limits_of_the_site_count():
    """Between a stack and the fence there is no way, so the disc goes round the other side."""
    limits = (0.0, 0.0, 20.0, 10.0)
    stack, wall = box(10.0, 5.6, 1.0, 7.0), box(10.0, 22.1, 1.0, 40.0)  # from y = 2.1 upwards
    found_m = bound_of(solids_of([stack], limits_m=limits), disc(0.5), (5, 8), (15, 8))
    assert found_m == pytest.approx(
        bound_of(solids_of([wall]), disc(0.5), (5, 8), (15, 8)), abs=1e-9
    )
    over = bound_of(solids_of([stack]), disc(0.5), (5, 8), (15, 8))
    assert over < found_m - 1.0


@pytest.mark.parametrize(("gap_m", "is_open"), [(0.998, False), (1.002, True)])
def test_a_gap_is_passed_by_what_fits(gap_m, is_open):
    walls = [
        box(0.0, 10.0 + 0.5 * gap_m, 1.0, 20.0, 0.0),
        box(0.0, -10.0 - 0.5 * gap_m, 1.0, 20.0, 0.0),
    ]
    found_m = bound_of(
        solids_of(walls, limits_m=(-9.0, -9.0, 9.0, 9.0)), disc(0.5), (-5, 2), (5, -2)
    )
    assert (found_m < 12.0) if is_open else found_m == math.inf


@settings(max_examples=50, deadline=None)
@given(st.floats(-3.0, 3.0), st.floats(-0.9, 0.9), st.sampled_from([0.0, 1000.0]), st.booleans())
def test_a_gap_just_as_wide_as_the_disc_is_open(turned, aside_m, away_m, round_ends):
    """Where corners face each other at just the width of the disc, the string touches both."""
    walls = [box(-10.5, 0.0, 20.0, 0.5), box(10.5 + aside_m, aside_m, 20.0, 0.5)]
    ends = [(-0.5, 0.0, 0.3), (0.5, 0.0, 0.3)]

    def length_m(radius_m: float) -> float:
        rings = [moved(ring, turned, (away_m, -away_m)) for ring in walls]
        discs = (
            [(*moved(p[:2], turned, (away_m, -away_m)), p[2]) for p in ends] if round_ends else []
        )
        limits = (away_m - 30.0, -away_m - 30.0, away_m + 30.0, -away_m + 30.0)
        start, goal = (moved(p, turned, (away_m, -away_m)) for p in ((-3.0, -4.0), (3.0, 4.0)))
        return bound_of(solids_of(rings, discs, limits_m=limits), disc(radius_m), start, goal)

    width_m = min(
        math.hypot(1.0 + aside_m, max(abs(aside_m) - 0.5, 0.0)), 0.4 if round_ends else 9.0
    )
    assert length_m(0.5 * width_m) < length_m(0.5 * width_m - 1e-4) + 1e-2


@pytest.mark.parametrize(
    ("half_gap_m", "half_width_m", "start", "goal"),
    [
        (0.499, 1.0, (-5, -3), (5, -3)),  # between the tips, 2 mm too narrow
        (0.0, 0.001, (-0.5002, -4), (0.5002, -4)),  # tip to tip: the arc crosses from side to side
    ],
)
def test_an_arc_through_a_closed_gap_is_refused(half_gap_m, half_width_m, start, goal):
    """Two needles, from below and from above. All is free but the arc round a tip."""
    needle = np.array([(0.0, -half_gap_m), (-half_width_m, -6.0), (half_width_m, -6.0)])
    fence = (-9.0, -6.0, 9.0, 6.0)
    shut = solids_of([needle, -needle], limits_m=fence)
    assert bound_of(shut, disc(0.5), start, goal) == math.inf
    assert bound_of(solids_of([needle], limits_m=fence), disc(0.5), start, goal) < 14.0


scenes = st.builds(random_polygons, st.integers(0, 10**6), st.integers(1, 7))


@settings(max_examples=40, deadline=None)
@given(scenes, st.floats(0.05, 1.2))
def test_one_more_obstacle_never_lowers_it(polygons, radius_m):
    start, goal = (-12.0, 0.5), (12.0, -0.5)
    fewer = bound_of(solids_of(polygons[:-1]), disc(radius_m), start, goal)
    assert bound_of(solids_of(polygons), disc(radius_m), start, goal) >= fewer - 1e-9


@settings(max_examples=40, deadline=None)
@given(scenes, st.floats(0.05, 1.2), st.floats(-3.0, 3.0), st.floats(-20.0, 20.0))
def test_the_same_from_goal_to_start_and_wherever_the_scene_lies(polygons, radius_m, turned, dx):
    start, goal = np.array([-12.0, 0.5]), np.array([12.0, -0.5])
    one = bound_of(solids_of(polygons), disc(radius_m), start, goal)
    assert bound_of(solids_of(polygons), disc(radius_m), goal, start) == pytest.approx(
        one, abs=1e-9
    )
    there = [moved(ring, turned, (dx, 7.0)) for ring in polygons]
    ends = (moved(place, turned, (dx, 7.0)) for place in (start, goal))
    assert bound_of(solids_of(there), disc(radius_m), *ends) == pytest.approx(one, abs=1e-6)


@settings(max_examples=40, deadline=None)
@given(scenes, st.floats(0.05, 1.2), st.integers(50, 4000))
def test_stopped_early_it_is_lower_and_slices_change_nothing(polygons, radius_m, work):
    solids, body = solids_of(polygons), disc(radius_m).body()
    whole = LowerBound(solids, body, (-12.0, 0.5, 0.0), (12.0, -0.5, 0.0))
    sliced = LowerBound(solids, body, (-12.0, 0.5, 0.0), (12.0, -0.5, 0.0))
    assert whole.advance(ALL_WORK)
    seen = [sliced.bound_m]
    while not sliced.advance(work * len(seen)):
        seen.append(sliced.bound_m)
        once = bound_of(
            solids, disc(radius_m), (-12, 0.5), (12, -0.5), work_max=work * len(seen[1:])
        )
        assert once == seen[-1]
    assert seen == sorted(seen)
    assert seen[-1] <= whole.bound_m
    assert sliced.bound_m == whole.bound_m


@settings(max_examples=30, deadline=None)
@given(scenes, st.floats(0.05, 1.2))
def test_obstacles_met_on_demand_are_enough(polygons, radius_m):
    """A search that knows all obstacles from the start finds the same length."""
    solids = solids_of(polygons)
    search = LowerBound(solids, disc(radius_m).body(), (-12.0, 0.5, 0.0), (12.0, -0.5, 0.0))
    (way,) = search._ways
    corners = len(way._ground.corners)
    way._chase.marks[:] = MET
    way._chase.met[:] = np.arange(corners)
    way._chase.counts[CORNERS] = corners
    search.advance(ALL_WORK)
    on_demand = bound_of(solids, disc(radius_m), (-12.0, 0.5), (12.0, -0.5))
    assert on_demand == pytest.approx(search.bound_m, abs=1e-9)


def test_cramped_arrays_grow_without_changing_anything(monkeypatch):
    polygons = random_polygons(3, 60, spread_m=40.0)
    roomy = bound_of(solids_of(polygons), disc(0.3), (-24.0, 0.0), (24.0, 0.0))
    monkeypatch.setattr(bound, "BENDS_AT_FIRST", 1)
    monkeypatch.setattr(bound, "HOPES_AT_FIRST", 4)
    assert bound_of(solids_of(polygons), disc(0.3), (-24.0, 0.0), (24.0, 0.0)) == roomy


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 10**6), st.floats(0.25, 0.9) | st.sampled_from([0.25, 0.5, 0.75]))
def test_cells_count_for_no_more_than_they_cover(seed, radius_m):
    """A grid lies between the squares of its cells as polygons and the discs inside them."""
    rng = np.random.default_rng(seed)
    cells = np.zeros((16, 24), np.uint8)
    for _ in range(4):
        r, c = rng.integers(0, 14), rng.integers(5, 18)
        cells[r : r + rng.integers(1, 7), c : c + rng.integers(1, 4)] = 1
    cells[:, -5:] = 0  # room for the disc at both ends
    limits = (0.0, 0.0, 12.0, 8.0)
    grid = Site.from_grid(cells, cell_m=0.5).snapshot.solids()
    middles = [(0.5 * c + 0.25, 0.5 * r + 0.25) for r, c in np.argwhere(cells)]
    squares = solids_of([box(*middle, 0.5, 0.5) for middle in middles], limits_m=limits)
    discs = solids_of([], [(*middle, 0.25) for middle in middles], limits_m=limits)
    start, goal = (1.2, 3.0), (10.8, 5.0)
    found_m = bound_of(grid, disc(radius_m), start, goal)
    assert found_m <= bound_of(squares, disc(radius_m), start, goal) + 1e-9
    assert found_m >= bound_of(discs, disc(radius_m), start, goal) - 1e-9


def test_a_wall_of_cells_is_a_wall():
    """Thin lines of cells, straight and oblique, hold the disc up; blocked tiles as well."""
    cells = np.zeros((200, 200), np.uint8)
    cells[40, :180] = 1
    cells[np.arange(60, 190), np.arange(20, 150)] = 1
    found = bound_of(Site.from_grid(cells, cell_m=0.1).snapshot.solids(), disc(0.3), (3, 1), (3, 6))
    assert found == pytest.approx(2 * math.hypot(14.95, 2.5), abs=1.5)
    cells[40, :] = 1
    assert bound_of(
        Site.from_grid(cells, cell_m=0.1).snapshot.solids(), disc(0.3), (3, 1), (3, 6)
    ) == math.inf  # fmt: skip
    unknown = np.zeros((256, 256), np.uint8)
    unknown[64:192, 64:192] = 1
    ring = bound_of(
        Site.from_grid(unknown, cell_m=0.1).snapshot.solids(), disc(0.3), (3, 12.8), (22.6, 12.8)
    )
    wall = bound_of(solids_of([box(12.8, 12.8, 12.8, 12.8)]), disc(0.3), (3, 12.8), (22.6, 12.8))
    assert wall - 0.1 < ring <= wall + 1e-9


def test_a_ground_serves_smaller_discs():
    polygons = random_polygons(11, 8)
    solids = solids_of(polygons)
    ground = outgrown(solids, 2.0)
    for radius_m in (0.1, 0.5, 1.0):
        shared = bound_of(solids, disc(radius_m), (-12, 0.5), (12, -0.5), ground=ground)
        assert shared == bound_of(solids, disc(radius_m), (-12, 0.5), (12, -0.5))
    with pytest.raises(ValueError, match=r"prepared for discs up to 2\.0 m"):
        bound_of(solids, disc(2.5), (-12, 0.5), (12, -0.5), ground=ground)
    with pytest.raises(ValueError, match="not of the same revision"):
        bound_of(solids_of([*polygons, SQUARE]), disc(0.5), (-12, 0.5), (12, -0.5), ground=ground)


def test_wide_scenes_lose_nothing_to_rounding():
    """Two kilometres from the origin, among a thousand corners."""
    rng = np.random.default_rng(5)
    near = [box(*rng.uniform(-50, 50, 2), 2.0, 3.0, rng.uniform(0, 3)) for _ in range(250)]
    near = [b for b in near if np.abs(b[:, 1]).min() > 0.5 or np.abs(b[:, 0]).max() < 45.0]
    far = [moved(ring, 0.0, (2000.0, 2000.0)) for ring in near]
    here = bound_of(solids_of(near), disc(0.4), (-58, 0), (58, 0))
    limits = tuple(value + 2000.0 for value in WIDE)
    there = bound_of(solids_of(far, limits_m=limits), disc(0.4), (1942, 2000), (2058, 2000))
    assert there == pytest.approx(here, abs=1e-7)
