"""The collision side of the check: against shapely on random scenes, and at known gaps."""

import math

import numpy as np
import pytest
import shapely
from tests.planning.route_scenes import (
    BOX,
    EVERYWHERE,
    U_SHAPE,
    Floats,
    Pose,
    Twin,
    car,
    disc,
    line_of,
    path_of,
    solids_of,
    star,
)

from byway_planning.route import make_route
from byway_planning.site.solids import ALL_CELLS, NO_CELLS, Solids
from byway_planning.vehicles.models import Car, Disc, ForwardCar
from byway_planning.verify import CLEARANCE_TOLD_M, Faults, clearance_m, verify

STRAIGHT = [(0.0, 10.0)]


def driven(
    solids: Solids,
    vehicle: Car | ForwardCar | Disc,
    pieces: list[tuple[float, float]],
    start: Pose = (0.0, 0.0, 0.0),
    **how: float,
) -> Faults:
    path, goal = path_of(start, pieces)
    return verify(solids, vehicle, path, make_route(path, vehicle), start, goal, **how)


def codes(faults: Faults) -> list[str]:
    return [fault.code for fault in faults]


# -- random scenes ---------------------------------------------------------------------------


def random_scene(rng: np.random.Generator, number: int) -> tuple:
    """A vehicle, a path, and a few shapes about as far from it as it is large."""
    radius = rng.uniform(2.0, 6.0)
    pieces = [
        (float(rng.choice([0.0, 1.0, -1.0, rng.uniform(-1, 1)]) / radius), float(length))
        for length in rng.uniform(0.3, 3.5, rng.integers(1, 4)) * rng.choice([-1.0, 1.0])
    ]
    if number % 4 == 3:
        vehicle: Car | Disc = disc(radius_m=float(rng.uniform(0.2, 1.5)))
        corners = np.cumsum(rng.uniform(-3.0, 3.0, (rng.integers(2, 5), 2)), axis=0)
        path, goal = line_of([tuple(map(float, corner)) for corner in corners])
    else:
        outline = [BOX, U_SHAPE, star(rng, (0.3, 0.1), 2.0).tolist()][number % 4]
        vehicle = car(footprint_m=outline, turn_radius_m_min=radius)
        start = (*rng.uniform(-50.0, 50.0, 2).tolist(), float(rng.uniform(-9.0, 9.0)))
        path, goal = path_of(start, pieces)
    route = make_route(path, vehicle)
    polygons, discs = [], []
    for _ in range(rng.integers(1, 5)):
        row, angle = rng.integers(len(route.table)), rng.uniform(0.0, 7.0)
        middle = np.array([route.table["x_m"][row], route.table["y_m"][row]])
        middle += rng.uniform(1.0, 6.0) * np.array([math.cos(angle), math.sin(angle)])
        if rng.random() < 0.7:
            polygons.append(star(rng, middle, rng.choice([0.1, 0.6, 2.0])))
        else:
            discs.append((*middle.tolist(), float(rng.uniform(0.02, 1.0))))
    limits = EVERYWHERE
    if rng.random() < 0.3:
        room = rng.uniform(2.0, 7.0, 4)
        x, y = route.table["x_m"], route.table["y_m"]
        limits = (x.min() - room[0], y.min() - room[1], x.max() + room[2], y.max() + room[3])
    return vehicle, path, goal, route, polygons, discs, limits


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


# -- gaps ------------------------------------------------------------------------------------


def gate(half_width_m: float, turn_rad: float = 0.0) -> tuple[list[Floats], Pose]:
    """Two blocks with a straight passage between them, turned, and a start before it."""
    lower = np.array([(5.0, -3.0), (6.0, -3.0), (6.0, -half_width_m), (5.0, -half_width_m)])
    upper = lower * (1.0, -1.0)
    c, s = math.cos(turn_rad), math.sin(turn_rad)
    turn = np.array([[c, s], [-s, c]])
    return [lower @ turn, upper @ turn], (0.0, 0.0, turn_rad)


@pytest.mark.parametrize("turn_rad", [0.0, 0.5, -2.2, math.pi])
@pytest.mark.parametrize("way", [1.0, -1.0])
def test_a_gap_a_centimetre_wider_on_each_side_is_passed(turn_rad: float, way: float) -> None:
    blocks, start = gate(0.96, turn_rad)
    if way < 0.0:
        start = (start[0], start[1], start[2] + math.pi)
    faults = driven(solids_of(blocks), car(), [(0.0, 10.0 * way)], start)
    assert faults == []
    assert faults.clearance_m == pytest.approx(0.01, abs=2e-6)


@pytest.mark.parametrize("turn_rad", [0.0, 0.5, -2.2, math.pi])
@pytest.mark.parametrize("half_width_m", [0.9495, 0.94999, 0.5])
def test_a_gap_that_is_too_narrow_is_not(turn_rad: float, half_width_m: float) -> None:
    blocks, start = gate(half_width_m, turn_rad)
    (fault,) = driven(solids_of(blocks), car(), STRAIGHT, start)
    assert fault.code == "collides"
    assert fault.at_s_m == pytest.approx(1.5, abs=1.1e-3)  # the front is 3.5 m ahead
    assert fault.facts["kind"] == "polygon"


def test_touching_is_no_overlap_but_no_clearance_either() -> None:
    blocks, start = gate(0.95)
    assert driven(solids_of(blocks), car(), STRAIGHT, start) == []
    faults = driven(solids_of(blocks), car(), STRAIGHT, start, clearance_m=0.001)
    assert codes(faults) == ["collides"]


@pytest.mark.parametrize("clearance", [0.1, 0.3])
def test_the_clearance_is_kept_to_a_micrometre(clearance: float) -> None:
    for less_m, expected in ((0.0, []), (5e-7, []), (2e-6, ["collides"]), (1e-3, ["collides"])):
        blocks, start = gate(0.95 + clearance - less_m)
        faults = driven(solids_of(blocks), car(clearance_m=clearance), STRAIGHT, start)
        assert codes(faults) == expected


def test_a_bend_swings_the_front_corner_out() -> None:
    """The outer front corner of a car turning left moves on a circle around (0, 5)."""
    out_m = math.hypot(3.5, 5.0 + 0.95)
    post = (0.0, 5.0 - out_m - 0.25, 0.05)  # a post 0.2 m outside that circle, below the centre
    pieces = [(0.2, 5.0 * 2.0 * math.pi)]
    faults = driven(solids_of(discs=[post]), car(), pieces)
    assert faults == []
    assert faults.clearance_m == pytest.approx(0.2, abs=2e-6)
    nearer = (0.0, 5.0 - out_m + 0.04, 0.05)
    assert codes(driven(solids_of(discs=[nearer]), car(), pieces)) == ["collides"]


def test_nothing_hides_where_a_bend_bulges() -> None:
    """
    Between its ends a stretch reaches farther out than at them: here a clearance of half a
    millimetre was met before, so that little else is looked at, and then a post or a spike
    stands in the way of a corner that points out of the bend, anywhere on its circle.
    """
    vehicle = car(footprint_m=[(-0.5, -0.5), (0.0, -2.0), (0.5, -0.5), (0.0, 1.0)])
    grazed = (0.0, 1.0 + 0.0005 + 0.2, 0.2)  # on the inner side, at the start
    for angle in -0.5 * math.pi + np.linspace(0.2, 1.3, 12):
        c, s = math.cos(angle), math.sin(angle)
        for inside_m, expected in ((-0.001, []), (0.03, ["collides"])):
            tip_m = 7.0 - inside_m
            post = ((tip_m + 0.05) * c, 5.0 + (tip_m + 0.05) * s, 0.05)
            spike = [
                (tip_m * c, 5.0 + tip_m * s),
                (post[0] + 0.01 * s, post[1] - 0.01 * c),
                (post[0] - 0.01 * s, post[1] + 0.01 * c),
            ]
            for solids in (solids_of(discs=[grazed, post]), solids_of([spike], discs=[grazed])):
                faults = driven(solids, vehicle, [(0.2, 7.0)])
                assert codes(faults) == expected
                if not expected:
                    # 5e-6: drawing the outline in by 1e-6 moves a sharp corner by more
                    assert faults.clearance_m == pytest.approx(0.0005, abs=5e-6)


@pytest.mark.parametrize("side", range(4))
def test_the_limits_are_kept_in_the_middle_of_a_bend(side: int) -> None:
    out_m = math.hypot(3.5, 5.0 + 0.95)
    circle = [-out_m, 5.0 - out_m, out_m, 5.0 + out_m]
    limits = list(EVERYWHERE)
    limits[side] = circle[side] + (-0.15 if side < 2 else 0.15)
    faults = driven(solids_of(limits=limits), car(), [(0.2, 5.0 * 2.0 * math.pi)])
    assert faults == []
    assert faults.clearance_m == pytest.approx(0.15, abs=2e-6)


@pytest.mark.parametrize("angle", np.linspace(-3.0, 3.0, 7))
def test_a_vehicle_may_turn_round_and_round_between_two_rows(angle: float) -> None:
    """Its turning radius is so small that one row's way is more than a circle."""
    vehicle = car(
        footprint_m=[(-0.02, -0.02), (0.2, 0.0), (-0.02, 0.02)],  # one corner far from its centre
        turn_radius_m_min=0.03,
        speed_mps_max=0.1,  # reached at once, so that nearly all of the way is one row's
    )
    far_m = math.hypot(0.2, 0.03)
    for gap_m, expected in ((0.001, []), (-0.001, ["collides"])):
        away_m = far_m + 0.2 + gap_m
        post = (away_m * math.cos(angle), 0.03 + away_m * math.sin(angle), 0.2)
        faults = driven(solids_of(discs=[post]), vehicle, [(1.0 / 0.03, 0.25)])
        assert codes(faults) == expected


def test_a_clearance_may_be_wider_than_the_one_that_is_told() -> None:
    path, goal = line_of([(0.0, 0.0), (9.0, 0.0)])
    for gap_m, expected in ((2.001, []), (1.999, ["collides"])):
        vehicle = disc(radius_m=0.5, clearance_m=2.0)
        route = make_route(path, vehicle)
        post = (12.0 * 0.5, 0.5 + gap_m + 0.1, 0.1)
        wall = [(4.0, 0.5 + gap_m), (5.0, 0.5 + gap_m), (5.0, 9.0), (4.0, 9.0)]
        for solids in (solids_of([wall]), solids_of(discs=[post])):
            faults = verify(solids, vehicle, path, route, path[0, :3], goal)
            assert codes(faults) == expected


# -- containment -----------------------------------------------------------------------------


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


# -- limits and discs ------------------------------------------------------------------------


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


# -- leaving a start that is too near ----------------------------------------------------------


#: Reaches 2 cm into the left flank of the standing tug, or stays 3 cm off, by `gap_m`.
def beside(gap_m: float) -> list[tuple[float, float]]:
    return [(0.0, 0.95 + gap_m), (2.0, 0.95 + gap_m), (2.0, 4.0), (0.0, 4.0)]


@pytest.mark.parametrize("gap_m", [0.03, 0.0, -0.02, -0.049])
def test_a_start_that_is_too_near_may_be_left(gap_m: float) -> None:
    vehicle = car(clearance_m=0.1, start_overlap_m=0.05)
    # backing away to the right turns the flank away from the block at once
    faults = driven(solids_of([beside(gap_m)]), vehicle, [(0.2, -4.0), (0.0, -3.0)])
    assert faults == []
    assert faults.clearance_m == pytest.approx(gap_m, abs=3e-6)


@pytest.mark.parametrize("gap_m", [-0.051, -0.2, -0.9])
def test_a_start_that_is_too_deep_may_not(gap_m: float) -> None:
    vehicle = car(clearance_m=0.1, start_overlap_m=0.05)
    (fault,) = driven(solids_of([beside(gap_m)]), vehicle, [(0.2, -4.0), (0.0, -3.0)])
    assert (fault.code, fault.at_s_m) == ("collides", 0.0)
    assert fault.facts["distance_m"] == pytest.approx(gap_m, abs=5e-6)


def test_no_start_may_overlap_if_none_is_allowed() -> None:
    for overlap_m, expected in ((0.05, []), (0.0, ["collides"])):
        vehicle = car(clearance_m=0.1)
        faults = driven(
            solids_of([beside(-0.02)]),
            vehicle,
            [(0.2, -4.0), (0.0, -3.0)],
            start_overlap_m=overlap_m,
        )
        assert codes(faults) == expected


@pytest.mark.parametrize("gap_m", [0.03, -0.02])
def test_the_way_out_may_not_come_nearer_first(gap_m: float) -> None:
    vehicle = car(clearance_m=0.1, start_overlap_m=0.05)
    (fault,) = driven(solids_of([beside(gap_m)]), vehicle, [(0.2, 0.5), (0.0, -6.0)])
    assert fault.code == "collides"
    assert fault.at_s_m < 0.02


def test_along_a_wall_the_clearance_may_stay_what_it_was() -> None:
    vehicle = car(clearance_m=0.1, start_overlap_m=0.05)
    wall = [(-9.0, 0.98), (6.0, 0.98), (6.0, 4.0), (-9.0, 4.0)]
    assert driven(solids_of([wall]), vehicle, [(0.0, 12.0)]) == []
    # a second wall a little nearer, further on, is not to be come near to
    nearer = [(7.0, 0.97), (9.0, 0.97), (9.0, 4.0), (7.0, 4.0)]
    (fault,) = driven(solids_of([wall, nearer]), vehicle, [(0.0, 14.0)])
    assert fault.facts["index"] == 1
    assert 3.4 < fault.at_s_m < 3.52


@pytest.mark.parametrize(("third_m", "expected"), [(0.07, []), (0.04, ["collides"])])
def test_on_the_way_out_what_was_gained_is_not_given_back(
    third_m: float, expected: list[str]
) -> None:
    vehicle = car(clearance_m=0.1, start_overlap_m=0.05)
    walls = [
        [(a, 0.95 + gap), (b, 0.95 + gap), (b, 4.0), (a, 4.0)]
        for a, b, gap in ((-2.0, 0.5, 0.03), (0.6, 8.0, 0.06), (12.0, 13.0, third_m))
    ]
    # the first is passed after 1.5 m, and then 6 cm are kept when the third one comes
    faults = driven(solids_of(walls), vehicle, [(0.0, 16.0)])
    assert codes(faults) == expected
    if expected:
        assert faults[0].facts["index"] == 2
        assert faults[0].at_s_m == pytest.approx(8.5, abs=0.07)


def test_once_out_the_clearance_holds_again() -> None:
    vehicle = car(clearance_m=0.1, start_overlap_m=0.05)

    def second(gap_m: float) -> list[tuple[float, float]]:
        return [(12.0, 0.95 + gap_m), (14.0, 0.95 + gap_m), (14.0, 4.0), (12.0, 4.0)]

    # past the first block after 3 m; the second one is wider off, but not wide enough
    assert driven(solids_of([beside(0.03), second(0.101)]), vehicle, [(0.0, 14.0)]) == []
    (fault,) = driven(solids_of([beside(0.03), second(0.09)]), vehicle, [(0.0, 14.0)])
    assert (fault.facts["index"], fault.facts["kind"]) == (1, "polygon")
    assert 8.4 < fault.at_s_m < 8.5


def test_a_goal_never_overlaps_even_if_the_start_does() -> None:
    vehicle = car(clearance_m=0.1, start_overlap_m=0.05)
    (fault,) = driven(solids_of([beside(0.03)]), vehicle, [(0.0, 0.5)])
    assert fault.code == "collides"
    assert fault.at_s_m == pytest.approx(0.5)


# -- the clearance of a pose -------------------------------------------------------------------


def test_the_clearance_of_a_pose_is_exact_and_names_what_is_nearest() -> None:
    far = [(100.0, 0.0), (101.0, 0.0), (101.0, 1.0), (100.0, 1.0)]
    near = [(20.0, 0.0), (21.0, 0.0), (21.0, 1.0), (20.0, 1.0)]
    solids = solids_of([far, near], [(3.5, 9.0, 0.5)])
    nearest = clearance_m(solids, car(), (0.0, 0.0, 0.0))
    assert (nearest.kind, nearest.number) == ("disc", 0)
    assert nearest.distance_m == pytest.approx(9.0 - 0.5 - 0.95)
    nearest = clearance_m(solids, car(), (12.0, 0.2, 0.0))
    assert (nearest.kind, nearest.number) == ("polygon", 1)
    assert nearest.distance_m == pytest.approx(20.0 - 15.5)
    assert clearance_m(solids_of(), car(), (1.0, 2.0, 3.0)) == (math.inf, "nothing", -1)
    limited = solids_of(limits=(-2.0, -9.0, 9.0, 9.0))
    assert clearance_m(limited, car(), (0.0, 0.0, 0.0))[:2] == (pytest.approx(1.0), "limits")


@pytest.mark.parametrize("turn_rad", [0.0, 0.9, -2.0])
def test_an_overlap_counts_by_its_depth(turn_rad: float) -> None:
    c, s = math.cos(turn_rad), math.sin(turn_rad)
    for depth_m in (0.001, 0.02, 0.5):
        block = np.array(beside(-depth_m)) @ np.array([[c, s], [-s, c]])
        distance_m, kind, number = clearance_m(solids_of([block]), car(), (0.0, 0.0, turn_rad))
        assert (distance_m, kind, number) == (pytest.approx(-depth_m, abs=3e-6), "polygon", 0)


def test_an_overlap_is_never_deeper_than_the_inner_disc() -> None:
    block = [(-50.0, -50.0), (50.0, -50.0), (50.0, 50.0), (-50.0, 50.0)]
    assert clearance_m(solids_of([block]), car(), (0.0, 0.0, 0.0)).distance_m == pytest.approx(
        -0.95, abs=2e-3
    )
    assert clearance_m(solids_of(discs=[(0.0, 0.0, 9.0)]), disc(), (0.0, 0.0, 0.0))[0] == -0.5


@pytest.mark.parametrize("pose", [(math.nan, 0.0, 0.0), (0.0, math.inf, 0.0)])
def test_a_pose_that_is_no_pose_has_no_clearance(pose: Pose) -> None:
    with pytest.raises(ValueError, match="finite"):
        clearance_m(solids_of(), car(), pose)


# -- cells -------------------------------------------------------------------------------------


def squares_of(cells: np.ndarray, cell_m: float, corner: tuple[float, float]) -> list[Floats]:
    corners = np.array([(0, 0), (1, 0), (1, 1), (0, 1)])
    return [
        np.array(corner) + cell_m * (corners + np.array((column, row)))
        for row, column in np.argwhere(cells != 0)
    ]


@pytest.mark.parametrize("part", range(3))
def test_blocked_cells_are_squares(part: int) -> None:
    """The same scene as cells and as one polygon per cell gives the same clearances."""
    rng = np.random.default_rng(40 + part)
    blocked = 0
    for _ in range(12):
        cell_m = float(rng.choice([0.1, 0.25]))
        cells = (rng.random((rng.integers(9, 60), rng.integers(9, 60))) < 0.004).astype(np.uint8)
        r, c = rng.integers(0, 8, 2)
        cells[r : r + rng.integers(1, 9), c : c + rng.integers(1, 20)] = 1
        corner = tuple(rng.uniform(-5.0, 5.0, 2).tolist())
        middle = np.array(corner) + cell_m * 0.5 * np.array(cells.shape[::-1])
        start = (*(middle + rng.uniform(-4.0, 4.0, 2)).tolist(), float(rng.uniform(-3.0, 3.0)))
        vehicle = car(footprint_m=[U_SHAPE, BOX][part % 2], turn_radius_m_min=3.0)
        path, goal = path_of(start, [(float(rng.uniform(-0.3, 0.3)), float(rng.uniform(1, 4)))])
        route = make_route(path, vehicle)
        as_cells = solids_of(cells=cells, cell_m=cell_m, corner_m=corner)
        as_polygons = solids_of(squares_of(cells, cell_m, corner))
        one = verify(as_cells, vehicle, path, route, start, goal)
        other = verify(as_polygons, vehicle, path, route, start, goal)
        assert codes(one) == codes(other)
        blocked += len(one)
        if not one:
            assert one.clearance_m == pytest.approx(other.clearance_m, abs=1e-9)
        elif one[0].at_s_m > 0.0:
            assert one[0].at_s_m == pytest.approx(other[0].at_s_m, abs=1e-3)
        nearest = clearance_m(as_cells, vehicle, start)
        assert nearest.distance_m == pytest.approx(
            clearance_m(as_polygons, vehicle, start).distance_m, abs=3e-6
        )
        columns = as_cells.cells_of.shape[1] * 8
        assert cells[nearest.number // columns, nearest.number % columns] == 1
    assert 2 <= blocked <= 10 * 3


@pytest.mark.parametrize("upright", [False, True])
def test_a_wall_of_cells_is_passed_at_its_true_distance(upright: bool) -> None:
    """Along it, a stretch sees neither of its ends."""
    cells = np.zeros((40, 330), np.uint8)
    cells[0:10, 5:325] = 1  # its face is 1 m from the corner
    for above_m, expected in ((0.96, []), (0.9499, ["collides"])):
        corner = (-10.0, -1.0 - above_m)
        start = (0.0, 0.0, 0.0)
        if upright:
            corner, start = corner[::-1], (0.0, 0.0, math.pi / 2)
        solids = solids_of(cells=cells.T if upright else cells, cell_m=0.1, corner_m=corner)
        faults = driven(solids, car(), STRAIGHT, start)
        assert codes(faults) == expected
        if not expected:
            assert faults.clearance_m == pytest.approx(above_m - 0.95, abs=2e-6)


def test_tiles_that_are_all_blocked_or_all_free_hold_no_cells() -> None:
    tile = np.zeros((1, 8, 8), np.uint8)
    tile[0, 3, 3] = 1
    places = np.array([[ALL_CELLS, NO_CELLS, 0], [NO_CELLS, ALL_CELLS, NO_CELLS]], np.int64)
    solids = solids_of(cells=tile, cells_of=places, cell_m=1.0, corner_m=(-12.0, 20.0))
    whole = np.zeros((16, 24), np.uint8)
    whole[:8, :8] = whole[8:, 8:16] = 1
    whole[3, 19] = 1
    shapes = squares_of(whole, 1.0, (-12.0, 20.0))
    union = shapely.unary_union([shapely.Polygon(p) for p in shapes])
    rng = np.random.default_rng(9)
    overlaps = 0
    for x, y in rng.uniform((-16.0, 14.0), (16.0, 40.0), (40, 2)):
        pose = (float(x), float(y), float(rng.uniform(-3.0, 3.0)))
        nearest = clearance_m(solids, car(), pose)
        expected = shapely.Polygon(car().outline_at(pose)).distance(union)
        assert nearest.kind == "cell"
        if expected > 0.0:
            assert nearest.distance_m == pytest.approx(expected, abs=1e-9)
        else:
            overlaps += 1
            assert nearest.distance_m <= 0.0
    assert 5 < overlaps < 35
    # a vehicle that a tile swallows whole
    assert clearance_m(solids, disc(), (-8.0, 24.0, 0.0)).distance_m == -0.5


# -- laws --------------------------------------------------------------------------------------


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
