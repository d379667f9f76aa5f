"""Angles, poses along arcs, and the functions for scripts."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from byway_planning.curves import pose_at, shortest_curve
from byway_planning.curves.word import advance, ahead, put, wrap
from byway_planning.vehicles import Car, Disc

few = settings(max_examples=60, deadline=None)


@few
@given(st.floats(-1e4, 1e4))
def test_wrap_keeps_the_direction(angle):
    wrapped = wrap(angle)
    assert -math.pi <= wrapped < math.pi
    # 1e4 rad has lost 1e-12 rad of its direction already
    assert math.cos(wrapped) == pytest.approx(math.cos(angle), abs=1e-11)
    assert math.sin(wrapped) == pytest.approx(math.sin(angle), abs=1e-11)


@pytest.mark.parametrize(
    ("angle", "wrapped"),
    [(math.pi, -math.pi), (-math.pi, -math.pi), (0.0, 0.0), (3 * math.pi, -math.pi), (7.0, 7.0)],
)
def test_wrap_at_its_edges(angle, wrapped):
    expected = wrapped if abs(wrapped) < 4 else wrapped - 2 * math.pi
    assert wrap(angle) == pytest.approx(expected, abs=1e-15)


def test_an_arc_of_nearly_a_full_turn_is_nothing():
    assert ahead(-1e-10, 1e-9) == 0.0
    assert ahead(1e-10, 1e-9) == 0.0
    assert ahead(2.0 * math.pi - 1e-10, 1e-9) == 0.0
    assert ahead(-1e-8, 1e-9) == pytest.approx(2.0 * math.pi - 1e-8, abs=1e-15)
    assert ahead(-0.5, 1e-9) == pytest.approx(2.0 * math.pi - 0.5, abs=1e-15)


@few
@given(st.floats(-3.0, 3.0), st.floats(-20.0, 20.0), st.floats(-2.0, 2.0))
def test_an_arc_ends_on_its_circle(heading, length, curvature):
    """Against the circle itself where it is small enough to be trusted, else the line."""
    x, y, after = advance(100.0, -50.0, heading, curvature, length)
    assert after == heading + curvature * length
    if abs(curvature) > 1e-3:
        expected_x = 100.0 + (math.sin(after) - math.sin(heading)) / curvature
        expected_y = -50.0 + (math.cos(heading) - math.cos(after)) / curvature
        assert x == pytest.approx(expected_x, abs=1e-11)
        assert y == pytest.approx(expected_y, abs=1e-11)
    half_turn = 0.5 * abs(curvature * length)
    assert math.hypot(x - 100.0, y + 50.0) <= abs(length) + 1e-12
    # a chord is shorter than its arc by a factor of 1 - angle^2 / 24 at most
    assert math.hypot(x - 100.0, y + 50.0) >= abs(length) * (1.0 - half_turn**2 / 6.0) - 1e-9


def test_a_hair_of_curvature_loses_nothing():
    """Around curvature 0, where circle coordinates would cancel, the pose is smooth."""
    straight = advance(0.0, 0.0, 0.3, 0.0, 10.0)
    for curvature in (5e-324, 1e-300, 1e-16, 1e-12):
        bent = advance(0.0, 0.0, 0.3, curvature, 10.0)
        assert bent == pytest.approx(straight, abs=60.0 * curvature + 4e-15)


@few
@given(st.floats(-2.0, 2.0), st.floats(-5.0, 5.0), st.floats(0.0, 1.0))
def test_an_arc_driven_in_two_parts_is_the_same_arc(curvature, length, share):
    middle = advance(1.0, 2.0, 0.5, curvature, share * length)
    assert advance(*middle, curvature, (1.0 - share) * length) == pytest.approx(
        advance(1.0, 2.0, 0.5, curvature, length), abs=1e-12
    )


def test_pieces_that_go_on_alike_become_one():
    out = np.zeros((5, 2))
    count = 0
    for curvature, length in [(1.0, 0.5), (1.0, 0.25), (0.0, 0.0), (1.0, -0.5), (0.0, -1.0)]:
        count = put(out, count, curvature, length)
    assert out[:count].tolist() == [[1.0, 0.75], [1.0, -0.5], [0.0, -1.0]]


def test_a_script_gets_segments_and_poses():
    start, goal = (2.0, 2.0, 0.0), (40.0, 22.0, 1.57)
    curve = shortest_curve("car", start, goal, turn_radius_m=5.0)
    assert curve.segments.shape == (3, 2)
    assert curve.cost_m == curve.length_m == pytest.approx(np.abs(curve.segments[:, 1]).sum())
    assert pose_at(start, curve.segments, 0.0) == start
    assert pose_at(start, curve.segments, curve.length_m) == pytest.approx(goal, abs=1e-9)
    x, y, _ = pose_at(start, curve.segments, 1.0)
    assert 0.99 < math.hypot(x - 2.0, y - 2.0) <= 1.0


def test_a_vehicle_brings_its_radius_and_costs():
    box = [(-1.0, -0.5), (2.0, -0.5), (2.0, 0.5), (-1.0, 0.5)]
    car = Car(footprint_m=box, turn_radius_m_min=4.0, reverse_factor=2.0, direction_change_m=3.0)
    for goal in ((-6.0, 0.5, 0.2), (0.0, 5.0, 0.0)):
        by_name = shortest_curve(
            "car",
            (0, 0, 0),
            goal,
            turn_radius_m=4.0,
            reverse_factor=2.0,
            direction_change_m=3.0,
        )
        own = shortest_curve(car, (0, 0, 0), goal)
        assert own.segments.tolist() == by_name.segments.tolist()
        assert own.cost_m == by_name.cost_m > own.length_m
    assert shortest_curve(Disc(radius_m=1.0), (0, 0, 0), (0, 2, 0)).length_m == 2.0


def test_a_pose_in_a_reverse_piece_lies_behind():
    segments = np.array([[0.0, 2.0], [0.0, -3.0]])
    assert pose_at((0.0, 0.0, 0.0), segments, 3.5) == (0.5, 0.0, 0.0)


def test_forward_and_disc_curves_by_name():
    forward = shortest_curve("forward_car", (0, 0, 0), (-5, 0, 0), turn_radius_m=1.0)
    assert forward.length_m == pytest.approx(5.0 + 2.0 * math.pi, abs=1e-12)
    disc = shortest_curve("disc", (0, 0, 0), (3, 4, 1))
    assert disc.segments.tolist() == [[0.0, 5.0]]


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"vehicle": "hovercraft"}, "the vehicle must be one of car, forward_car, disc"),
        ({"start": (0.0, math.nan, 0.0)}, "start must be three finite numbers"),
        ({"goal": (0.0, 0.0)}, "goal must be three finite numbers"),
        ({"turn_radius_m": 0.0}, "turn_radius_m must be above 0"),
        ({"reverse_factor": 0.9}, "reverse_factor must be at least 1"),
        ({"direction_change_m": -1.0}, "direction_change_m must be at least 0"),
        ({"direction_change_m": math.nan}, "direction_change_m must be at least 0"),
    ],
)
def test_senseless_arguments_are_named(change, said):
    arguments = {"vehicle": "car", "start": (0, 0, 0), "goal": (1, 2, 3), "turn_radius_m": 5.0}
    arguments |= change
    with pytest.raises(ValueError, match=said):
        shortest_curve(**arguments)


@pytest.mark.parametrize("at_m", [-0.1, 5.1, math.nan])
def test_a_pose_off_the_curve_is_refused(at_m):
    with pytest.raises(ValueError, match="at_m must be within"):
        pose_at((0.0, 0.0, 0.0), np.array([[0.0, 5.0]]), at_m)
