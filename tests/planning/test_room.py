"""Collision of poses and motions against shapely: never careless, nor more careful than told."""

import math

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st

from byway_planning import Car, Disc, LayerSettings, PolygonShape, Site, SiteModel, SiteSettings
from byway_planning.collision import CONTACT_M, EXACT_M, excesses_kernel
from byway_planning.curves.word import advance
from byway_planning.kernel import kernel
from byway_planning.motion import motion_free, motion_reach, swept_hull
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import Body

LIMITS = (0.0, 0.0, 24.0, 24.0)
BOX = [(-1.0, -0.95), (3.5, -0.95), (3.5, 0.95), (-1.0, 0.95)]
L_SHAPE = [(-1.0, -0.9), (3.5, -0.9), (3.5, 0.9), (2.4, 0.9), (2.4, -0.2), (-1.0, 0.2)]
U_SHAPE = [
    *[(-1.0, -1.0), (3.0, -1.0), (3.0, -0.5), (0.0, -0.5)],
    *[(0.0, 0.5), (3.0, 0.5), (3.0, 1.0), (-1.0, 1.0)],
]
CARS = {
    "box": Car(footprint_m=BOX, turn_radius_m_min=4.0, clearance_m=0.0),
    "L": Car(footprint_m=L_SHAPE, turn_radius_m_min=4.0, clearance_m=0.0),
    "U": Car(footprint_m=U_SHAPE, turn_radius_m_min=4.0, clearance_m=0.05),
}


@kernel(Scene, Body, "f8", "f8", "f8", "f8", "f8")
def free_kernel(
    scene: Scene, body: Body, x: float, y: float, h: float, curvature: float, length: float
) -> bool:
    return motion_free(scene, body, x, y, h, curvature, length)


@kernel(Scene, Body, "f8", "f8", "f8", "f8", "f8")
def reach_kernel(
    scene: Scene, body: Body, x: float, y: float, h: float, curvature: float, length: float
) -> float:
    return motion_reach(scene, body, x, y, h, curvature, length)


def random_polygons(seed: int, count: int) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(seed)
    found = {}
    for i in range(count):
        points = rng.uniform(1.0, 23.0, 2) + rng.normal(0.0, 0.7, (6, 2))
        hull = shapely.convex_hull(shapely.multipoints(points))
        found[f"p{i}"] = np.array(hull.exterior.coords)[:-1]
    return found


def world_of(polygons: dict[str, np.ndarray]) -> shapely.Geometry:
    """The obstacles and everything outside of the limits."""
    x0, y0, x1, y1 = LIMITS
    frame = shapely.box(x0 - 9, y0 - 9, x1 + 9, y1 + 9).difference(shapely.box(x0, y0, x1, y1))
    world = shapely.union_all([*[shapely.Polygon(p) for p in polygons.values()], frame])
    shapely.prepare(world)
    return world


def placed(outline: list[tuple[float, float]], poses: np.ndarray) -> np.ndarray:
    """Footprints (n,) as shapely polygons."""
    points = np.array(outline)
    c, s = np.cos(poses[:, 2:3]), np.sin(poses[:, 2:3])
    x = points[:, 0] * c - points[:, 1] * s + poses[:, :1]
    y = points[:, 0] * s + points[:, 1] * c + poses[:, 1:2]
    return shapely.polygons(np.stack([x, y], axis=-1))


def excesses(scene: Scene, body: Body, poses: np.ndarray) -> np.ndarray:
    out = np.empty(len(poses))
    kept = np.ascontiguousarray(poses)
    kept.flags.writeable = False
    excesses_kernel(scene, body, kept, out)
    return out


def random_poses(seed: int, count: int) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return rng.uniform((0.0, 0.0, -math.pi), (24.0, 24.0, math.pi), (count, 3))


@pytest.mark.parametrize("shape", CARS)
@pytest.mark.parametrize("seed", range(3))
def test_the_excess_of_a_pose_is_never_overstated_and_exact_when_small(shape, seed):
    polygons = random_polygons(seed, 25)
    scene = Site.from_shapes(polygons, limits_m=LIMITS).snapshot.scene()
    car, poses = CARS[shape], random_poses(seed + 10, 3000)
    found = excesses(scene, car.body(), poses)
    outline = {"box": BOX, "L": L_SHAPE, "U": U_SHAPE}[shape]
    true = shapely.distance(placed(outline, poses), world_of(polygons)) - car.clearance_m
    assert (found <= np.maximum(true, 0.0) + 1e-9).all()
    assert ((found > 0.0) == (true > 0.0)).all()
    small = (true > 0.0) & (true < 0.1)
    assert small.sum() > 20
    assert found[small] == pytest.approx(true[small], abs=1e-9)
    assert EXACT_M > 0.1


def test_a_disc_is_as_far_as_its_middle_less_its_radius():
    polygons = random_polygons(7, 30)
    scene = Site.from_shapes(polygons, limits_m=LIMITS).snapshot.scene()
    poses = random_poses(8, 3000)
    found = excesses(scene, Disc(radius_m=0.6, clearance_m=0.1).body(), poses)
    true = shapely.distance(shapely.points(poses[:, :2]), world_of(polygons)) - 0.7
    assert (found <= np.maximum(true, 0.0) + 1e-9).all()
    assert ((found > 0.0) == (true > 0.0)).all()


def test_blocked_cells_count_with_their_squares():
    rng = np.random.default_rng(9)
    cells = (rng.random((60, 60)) < 0.02).astype(np.uint8)
    scene = Site.from_grid(cells, cell_m=0.4).snapshot.scene()
    squares = {
        f"c{r},{c}": np.array(
            shapely.box(0.4 * c, 0.4 * r, 0.4 * (c + 1), 0.4 * (r + 1)).exterior.coords
        )[:-1]
        for r, c in np.argwhere(cells)
    }
    poses = random_poses(10, 3000)
    wide = Car(footprint_m=[(-2, -1.2), (3, -1.2), (3, 1.2), (-2, 1.2)], turn_radius_m_min=4.0)
    found = excesses(scene, wide.body(0.0), poses)
    outline = [(-2, -1.2), (3, -1.2), (3, 1.2), (-2, 1.2)]
    true = shapely.distance(placed(outline, poses), world_of(squares))
    assert (found <= np.maximum(true, 0.0) + 1e-9).all()
    assert ((found > 0.0) == (true > 1e-9)).all()


def test_obstacles_that_are_never_rastered_count_exactly_also_from_inside():
    model = SiteModel(SiteSettings(LIMITS))
    model.declare("units", LayerSettings(outlines_only=True))
    polygons = random_polygons(11, 6) | {
        "large": np.array([(2, 2), (14, 2), (14, 12), (2, 12)], float)
    }
    for name, ring in polygons.items():
        model.put("units", name, PolygonShape(ring))
    poses = random_poses(12, 2000)
    found = excesses(model.publish().scene(), CARS["L"].body(), poses)
    true = shapely.distance(placed(L_SHAPE, poses), world_of(polygons))
    assert (found <= np.maximum(true, 0.0) + 1e-9).all()
    assert ((found > 0.0) == (true > 0.0)).all()


@settings(max_examples=60, deadline=None)
@given(
    st.integers(0, 10**6),
    st.sampled_from(sorted(CARS)),
    st.sampled_from([0.0, 0.25, -0.25, 0.1]),
    st.floats(-6.0, 6.0),
)
def test_a_motion_is_free_just_when_all_of_it_is(seed, shape, curvature, length):
    """Dense samples never meet an obstacle on a free motion; a clearly free one is found free."""
    polygons = random_polygons(seed % 50, 14)
    scene = Site.from_shapes(polygons, limits_m=LIMITS).snapshot.scene()
    car, (pose,) = CARS[shape], random_poses(seed, 1)
    outline = {"box": BOX, "L": L_SHAPE, "U": U_SHAPE}[shape]
    steps = np.linspace(0.0, length, 240)
    samples = np.array([advance.py_func(*pose, curvature, s) for s in steps])
    clear = shapely.distance(placed(outline, samples), world_of(polygons)) - car.clearance_m
    ends_free = clear[0] > CONTACT_M and clear[-1] > CONTACT_M
    if not ends_free:
        return
    found = free_kernel(scene, car.body(), *pose, curvature, length)
    if found:
        assert clear.min() > 0.0
    # Between samples a point moves at most 0.05 m, so 0.06 m leave no doubt.
    if clear.min() > 0.06:
        assert found


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from([0.0, 0.25, -0.25]), st.sampled_from([8.0, -8.0]))
def test_a_motion_reaches_no_farther_than_contact(seed, curvature, length):
    polygons = random_polygons(seed % 50, 14)
    scene = Site.from_shapes(polygons, limits_m=LIMITS).snapshot.scene()
    (pose,) = random_poses(seed, 1)
    reach = reach_kernel(scene, CARS["box"].body(), *pose, curvature, length)
    assert 0.0 <= reach <= abs(length)
    steps = np.linspace(0.0, math.copysign(reach, length), 120)
    samples = np.array([advance.py_func(*pose, curvature, s) for s in steps])
    clear = shapely.distance(placed(BOX, samples), world_of(polygons))
    if reach > 0.0:
        assert clear[:-1].min() > 0.0


@settings(max_examples=60, deadline=None)
@given(
    st.sampled_from([BOX, L_SHAPE, U_SHAPE]),
    st.floats(-0.25, 0.25),
    st.floats(-2.0, 2.0),
)
def test_the_swept_hull_is_the_convex_hull_of_both_ends(outline, curvature, length):
    points = np.array(outline)
    room, hull = np.empty((64, 2)), np.empty((66, 2))
    n = swept_hull.py_func(points, curvature, length, room, hull)
    x, y, turn = advance.py_func(0.0, 0.0, 0.0, curvature, length)
    ends = shapely.union_all(placed(outline, np.array([(0.0, 0.0, 0.0), (x, y, turn)])))
    found, true = shapely.Polygon(hull[:n]), shapely.convex_hull(ends)
    assert found.symmetric_difference(true).area < 1e-9
