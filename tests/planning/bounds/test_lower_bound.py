"""Bounds of whole routes: costs, vehicles whose origin is anywhere, overlaps, layers left out."""

import math

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from tests.planning.bounds.bound_scenes import (
    ALL_WORK,
    WIDE,
    bound_of,
    box,
    disc,
    random_polygons,
    solids_of,
)

from byway_planning import Car, Disc, ForwardCar, Site, plan
from byway_planning.bounds import lower_bound, outgrown, passing_radius_m
from byway_planning.bounds.passing import passing_discs
from byway_planning.curves import shortest_curve
from byway_planning.site import DiscShape, LayerSettings, PolygonShape, SiteModel, SiteSettings
from byway_planning.vehicles.footprint import depth_m

LENGTH = {"reverse_factor": 1.0, "direction_change_m": 0.0}
BOX = [(-1.0, -0.95), (3.5, -0.95), (3.5, 0.95), (-1.0, 0.95)]
EMPTY = solids_of([])

poses = st.tuples(st.floats(-15.0, 15.0), st.floats(-15.0, 15.0), st.floats(-3.2, 3.2))


def car(footprint=BOX, radius_m=5.0, clearance_m=0.0, **more) -> Car:
    return Car(
        footprint_m=footprint, turn_radius_m_min=radius_m, clearance_m=clearance_m,
        **{**LENGTH, **more},
    )  # fmt: skip


@settings(max_examples=50, deadline=None)
@given(poses, poses, st.floats(1.0, 3.0), st.floats(0.0, 6.0))
def test_in_an_empty_world_no_curve_is_cheaper(start, goal, factor, change_m):
    """The cheapest curve of the planner is a route, so the bound is at most its cost."""
    # Below that the planner takes goals for reached that are not: rounding, within its check.
    moved = max(math.dist(start[:2], goal[:2]), abs(start[2] - goal[2]))
    assume(moved == 0.0 or moved > 1e-6)
    vehicles = (
        car(reverse_factor=factor, direction_change_m=change_m),
        ForwardCar(footprint_m=BOX, turn_radius_m_min=5.0),
        Disc(radius_m=0.5),
    )
    for vehicle in vehicles:
        found_m = bound_of(EMPTY, vehicle, start, goal)
        cost_m = shortest_curve(vehicle, start, goal).cost_m
        assert math.dist(start[:2], goal[:2]) - 1e-9 <= found_m <= cost_m + 1e-9


def test_where_the_curve_costs_its_length_the_bound_is_that_cost():
    """A gap of 0 ends a search, so no rounding may come between the two."""
    for vehicle in (car(), ForwardCar(footprint_m=BOX, turn_radius_m_min=5.0), Disc(radius_m=0.5)):
        goal = (13.0, 4.0, 1.0)
        cost_m = shortest_curve(vehicle, (-3.0, 1.0, 0.3), goal).cost_m
        assert bound_of(EMPTY, vehicle, (-3.0, 1.0, 0.3), goal) == cost_m


@pytest.mark.parametrize(
    ("goal", "factor", "change_m", "wanted_m"),
    [
        ((6.0, 0.0, 0.0), 3.0, 9.0, 6.0),  # forward, straight on
        ((-6.0, 0.0, 0.0), 1.5, 9.0, 9.0),  # in reverse all the way
        ((-6.0, 0.0, 0.0), 3.0, 2.0, 8.0),  # dear: a change of direction might save it
        ((0.0, 0.0, 0.5), 1.0, 2.0, 4.5),  # a turn on the spot: 0.5 rad at 5 m, and a change
    ],
)
def test_what_reversing_and_changing_direction_cost_at_least(goal, factor, change_m, wanted_m):
    vehicle = car(reverse_factor=factor, direction_change_m=change_m)
    assert bound_of(EMPTY, vehicle, (0.0, 0.0, 0.0), goal) == pytest.approx(wanted_m, abs=1e-9)


def test_discs_lie_inside_the_body():
    bodies = [
        BOX,
        [(-0.3, -0.6), (2.1, -0.6), (2.1, 0.6), (-0.3, 0.6)],
        [(1.0, -0.5), (3.0, -0.5), (3.0, 0.5), (1.0, 0.5)],
        [(-0.5, 0.2), (-0.5, -1.0), (4.0, -1.0), (4.0, 1.5), (3.0, 1.5), (3.0, 0.2)],
    ]
    for footprint in bodies:
        vehicle = car(footprint, radius_m=4.0)
        discs = passing_discs(vehicle.body())
        inside = depth_m(np.array(vehicle.footprint_m), np.array([row[:2] for row in discs]))
        for depth, (x, y, radius_m, stretch) in zip(inside, discs, strict=True):
            assert radius_m <= depth + 1e-12
            bends = np.linspace(-0.25, 0.25, 41)
            assert np.hypot(1.0 - bends * y, bends * x).max() <= stretch + 1e-12
        assert passing_radius_m(vehicle.body()) <= vehicle.inner_radius_m
        assert discs[-1][2] >= 0.998 * vehicle.inner_radius_m - 0.02
    assert len(passing_discs(car().body())) == 1, "as large as any already"
    assert passing_discs(Disc(radius_m=0.7).body()) == [(0.0, 0.0, 0.7, 1.0)]


def test_a_gap_that_only_the_rear_fits_through():
    """The origin is 0.3 m from the rear edge, the body 1.2 m wide: a gap of 1.1 m is shut."""
    tug = car([(-0.3, -0.6), (2.1, -0.6), (2.1, 0.6), (-0.3, 0.6)], radius_m=2.5)
    walls = [box(0.0, 10.55, 1.0, 20.0), box(0.0, -10.55, 1.0, 20.0)]
    start, goal = (-6.0, 3.0, 0.0), (6.0, -3.0, 0.0)
    fence = (-9.0, -9.0, 9.0, 9.0)
    assert bound_of(solids_of(walls, limits_m=fence), tug, start, goal) == math.inf
    assert bound_of(solids_of(walls, limits_m=fence), disc(0.3), start, goal) < 14.0


def test_an_origin_outside_the_footprint_may_pass_over_things():
    """
    The body begins 1 m ahead of the origin. A pole stands between the two, so straight on is
    free, though the origin runs over the pole.
    """
    pusher = car([(1.0, -0.5), (3.0, -0.5), (3.0, 0.5), (1.0, 0.5)], clearance_m=0.1)
    pole = solids_of([box(0.5, 0.0, 0.2, 0.2)])
    assert bound_of(pole, pusher, (0, 0, 0), (10, 0, 0)) == pytest.approx(10.0, abs=1e-9)
    behind = bound_of(pole, pusher, (10, 0, 0), (30, 0, 0))
    assert behind == pytest.approx(20.0, abs=1e-9)
    wall = solids_of([box(6.0, 0.0, 1.0, 20.0)])
    assert bound_of(wall, pusher, (0, 0, 0), (14, 0, 0)) > 20.0
    far = car([(1.0, -0.05), (2.0, -0.05), (2.0, 0.05), (1.0, 0.05)])
    assert passing_radius_m(far.body()) == pytest.approx(0.05, abs=1e-3)


def test_an_end_nearer_than_the_disc_allows_only_makes_the_disc_smaller():
    wall = box(0.0, 0.0, 1.0, 6.0)
    vehicle = disc(0.5)
    free = bound_of(solids_of([wall]), vehicle, (-1.0, 0.0), (1.0, 0.0))
    touching = bound_of(solids_of([wall]), vehicle, (-0.8, 0.0), (1.0, 0.0))
    as_small = bound_of(solids_of([wall]), disc(0.3), (-0.8, 0.0), (1.0, 0.0))
    assert touching == pytest.approx(as_small, abs=1e-5)
    assert touching < free
    within = bound_of(solids_of([wall]), vehicle, (0.2, 0.0), (1.0, 0.0))
    assert within == pytest.approx(0.8)  # nothing is known of a disc that begins in an obstacle
    outside = bound_of(solids_of([wall], limits_m=(-2, -5, 2, 5)), vehicle, (-3, 0), (1, 0))
    assert outside == pytest.approx(4.0)
    in_disc = bound_of(solids_of([], [(0.0, 0.0, 2.0)]), vehicle, (0.5, 0.0), (5.0, 0.0))
    assert in_disc == pytest.approx(4.5)


def test_a_start_that_overlaps_counts_everywhere():
    """While a route gets out of an overlap it may keep less of everything, not of one thing."""
    vehicle = car(clearance_m=0.4)
    walls = [box(6.0, 5.0 + 1.2, 1.0, 10.0), box(6.0, -5.0 - 1.2, 1.0, 10.0)]  # 2.4 m apart
    solids = solids_of(walls, limits_m=(-8.0, -11.0, 20.0, 11.0))
    start, goal = (0.0, 1.0, 0.0), (13.0, 1.0, 0.0)
    assert bound_of(solids, vehicle, start, goal) == math.inf
    assert bound_of(solids, vehicle, start, goal, start_clearance_m=0.2) < 14.0


def test_layers_left_out_of_the_request_may_stay_in_the_ground():
    model = SiteModel(SiteSettings(WIDE, cell_m=0.5))
    model.declare("fixed", LayerSettings())
    model.declare("unit", LayerSettings(outlines_only=True))
    model.put("fixed", "a", PolygonShape(box(0.0, 0.0, 1.0, 6.0)))
    fixed_alone = solids_of([box(0.0, 0.0, 1.0, 6.0)])
    model.put("unit", "b", PolygonShape(box(-3.0, 0.0, 1.0, 12.0)))
    model.put("unit", "c", DiscShape(3.0, 0.0, 4.0))
    snapshot = model.publish()
    vehicle = disc(0.4)
    ground = outgrown(snapshot.solids(), passing_radius_m(vehicle.body()))
    left_out = snapshot.solids(frozenset({"unit"}))
    start, goal = (-8.0, 0.5), (8.0, 0.0)
    without = bound_of(left_out, vehicle, start, goal, ground=ground)
    assert without == pytest.approx(bound_of(fixed_alone, vehicle, start, goal), abs=1e-12)
    assert bound_of(left_out, vehicle, start, goal) == without
    assert bound_of(snapshot.solids(), vehicle, start, goal, ground=ground) > without + 1.0


@pytest.mark.parametrize("seed", range(3))
def test_verified_routes_cost_no_less(seed):
    """What the planner finds among stacks, by car, forward-only and as a disc."""
    polygons = random_polygons(seed + 20, 5)
    site = Site.from_shapes(
        {str(i): ring for i, ring in enumerate(polygons)},
        limits_m=(-30.0, -25.0, 30.0, 25.0),
    )
    for vehicle in (car(), car(reverse_factor=1.5, direction_change_m=2.0), Disc(radius_m=0.6)):
        start, goal = (-16.0, 0.5, 0.0), (16.0, -0.5, 0.0)
        outcome = plan(site, vehicle, start, goal, time_left=lambda: 1.0, seed=1, work_max=1500)
        found_m = lower_bound(
            site.snapshot.solids(), vehicle.body(), start, goal, work_max=ALL_WORK
        )
        assert outcome.kind == "route"
        assert 0.8 * outcome.cost < found_m <= outcome.cost + 1e-9
