"""Floods against scipy's Dijkstra, and masks that lose no square where the disc has room."""

import math

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.sparse import coo_array
from scipy.sparse.csgraph import dijkstra
from tests.planning.search.search_scenes import LIMITS, box, car, pen, question

from byway_planning import Disc, ForwardCar, Site
from byway_planning.search.floods import (
    BUCKETS,
    DIAGONAL_STEP,
    FINE_SQUARES_MAX,
    GUIDE_CELLS,
    PROOF_CELLS,
    SIDE_STEP,
    UNREACHED,
    FloodGround,
    FloodRoom,
    flood_kernel,
    flood_m,
    used_tiles,
    window_for,
)
from byway_planning.search.question import flood_length_kernel, middle_of

EVERYWHERE = 10**8  # a cost to go on for that floods everything


def flooded(mask, origin, other, stretch=1.0, beyond=EVERYWHERE, room=None):
    """The cost to the other end, and the costs of all squares, inf where it did not come."""
    room = FloodRoom() if room is None else room
    room.fit(mask.size)
    cost = np.empty(mask.shape, np.int32)
    mask.flags.writeable = False
    told = flood_kernel(
        mask, origin, other, stretch, beyond, cost, room.heads, room.entries, room.links
    )
    return told, np.where(cost.ravel() >= UNREACHED, np.inf, cost.ravel())


def by_scipy(mask, origin, other):
    """Costs over the squares that are free or an end, by scipy.sparse.csgraph."""
    free = mask.astype(bool).ravel()
    free[[origin, other]] = True
    squares = np.flatnonzero(free)
    width = mask.shape[1]
    rows, columns, costs = [], [], []
    for step, cost in (
        *((s, SIDE_STEP) for s in (1, -1, width, -width)),
        *((s, DIAGONAL_STEP) for s in (width + 1, width - 1, 1 - width, -1 - width)),
    ):
        to = squares + step
        open_ = free[to]
        rows.append(squares[open_])
        columns.append(to[open_])
        costs.append(np.full(open_.sum(), cost))
    entries = (np.concatenate(costs), (np.concatenate(rows), np.concatenate(columns)))
    graph = coo_array(entries, shape=(mask.size, mask.size)).tocsr()
    return dijkstra(graph, indices=origin)


def random_mask(rng, density):
    rows, columns = rng.integers(1, 40, 2)
    return np.pad((rng.random((rows, columns)) < density).astype(np.uint8), 1)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32), st.sampled_from([0.0, 0.35, 0.6, 0.8, 1.0]))
def test_a_flood_is_dijkstras_algorithm_over_the_free_squares(seed, density):
    """Against scipy.sparse.csgraph; the ends count as free whatever the mask says."""
    rng = np.random.default_rng(seed)
    mask = random_mask(rng, density)
    inner = np.flatnonzero(np.pad(np.ones((mask.shape[0] - 2, mask.shape[1] - 2), bool), 1))
    origin, other = (int(square) for square in rng.choice(inner, 2))
    wanted = by_scipy(mask, origin, other)
    told, found = flooded(mask, origin, other)
    assert (found == wanted).all()
    assert told == min(wanted[other], UNREACHED)


@settings(max_examples=60, deadline=None)
@given(
    st.integers(0, 2**32),
    st.sampled_from([0.6, 0.8, 1.0]),
    st.sampled_from([1.0, 1.2, 2.0]),
    st.sampled_from([0, 1, 5, 33]),
)
def test_stopping_early_changes_no_cost_that_counts(seed, density, stretch, beyond):
    rng = np.random.default_rng(seed)
    mask = random_mask(rng, density)
    inner = np.flatnonzero(np.pad(np.ones((mask.shape[0] - 2, mask.shape[1] - 2), bool), 1))
    origin, other = (int(square) for square in rng.choice(inner, 2))
    _, whole = flooded(mask, origin, other)
    told, found = flooded(mask, origin, other, stretch, beyond)
    assert told == min(whole[other], UNREACHED)
    if told == UNREACHED:
        assert (found == whole).all()
        return
    until = told * stretch + beyond
    # What lies nearer is right, and nothing is claimed to be nearer than it is.
    near = whole <= int(until)
    assert (found[near] == whole[near]).all()
    assert (found >= whole).all()
    assert (found[np.isfinite(found)] < until + BUCKETS).all()


def test_scratch_memory_that_served_other_floods_changes_nothing():
    rng = np.random.default_rng(3)
    room = FloodRoom()
    for _ in range(12):
        mask = random_mask(rng, 0.8)
        origin = mask.shape[1] + 1
        used = flooded(mask, origin, origin, room=room)[1]
        assert (used == flooded(mask, origin, origin)[1]).all()
    assert len(room.entries) >= 8 * mask.size


# -- masks over a site ----------------------------------------------------------------------


def crowd(rng, count, reach_m=0.8):
    """Convex polygons anywhere on the site."""
    found = {}
    for i in range(count):
        points = rng.uniform((2, 2), (38, 22)) + rng.normal(0, reach_m, (6, 2))
        ring = shapely.convex_hull(shapely.multipoints(points)).exterior
        found[f"p{i}"] = np.array(ring.coords)[:-1]
    return found


@pytest.mark.parametrize("cell_m", [0.1, 0.25])
@pytest.mark.parametrize("level", [0, 1])
def test_the_proving_mask_keeps_every_square_in_which_the_disc_has_room(level, cell_m, monkeypatch):
    """Against exact distances by shapely: a square lost would prove that no route exists."""
    monkeypatch.setattr("byway_planning.search.floods.FINE_SQUARES_MAX", (1 - level) * 10**9)
    rng = np.random.default_rng(5)
    polygons = crowd(rng, 40)
    discs = {"d": (7.03, 19.0, 1.21), "e": (30.0, 4.0, 0.1)}
    site = Site.from_shapes(polygons, discs, limits_m=LIMITS, cell_m=cell_m)
    scene = site.snapshot.scene()
    circles = shapely.points([d[:2] for d in discs.values()])
    world = shapely.union_all([shapely.Polygon(p) for p in polygons.values()])
    shapely.prepare(world)
    points = shapely.points(rng.uniform((0.1, 0.1), (39.9, 23.9), (6000, 2)))
    frame = shapely.box(*LIMITS).exterior
    room_m = np.minimum(shapely.distance(points, world), shapely.distance(points, frame))
    for circle, (_, _, radius) in zip(circles, discs.values(), strict=True):
        room_m = np.minimum(room_m, shapely.distance(points, circle) - radius)
    for radius in (0.6, 0.9, 1.7):
        ground = FloodGround(scene, radius, (0, 0, *scene.field_of.shape))
        assert ground.level == level
        mask = ground.mask(PROOF_CELLS).ravel()
        fits = room_m >= radius
        squares = [ground.square_of(p.x, p.y) for p in points[fits]]
        assert fits.sum() > 50
        assert (mask[squares] == 1).all()


def test_the_guiding_mask_keeps_less_than_the_proving_one_and_loses_what_is_full():
    scene = Site.from_shapes(crowd(np.random.default_rng(6), 25, 2.0), limits_m=LIMITS)
    scene = scene.snapshot.scene()
    ground = FloodGround(scene, 0.9, (0, 0, *scene.field_of.shape))
    guide, proof = ground.mask(GUIDE_CELLS), ground.mask(PROOF_CELLS)
    assert (guide <= proof).all()
    assert guide.sum() < proof.sum()
    assert ground.mask(GUIDE_CELLS) is guide
    walls = FloodGround(Site.from_shapes({"all": box(0.0, 0.0, 40.0, 24.0)}, limits_m=LIMITS)
                        .snapshot.scene(), 0.9, (0, 0, 1, 1))  # fmt: skip
    assert not walls.mask(PROOF_CELLS)[5:20, 5:20].any()
    for mask in (guide, proof):
        border = (mask[0], mask[-1], mask[:, 0], mask[:, -1])
        assert not any(side.any() for side in border)


@pytest.mark.parametrize("limits_m", [(0.0, 0.0, 40.0, 24.0), (-3.3, 1.7, 31.9, 25.9)])
def test_no_flood_goes_round_between_a_wall_and_the_limits_of_the_site(limits_m):
    """Tiles go on beyond the upper limits; the strip beside a wall is too narrow everywhere."""
    x0, y0, x1, y1 = limits_m
    disc = Disc(radius_m=0.8, clearance_m=0.0)
    middle_y = (y0 + y1) / 2
    ends = ((x0 + 5.0, middle_y, 0.0), (x1 - 5.0, middle_y, 0.0))
    for strip_m, reached in ((0.0, False), (0.9, False), (1.7, True)):
        for low, high in ((strip_m, 0.0), (0.0, strip_m)):
            wall = {"wall": box(x0 + 16.0, y0 + low, 2.0, y1 - y0 - low - high)}
            assert question(disc, wall, *ends, limits_m=limits_m).guide.reached == reached


def test_large_windows_are_flooded_in_wider_squares():
    site = Site.from_shapes({"a": box(1.0, 1.0, 2.0, 2.0)}, limits_m=(0.0, 0.0, 400.0, 400.0))
    scene = site.snapshot.scene()
    rows, columns = scene.field_of.shape
    small = FloodGround(scene, 0.9, (0, 0, 4, 4))
    large = FloodGround(scene, 0.9, (0, 0, rows, columns))
    assert (small.level, large.level) == (0, 1)
    assert large.side_m == 4 * small.side_m
    assert small.shape[0] * small.shape[1] < FINE_SQUARES_MAX * 1.1
    assert (large.shape[0] - 2) * large.side_m == pytest.approx(400.0, abs=6.4)


def test_a_flood_in_the_open_measures_distances_within_the_law_of_its_steps():
    """
    Steps of 5 and 7 overstate no straight line by more than 8 %, and understate none by more
    than the diagonal does: 7/5 instead of sqrt 2.
    """
    q = question(Disc(radius_m=0.8, clearance_m=0.0), {}, (5.0, 5.0, 0.0), (35.0, 20.0, 0.0))
    flood, told = q.guide.ground.flood(
        (20.0, 12.0), (39.0, 23.0), FloodRoom(), slack_cells=PROOF_CELLS, stretch=1.0, beyond_m=99.0
    )
    side = q.guide.ground.side_m
    rng = np.random.default_rng(8)
    for x, y in rng.uniform((1.0, 1.0), (39.0, 23.0), (300, 2)):
        away = math.hypot(x - 20.0, y - 12.0)
        found = flood_m(flood, x, y)
        assert found == flood_length_kernel(flood, x, y)
        assert 0.989 * away - 2 * side < found < 1.085 * away + 2 * side
    assert told == flood_m(flood, 39.0, 23.0)
    assert flood_m(flood, -3.0, 12.0) == math.inf
    assert flood_m(flood, 20.0, 99.0) == math.inf


def test_a_flood_around_a_wall_is_never_longer_than_the_way_of_the_disc():
    """Up to the two squares of its ends, and the 8 % of its steps."""
    q = question(Disc(radius_m=0.8, clearance_m=0.0))
    around = 2 * 0.8 * math.acos(0.0)  # a quarter of a circle at each corner passed
    legs = math.hypot(13.0, 10.8) + 8.6 + math.hypot(7.0, 10.0)
    found = flood_m(q.to_goal, *q.start[:2])
    assert 0.9 * legs - 2 * q.to_goal.side_m < found < 1.09 * (legs + around)


# -- what is proved -------------------------------------------------------------------------


def test_the_window_holds_a_way_round_whatever_stands_on_the_site():
    """Beside everything there is the margin, or the limit of the site."""
    polygons = {"far": box(30.0, 10.0, 1.0, 70.0), "low": box(90.0, 20.0, 5.0, 5.0)}
    scene = Site.from_shapes(polygons, limits_m=(0.0, 0.0, 300.0, 300.0)).snapshot.scene()
    tile_m = scene.tile_cells * scene.cell_m
    used = used_tiles(scene)
    window = window_for(scene, used, [(10.0, 40.0), (60.0, 150.0)], 15.0)
    assert window[0] == 0
    assert window[1] == 0
    assert window[2] * tile_m >= 165.0
    assert window[3] * tile_m >= 110.0
    assert window[3] < scene.field_of.shape[1]
    assert used_tiles(Site.from_shapes({}, limits_m=LIMITS).snapshot.scene()) == (0, 0, 0, 0)


@pytest.mark.parametrize(
    "vehicle", [car(), ForwardCar(footprint_m=[(-1, -1), (3, -1), (3, 1), (-1, 1)],
                                  turn_radius_m_min=4.0), Disc(radius_m=0.8)],
    ids=["car", "forward", "disc"],
)  # fmt: skip
def test_a_sealed_goal_is_not_reached_and_one_with_a_door_is(vehicle):
    sealed = question(vehicle, pen(24.0, 6.0, 12.0), (5.1, 12.1, 0.0), (30.1, 12.1, 0.0))
    assert not sealed.guide.reached
    door = pen(24.0, 6.0, 12.0)
    door["west"] = box(24.0, 6.0, 0.4, 3.0)
    open_ = question(vehicle, door, (5.1, 12.1, 0.0), (30.1, 12.1, 0.0))
    assert open_.guide.reached
    assert flood_m(open_.to_goal, *middle_of(open_.body, open_.goal)) == 0.0
    assert flood_m(open_.to_start, *middle_of(open_.body, open_.start)) == 0.0


def test_the_guide_falls_back_to_the_proving_mask_where_the_guiding_one_is_shut():
    gap = {"south": box(20.0, 0.0, 2.0, 12.0), "north": box(20.0, 13.6, 2.0, 10.4)}

    def guide(radius_m):
        ends = ((5.0, 12.0, 0.0), (35.0, 12.0, 0.0))
        return question(Disc(radius_m=radius_m, clearance_m=0.0), gap, *ends).guide

    assert (guide(0.75).reached, guide(0.75).slack_cells) == (True, GUIDE_CELLS)
    assert (guide(0.8).reached, guide(0.8).slack_cells) == (True, PROOF_CELLS)
    assert (guide(1.05).reached, guide(1.05).slack_cells) == (False, PROOF_CELLS)


def test_a_vehicle_that_cannot_reverse_gets_a_flood_that_covers_a_circle():
    """Next to its goal, it may have to leave and come back."""
    near = ((20.0, 12.0, 0.0), (20.0, 14.0, 0.0))
    forward = ForwardCar(
        footprint_m=[(-1, -1), (3, -1), (3, 1), (-1, 1)], turn_radius_m_min=5.0, clearance_m=0.0
    )
    for flood in (question(forward, {}, *near).to_goal, question(forward, {}, *near).to_start):
        for x, y in ((33.0, 13.0), (8.0, 13.0), (20.0, 22.0), (20.0, 2.0)):
            assert flood_m(flood, x, y) < math.inf
    disc = question(Disc(radius_m=0.8), {}, *near)
    assert flood_m(disc.to_goal, 33.0, 13.0) == math.inf
