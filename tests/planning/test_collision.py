"""Room for a body at a pose, against exact distances by shapely."""

import math

import numpy as np
import pytest
import shapely
from tests.planning.collision_twins import BOX, FORK, VEHICLES, World, car, random_world, world

from byway_planning.collision import (
    CONTACT_M,
    NEAR_M,
    _cell_of,
    excesses_kernel,
    pose_excess,
    pose_free,
)
from byway_planning.site import LayerSettings, Site, SiteModel, SiteSettings
from byway_planning.vehicles.models import Car, Disc

#: Rounding of the two computations, coordinates up to 30 m.
ROUNDING_M = 1e-9


def excesses(place: World, vehicle: Car | Disc, poses: np.ndarray) -> np.ndarray:
    out = np.empty(len(poses))
    given = np.ascontiguousarray(poses)
    given.flags.writeable = False
    excesses_kernel(place.scene, vehicle.body(), given, out)
    return out


def random_poses(seed: int, count: int) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return rng.uniform((-4.0, 1.0, -math.pi), (22.0, 19.0, math.pi), (count, 3))


@pytest.mark.parametrize("cell_m", [0.05, 0.1, 0.25, 0.8])
@pytest.mark.parametrize("name", VEHICLES)
def test_the_excess_of_a_pose_is_exact_when_small_and_never_overstated(name, cell_m):
    """Whatever the cell: it decides how fast the answer comes, not what it is."""
    vehicle = VEHICLES[name]
    for seed in range(2):
        place = random_world(seed, cell_m)
        poses = random_poses(seed, 600)
        found = excesses(place, vehicle, poses)
        wanted = place.distances_m(vehicle, poses) - vehicle.clearance_m
        hits = wanted <= 0.0
        assert (found[hits] <= ROUNDING_M).all()
        assert (found[~hits] <= wanted[~hits] + ROUNDING_M).all()
        assert (found[~hits] > 0.0).all()
        near = ~hits & (wanted < NEAR_M)
        assert found[near] == pytest.approx(wanted[near], abs=ROUNDING_M)
        assert 30 < hits.sum() < 595


@pytest.mark.parametrize("name", VEHICLES)
def test_a_pose_is_free_when_its_excess_is_more_than_contact(name):
    vehicle = VEHICLES[name]
    place = random_world(5, 0.1)
    poses = random_poses(6, 300)
    found = excesses(place, vehicle, poses)
    body = vehicle.body()
    free = [pose_free(place.scene, body, *pose) for pose in poses.tolist()]
    assert free == (found > CONTACT_M).tolist()


@pytest.mark.parametrize("name", ["mouse", "sliver", "disc", "box"])
@pytest.mark.parametrize("cell_m", [0.1, 0.5, 2.0])
def test_a_body_inside_a_large_obstacle_is_found_wherever_it_is(name, cell_m):
    """No edge is near, and the raster cannot tell within two cells."""
    ring = np.array([(2.0, 2.0), (28.0, 2.0), (28.0, 28.0), (2.0, 28.0)])
    # Another one over its edge, so that nearest edges say nothing about inside and outside.
    other = np.array([(20.0, -5.0), (40.0, -5.0), (40.0, 15.0), (20.0, 15.0)])
    place = world((0.0, 0.0, 60.0, 60.0), cell_m=cell_m, polygons=[ring, other])
    vehicle = VEHICLES[name]
    rng = np.random.default_rng(1)
    poses = rng.uniform((6.0, 6.0, -3.0), (38.0, 24.0, 3.0), (400, 3))
    wanted = place.distances_m(vehicle, poses)
    found = excesses(place, vehicle, poses)
    assert ((found > 0.0) == (wanted > vehicle.clearance_m)).all()
    assert (wanted <= 0.0).sum() > 100


@pytest.mark.parametrize("unknown_blocks", [False, True])
def test_a_mouse_in_blocked_cells_is_found(unknown_blocks):
    """Whole tiles of them, without an edge inside; and cells that touch only at corners."""
    model = SiteModel(SiteSettings((0.0, 0.0, 12.0, 12.0), cell_m=0.1, tile_cells=16))
    model.declare("cells", LayerSettings(unknown_blocks=unknown_blocks))
    cells = np.indices((100, 60)).sum(axis=0) % 2  # a chessboard on the left, free on the right
    model.patch("cells", (0.0, 0.0), 0.1, np.hstack([cells, 0 * cells]).astype(np.uint8))
    model.patch("cells", (2.0, 2.0), 0.1, np.ones((50, 40), np.uint8))
    scene = model.publish().scene()
    body = VEHICLES["mouse"].body()
    rng = np.random.default_rng(2)
    known = np.hstack([cells, 0 * cells])
    known[20:70, 20:60] = 1
    # In the middle of a cell the mouse touches no border of it.
    for row, column in rng.integers(0, (100, 120), (300, 2)).tolist():
        x, y = column * 0.1 + 0.05, row * 0.1 + 0.05
        assert (pose_excess(scene, body, x, y, 0.0) > 0.0) == (known[row, column] == 0)
    beyond = pose_excess(scene, body, 6.0, 11.03, 0.0)
    assert (beyond > 0.0) == (not unknown_blocks)


def test_discs_are_found_from_inside():
    place = world(
        (0.0, 0.0, 30.0, 30.0), discs=[(15.0, 15.0, 9.0)], outline_discs=[(4.0, 4.0, 3.0)]
    )
    for name in ("mouse", "sliver", "box"):
        body = VEHICLES[name].body()
        assert pose_excess(place.scene, body, 15.0, 15.0, 1.0) <= 0.0
        assert pose_excess(place.scene, body, 20.0, 17.0, 1.0) <= 0.0
        assert pose_excess(place.scene, body, 4.2, 4.1, 1.0) <= 0.0


def test_an_obstacle_inside_the_body_is_found_and_one_in_its_slot_is_not():
    post = np.array([(-0.05, -0.05), (0.05, -0.05), (0.05, 0.05), (-0.05, 0.05)])
    fork, box = car(FORK).body(), car(BOX).body()
    for layer in ("polygons", "outlines"):
        place = world((-20.0, -20.0, 20.0, 20.0), **{layer: [post]})
        for heading in (0.0, 0.3, 2.0):
            c, s = math.cos(heading), math.sin(heading)
            # The post is 1.2 m ahead of the origin: in the slot, 0.45 m from each arm.
            pose = (-1.2 * c, -1.2 * s, heading)
            found = pose_excess(place.scene, fork, *pose)
            wanted = shapely.distance(
                shapely.transform(shapely.Polygon(FORK), lambda p, c=c, s=s: turned(p, c, s)),
                shapely.Polygon(post),
            )
            assert 0.35 < wanted < 0.46
            assert NEAR_M < found <= wanted + ROUNDING_M
            assert pose_excess(place.scene, box, *pose) <= 0.0


def turned(points: np.ndarray, c: float, s: float) -> np.ndarray:
    x, y = points[:, 0] - 1.2, points[:, 1]
    return np.column_stack([c * x - s * y, s * x + c * y])


@pytest.mark.parametrize("degrees", [0, 7, 45, 90, 133, 200, 301])
def test_a_gap_is_passed_when_wider_than_the_vehicle_and_only_then(degrees):
    """Between two walls: 2 cm to spare is plenty, 1 mm too little is too little."""
    heading = math.radians(degrees)
    c, s = math.cos(heading), math.sin(heading)
    turn = np.array([[c, s], [-s, c]])
    body = car(BOX).body()
    for gap_m, passes in ((1.92, True), (1.899, False)):
        half = gap_m / 2
        walls = [
            np.array(
                [(-6.0, side * half), (6.0, side * half), (6.0, side * 2.5), (-6.0, side * 2.5)]
            )
            @ turn
            + (12.3, 11.7)
            for side in (1.0, -1.0)
        ]
        place = world((0.0, 0.0, 25.0, 25.0), polygons=walls)
        for ahead in np.linspace(-4.0, 2.0, 13):
            pose = (12.3 + c * ahead, 11.7 + s * ahead, heading)
            assert pose_free(place.scene, body, *pose) == passes
            assert (pose_excess(place.scene, body, *pose) > CONTACT_M) == passes


@pytest.mark.parametrize("upright", [False, True])
@pytest.mark.parametrize("cell_m", [0.1, 0.05, 0.2])
def test_a_gap_between_cells_is_as_wide_as_the_cells_say(cell_m, upright):
    across = round(2.0 / cell_m)
    count = round(16.0 / cell_m)
    cells = np.zeros((count, count), np.uint8)
    first = round(7.0 / cell_m)
    cells[first - 4 : first, :] = 1
    cells[first + across : first + across + 4, :] = 1
    cells = np.ascontiguousarray(cells.T) if upright else cells
    place = world((0.0, 0.0, 16.0, 16.0), cell_m=cell_m, cells=cells)
    heading = math.pi / 2 if upright else 0.0
    for width_m, passes in ((1.98, True), (2.001, False)):
        half = width_m / 2
        body = car(((-1.0, -half), (3.5, -half), (3.5, half), (-1.0, half))).body()
        for along in np.linspace(2.0, 11.0, 10):
            x, y = (8.0, along) if upright else (along, 8.0)
            assert pose_free(place.scene, body, x, y, heading) == passes


def test_a_clearance_is_kept_and_no_more():
    wall = np.array([(10.0, 0.0), (12.0, 0.0), (12.0, 20.0), (10.0, 20.0)])
    place = world((0.0, 0.0, 20.0, 20.0), polygons=[wall])
    body = car(BOX, 0.3).body()
    assert pose_excess(place.scene, body, 6.15, 10.0, 0.0) == pytest.approx(0.05, abs=1e-12)
    assert pose_excess(place.scene, body, 6.25, 10.0, 0.0) <= 0.0


def test_points_next_to_the_limits_are_in_the_outermost_cells():
    """Differences are rounded, and must not be rounded out of the tables."""
    rng = np.random.default_rng(4)
    rounded_out = 0
    for x0, tiles in zip(rng.uniform(-50.0, 50.0, 200), rng.integers(1, 9, 200), strict=True):
        limits_m = (x0, x0, x0 + tiles * 1.6, x0 + tiles * 1.6)
        scene = SiteModel(SiteSettings(limits_m, 0.1, tile_cells=16)).publish().scene()
        low, high = np.nextafter(x0, np.inf), np.nextafter(limits_m[2], -np.inf)
        assert _cell_of.py_func(scene, low, low)[2:] == (0, 0, 0, 0)
        last = scene.field_of.shape[0] - 1
        u, _, *place = _cell_of.py_func(scene, high, high)
        assert place == [last, last, 15, 15]
        rounded_out += u >= 16 * (last + 1)
    assert rounded_out > 0


def test_nonsense_poses_collide():
    place = world((0.0, 0.0, 20.0, 20.0))
    for vehicle in VEHICLES.values():
        body = vehicle.body()
        for pose in ((math.nan, 5.0, 0.0), (5.0, math.nan, 0.0), (5.0, 5.0, math.nan)):
            assert not pose_free(place.scene, body, *pose)
            assert not pose_excess(place.scene, body, *pose) > 0.0
        assert not pose_free(place.scene, body, 1e9, 5.0, 0.0)
        assert not pose_free(place.scene, body, -math.inf, 5.0, 0.0)


def test_a_site_far_from_its_origin_is_the_same_site():
    """Survey coordinates lose nothing, because the site's own are small."""
    ring = np.array([(3.0, 3.0), (7.0, 3.5), (5.0, 6.0)])
    near = Site.from_shapes({"a": ring}, {"d": (9.0, 9.0, 1.0)}, limits_m=(0, 0, 12, 12))
    shift = np.array([500_000.0, 5_000_000.0])
    far = Site.from_shapes(
        {"a": ring + shift},
        {"d": (9.0 + shift[0], 9.0 + shift[1], 1.0)},
        limits_m=(shift[0], shift[1], shift[0] + 12, shift[1] + 12),
        origin_m=(shift[0], shift[1]),
    )
    assert far.origin_m == (500_000.0, 5_000_000.0)
    body = VEHICLES["ell"].body()
    poses = np.random.default_rng(3).uniform((0, 0, -3), (12, 12, 3), (300, 3))
    poses.flags.writeable = False
    found = np.empty((2, 300))
    for out, site in zip(found, (near, far), strict=True):
        excesses_kernel(site.snapshot.scene(), body, poses, out)
    assert found[0] == pytest.approx(found[1], abs=1e-12)
