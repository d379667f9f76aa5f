"""The collision side of the check, against shapely on random scenes, and by laws."""

import math

import numpy as np
import pytest
from tests.planning.route_scenes import (
    BOX,
    EVERYWHERE,
    U_SHAPE,
    Twin,
    car,
    codes,
    disc,
    driven,
    line_of,
    path_of,
    random_scene,
    solids_of,
)

from byway_planning.route import make_route
from byway_planning.verify import CLEARANCE_TOLD_M, verify

STRAIGHT = [(0.0, 10.0)]


@pytest.mark.parametrize("part", range(4))
def test_the_least_clearance_is_that_of_shapely(part: int) -> None:
    """
    Exact, not sampled: the twin refines its samples, so both must agree to micrometres, and a
    route that overlaps by more than the tolerance is always faulted.
    """
    rng = np.random.default_rng(100 + part)
    passed = 0
    for number in range(40):
        vehicle, path, goal, route, polygons, discs, limits = random_scene(rng, number)
        solids = solids_of(polygons, discs, limits)
        start = tuple(path[0, :3])
        faults = verify(solids, vehicle, path, route, start, goal)
        twin = Twin(vehicle, route.table, polygons, discs, limits)
        least_m = twin.least()
        if least_m > 1e-6:
            passed += 1
            assert codes(faults) == []
            assert faults.clearance_m == pytest.approx(min(least_m, CLEARANCE_TOLD_M), abs=3e-6)
            # asking for a hair more than there is must fail, for a hair less pass
            if least_m < CLEARANCE_TOLD_M:
                for more_m, expected in ((1e-5, ["collides"]), (-1e-5, [])):
                    again = verify(
                        solids, vehicle, path, route, start, goal, clearance_m=least_m + more_m
                    )
                    nearer_at_start = twin.distances(np.zeros(1))[0] < least_m + more_m
                    if not nearer_at_start:
                        assert codes(again) == expected
        else:
            assert codes(faults) == ["collides"]
    assert 8 <= passed <= 32, "the scenes must be neither all free nor all blocked"


def test_a_fault_is_where_the_vehicle_first_comes_too_near() -> None:
    rng = np.random.default_rng(7)
    found = 0
    for number in range(60):
        vehicle, path, goal, route, polygons, discs, limits = random_scene(rng, number)
        solids = solids_of(polygons, discs, limits)
        faults = verify(solids, vehicle, path, route, tuple(path[0, :3]), goal, clearance_m=0.2)
        twin = Twin(vehicle, route.table, polygons, discs, limits)
        if not faults or twin.distances(np.zeros(1))[0] < 0.2:
            continue
        found += 1
        facts = faults[0].facts
        arcs = np.abs(twin._arcs)
        way = np.concatenate([[0.0], np.cumsum(arcs)])
        place = np.interp(faults[0].at_s_m, way, np.arange(len(way)))
        x, y, heading = twin.poses(np.array([place]))[0]
        assert (x, y) == pytest.approx((facts["x_m"], facts["y_m"]), abs=1e-6)
        assert abs(math.remainder(heading - facts["heading_rad"], 2.0 * math.pi)) < 1e-6
        # free before it, and nearer than asked for within a millimetre after it
        before = np.linspace(0.0, place, 200)
        assert twin.distances(before).min() >= 0.2 - 1e-5
        after = np.interp(faults[0].at_s_m + 1.01e-3, way, np.arange(len(way)))
        assert twin.distances(np.array([after]))[0] < 0.2 + 1e-5
    assert found > 10


def test_a_vehicle_deep_inside_a_large_polygon_is_blocked() -> None:
    block = [(-50.0, -50.0), (50.0, -50.0), (50.0, 50.0), (-50.0, 50.0)]
    (fault,) = driven(solids_of([block]), car(), STRAIGHT)
    assert (fault.code, fault.at_s_m, fault.facts["index"]) == ("collides", 0.0, 0)
    (fault,) = driven(solids_of(discs=[(3.0, 4.0, 60.0)]), car(), STRAIGHT)
    assert (fault.code, fault.facts["kind"]) == ("collides", "disc")


@pytest.mark.parametrize("radius_m", [0.01, 0.2])
def test_what_fits_between_the_arms_of_a_vehicle_is_free(radius_m: float) -> None:
    vehicle = car(footprint_m=U_SHAPE)
    c, s = math.cos(0.3), math.sin(0.3)
    start = (10.0, 10.0, 0.3)

    def at(x: float, y: float) -> tuple[float, float]:
        return 10.0 + c * x - s * y, 10.0 + s * x + c * y

    stay = [(0.0, 0.05)]
    for (x, y), free in (
        ((1.0, 0.4), True),  # between the arms
        ((-0.5, 0.5), False),  # inside an arm
        ((1.0, -0.6), False),  # inside the body
        ((2.5, 0.0), False),  # inside the other arm
        ((4.0, 0.0), True),  # in front
    ):
        middle = at(x, y)
        square = [(middle[0] + a * radius_m, middle[1] + b * radius_m)
                  for a, b in ((-1, -1), (1, -1), (1, 1), (-1, 1))]  # fmt: skip
        expected = [] if free else ["collides"]
        assert codes(driven(solids_of([square]), vehicle, stay, start)) == expected
        assert (
            codes(driven(solids_of(discs=[(*middle, radius_m)]), vehicle, stay, start)) == expected
        )


def test_an_arm_catches_what_stood_between_the_arms() -> None:
    vehicle = car(footprint_m=U_SHAPE)
    post = [(0.9, 0.3), (1.1, 0.3), (1.1, 0.5), (0.9, 0.5)]
    faults = driven(solids_of([post]), vehicle, [(0.0, 0.89)])
    assert faults == []
    (fault,) = driven(solids_of([post]), vehicle, [(0.0, 2.0)])
    assert fault.at_s_m == pytest.approx(0.9, abs=1.1e-3)  # the left arm's face is at x = 0


@pytest.mark.parametrize("side", range(4))
@pytest.mark.parametrize("turn_rad", [0.0, 0.7, 2.5])
def test_the_limits_of_the_site_are_walls(side: int, turn_rad: float) -> None:
    vehicle = car(clearance_m=0.1)
    path, goal = path_of((0.0, 0.0, turn_rad), [(0.2, -3.0), (-0.1, 7.0), (0.1, -3.0)])
    route = make_route(path, vehicle)
    twin = Twin(vehicle, route.table)
    places = np.linspace(0.0, len(route.table) - 1.0, (len(route.table) - 1) * 50 + 1)
    poses = twin.poses(places)
    c, s = np.cos(poses[:, 2])[:, None], np.sin(poses[:, 2])[:, None]
    outline = np.array(BOX)
    x = poses[:, :1] + c * outline[:, 0] - s * outline[:, 1]
    y = poses[:, 1:2] + s * outline[:, 0] + c * outline[:, 1]
    ends = [x.min(), y.min(), x.max(), y.max()]
    firsts = [x[0].min(), y[0].min(), x[0].max(), y[0].max()]
    # a start that is as near as the nearest place may be left
    too_near = [] if firsts[side] == ends[side] else ["collides"]
    for room_m, expected in ((0.1001, []), (0.0998, too_near), (-0.5, ["collides"])):
        limits = list(EVERYWHERE)
        limits[side] = ends[side] - room_m if side < 2 else ends[side] + room_m
        faults = verify(
            solids_of(limits=limits), vehicle, path, route, path[0, :3], goal, start_overlap_m=0.05
        )
        if not expected:
            assert faults == []
            assert faults.clearance_m == pytest.approx(room_m, abs=1e-5)
        else:
            assert codes(faults) == expected
            assert faults[0].facts["kind"] == "limits"


def test_a_disc_passes_by_its_radius() -> None:
    path, goal = line_of([(0.0, 0.0), (4.0, 0.0), (4.0, 4.0)])
    vehicle = disc(radius_m=0.5, clearance_m=0.1)
    route = make_route(path, vehicle)
    for gap_m, expected in ((0.1001, []), (0.0999, ["collides"])):
        wall = [(1.0, 0.5 + gap_m), (2.0, 0.5 + gap_m), (2.0, 3.0), (1.0, 3.0)]
        post = (4.0 + 0.5 + gap_m + 0.3, 2.0, 0.3)
        for solids in (solids_of([wall]), solids_of(discs=[post])):
            faults = verify(solids, vehicle, path, route, path[0, :3], goal)
            assert codes(faults) == expected


def test_turning_and_moving_the_whole_yard_changes_nothing() -> None:
    rng = np.random.default_rng(23)
    for number in range(12):
        vehicle, path, goal, route, polygons, discs, _ = random_scene(rng, number)
        turn, shift = rng.uniform(-3.0, 3.0), rng.uniform(-900.0, 900.0, 2)
        c, s = math.cos(turn), math.sin(turn)
        rotation = np.array([[c, s], [-s, c]])
        moved = path.copy()
        moved[:, :2] = path[:, :2] @ rotation + shift
        moved[:, 2] += turn
        moved_goal = (*(np.array(goal[:2]) @ rotation + shift), goal[2] + turn)
        one = verify(solids_of(polygons, discs), vehicle, path, route, tuple(path[0, :3]), goal)
        other = verify(
            solids_of(
                [p @ rotation + shift for p in polygons],
                [(*(np.array(d[:2]) @ rotation + shift), d[2]) for d in discs],
            ),
            vehicle,
            moved,
            make_route(moved, vehicle),
            tuple(moved[0, :3]),
            moved_goal,
        )
        assert codes(one) == codes(other)
        if not one:
            # 1e-9: coordinates of a kilometre keep 1e-13 m
            assert one.clearance_m == pytest.approx(other.clearance_m, abs=1e-9)


def test_a_long_table_is_looked_at_from_end_to_end() -> None:
    """Many parts, each with its own choice of what is near; one post far along stops it."""
    pieces = [(0.0, 20.0), (0.2, 7.0), (0.0, 6.0), (-0.2, 7.0)] * 5
    path, goal = path_of((0.0, 0.0, 0.0), pieces)
    vehicle = car()
    route = make_route(path, vehicle)
    rng = np.random.default_rng(2)
    x, y = route.table["x_m"], route.table["y_m"]
    posts = []
    while len(posts) < 300:
        p = rng.uniform((x.min() - 9, y.min() - 9), (x.max() + 9, y.max() + 9))
        if np.hypot(x - p[0], y - p[1]).min() > 4.5:
            posts.append((*p.tolist(), 0.2))
    assert verify(solids_of(discs=posts), vehicle, path, route, path[0, :3], goal) == []
    squares = [
        [(a - 0.1, b - 0.1), (a + 0.1, b - 0.1), (a + 0.1, b + 0.1), (a - 0.1, b + 0.1)]
        for a, b, _ in posts
    ]
    assert verify(solids_of(squares), vehicle, path, route, path[0, :3], goal) == []
    for row in (5, len(route.table) // 2, len(route.table) - 3):
        t = route.table[row]
        ahead = (t["x_m"] + 3.6 * math.cos(t["heading_rad"]),
                 t["y_m"] + 3.6 * math.sin(t["heading_rad"]))  # fmt: skip
        faults = verify(
            solids_of(squares, discs=[(*ahead, 0.05)]), vehicle, path, route, path[0, :3], goal
        )
        assert codes(faults) == ["collides"]
        assert faults[0].facts["kind"] == "disc"
