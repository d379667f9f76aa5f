"""Room for a body along an arc, against dense sampling of exact distances by shapely."""

import math

import numpy as np
import pytest
from tests.planning.collision_twins import (
    BOX,
    FORK,
    VEHICLES,
    car,
    poses_along,
    random_world,
    world,
)

from byway_planning.collision import CONTACT_M, pose_free
from byway_planning.motion import motion_free, motion_reach, segments_free

#: No point of a vehicle here moves more than 1.8 m a metre driven, so nothing that comes nearer
#: than CLEAR_M goes unseen between two samples by more than 0.0036 m.
STEP_M = 0.004
CLEAR_M = 0.005
#: Few enough obstacles that large vehicles have somewhere to go.
SPARSE = (1.2, 0.7, 0.3, 0.1)


def random_arcs(seed: int, count: int) -> list[tuple[tuple[float, float, float], float, float]]:
    rng = np.random.default_rng(seed)
    poses = rng.uniform((-3.0, 2.0, -math.pi), (21.0, 18.0, math.pi), (count, 3)).tolist()
    curvatures = rng.choice([0.0, 1 / 3, -1 / 3, 0.1], count).tolist()
    lengths = (rng.choice([-1.0, 1.0], count) * rng.uniform(0.2, 5.0, count)).tolist()
    return [(tuple(p), k, s) for p, k, s in zip(poses, curvatures, lengths, strict=True)]


@pytest.mark.parametrize("name", VEHICLES)
def test_a_free_motion_touches_nothing_and_a_clear_one_is_free(name):
    vehicle = VEHICLES[name]
    body = vehicle.body()
    answers = set()
    for seed in range(3):
        place = random_world(seed, 0.1, SPARSE)
        scene = place.scene
        for pose, curvature, length in random_arcs(seed, 60):
            if vehicle.inner_radius_m == body.skin_m:
                curvature = 0.0  # a disc goes straight
            poses = poses_along(pose, curvature, length, STEP_M)
            if not (pose_free(scene, body, *pose) and pose_free(scene, body, *poses[-1])):
                continue
            least = (place.distances_m(vehicle, poses) - vehicle.clearance_m).min()
            free = motion_free(scene, body, *pose, curvature, length)
            answers.add(free)
            assert not (free and least <= 0.0), (seed, pose, curvature, length)
            assert free or least < CLEAR_M, (seed, pose, curvature, length)
    assert answers == {True, False}


@pytest.mark.parametrize("name", VEHICLES)
def test_a_motion_reaches_as_far_as_there_is_room(name):
    vehicle = VEHICLES[name]
    body = vehicle.body()
    stopped = 0
    place = random_world(3, 0.1, SPARSE)
    for pose, curvature, length in random_arcs(4, 60):
        if not pose_free(place.scene, body, *pose):
            assert motion_reach(place.scene, body, *pose, curvature, length) == 0.0
            continue
        reach = motion_reach(place.scene, body, *pose, curvature, length)
        assert 0.0 <= reach <= abs(length)
        signed = math.copysign(reach, length)
        poses = poses_along(pose, curvature, signed, STEP_M)
        distances = place.distances_m(vehicle, poses) - vehicle.clearance_m
        assert (distances > 0.4 * CONTACT_M).all()
        if reach < abs(length):
            stopped += 1
            assert distances[-1] < CONTACT_M + 1e-9
        else:
            assert pose_free(place.scene, body, *poses[-1])
    assert stopped > 5


@pytest.mark.parametrize("degrees", [0, 30, 90, 171])
def test_a_gap_is_driven_through_when_wider_than_the_vehicle_and_only_then(degrees):
    heading = math.radians(degrees)
    c, s = math.cos(heading), math.sin(heading)
    turn = np.array([[c, s], [-s, c]])
    body = car(BOX).body()
    for gap_m, passes in ((1.92, True), (1.899, False)):
        walls = [
            np.array([(-3.0, side * gap_m / 2), (3.0, side * gap_m / 2), (0.0, side * 3.5)])
            @ turn + (14.0, 14.0)
            for side in (1.0, -1.0)
        ]  # fmt: skip
        place = world((0.0, 0.0, 28.0, 28.0), polygons=walls)
        start = (14.0 - 8.0 * c, 14.0 - 8.0 * s, heading)
        back = (14.0 + 6.0 * c, 14.0 + 6.0 * s, heading)
        assert motion_free(place.scene, body, *start, 0.0, 14.0) == passes
        assert motion_free(place.scene, body, *back, 0.0, -14.0) == passes
        reach = motion_reach(place.scene, body, *start, 0.0, 14.0)
        # The nose is 3.5 m ahead of the origin, the walls begin 3 m before the middle.
        assert (reach == 14.0) if passes else (1.49 < reach <= 1.52)


def test_a_gap_between_cells_is_driven_through():
    cells = np.zeros((160, 160), np.uint8)
    cells[60:70, 40:120] = 1
    cells[90:100, 40:120] = 1
    place = world((0.0, 0.0, 16.0, 16.0), cells=cells)
    for width_m, passes in ((1.98, True), (2.001, False)):
        half = width_m / 2
        body = car(((-1.0, -half), (2.0, -half), (2.0, half), (-1.0, half))).body()
        assert motion_free(place.scene, body, 1.5, 8.0, 0.0, 0.0, 12.0) == passes


@pytest.mark.parametrize("layer", ["polygons", "outlines"])
def test_a_fork_drives_with_a_post_between_its_arms(layer):
    """The hull of a concave body is full of it, the body is not."""
    post = np.array([(-0.05, -0.05), (0.05, -0.05), (0.05, 0.05), (-0.05, 0.05)])
    place = world((-20.0, -20.0, 20.0, 20.0), **{layer: [post]})
    fork = car(FORK).body()
    assert motion_free(place.scene, fork, -5.0, 0.0, 0.0, 0.0, 4.7)
    assert not motion_free(place.scene, fork, -5.0, 0.0, 0.0, 0.0, 4.9)
    assert motion_reach(place.scene, fork, -5.0, 0.0, 0.0, 0.0, 9.0) == pytest.approx(
        4.75, abs=0.002
    )
    assert motion_free(place.scene, fork, -0.4, 0.0, 0.0, 0.0, -6.0)
    assert not motion_free(place.scene, fork, -3.0, -0.7, 0.0, 0.0, 2.0)
    # Turning with it, and out of a turn.
    assert motion_free(place.scene, fork, -1.0, 0.0, 0.0, 0.33, 0.3)


@pytest.mark.parametrize("curvature", [1 / 3, -1 / 3])
@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_a_corner_that_swings_out_between_two_poses_is_seen(curvature, sign):
    """Its arc lies outside of the chord that it ends on, by more than a centimetre here."""
    body = car(BOX).body()
    side = math.copysign(1.0, curvature)
    # The outer front corner, seen from the centre of the turn at (0, side * 3).
    ahead, across = 3.5, -0.95 * side - 3.0 * side
    radius, first = math.hypot(ahead, across), math.atan2(across, ahead)
    for length in (0.2, 0.45, 1.1):
        turn = sign * length * curvature
        for part in (0.3, 0.5, 0.8):
            for more_m, free in ((-0.004, False), (0.0075, True)):
                at = first + part * turn
                x, y = (radius + more_m) * math.cos(at), (radius + more_m) * math.sin(at)
                post = (10.0 + x, 10.0 + 3.0 * side + y, 0.001)
                place = world((0.0, 0.0, 20.0, 20.0), discs=[post])
                end = poses_along((10.0, 10.0, 0.0), curvature, sign * length, length)[-1]
                assert pose_free(place.scene, body, 10.0, 10.0, 0.0)
                assert pose_free(place.scene, body, *end)
                found = motion_free(place.scene, body, 10.0, 10.0, 0.0, curvature, sign * length)
                assert found == free


def test_segments_are_driven_one_after_another():
    wall = np.array([(6.0, 4.0), (7.0, 4.0), (7.0, 8.0), (6.0, 8.0)])
    place = world((-10.0, -10.0, 20.0, 20.0), polygons=[wall])
    body = car(BOX).body()
    free = np.array([(0.0, 3.0), (0.25, 2.0), (-0.25, -1.0)])
    assert segments_free(place.scene, body, -4.0, 0.0, 0.0, free, 3)
    blocked = np.array([(0.0, 3.0), (0.33, 6.0), (0.0, -1.0)])
    assert not segments_free(place.scene, body, 2.0, 0.0, 0.0, blocked, 3)
    assert segments_free(place.scene, body, 2.0, 0.0, 0.0, blocked, 0)


def test_an_obstacle_smaller_than_the_body_is_not_jumped_over():
    """However thin it is and however fast the ends of the motion are past it."""
    needle = np.array([(5.0, 5.0), (5.002, 5.0), (5.002, 5.002), (5.0, 5.002)])
    place = world((-10.0, -10.0, 20.0, 20.0), polygons=[needle])
    for name in ("box", "disc", "wedge", "mouse"):
        body = VEHICLES[name].body()
        assert not motion_free(place.scene, body, -2.0, 5.001, 0.0, 0.0, 15.0)
        assert not motion_free(place.scene, body, 15.0, 5.001, 0.0, 0.0, -18.0)


def test_nonsense_motions_are_not_free():
    place = world((0.0, 0.0, 20.0, 20.0))
    body = VEHICLES["box"].body()
    assert not motion_free(place.scene, body, math.nan, 5.0, 0.0, 0.0, 1.0)
    assert not motion_free(place.scene, body, 5.0, 5.0, math.nan, 0.1, 1.0)
    assert motion_reach(place.scene, body, math.nan, 5.0, 0.0, 0.0, 1.0) == 0.0
