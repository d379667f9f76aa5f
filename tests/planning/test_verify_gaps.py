"""The check at known gaps, in bends, and on the way out of a start that is too near."""

import math

import numpy as np
import pytest
from tests.planning.route_scenes import (
    EVERYWHERE,
    Floats,
    Pose,
    Twin,
    car,
    codes,
    disc,
    driven,
    line_of,
    path_of,
    solids_of,
)

from byway_planning.route import make_route
from byway_planning.verify import verify

STRAIGHT = [(0.0, 10.0)]


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


@pytest.mark.parametrize("curvature", [2.9e-6, -1e-6, 3.1e-6])
def test_a_very_flat_bend_is_measured_to_a_micrometre(curvature: float) -> None:
    wall = [(0.0, 1.25), (8.0, 1.25), (8.0, 3.0), (0.0, 3.0)]
    path, goal = path_of((0.0, 0.0, 0.0), [(curvature, 12.0)])
    route = make_route(path, car())
    faults = verify(solids_of([wall]), car(), path, route, (0.0, 0.0, 0.0), goal)
    least_m = Twin(car(), route.table, [wall]).least()
    # the outline is drawn in by a micrometre while it is measured
    assert faults.clearance_m == pytest.approx(least_m, abs=0.3e-6)


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
            # a long straight face across the circle: no end of it comes near the vehicle
            face = [
                ((tip_m + d) * c - w * s, 5.0 + (tip_m + d) * s + w * c)
                for d, w in ((0.0, -3.0), (1.0, -3.0), (1.0, 3.0), (0.0, 3.0))
            ]
            for solids in (
                solids_of(discs=[grazed, post]),
                solids_of([spike], discs=[grazed]),
                solids_of([face], discs=[grazed]),
            ):
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


# -- leaving a start that is too near ----------------------------------------


def beside(gap_m: float) -> list[tuple[float, float]]:
    """A block off the left flank of a tug that stands at 0; it reaches in if negative."""
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


@pytest.mark.parametrize(("overlap_m", "expected"), [(0.02, []), (0.035, ["collides"])])
def test_thin_arms_allow_less_overlap(overlap_m: float, expected: list[str]) -> None:
    """Arms 0.1 m thick cannot be drawn in by the 0.06 m that are allowed, but by half of it."""
    fork = [(-1.0, -0.6), (3.0, -0.6), (3.0, -0.5), (0.0, -0.5)]
    fork += [(x, -y) for x, y in reversed(fork)]
    vehicle = car(footprint_m=fork, start_overlap_m=0.06)
    post = [(1.0, -0.8), (1.2, -0.8), (1.2, -0.6 + overlap_m), (1.0, -0.6 + overlap_m)]
    assert codes(driven(solids_of([post]), vehicle, [(-0.1, -4.0)])) == expected


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
