"""The anytime loop: its outcomes, its promises, and that the same work gives the same bits."""

import math
from collections.abc import Callable

import numpy as np
import pytest

from byway_planning import Car, Disc, ForwardCar, Outcome, Site, countdown, plan
from byway_planning.site import LayerSettings, PolygonShape, SiteModel, SiteSettings
from byway_planning.vehicles.models import Vehicle

FOOTPRINT = [(-1.0, -0.95), (3.5, -0.95), (3.5, 0.95), (-1.0, 0.95)]
LIMITS = (0.0, 0.0, 45.0, 25.0)
START, GOAL = (2.0, 2.0, 0.0), (40.0, 19.0, 1.57)
KILN = [(10.0, 5.0), (18.0, 5.0), (18.0, 9.0), (10.0, 9.0)]


def box(x: float, y: float, width: float, height: float) -> list[tuple[float, float]]:
    return [(x, y), (x + width, y), (x + width, y + height), (x, y + height)]


def pure_length_car(clearance_m: float = 0.0) -> Car:
    return Car(
        footprint_m=FOOTPRINT,
        turn_radius_m_min=5.0,
        reverse_factor=1.0,
        direction_change_m=0.0,
        clearance_m=clearance_m,
    )


def forever() -> float:
    return 1.0


def planned(site: Site, vehicle: Vehicle, start=START, goal=GOAL, work=4000, **more) -> Outcome:
    return plan(site, vehicle, start, goal, time_left=forever, seed=1, work_max=work, **more)


@pytest.fixture(scope="module")
def yard() -> Site:
    cells = np.zeros((250, 450), np.uint8)
    cells[100:140, 200:230] = 1
    return Site.from_grid(cells, cell_m=0.1, polygons={"kiln": KILN})


def test_the_published_example_finds_a_route(yard):
    """The call that the README shows works with its 50 ms."""
    outcome = plan(yard, pure_length_car(), START, GOAL, time_left=countdown(0.05), seed=1)
    assert outcome.kind == "route"
    assert outcome.bound <= outcome.cost < 1.1 * outcome.bound
    assert 0.0 <= outcome.gap < 0.1
    assert outcome.first_s is not None
    assert outcome.first_s <= outcome.total_s
    table = outcome.route.table
    assert table["x_m"][-1] == pytest.approx(40.0, abs=1e-3)
    assert table["heading_rad"][-1] == pytest.approx(1.57, abs=1e-3)


@pytest.mark.parametrize(
    "vehicle",
    [
        pure_length_car(),
        Car(footprint_m=FOOTPRINT, turn_radius_m_min=5.0),
        ForwardCar(footprint_m=FOOTPRINT, turn_radius_m_min=5.0),
        Disc(radius_m=0.6),
    ],
    ids=["car", "yard car", "forward car", "disc"],
)
@pytest.mark.parametrize("method", ["auto", "lattice", "rrt_connect", "rrt"])
def test_every_method_finds_a_way_round_the_kiln(yard, vehicle, method):
    """Each published method answers by its name, for each kind of vehicle."""
    outcome = planned(yard, vehicle, work=30_000, method=method, gap_wanted=0.6)
    assert outcome.kind == "route"
    assert outcome.cost >= outcome.bound
    assert outcome.statistics["method"] == method
    assert "rejected" not in outcome.statistics


@pytest.mark.parametrize("sampler", ["uniform", "halton", "goal_biased", "corridor"])
def test_samplers_are_chosen_by_name(yard, sampler):
    assert planned(yard, Disc(radius_m=0.6), method="rrt_connect", sampler=sampler).kind == "route"


def test_the_same_seed_and_work_give_the_same_bits_wherever_slices_fall(yard):
    """Slices end where the clock says; what is found after them must not depend on it."""

    def run() -> Outcome:
        return planned(yard, pure_length_car(), work=6000)

    one, two = run(), run()
    assert one.route.path.tobytes() == two.route.path.tobytes()
    assert one.route.table.tobytes() == two.route.table.tobytes()
    assert one.cost == two.cost


def test_better_routes_come_in_falling_cost_and_the_last_is_the_answer(yard):
    told: list[Outcome] = []
    outcome = planned(yard, pure_length_car(), work=8000, on_better=told.append)
    costs = [better.cost for better in told]
    assert costs
    assert costs == sorted(costs, reverse=True)
    assert outcome.cost <= costs[-1]
    assert all(better.kind == "route" for better in told)


def test_a_free_direct_curve_is_the_optimum_of_length_and_ends_the_search():
    site = Site.from_shapes({}, limits_m=LIMITS)
    outcome = planned(site, pure_length_car(), (5.0, 5.0, 0.0), (30.0, 12.0, 0.0))
    assert outcome.gap == pytest.approx(0.0, abs=1e-12)
    assert "work" not in outcome.statistics


def test_a_direct_curve_does_not_end_the_search_while_reversing_is_dear():
    """With a factor and a penalty the cheapest word may be beaten by another path."""
    site = Site.from_shapes({}, limits_m=LIMITS)
    car = Car(footprint_m=FOOTPRINT, turn_radius_m_min=5.0)
    outcome = planned(site, car, (20.0, 10.0, 0.0), (20.0, 13.0, 0.0), work=2000)
    assert outcome.kind == "route"
    assert outcome.gap > 0.0
    assert outcome.statistics["work"] >= 2000


def test_whole_numbers_may_stand_where_metres_are_wanted():
    site = Site.from_shapes({"kiln": KILN}, limits_m=(0, 0, 45, 25), cell_m=1)
    car = Car(footprint_m=[(-3, -3), (5, -3), (5, 3), (-3, 3)], turn_radius_m_min=5)
    assert planned(site, car, (6, 18, 0), (30, 18, 0)).kind == "route"


def test_start_equal_to_goal_is_a_route_of_no_length(yard):
    outcome = planned(yard, pure_length_car(), START, START)
    assert outcome.kind == "route"
    assert outcome.cost == 0.0
    assert outcome.gap == 0.0


def test_a_blocked_goal_names_the_obstacle_and_the_depth(yard):
    outcome = planned(yard, pure_length_car(), START, (12.0, 4.5, 0.0))
    assert outcome.kind == "goal_blocked"
    blockage = outcome.blocked_by[0]
    assert (blockage.layer, blockage.obstacle) == ("shapes", "kiln")
    assert blockage.depth_m == pytest.approx(0.45, abs=0.01)


def test_a_blocked_start_names_cells_and_limits(yard):
    car = pure_length_car()
    in_cells = planned(yard, car, (19.0, 12.0, 0.0), GOAL)
    assert in_cells.kind == "start_blocked"
    assert in_cells.blocked_by[0].obstacle == "cells"
    outside = planned(yard, car, (0.5, 10.0, 0.0), GOAL)
    assert outside.kind == "start_blocked"
    assert outside.blocked_by[0].obstacle == "limits"


def test_a_sealed_goal_is_proved_at_once():
    walls = {
        "south": box(28.0, 4.0, 14.0, 0.5),
        "north": box(28.0, 20.0, 14.0, 0.5),
        "west": box(28.0, 4.0, 0.5, 16.5),
        "east": box(41.5, 4.0, 0.5, 16.5),
    }
    site = Site.from_shapes(walls, limits_m=LIMITS)
    outcome = planned(site, pure_length_car(), START, (34.0, 12.0, 0.0))
    assert outcome.kind == "no_route"
    assert math.isinf(outcome.cost)


def test_a_gap_a_little_too_narrow_for_the_disc_is_proved_by_the_bound():
    """The grid of the floods is too coarse to tell; the ways of grown obstacles are exact."""
    walls = {"south": box(20.0, 0.0, 0.5, 12.0), "north": box(20.0, 13.1, 0.5, 11.9)}
    site = Site.from_shapes(walls, limits_m=LIMITS)
    disc = Disc(radius_m=0.6, clearance_m=0.0)
    outcome = planned(site, disc, (5.0, 12.0, 0.0), (35.0, 12.0, 0.0), work=20_000)
    assert outcome.kind == "no_route"
    assert outcome.statistics["work"] < 20_000
    wider = {"south": walls["south"], "north": box(20.0, 13.3, 0.5, 11.7)}
    passing = planned(
        Site.from_shapes(wider, limits_m=LIMITS), disc, (5.0, 12.0, 0.0), (35.0, 12.0, 0.0)
    )
    assert passing.kind == "route"


@pytest.mark.parametrize(("extra_m", "passes"), [(0.02, True), (-0.001, False)])
@pytest.mark.parametrize("tilt_rad", [0.0, 0.3])
def test_between_polygons_two_centimetres_more_are_enough_and_a_millimetre_less_never(
    extra_m, passes, tilt_rad
):
    gap = 1.9 + extra_m
    c, s = math.cos(tilt_rad), math.sin(tilt_rad)

    def turned(points):
        return [(22.0 + c * x - s * y, 12.0 + s * x + c * y) for x, y in points]

    upper = turned([(-0.2, gap / 2), (0.2, gap / 2), (0.2, 40.0), (-0.2, 40.0)])
    lower = turned([(-0.2, -40.0), (0.2, -40.0), (0.2, -gap / 2), (-0.2, -gap / 2)])
    site = Site.from_shapes({"upper": upper, "lower": lower}, limits_m=LIMITS)
    start = (22.0 - 9.0 * c, 12.0 - 9.0 * s, tilt_rad)
    goal = (22.0 + 7.0 * c, 12.0 + 7.0 * s, tilt_rad)
    outcome = planned(site, pure_length_car(), start, goal, work=3000)
    assert (outcome.kind == "route") is passes


def test_the_hard_clearance_is_kept_and_may_be_changed_per_replan(yard):
    car = pure_length_car(clearance_m=0.3)
    wide = planned(yard, car)
    assert wide.statistics["clearance_m"] >= 0.3 - 1e-6
    close = planned(yard, car, clearance_m=0.0)
    assert close.cost < wide.cost


def test_a_start_that_overlaps_a_little_may_only_get_out():
    site = Site.from_shapes({"dock": box(6.0, 4.0, 2.0, 6.0)}, limits_m=LIMITS)
    car = Car(footprint_m=FOOTPRINT, turn_radius_m_min=5.0, clearance_m=0.1, start_overlap_m=0.05)
    nose_in = (2.53, 7.0, 0.0)  # the front is 3 cm inside the dock
    outcome = planned(site, car, nose_in, (20.0, 15.0, 0.0))
    assert outcome.kind == "route"
    assert outcome.route.table["gear"][0] == -1
    too_deep = planned(site, car, (2.60, 7.0, 0.0), (20.0, 15.0, 0.0))
    assert too_deep.kind == "start_blocked"
    assert too_deep.blocked_by[0].obstacle == "dock"


def test_a_goal_may_touch_the_hard_clearance_but_not_less():
    site = Site.from_shapes({"ramp": box(30.0, 5.0, 2.0, 10.0)}, limits_m=LIMITS)
    car = pure_length_car(clearance_m=0.1)
    for keeps_m in (0.11, 0.1005, 0.1):
        goal = (30.0 - 3.5 - keeps_m, 10.0, 0.0)
        outcome = planned(site, car, (5.0, 6.0, 0.5), goal)
        assert outcome.kind == "route"
        assert "rejected" not in outcome.statistics
    assert (
        planned(site, car, (5.0, 10.0, 0.0), (30.0 - 3.5 - 0.05, 10.0, 0.0)).kind == "goal_blocked"
    )


def test_a_moving_vehicle_keeps_its_gear_until_it_can_stop():
    site = Site.from_shapes({}, limits_m=LIMITS)
    car = Car(footprint_m=FOOTPRINT, turn_radius_m_min=5.0)
    outcome = planned(site, car, (20.0, 12.0, 0.0), (10.0, 12.0, 0.0), start_speed_mps=2.0)
    assert outcome.kind == "route"
    table = outcome.route.table
    assert table["speed_mps"][0] == pytest.approx(2.0)
    assert table["gear"][0] == 1
    stop_m = 2.0**2 / (2 * 1.5)
    forward = outcome.route.legs[0]
    assert forward.gear == 1
    assert forward.length_m >= stop_m - 1e-6
    backwards = planned(site, car, (20.0, 12.0, 0.0), (30.0, 12.0, 0.0), start_speed_mps=-1.0)
    assert backwards.route.legs[0].gear == -1


def test_a_vehicle_that_cannot_stop_before_the_wall_is_too_fast():
    site = Site.from_shapes({"wall": box(20.0, 0.0, 1.0, 25.0)}, limits_m=LIMITS)
    car = Car(footprint_m=FOOTPRINT, turn_radius_m_min=5.0)
    outcome = planned(site, car, (16.0, 12.0, 0.0), (5.0, 12.0, 0.0), start_speed_mps=3.0)
    assert outcome.kind == "start_too_fast"


def test_time_that_is_over_before_anything_was_found_is_not_a_proof(yard):
    outcome = plan(yard, pure_length_car(), START, GOAL, time_left=lambda: 0.0, seed=1)
    assert outcome.kind == "not_found"
    assert outcome.route is None


def test_survey_coordinates_give_the_same_route_bit_for_bit(yard):
    east, north = 500_000.0, 5_000_000.0
    moved = Site.from_shapes(
        {"kiln": [(x + east, y + north) for x, y in KILN]},
        limits_m=(east, north, east + 45.0, north + 25.0),
        origin_m=(east, north),
    )
    here = Site.from_shapes({"kiln": KILN}, limits_m=LIMITS)
    far = planned(
        moved, pure_length_car(), (2.0 + east, 2.0 + north, 0.0), (40.0 + east, 19.0 + north, 1.57)
    )
    near = planned(here, pure_length_car())
    assert far.cost == near.cost
    assert far.route.table["x_m"] - east == pytest.approx(near.route.table["x_m"], abs=1e-8)


def test_a_layer_of_outlines_can_be_left_out():
    model = SiteModel(SiteSettings(LIMITS))
    model.declare("units", LayerSettings(outlines_only=True))
    model.put("units", "tug", PolygonShape(np.array(box(1.0, 1.0, 5.0, 2.0))))
    snapshot = model.publish()
    car = pure_length_car()
    assert planned(snapshot, car).kind == "start_blocked"
    assert planned(snapshot, car, left_out=frozenset({"units"})).kind == "route"


@pytest.mark.parametrize(
    ("change", "word"),
    [
        ({"start": (math.nan, 0.0, 0.0)}, "start"),
        ({"goal": (1.0, 2.0)}, "goal"),
        ({"gap_wanted": 1.5}, "gap_wanted"),
        ({"start_speed_mps": math.inf}, "start_speed_mps"),
        ({"start_curvature_per_m": 0.5}, "start_curvature_per_m"),
        ({"method": "guess"}, "guess"),
        ({"sampler": "dice"}, "dice"),
        ({"clearance_m": -0.1}, "clearance_m"),
    ],
)
def test_senseless_arguments_are_refused_by_name(yard, change, word):
    arguments = {"start": START, "goal": GOAL} | change
    with pytest.raises(ValueError, match=word):
        planned(yard, pure_length_car(), **arguments)


def test_cells_too_coarse_for_a_small_vehicle_are_refused(yard):
    tiny = Disc(radius_m=0.2)
    with pytest.raises(ValueError, match="too coarse"):
        planned(yard, tiny)


def test_the_budget_is_kept_within_a_slice(yard):
    """Time is only read, so a clock made of calls shows where the loop stops."""
    left = iter(np.linspace(0.05, -0.05, 400))
    calls: list[float] = []

    def time_left() -> float:
        calls.append(float(next(left)))
        return calls[-1]

    outcome = plan(yard, pure_length_car(), START, GOAL, time_left=time_left, seed=1)
    assert outcome.kind == "route"
    # After the reserve is reached, only the last route is made: a handful of readings.
    assert sum(value <= 0.0 for value in calls) <= 4


_: Callable[[], float] = forever


# -- without a route: what would have to move ---------------------------------------------------


def _room(x: float, y: float, side: float) -> dict[str, list[tuple[float, float]]]:
    wall = 0.4
    return {
        "south": [(x, y), (x + side, y), (x + side, y + wall), (x, y + wall)],
        "north": [
            (x, y + side - wall), (x + side, y + side - wall), (x + side, y + side), (x, y + side)
        ],
        "west": [(x, y), (x + wall, y), (x + wall, y + side), (x, y + side)],
        "east": [
            (x + side - wall, y), (x + side, y), (x + side, y + side), (x + side - wall, y + side)
        ],
    }  # fmt: skip


@pytest.mark.parametrize("origin_m", [(0.0, 0.0), (500_000.0, 5_000_000.0)])
def test_a_sealed_goal_names_what_would_have_to_move(origin_m: tuple[float, float]) -> None:
    ox, oy = origin_m
    polygons = {n: [(x + ox, y + oy) for x, y in r] for n, r in _room(30.0, 10.0, 16.0).items()}
    limits_m = (ox, oy, ox + 60.0, oy + 40.0)
    site = Site.from_shapes(polygons, limits_m=limits_m, origin_m=origin_m)
    car = Car(
        footprint_m=[(-0.6, -0.7), (2.2, -0.7), (2.2, 0.7), (-0.6, 0.7)], turn_radius_m_min=3.0
    )
    outcome = plan(
        site, car, (ox + 5.0, oy + 18.0, 0.0), (ox + 37.0, oy + 18.0, 0.0),
        time_left=lambda: 1.0, seed=1,
    )  # fmt: skip
    assert outcome.kind == "no_route"
    assert outcome.remedy is not None
    (only,) = outcome.remedy.movables
    assert only.obstacle == "west"
    assert (only.x_m, only.y_m) == pytest.approx((ox + 30.2, oy + 18.0), abs=1.0)
    x, y = outcome.remedy.way_m[0]
    assert ox + 4.4 < x < ox + 7.2  # the middle of the largest disc in the outline
    assert y == pytest.approx(oy + 18.0)


def test_what_was_not_found_names_what_makes_it_tight() -> None:
    """A lane hardly wider than the truck with a right angle in it; the disc turns there."""
    polygons = {
        "inner": [(0.0, 0.0), (20.0, 0.0), (20.0, 20.0), (0.0, 20.0)],
        "right": [(22.6, 0.0), (40.0, 0.0), (40.0, 40.0), (22.6, 40.0)],
        "top": [(0.0, 22.6), (22.6, 22.6), (22.6, 40.0), (0.0, 40.0)],
    }
    truck = ForwardCar(
        footprint_m=[(-1.0, -1.1), (6.0, -1.1), (6.0, 1.1), (-1.0, 1.1)], turn_radius_m_min=7.0
    )
    site = Site.from_shapes(polygons, limits_m=(0.0, 0.0, 40.0, 40.0))
    outcome = planned(site, truck, (21.3, 2.0, math.pi / 2), (7.0, 21.3, math.pi), work=2000)
    assert outcome.kind == "not_found"
    assert outcome.remedy is not None
    assert outcome.remedy.movables
    assert {each.obstacle for each in outcome.remedy.movables} <= set(polygons)
    assert outcome.remedy.disc_radius_m >= truck.body().inner_radius_m
