"""
A simulated range sensor drives through a yard; what the site knows afterwards is what was there.

Beams are cut off by walls with shapely, then made worse: noise, beams that fail, beams that stop
short in dust. The sensor sends scans only; the truth stays in the test.
"""

import math

import numpy as np
import pytest
import shapely

from byway_planning import (
    Car,
    LayerSettings,
    Memory,
    PolygonShape,
    SiteModel,
    SiteSettings,
    plan,
)
from byway_planning.verify import clearance_m

LIMITS = (0.0, 0.0, 50.0, 36.0)
RANGE_M = 20.0
NOISE_M = 0.02
WALLS = [
    shapely.box(0, 0, 50, 0.5),
    shapely.box(0, 35.5, 50, 36),
    shapely.box(0, 0, 0.5, 36),
    shapely.box(49.5, 0, 50, 36),
    shapely.box(15, 8, 17, 28),
    shapely.box(30, 0, 32, 20),
    shapely.Polygon([(38, 26), (44, 24), (46, 30), (40, 31)]),
    shapely.Point(23, 20).buffer(1.2),
]
WORLD = shapely.union_all(WALLS)
POSES = [(4 + 42 * t, 18 + 12 * math.sin(7 * t), 0.4 * t) for t in np.linspace(0.0, 1.0, 60)]


def measured(x: float, y: float, heading: float, rng: np.random.Generator, dust: float):
    """Bearings and ranges of a whole turn, as a sensor would give them."""
    bearings = np.linspace(-math.pi, math.pi, 720, endpoint=False)
    ends = np.column_stack([x + RANGE_M * np.cos(heading + bearings),
                            y + RANGE_M * np.sin(heading + bearings)])  # fmt: skip
    beams = shapely.linestrings([[(x, y), tuple(end)] for end in ends])
    hits = shapely.distance(shapely.intersection(beams, WORLD), shapely.Point(x, y))
    ranges = np.where(np.isnan(hits), np.inf, hits) + rng.normal(0.0, NOISE_M, len(bearings))
    in_dust = rng.uniform(size=len(bearings)) < dust
    ranges[in_dust] = rng.uniform(0.0, 3.0, in_dust.sum())
    kept = rng.uniform(size=len(bearings)) > 0.1  # beams that failed are left out
    return bearings[kept], np.maximum(ranges[kept], 0.0)


def driven_through(*, dust: float, decay_s: float | None) -> SiteModel:
    rng = np.random.default_rng(3)
    model = SiteModel(SiteSettings(LIMITS), Memory.private())
    model.declare("lidar", LayerSettings(unknown_blocks=True, decay_s=decay_s))
    for i, (x, y, heading) in enumerate(POSES):
        if WORLD.distance(shapely.Point(x, y)) < 0.5:
            continue
        bearings, ranges = measured(x, y, heading, rng, dust)
        model.scan("lidar", (x, y, heading), bearings, ranges, RANGE_M, at_s=0.1 * i)
        model.carry(0.1 * i)
        model.publish()
        model.release_before(model.revision)
    return model


def known(model: SiteModel) -> tuple[np.ndarray, np.ndarray]:
    """Middles of cells that are known to be occupied, and to be free."""
    occupied, free = [], []
    for (x, y), cells in model.publish().cells("lidar"):
        for value, into in ((1, occupied), (0, free)):
            rows, columns = np.nonzero(cells == value)
            into.append(np.column_stack([x + (columns + 0.5) * 0.1, y + (rows + 0.5) * 0.1]))
    return np.concatenate(occupied), np.concatenate(free)


def test_what_was_seen_is_what_was_there() -> None:
    occupied, free = known(driven_through(dust=0.0, decay_s=None))
    apart = shapely.distance(shapely.points(occupied), WORLD)
    assert np.quantile(apart, 0.99) < 0.15
    # Of the walls, what faces a place that was driven through has been found.
    faces = shapely.boundary(WORLD)
    places = shapely.line_interpolate_point(faces, np.arange(0.0, faces.length, 0.5))
    sight = shapely.union_all([shapely.Point(x, y).buffer(8.0) for x, y, _ in POSES])
    seen = [p for p in places if sight.contains(p) and _is_in_sight(p)]
    found = shapely.STRtree(shapely.points(occupied))
    missed = sum(len(found.query(p.buffer(0.2))) == 0 for p in seen)
    assert len(seen) > 60
    assert missed <= 0.05 * len(seen)
    inside = shapely.contains(WORLD.buffer(-0.25), shapely.points(free))
    assert inside.mean() < 0.001


def _is_in_sight(place: shapely.Point) -> bool:
    for x, y, _ in POSES:
        if math.hypot(place.x - x, place.y - y) < 8.0:
            line = shapely.LineString([(x, y), (place.x, place.y)])
            if line.intersection(WORLD).length < 0.01:
                return True
    return False


def test_dust_is_forgotten_and_walls_that_are_seen_again_are_not() -> None:
    fleeting = driven_through(dust=0.02, decay_s=0.5)
    lasting = driven_through(dust=0.02, decay_s=None)

    def in_the_air(model: SiteModel) -> int:
        occupied, _ = known(model)
        return int((shapely.distance(shapely.points(occupied), WORLD) > 0.4).sum())

    assert in_the_air(lasting) > 30
    assert in_the_air(fleeting) < 0.7 * in_the_air(lasting)
    # Standing still for longer than it remembers: the dust is gone, the walls around are not.
    rng, (x, y, heading) = np.random.default_rng(5), POSES[-1]
    for i in range(10):
        bearings, ranges = measured(x, y, heading, rng, 0.0)
        at_s = 100.0 + 0.1 * i
        fleeting.scan("lidar", (x, y, heading), bearings, ranges, RANGE_M, at_s=at_s)
        fleeting.carry(at_s)
    assert in_the_air(fleeting) == 0
    assert len(known(fleeting)[0]) > 100


@pytest.mark.parametrize("goal", [(44.0, 8.0, 0.0), (8.0, 30.0, 1.5)])
def test_routes_on_what_was_seen_keep_clear_of_what_is_there(goal) -> None:
    """Ground that nobody has seen counts as blocked, so only the noise is left to hit."""
    car = Car(
        footprint_m=[(-0.6, -0.6), (1.8, -0.6), (1.8, 0.6), (-0.6, 0.6)],
        turn_radius_m_min=2.5,
        clearance_m=0.2,
    )
    outcome = plan(
        driven_through(dust=0.0, decay_s=None).publish(),
        car, (5.0, 20.0, 0.0), goal, time_left=lambda: 1.0, seed=1, work_max=4000,
    )  # fmt: skip
    assert outcome.kind == "route"
    assert outcome.route is not None
    truth = SiteModel(SiteSettings(LIMITS), Memory.private())
    truth.declare("fixed", LayerSettings())
    for i, wall in enumerate(WALLS):
        truth.put("fixed", f"w{i}", PolygonShape(np.array(wall.exterior.coords)))
    solids = truth.publish().solids()
    for row in outcome.route.table[::3]:
        pose = (float(row["x_m"]), float(row["y_m"]), float(row["heading_rad"]))
        assert clearance_m(solids, car, pose).distance_m > 0.2 - 4 * NOISE_M
