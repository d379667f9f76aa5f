"""What must hold for every goal: symmetries, bounds, exact ends, tidy segments."""

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from byway_planning.curves.dubins import dubins, dubins_length
from byway_planning.curves.reeds_shepp import reeds_shepp, reeds_shepp_length
from byway_planning.curves.steer import steer
from byway_planning.curves.straight import straight
from byway_planning.curves.word import advance, wrap
from byway_planning.vehicles.body import CAR, DISC, FORWARD_CAR

few = settings(max_examples=60, deadline=None)
near = st.floats(-6.0, 6.0)
far = st.floats(-1000.0, 1000.0)
headings = st.floats(-math.pi, math.pi)
radii = st.floats(0.3, 50.0)
factors = st.floats(1.0, 4.0)
changes = st.floats(0.0, 10.0)


def drive(start, segments):
    pose = start
    for curvature, length in segments:
        pose = advance(*pose, curvature, length)
    return pose


def turned(a, b):
    return abs((a - b + math.pi) % (2.0 * math.pi) - math.pi)


@few
@given(near, near, headings)
def test_mirrored_and_reversed_goals_are_as_far(x, y, heading):
    length = reeds_shepp_length(x, y, heading)
    assert reeds_shepp_length(-x, y, -heading) == pytest.approx(length, abs=1e-10)
    assert reeds_shepp_length(x, -y, -heading) == pytest.approx(length, abs=1e-10)
    assert reeds_shepp_length(-x, -y, heading) == pytest.approx(length, abs=1e-10)


@few
@given(st.integers(0, 2**31))
def test_the_way_back_is_as_long(seed):
    """
    Swapping start and goal changes no length.

    Drawn without the round numbers that hypothesis loves: at goals a rounding error away from
    degenerate ones the length changes like the root of the error.
    """
    x, y, heading = np.random.default_rng(seed).uniform(-1, 1, 3) * [6.0, 6.0, math.pi]
    c, s = math.cos(heading), math.sin(heading)
    there = reeds_shepp_length(x, y, heading)
    back = reeds_shepp_length(-x * c - y * s, x * s - y * c, -heading)
    assert back == pytest.approx(there, abs=1e-9)


@few
@given(near, near, headings)
def test_lengths_lie_between_their_bounds(x, y, heading):
    """Distance and heading change <= Reeds-Shepp <= Dubins <= distance + 7 pi / 3."""
    rs, forward = reeds_shepp_length(x, y, heading), dubins_length(x, y, heading)
    distance = math.hypot(x, y)
    assert max(distance, abs(wrap(heading))) <= rs + 1e-10
    assert rs <= forward + 1e-10
    # Kim and Cheong, The cost of bounded curvature, arXiv 1106.6214
    assert forward <= distance + 7.0 * math.pi / 3.0 + 1e-9


@few
@given(st.integers(0, 2**31), factors, changes)
def test_no_chain_of_arcs_is_cheaper(seed, factor, change):
    """
    Any row of arcs and lines that ends at the goal is at least as long as the curve, and the
    words among them (here: C C|C, C|C C, C|C S C and the like) at least as dear.
    """
    rng = np.random.default_rng(seed)
    pieces = [(rng.integers(-1, 2), rng.uniform(-2.0, 2.0)) for _ in range(rng.integers(1, 7))]
    goal = drive((0.0, 0.0, 0.0), pieces)
    driven = sum(abs(length) for _, length in pieces)
    assert reeds_shepp_length(*goal) <= driven + 1e-9
    forward = drive((0.0, 0.0, 0.0), [(c, abs(length)) for c, length in pieces])
    assert dubins_length(*forward) <= driven + 1e-9

    a, b, u = rng.uniform(0.0, math.pi, 3)
    left = rng.choice([-1.0, 1.0])
    quarter, half = 0.5 * math.pi, 0.5 * u
    words = [
        [(left, a), (-left, -u), (left, b)],
        [(left, a), (-left, -u), (left, -b)],
        [(left, a), (-left, u), (left, -b)],
        [(left, a), (-left, half), (left, -half), (-left, -b)],
        [(left, a), (-left, -half), (left, -half), (-left, b)],
        [(left, a), (-left, -quarter), (0.0, -u), (left, -b)],
        [(left, a), (-left, -quarter), (0.0, -u), (-left, -b)],
        [(left, a), (-left, -quarter), (0.0, -u), (left, -quarter), (-left, b)],
        [(left, 1.9 * a), (0.0, u), (left, 1.9 * b)],
        [(left, 1.9 * a), (0.0, u), (-left, 1.9 * b)],
        [(left, 1.9 * a), (-left, math.pi + u), (left, 1.9 * b)],
    ]
    out = np.zeros((5, 2))
    for word in words:
        for sign in (1.0, -1.0):  # the word, and its way back in time
            driven = [(c, sign * length) for c, length in word]
            goal = drive((0.0, 0.0, 0.0), driven)
            _, _, cost = reeds_shepp(1.0, *goal, factor, change, out)
            assert cost <= cost_of(driven, factor, change) + 1e-8


def cost_of(segments, factor, change):
    lengths = [length for _, length in segments]
    changes = sum((a > 0) != (b > 0) for a, b in itertools.pairwise(lengths))
    return sum(p if p > 0 else -factor * p for p in lengths) + change * changes


@few
@given(far, far, headings, far, far, headings, radii, factors, changes)
def test_curves_end_exactly_and_are_tidy(ax, ay, ah, bx, by, bh, radius, factor, change):
    """Within 1e-9 m and rad at coordinates of a kilometre; no empty or split segment."""
    for kind in (CAR, FORWARD_CAR):
        out = np.full((5, 2), np.nan)
        count, length, cost = steer(kind, radius, factor, change, ax, ay, ah, bx, by, bh, out)
        segments = out[:count].tolist()
        x, y, heading = drive((ax, ay, ah), segments)
        assert math.hypot(x - bx, y - by) <= 1e-9
        assert turned(heading, bh) <= 1e-9
        assert all(piece != 0.0 for _, piece in segments)
        for first, second in itertools.pairwise(segments):
            assert first[0] != second[0] or first[1] * second[1] < 0.0
        assert {abs(c) for c, _ in segments} <= {0.0, 1.0 / radius}
        assert length == pytest.approx(sum(abs(piece) for _, piece in segments), rel=1e-12)
        if kind == FORWARD_CAR:
            assert all(piece > 0.0 for _, piece in segments)
            assert cost == length
        else:
            assert cost == pytest.approx(cost_of(segments, factor, change), rel=1e-12)


@few
@given(near, near, headings, factors, changes)
def test_a_dearer_reverse_never_makes_it_cheaper(x, y, heading, factor, change):
    """Length <= cost; never above the forward curve, nor the same curve all in reverse."""
    out = np.zeros((5, 2))
    _, length, cost = reeds_shepp(1.0, x, y, heading, factor, change, out)
    assert reeds_shepp_length(x, y, heading) <= length + 1e-9
    assert length <= cost + 1e-9
    assert cost <= dubins_length(x, y, heading) + 1e-9
    assert cost <= factor * dubins_length(-x, y, -heading) + 1e-9
    _, _, dearer = reeds_shepp(1.0, x, y, heading, 1.5 * factor, change + 0.1, out)
    assert cost <= dearer + 1e-9


@few
@given(st.integers(0, 2**31))
def test_rounding_asks_for_no_detours(seed):
    """
    One or two pieces driven far from the origin are found again as such, although the goal is
    rounded: no full circle, no four-arc shuffle of a micrometre.
    """
    rng = np.random.default_rng(seed)
    radius = float(rng.choice([1.0, 2.2, 5.0, 12.0]))
    start = (*rng.uniform(-1000.0, 1000.0, 2), rng.uniform(-math.pi, math.pi))
    pieces = [
        (rng.integers(-1, 2) / radius, radius * rng.uniform(0.1, 2.5))
        for _ in range(rng.integers(1, 3))
    ]
    goal = drive(start, pieces)
    driven = sum(length for _, length in pieces)
    out = np.zeros((5, 2))
    for kind in (CAR, FORWARD_CAR):
        _, length, _ = steer(kind, radius, 1.5, 2.0, *start, *goal, out)
        assert length <= driven + 1e-6


@pytest.mark.parametrize("goal", [(0.4, 0.2, 2.5), (-3.0, 1.0, -0.3), (0.0, 4.0, 0.0)])
def test_the_segments_lead_to_the_goal_by_the_equations_of_motion(goal):
    """x' = cos h, y' = sin h, h' = curvature, integrated along the signed length."""
    out = np.zeros((5, 2))
    for kind in (CAR, FORWARD_CAR):
        count, _, _ = steer(kind, 0.8, 1.2, 0.1, 0.0, 0.0, 0.0, *goal, out)
        pose = np.zeros(3)
        for curvature, length in out[:count]:
            motion = solve_ivp(
                lambda _, p, c=curvature: [math.cos(p[2]), math.sin(p[2]), c],
                (0.0, length),
                pose,
                rtol=1e-11,
                atol=1e-12,
            )
            pose = motion.y[:, -1]
        assert math.hypot(pose[0] - goal[0], pose[1] - goal[1]) < 1e-8
        assert turned(pose[2], goal[2]) < 1e-8


def test_the_goal_at_the_start_needs_no_segment():
    out = np.zeros((5, 2))
    for kind in (CAR, FORWARD_CAR, DISC):
        assert steer(kind, 5.0, 1.5, 2.0, 3.0, 4.0, 0.7, 3.0, 4.0, 0.7, out) == (0, 0.0, 0.0)
    # a whole turn of heading is no turn
    assert steer(CAR, 5.0, 1.5, 2.0, 3.0, 4.0, 0.7, 3.0, 4.0, 0.7 + 2 * math.pi, out)[1] < 1e-9


def test_straight_back_is_one_segment():
    out = np.zeros((5, 2))
    assert reeds_shepp(5.0, -4.0, 0.0, 0.0, 1.5, 2.0, out) == (1, 4.0, 6.0)
    assert out[0].tolist() == [0.0, -4.0]


def test_a_long_arc_is_driven_where_reversing_is_too_dear():
    """Turning round on the spot: three arcs to and fro, or forward all round."""
    out = np.zeros((5, 2))
    _, _, cheap = reeds_shepp(1.0, 0.0, 0.0, math.pi, 1.0, 0.0, out)
    assert cheap == pytest.approx(math.pi, abs=1e-12)
    count, length, cost = reeds_shepp(1.0, 0.0, 0.0, math.pi, 3.0, 10.0, out)
    assert cost == length == pytest.approx(7.0 * math.pi / 3.0, abs=1e-12)
    assert (out[:count, 1] > 0.0).all()


def test_a_disc_goes_straight():
    out = np.zeros((5, 2))
    assert straight(3.0, -4.0, out) == (1, 5.0, 5.0)
    assert out[0].tolist() == [0.0, 5.0]
    assert steer(DISC, 0.0, 1.0, 0.0, 1.0, 1.0, 9.0, 4.0, 5.0, -9.0, out) == (1, 5.0, 5.0)


def test_dubins_scales_with_the_radius():
    out = np.zeros((5, 2))
    count, length, _ = dubins(4.0, 6.0, -5.0, 2.0, out)
    assert length == pytest.approx(4.0 * dubins_length(1.5, -1.25, 2.0), rel=1e-14)
    assert set(np.abs(out[:count, 0])) <= {0.0, 0.25}
