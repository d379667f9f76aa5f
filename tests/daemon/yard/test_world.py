"""The whole yard without a daemon: planned for in process, watched by the referee."""

import itertools
import math

import pytest
from tests.daemon.yard.planning_desk import PlanningDesk, run_world

from bywayd.yard.crane import PACKS_GAP_M, PASSAGE_M
from bywayd.yard.fork_truck import NAME as FORK_TRUCK
from bywayd.yard.scene import BUILDINGS, STACKS
from bywayd.yard.shapes import Masses, distance_m
from bywayd.yard.world import World


@pytest.fixture(scope="module")
def run() -> tuple[World, PlanningDesk]:
    return run_world(seconds=26.0, seed=1)


def test_nothing_touches_anything(run: tuple[World, PlanningDesk]) -> None:
    world, _ = run
    assert world.referee.collisions == []
    # The least hard clearance of a vehicle is 0.1 m; tracking may take a centimetre of it.
    assert world.referee.nearest.distance_m > 0.09
    assert world.referee.nearest_units.distance_m > 0.22


def test_every_vehicle_gets_something_done(run: tuple[World, PlanningDesk]) -> None:
    world, desk = run
    assert world.deliveries >= 2
    assert all(unit.driver.driven_m > 15.0 for unit in world.units.values())
    assert desk.kinds["route"] > 0.7 * sum(desk.kinds.values())


def test_packs_come_in_the_way_and_routes_are_taken_over(run: tuple[World, PlanningDesk]) -> None:
    world, _ = run
    assert world.crane.put_down >= 2
    assert sum(unit.tally.taken_over for unit in world.units.values()) >= 1


def test_what_nobody_tells_is_seen_and_every_blocked_route_is_told_of(
    run: tuple[World, PlanningDesk],
) -> None:
    world, desk = run
    assert world.crane.pallets >= 1
    assert desk.heard["alert"] >= 2
    assert desk.heard["rerouted"] >= 1
    assert sum(unit.tally.rerouted_taken for unit in world.units.values()) >= 1
    assert sum(unit.tally.alerts for unit in world.units.values()) >= 1


def test_the_fork_truck_goes_its_way(run: tuple[World, PlanningDesk]) -> None:
    world, _ = run
    assert world.truck.driver.driven_m > 10.0
    assert world.truck.driver.off_m_max < 0.03
    assert FORK_TRUCK not in world.claims


def test_packs_leave_room_for_the_widest(run: tuple[World, PlanningDesk]) -> None:
    world, _ = run
    fixed = Masses((*BUILDINGS, *STACKS))
    packs = [pack.mass.ring_m for pack in world.crane.packs]
    for index, ring_m in enumerate(packs):
        assert fixed.nearest(ring_m, PASSAGE_M)[0] >= PASSAGE_M
        assert all(distance_m(ring_m, other) > PACKS_GAP_M for other in packs[:index])


def test_vehicles_stay_on_their_routes(run: tuple[World, PlanningDesk]) -> None:
    world, _ = run
    assert max(unit.driver.off_m_max for unit in world.units.values()) < 0.03


def test_traces_have_no_gaps(run: tuple[World, PlanningDesk]) -> None:
    world, _ = run
    for trace in world.traces.values():
        steps_m = [math.dist(a[:2], b[:2]) for a, b in itertools.pairwise(trace)]
        assert max(steps_m) < 3.5 * 0.13  # the fastest vehicle, and one step of time more


def test_the_same_seed_is_the_same_day() -> None:
    ends = []
    for _ in range(2):
        world, _ = run_world(seconds=3.0, seed=4)
        ends.append([unit.driver.pose for unit in world.units.values()])
    assert ends[0] == ends[1]
