"""Editable paths against plain Python twins."""

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.planning.naive import cost_until, merged, pose_at, sums_along
from tests.planning.route_scenes import after
from tests.planning.search.search_scenes import BOX, RADIUS_M, read_only, turn_between

from byway_planning import Car, Disc, ForwardCar
from byway_planning.search.paths import (
    ELEMENTS_MAX,
    copy_course,
    cost_along,
    cost_of,
    element_at,
    load_course_kernel,
    new_course,
    path_cost,
    path_from,
    pose_along,
)

BODIES = {
    "car": Car(
        footprint_m=BOX, turn_radius_m_min=RADIUS_M, reverse_factor=1.7, direction_change_m=2.5
    ).body(),
    "forward": ForwardCar(footprint_m=BOX, turn_radius_m_min=RADIUS_M).body(),
    "disc": Disc(radius_m=0.5).body(),
}
PIECE = st.tuples(st.sampled_from([0.0, 1 / RADIUS_M, -1 / RADIUS_M, 0.1]), st.floats(-9.0, 9.0))


def path_through(pieces, name, jumps=None):
    """A path over pieces for a body; headings off by whole turns where told."""
    jumps = itertools.repeat(0) if jumps is None else jumps
    rows, pose = [], (1.0, -2.0, 0.4)
    for (curvature, length), turns in zip(pieces, jumps, strict=False):
        k, metres = curvature, length
        if name != "car":
            metres = abs(length)
        if name == "disc":
            pose = (pose[0], pose[1], 40.0 * curvature + length)  # a corner
            k = 0.0
        x, y, h = pose
        rows.append((x, y, h + 2.0 * math.pi * turns, k, metres))
        pose = after(pose, k, metres)
    return np.array(rows)


def loaded(path, body):
    course = new_course()
    assert load_course_kernel(read_only(path), body, course)
    return course


@pytest.mark.parametrize("name", BODIES)
@settings(max_examples=40, deadline=None)
@given(pieces=st.lists(PIECE, min_size=1, max_size=12), share=st.floats(0.0, 1.0))
def test_sums_costs_and_poses_along_a_path_are_those_of_the_twin(name, pieces, share):
    body = BODIES[name]
    path = path_through(pieces, name)
    rows = np.array(merged(path)).reshape(-1, 5)
    course = loaded(path, body)
    used = int(course.used[0])
    if not len(rows):  # a path of no length stays one element
        assert used == 1
        assert cost_of(course) == 0.0
        assert path_from(course)[0, :3] == pytest.approx(path[0, :3])
        return
    assert path_from(course) == pytest.approx(rows, abs=1e-9)
    lengths, costs = sums_along(rows, body)
    assert course.lengths[: used + 1] == pytest.approx(lengths, abs=1e-9)
    assert course.costs[: used + 1] == pytest.approx(costs, abs=1e-9)
    assert path_cost(path_from(course), body) == pytest.approx(costs[-1], abs=1e-9)
    assert cost_of(course) == course.costs[used]
    s = share * lengths[-1]
    element = element_at(course, s)
    assert course.lengths[element] <= s
    assert element == used - 1 or s < course.lengths[element + 1]
    x, y, h = pose_along(course, element, s)
    wanted = pose_at(rows, s)
    assert (x, y) == pytest.approx(wanted[:2], abs=1e-6)
    assert name == "disc" or turn_between(h, wanted[2]) < 1e-6
    assert cost_along(body, course, element, s) == pytest.approx(
        max(cost_until(rows, body, s), costs[element]), abs=1e-6
    )


@settings(max_examples=30, deadline=None)
@given(
    st.lists(PIECE, min_size=2, max_size=8),
    st.lists(st.integers(-2, 2), min_size=8, max_size=8),
)
def test_headings_that_jump_by_whole_turns_are_made_continuous(pieces, jumps):
    """Lattices and trees keep headings within one turn; their paths may wind."""
    pieces = [(k, length) for k, length in pieces if abs(length) > 1e-6]
    path = path_through(pieces, "car", jumps)
    for name in ("car", "forward"):
        if len(path) == 0:
            continue
        rows = path_from(loaded(path, BODIES[name]))
        ends = rows[:-1, 2] + rows[:-1, 3] * rows[:-1, 4]
        assert rows[1:, 2] == pytest.approx(ends, abs=1e-9)
        assert rows[0, 2] == path[0, 2]


def test_a_disc_keeps_the_headings_of_its_corners():
    """They are directions of travel; -3 and 3 radians are nearly the same one."""
    path = np.array([(0.0, 0.0, 3.0, 0.0, 1.0), (-0.99, 0.14, -3.0, 0.0, 1.0)])
    assert path_from(loaded(path, BODIES["disc"]))[:, 2].tolist() == [3.0, -3.0]


def test_an_element_that_goes_on_like_the_last_lengthens_it_and_others_do_not():
    k = 1 / RADIUS_M
    pieces = [(k, 1.0), (k, 2.0), (k, -1.0), (0.0, -1.0), (0.0, -2.0), (0.0, 0.0), (k, 1e-12)]
    rows = path_from(loaded(path_through(pieces, "car"), BODIES["car"]))
    assert rows[:, 3:] == pytest.approx(np.array([(k, 3.0), (k, -1.0), (0.0, -3.0)]))
    corner = np.array([(0.0, 0.0, 0.0, 0.0, 1.0), (1.0, 0.0, 0.1, 0.0, 1.0)])
    assert len(path_from(loaded(corner, BODIES["disc"]))) == 2


def test_a_change_of_direction_is_paid_by_cars_only_and_where_it_leads_to():
    path = path_through([(0.0, 4.0), (0.1, -2.0), (0.0, -1.0), (0.0, 5.0)], "car")
    course = loaded(path, BODIES["car"])
    assert course.costs[:5] == pytest.approx([0.0, 6.5, 9.9, 14.1, 19.1])
    assert path_cost(path, BODIES["car"]) == pytest.approx(4 + 3 * 1.7 + 5 + 2 * 2.5)


def test_a_copy_is_the_same_and_stays_so():
    course = loaded(path_through([(0.0, 4.0), (0.1, -2.0)], "car"), BODIES["car"])
    twin = new_course()
    copy_course(course, twin)
    before = path_from(twin)
    load_course_kernel(read_only([(9.0, 9.0, 0.0, 0.0, 1.0)]), BODIES["car"], course)
    assert path_from(twin).tobytes() == before.tobytes()
    assert cost_of(twin) == pytest.approx(4 + 2 * 1.7 + 2.5)


def test_a_path_of_too_many_elements_is_refused_and_one_that_just_fits_is_not():
    """A lattice over a wide site could bring one; it must not be written past the end."""
    k = 1 / RADIUS_M
    zigzag = [(k if i % 2 else -k, 0.01) for i in range(ELEMENTS_MAX + 1)]
    path = path_through(zigzag, "forward")
    body = BODIES["forward"]
    assert not load_course_kernel(read_only(path), body, new_course())
    fits = loaded(path[:-1], body)
    assert fits.used[0] == ELEMENTS_MAX
    assert cost_of(fits) == pytest.approx(0.01 * ELEMENTS_MAX)
    assert fits.lengths[ELEMENTS_MAX] == pytest.approx(0.01 * ELEMENTS_MAX)
    straight = path_through([(0.0, 0.01)] * (2 * ELEMENTS_MAX), "forward")
    assert loaded(straight, body).used[0] == 1
