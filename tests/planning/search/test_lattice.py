"""The lattice: drivable from either end, the same in any slices and memory, and bounded."""

import math

import numpy as np
import pytest
from tests.planning.search.search_scenes import (
    GOAL,
    KNOBS,
    START,
    VEHICLES,
    WALLS,
    box,
    car,
    check_drivable,
    lattice_path,
    pen,
    question,
    random_questions,
    read_only,
    run_lattice,
)

from byway_planning import Disc
from byway_planning.curves import shortest_curve
from byway_planning.search.lattice import EXPANSIONS, STAMP, STATES, new_lattice, path_of, restart
from byway_planning.search.method import EXHAUSTED, FOUND, FULL, RUNNING
from byway_planning.search.paths import path_cost

EVERY_VEHICLE = pytest.mark.parametrize("name", VEHICLES)
EITHER_END = pytest.mark.parametrize("backward", [False, True], ids=["forward", "backward"])


@EVERY_VEHICLE
@EITHER_END
def test_paths_are_drivable_and_the_same_bits_in_any_slices(name, backward):
    vehicle = VEHICLES[name]
    q = question(vehicle)
    paths = [lattice_path(q, backward=backward, step=step) for step in (1, 7, 1000)]
    assert paths[0].tobytes() == paths[1].tobytes() == paths[2].tobytes()
    check_drivable(paths[0], vehicle, q)


@EVERY_VEHICLE
@EITHER_END
def test_where_nothing_is_in_the_way_the_path_is_the_curve(name, backward):
    """Whatever the weight: the first shot is at once the cheapest word."""
    vehicle = VEHICLES[name]
    q = question(vehicle, {})
    path = lattice_path(q, backward=backward, weight=1.0)
    check_drivable(path, vehicle, q, {})
    if isinstance(vehicle, Disc):
        wanted = math.dist(START[:2], GOAL[:2])
    else:
        wanted = shortest_curve(vehicle, START, GOAL).cost_m
    assert path_cost(path, q.body) == pytest.approx(wanted, rel=1e-12)


@EITHER_END
def test_a_dog_leg_costs_no_more_than_the_grid_is_coarse(backward):
    """
    A post in the way of a straight drive of 24 m. Passing it takes a sideways shift of 1.45 m at
    least: the shortest curve to its side and back is a bound, a tenth more is the lattice's.
    """
    post = {"post": box(19.75, 11.75, 0.5, 0.5)}
    vehicle = car()
    q = question(vehicle, post, (8.0, 12.0, 0.0), (32.0, 12.0, 0.0))
    path = lattice_path(q, backward=backward, weight=1.0)
    check_drivable(path, vehicle, q, post)
    # 1.2 m to the side of the post, somewhere on the way: 0.95 + 0.25, straight lines instead
    # of curves, and 3.5 m of vehicle ahead of its origin.
    assert 24.0 < path_cost(path, q.body) < 26.4


def test_a_change_of_direction_is_counted_as_dear_as_told():
    """Out of a bay into an aisle: with dear changes a path has no more of them."""
    bay = {
        "left": box(14.0, 4.0, 3.4, 6.0),
        "right": box(20.2, 4.0, 3.4, 6.0),
        "behind": box(14.0, 3.0, 9.6, 1.0),
        "across": box(8.0, 16.5, 24.0, 1.0),
    }
    vehicle = car()
    q = question(vehicle, bay, (12.0, 13.0, 0.0), (18.8, 5.5, math.pi / 2))
    changes = []
    for change_m in (0.0, 10.0):
        path = lattice_path(q, change_m=change_m, cell_m=0.5, arc_m=0.8)
        check_drivable(path, vehicle, q, bay)
        changes.append(int((np.diff(np.sign(path[:, 4])) != 0).sum()))
    assert changes[1] <= changes[0]
    assert changes[1] >= 1


@EVERY_VEHICLE
@EITHER_END
def test_no_path_costs_as_much_as_the_bound(name, backward):
    """The change of direction between the moves and the last curve included."""
    vehicle = VEHICLES[name]
    lattice = new_lattice(60_000)
    ended = set()
    for q, boxes in random_questions(vehicle, 5, 12):
        settings = KNOBS | {"change_m": q.body.direction_change_m}

        def run(bound_m, q=q, settings=settings):
            restart(
                lattice, backward=backward, start=q.start, goal=q.goal, bound_m=bound_m, **settings
            )
            return run_lattice(lattice, q, backward=backward, step=500, expansions_max=4000)

        bound_m = math.inf
        while run(bound_m) == FOUND:
            path = path_of(lattice, q.body)
            cost = path_cost(path, q.body)
            assert cost < bound_m + 1e-9
            check_drivable(path, vehicle, q, boxes)
            ended.add((bound_m < math.inf, FOUND))
            bound_m = 0.98 * cost
        ended.add((bound_m < math.inf, EXHAUSTED))
    assert {(False, FOUND), (True, EXHAUSTED)} <= ended
    assert name == "disc" or (True, FOUND) in ended


def test_a_pen_is_exhausted_and_little_memory_full():
    q = question(car(), pen(24.0, 6.0, 12.0), (28.0, 12.0, 0.0), (33.0, 13.0, 0.0))
    lattice = new_lattice(60_000)
    restart(lattice, backward=False, start=q.start, goal=read_only(START), **KNOBS)
    assert run_lattice(lattice, q, backward=False) == EXHAUSTED
    assert 0 < lattice.marks[EXPANSIONS] < lattice.marks[STATES]
    assert run_lattice(lattice, q, backward=False) == EXHAUSTED
    small, q = new_lattice(64), question(car())
    restart(small, backward=False, start=q.start, goal=q.goal, **KNOBS)
    assert run_lattice(small, q, backward=False) == FULL
    assert run_lattice(small, q, backward=False) == FULL


def test_nothing_is_expanded_twice_or_beyond_what_was_asked():
    q = question(car())
    lattice = new_lattice(60_000)
    restart(lattice, backward=False, start=q.start, goal=q.goal, **KNOBS)
    for _ in range(5):
        before = lattice.marks[EXPANSIONS]
        assert run_lattice(lattice, q, backward=False, step=10, expansions_max=10) == RUNNING
        assert lattice.marks[EXPANSIONS] == before + 10
    closed = lattice.table[lattice.stamps == lattice.marks[STAMP]]
    assert len(closed) == len(set(closed.tolist())) == 50


@EVERY_VEHICLE
def test_memory_that_served_another_search_changes_nothing(name):
    """After a found path, an exhausted pen and a search broken off."""
    vehicle = VEHICLES[name]
    q = question(vehicle)
    inside = question(vehicle, pen(24.0, 6.0, 12.0), (29.0, 12.0, 0.0), (33.0, 13.0, 0.0))
    lattice = new_lattice(60_000)
    fresh = [lattice_path(q, backward=b).tobytes() for b in (False, True)]
    for other, goal, work in ((q, q.goal, 10**4), (inside, q.goal, 10**4), (q, q.start, 40)):
        restart(lattice, backward=False, start=other.start, goal=read_only(goal), **KNOBS)
        run_lattice(lattice, other, backward=False, step=10, expansions_max=work)
        for backward in (False, True):
            restart(lattice, backward=backward, start=q.start, goal=q.goal, **KNOBS)
            assert run_lattice(lattice, q, backward=backward) == FOUND
            assert path_of(lattice, q.body).tobytes() == fresh[backward]


@EVERY_VEHICLE
def test_a_search_from_its_goal_finds_an_empty_path(name):
    q = question(VEHICLES[name], {}, START, START)
    assert len(lattice_path(q)) == 0


def test_a_long_path_is_written_whole():
    """More elements than the first room for it."""
    q = question(car())
    path = lattice_path(q, arc_m=0.1, cell_m=0.06, headings=500, weight=5.0)
    assert len(path) > 256
    check_drivable(path, car(), q, WALLS)
