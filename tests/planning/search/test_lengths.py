"""The table of unit curve lengths, against the curves themselves."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from byway_planning import Car, ForwardCar
from byway_planning.curves import shortest_curve
from byway_planning.search.lengths import HALF, STEP, TURNS, guessed_length, lengths_of
from byway_planning.vehicles.body import CAR, DISC, FORWARD_CAR

BOX = [(-1.0, -0.95), (3.5, -0.95), (3.5, 0.95), (-1.0, 0.95)]
UNIT = {
    CAR: Car(footprint_m=BOX, turn_radius_m_min=1.0, reverse_factor=1.0, direction_change_m=0.0),
    FORWARD_CAR: ForwardCar(footprint_m=BOX, turn_radius_m_min=1.0),
}
KINDS = pytest.mark.parametrize("kind", UNIT, ids=["car", "forward"])


def exact(kind, goal):
    return shortest_curve(UNIT[kind], (0.0, 0.0, 0.0), goal).length_m


def at(i, j, k):
    return (i - HALF) * STEP, (j - HALF) * STEP, k * 2.0 * math.pi / TURNS


@KINDS
def test_the_table_holds_the_shortest_lengths_at_its_points(kind):
    lengths = lengths_of(kind)
    assert lengths.table.shape == (2 * HALF + 1, 2 * HALF + 1, TURNS)
    assert not lengths.table.flags.writeable
    assert lengths_of(kind) is lengths
    rng = np.random.default_rng(7)
    for place in rng.integers((0, 0, 0), lengths.table.shape, (300, 3)):
        # Where an arc becomes a full circle a Dubins length jumps, and rounding decides which.
        goal = at(*place)
        beside = [exact(kind, (goal[0], goal[1], goal[2] + d)) for d in (0.0, 1e-9, -1e-9)]
        assert min(abs(lengths.table[tuple(place)] - length) for length in beside) < 2e-6


@KINDS
@settings(max_examples=80, deadline=None)
@given(
    st.tuples(*[st.integers(1, 2 * HALF - 1)] * 2, st.integers(0, TURNS - 1)),
    st.floats(0.5, 20.0),
    st.tuples(st.floats(-300.0, 300.0), st.floats(-300.0, 300.0), st.floats(-7.0, 7.0)),
)
def test_one_table_serves_every_radius_and_every_pose(kind, place, radius, start):
    lengths = lengths_of(kind)
    goal = at(*place)
    c, s = math.cos(start[2]), math.sin(start[2])
    x = start[0] + radius * (c * goal[0] - s * goal[1])
    y = start[1] + radius * (s * goal[0] + c * goal[1])
    turn = start[2] + goal[2] + 2.0 * math.pi
    found = guessed_length(lengths, radius, *start, x, y, turn)
    assert found == pytest.approx(radius * float(lengths.table[place]), rel=1e-6)


@KINDS
def test_between_its_points_it_is_off_by_the_rounding_of_position_and_heading(kind):
    """
    No promise of the curves themselves: a sideways step of e costs about 2 sqrt(2 e). The bulk
    must be near, the mean nearer.
    """
    lengths = lengths_of(kind)
    rng = np.random.default_rng(8)
    off = []
    for goal in rng.uniform((-2.9, -2.9, -math.pi), (2.9, 2.9, math.pi), (400, 3)):
        found = guessed_length(lengths, 1.0, 0.0, 0.0, 0.0, *goal)
        off.append(abs(found - exact(kind, tuple(goal))))
    assert np.median(off) < 0.1
    assert np.quantile(off, 0.9) < 0.3


@KINDS
def test_beyond_the_table_it_is_the_distance(kind):
    lengths = lengths_of(kind)
    for goal in ((3.2, 0.0), (0.0, -3.0), (-2.0, 90.0), (3.0, 3.0)):
        found = guessed_length(lengths, 4.0, 1.0, 2.0, 0.0, 1.0 + 4 * goal[0], 2 + 4 * goal[1], 1.0)
        assert found == pytest.approx(4.0 * math.hypot(*goal), rel=1e-12)


def test_a_disc_has_no_table_and_goes_straight():
    lengths = lengths_of(DISC)
    assert lengths.table.size == 0
    assert guessed_length(lengths, 0.0, 1.0, 2.0, 3.0, 4.0, 6.0, 0.0) == 5.0
