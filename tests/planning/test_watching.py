"""Watched routes: what is found is there, by shapely; and looking at changes alone finds it too."""

import functools
import itertools
import math

import numpy as np
import pytest
import shapely

from byway_planning import (
    Car,
    Disc,
    DiscShape,
    LayerSettings,
    Memory,
    PolygonShape,
    SiteModel,
    SiteSettings,
    plan,
)
from byway_planning.site import Track
from byway_planning.watching import WatchedRoute

LIMITS = (0.0, 0.0, 60.0, 40.0)
CAR = Car(
    footprint_m=[(-0.8, -0.7), (2.2, -0.7), (2.2, 0.7), (-0.8, 0.7)],
    turn_radius_m_min=3.0,
    clearance_m=0.1,
)
DISC = Disc(radius_m=0.6, clearance_m=0.05)
VEHICLES = {"car": CAR, "disc": DISC}


def square(x: float, y: float, side: float) -> PolygonShape:
    h = side / 2
    return PolygonShape([(x - h, y - h), (x + h, y - h), (x + h, y + h), (x - h, y + h)])


def yard(**settings) -> SiteModel:
    model = SiteModel(SiteSettings(LIMITS, **settings), Memory.private())
    for name in ("stacks", "lidar"):
        model.declare(name, LayerSettings())
    model.declare("outlines", LayerSettings(outlines_only=True))
    model.put("stacks", "kiln", PolygonShape([(25, 10), (31, 10), (31, 26), (25, 26)]))
    model.put("stacks", "shed", PolygonShape([(40, 18), (46, 18), (46, 39), (40, 39)]))
    return model


def route_in(model: SiteModel, vehicle, start=(5.0, 20.0, 0.3), goal=(54.0, 30.0, 1.2)):
    found = plan(
        model.publish(), vehicle, start, goal, time_left=lambda: 1.0, seed=1, work_max=3000
    )
    assert found.kind == "route"
    return found.route


@functools.cache
def free_route(name: str):
    return route_in(yard(), VEHICLES[name])


def poses_along(table: np.ndarray, step_m: float) -> tuple[np.ndarray, np.ndarray]:
    """Places along a table, and poses (n, 3) there, by arcs from row to row."""
    places, poses = [], []
    along = 0.0
    for a, b in itertools.pairwise(table):
        length = 0.5 * (a["speed_mps"] + b["speed_mps"]) * (b["t_s"] - a["t_s"])
        k, n = a["curvature_per_m"], max(2, int(abs(length) / step_m) + 1)
        for s in np.linspace(0.0, length, n):
            turn = 0.5 * k * s
            chord = s * (np.sin(turn) / turn if turn else 1.0)
            h = a["heading_rad"]
            places.append(along + abs(s))
            poses.append(
                (a["x_m"] + chord * np.cos(h + turn), a["y_m"] + chord * np.sin(h + turn),
                 h + 2.0 * turn)
            )  # fmt: skip
        along += abs(length)
    return np.array(places), np.array(poses)


def bodies(vehicle, poses: np.ndarray):
    if isinstance(vehicle, Disc):
        return shapely.buffer(shapely.points(poses[:, :2]), vehicle.radius_m, quad_segs=24)
    outline = np.array(vehicle.footprint_m)
    c, s = np.cos(poses[:, 2:]), np.sin(poses[:, 2:])
    x = poses[:, :1] + c * outline[:, 0] - s * outline[:, 1]
    y = poses[:, 1:2] + s * outline[:, 0] + c * outline[:, 1]
    return shapely.polygons(np.stack([x, y], axis=2))


def first_contact(vehicle, table: np.ndarray, world, from_m: float) -> float:
    """Where a body first comes nearer than its clearance, by sampling; inf if nowhere."""
    places, poses = poses_along(table, 0.02)
    ahead = places >= from_m
    near = shapely.distance(bodies(vehicle, poses[ahead]), world) < vehicle.clearance_m
    return float(places[ahead][np.argmax(near)]) if near.any() else math.inf


@pytest.mark.parametrize("name", VEHICLES)
def test_a_free_route_is_free(name: str) -> None:
    watched = WatchedRoute(VEHICLES[name], free_route(name).table)
    assert watched.check(yard().publish(), 0.0) is None
    assert watched.length_m == pytest.approx(free_route(name).length_m)
    assert len(watched.poses()) == len(free_route(name).table)


@pytest.mark.parametrize("name", VEHICLES)
@pytest.mark.parametrize("seed", range(12))
def test_the_first_contact_is_where_shapely_finds_it(name: str, seed: int) -> None:
    rng = np.random.default_rng(seed)
    vehicle, route, model = VEHICLES[name], free_route(name), yard()
    world = []
    for i in range(int(rng.integers(1, 6))):
        row = route.table[int(rng.integers(0, len(route.table)))]
        x, y = row["x_m"] + rng.normal(0.0, 2.0), row["y_m"] + rng.normal(0.0, 2.0)
        x, y = min(max(x, 1.0), 59.0), min(max(y, 1.0), 39.0)
        size = float(rng.uniform(0.2, 1.5))
        if rng.uniform() < 0.5:
            model.put("stacks", f"new-{i}", square(x, y, size))
            world.append(shapely.Polygon(square(x, y, size).vertices_m))
        else:
            model.put("stacks", f"new-{i}", DiscShape(x, y, size / 2))
            world.append(shapely.Point(x, y).buffer(size / 2, 128))
    from_m = float(rng.uniform(0.0, 0.7 * route.length_m))
    wanted = first_contact(vehicle, route.table, shapely.union_all(world), from_m)
    watched = WatchedRoute(vehicle, route.table)
    watched.check(yard().publish(), 0.0)
    found = watched.check(model.publish(), from_m)
    if wanted == math.inf:
        # What sampling passed over by a hair may be found.
        assert found is None or found.depth_m < 0.01
        return
    assert found is not None
    assert found.at_m == pytest.approx(wanted, abs=0.05)
    assert found.layer == "stacks"
    assert found.obstacle.startswith("new-")
    places, poses = poses_along(route.table, 0.01)
    there = poses[np.argmin(np.abs(places - found.at_m))]
    assert math.hypot(found.x_m - there[0], found.y_m - there[1]) < 0.03
    times = np.interp(found.at_m, *_timing(route.table))
    assert found.t_s == pytest.approx(times, abs=0.05)
    assert found.depth_m >= 0.0


def _timing(table: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    steps = np.abs(0.5 * (table["speed_mps"][:-1] + table["speed_mps"][1:]) * np.diff(table["t_s"]))
    return np.concatenate([[0.0], np.cumsum(steps)]), table["t_s"]


@pytest.mark.parametrize("name", VEHICLES)
@pytest.mark.parametrize("seed", range(4))
def test_looking_at_changes_alone_finds_the_same(name: str, seed: int) -> None:
    """Random changes of all kinds while the vehicle goes on; a fresh look after each."""
    rng = np.random.default_rng(seed)
    vehicle, route, model = VEHICLES[name], free_route(name), yard(sweep_s=1.0)
    watched, first = WatchedRoute(vehicle, route.table), model.publish()
    assert watched.check(first, 0.0, None) is None
    progress_m, blocked = 0.0, 0
    for step in range(120):
        row = route.table[int(rng.integers(0, len(route.table)))]
        x = min(max(row["x_m"] + rng.normal(0.0, 2.5), 1.0), 59.0)
        y = min(max(row["y_m"] + rng.normal(0.0, 2.5), 1.0), 39.0)
        what = rng.integers(0, 7)
        if what == 0:
            model.put("stacks", f"n{rng.integers(5)}", square(x, y, float(rng.uniform(0.2, 1.2))))
        elif what == 1:
            model.drop("stacks", f"n{rng.integers(5)}")
        elif what == 2:
            cells = (rng.uniform(size=(9, 9)) < 0.1).astype(np.uint8)
            model.patch("lidar", (x, y), 0.13, cells, float(rng.uniform(-3, 3)))
        elif what == 3:
            model.scan("lidar", (x, y, 0.0), np.linspace(-3, 3, 40), rng.uniform(0.3, 6, 40), 5.0)
        elif what == 4:
            track = Track(DiscShape(0, 0, 0.3), (x, y, 0.0), tuple(rng.normal(0, 1, 2)), at_s=step)
            model.track("stacks", "walker", track)
        elif what == 5:
            model.put("outlines", "unit", square(x, y, 1.0))
        else:
            model.clear("lidar" if rng.uniform() < 0.7 else "outlines")
        model.carry(float(step))
        progress_m = min(progress_m + float(rng.uniform(0.0, 0.3)), route.length_m)
        before = model.revision
        snapshot = model.publish()
        changed = model.changed_m if model.revision > before else np.empty((0, 4))
        found = watched.check(snapshot, progress_m, changed)
        fresh = WatchedRoute(vehicle, route.table)
        fresh.check(first, 0.0)
        anew = fresh.check(snapshot, progress_m)
        assert (found is None) == (anew is None)
        if found is not None and anew is not None:
            assert found.at_m == pytest.approx(anew.at_m, abs=3e-3)
            blocked += 1
    assert blocked > 20


def test_what_lies_behind_does_not_matter() -> None:
    model = yard()
    route = route_in(model, CAR)
    watched = WatchedRoute(CAR, route.table)
    row = route.table[40]
    model.put("stacks", "crate", square(float(row["x_m"]), float(row["y_m"]), 0.5))
    snapshot = model.publish()
    found = watched.check(snapshot, 0.0)
    assert found is not None
    assert found.kind == "polygon"
    assert (found.layer, found.obstacle) == ("stacks", "crate")
    assert found.depth_m > 0.3
    assert watched.check(snapshot, found.at_m + 5.0, np.empty((0, 4))) is None
    assert watched.check(snapshot, found.at_m - 1.0, np.empty((0, 4))) == found


def test_tracks_cells_and_limits_are_named() -> None:
    model = yard()
    route = route_in(model, CAR)
    middle = route.table[len(route.table) // 2]
    x, y = float(middle["x_m"]), float(middle["y_m"])
    model.track("stacks", "fork-1", Track(DiscShape(0, 0, 0.4), (x, y, 0.0), (0.1, 0.0)))
    found = WatchedRoute(CAR, route.table).check(model.publish(), 0.0)
    assert found is not None
    assert (found.kind, found.layer, found.obstacle) == ("track", "stacks", "fork-1")
    model.drop("stacks", "fork-1")
    model.patch("lidar", (x, y), 0.1, np.ones((3, 3), np.uint8))
    found = WatchedRoute(CAR, route.table).check(model.publish(), 0.0)
    assert found is not None
    assert (found.kind, found.layer, found.obstacle) == ("cell", "lidar", "")
    smaller = SiteModel(SiteSettings((0.0, 0.0, 50.0, 40.0)), Memory.private())
    found = WatchedRoute(CAR, route.table).check(smaller.publish(), 0.0)
    assert found is not None
    assert (found.kind, found.layer) == ("limits", "")


def test_outlines_that_were_left_out_do_not_count() -> None:
    model = yard()
    route = route_in(model, CAR)
    row = route.table[30]
    model.put("outlines", "unit", square(float(row["x_m"]), float(row["y_m"]), 1.0))
    snapshot = model.publish()
    assert WatchedRoute(CAR, route.table).check(snapshot, 0.0) is not None
    left_out = WatchedRoute(CAR, route.table, left_out=frozenset({"outlines"}))
    assert left_out.check(snapshot, 0.0) is None


def test_a_start_that_is_too_near_may_be_left_but_nothing_new_may_be_in_it() -> None:
    """A vehicle parked within its clearance of a wall: the route was good, and it is no alert."""
    model = yard()
    model.put(
        "stacks", "wall", PolygonShape([(4.0, 18.0), (8.0, 18.0), (8.0, 19.26), (4.0, 19.26)])
    )
    route = route_in(model, CAR, (5.0, 20.0, 0.0))
    watched = WatchedRoute(CAR, route.table)
    assert watched.check(model.publish(), 0.0) is None
    model.put("stacks", "crate", square(6.9, 20.2, 0.6))
    found = watched.check(model.publish(), 0.0, model.changed_m)
    assert found is not None
    assert found.obstacle == "crate"
    assert found.at_m == 0.0


def test_survey_coordinates_give_the_same() -> None:
    ox, oy = 500_000.0, 5_000_000.0
    model = yard()
    route = route_in(model, CAR)
    far = SiteModel(SiteSettings(LIMITS, origin_m=(ox, oy)), Memory.private())
    far.declare("stacks", LayerSettings())
    row = route.table[50]
    for one in (model, far):
        one.put("stacks", "crate", square(float(row["x_m"]), float(row["y_m"]), 0.5))
    table = route.table.copy()
    table["x_m"] += ox
    table["y_m"] += oy
    here = WatchedRoute(CAR, route.table).check(model.publish(), 0.0)
    there = WatchedRoute(CAR, table).check(far.publish(), 0.0)
    assert here is not None
    assert there is not None
    assert there.at_m == pytest.approx(here.at_m, abs=1e-6)
    assert (there.x_m - ox, there.y_m - oy) == pytest.approx((here.x_m, here.y_m), abs=1e-6)


@pytest.mark.parametrize(
    ("spoil", "said"),
    [
        (lambda t: t[:1], "two rows"),
        (lambda t: _with(t, "x_m", 3, np.nan), "finite"),
        (lambda t: _with(t, "t_s", 3, 0.0), "time must grow"),
    ],
)
def test_tables_that_make_no_sense_are_refused(spoil, said: str) -> None:
    with pytest.raises(ValueError, match=said):
        WatchedRoute(CAR, spoil(free_route("car").table.copy()))


def _with(table: np.ndarray, name: str, row: int, value: float) -> np.ndarray:
    table[name][row] = value
    return table
