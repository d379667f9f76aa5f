"""The fork truck: its round, how it waits, and how it is seen."""

import math

import pytest
import shapely

from bywayd.outlines import placed
from bywayd.yard.claims import GROWN_M, Ground, claim_here
from bywayd.yard.fork_truck import GROWTH_MPS, ForkTruck, round_of
from bywayd.yard.scene import BUILDINGS, STACKS, TRUCK_CORNER_M, TRUCK_CORNERS
from bywayd.yard.shapes import Mass, Masses, rectangle

DT_S = 0.02


def drive(truck: ForkTruck, seconds: float, from_s: float = 0.0) -> float:
    now_s = from_s
    while now_s < from_s + seconds:
        now_s += DT_S
        truck.step(now_s, DT_S)
    return now_s


@pytest.mark.parametrize("corners", [TRUCK_CORNERS, tuple(reversed(TRUCK_CORNERS))])
def test_a_round_is_closed_and_smooth(corners: tuple[tuple[float, float], ...]) -> None:
    line = round_of(corners, TRUCK_CORNER_M)
    ring = shapely.Polygon(corners)
    round_ = ring.buffer(-TRUCK_CORNER_M).buffer(TRUCK_CORNER_M, quad_segs=64)
    assert line.length_m == pytest.approx(round_.exterior.length, rel=1e-3)
    begin, end = line.pose_at(0.0), line.pose_at(line.length_m)
    assert begin[:2] == pytest.approx(end[:2], abs=1e-9)
    assert math.cos(begin[2] - end[2]) == pytest.approx(1.0)
    places = [line.pose_at(at_m)[:2] for at_m in line.places(0.0, line.length_m, 0.2)]
    assert max(round_.exterior.distance(shapely.Point(place)) for place in places) < 0.01


def test_it_drives_round_after_round_and_touches_nothing() -> None:
    truck = ForkTruck(Ground(), seed=1)
    fixed = Masses((*BUILDINGS, *STACKS))
    now_s, nearest_m = 0.0, math.inf
    while truck.rounds < 2:
        now_s = drive(truck, 0.5, now_s)
        nearest_m = min(nearest_m, fixed.nearest(truck.mass.ring_m, 2.0)[0])
        assert now_s < 150.0
    assert nearest_m > 0.5
    assert truck.driver.driven_m == pytest.approx(2 * truck._round.length_m, rel=0.01)


def test_it_waits_for_what_is_in_its_way_and_seems_to_stand() -> None:
    ground = Ground()
    truck = ForkTruck(ground, seed=1)
    now_s = drive(truck, 2.0)
    seen = truck.seen()
    assert math.hypot(*seen.velocity_mps) > 1.0
    assert (seen.uncertainty_m, seen.growth_mps) == (GROWN_M, GROWTH_MPS)
    ahead = truck._round.pose_at(truck.driver.at_m + 8.0)
    ring = rectangle(0.0, 0.0, 2.0, 6.0)
    assert ground.take("other", claim_here(ring, ahead, 0.0)) is None
    now_s = drive(truck, 8.0, now_s)
    seen = truck.seen()
    assert seen.velocity_mps == (0.0, 0.0)
    assert seen.growth_mps == 0.0
    # A pack it sees itself.
    ground.shrink("other", claim_here(ring, (-50.0, -50.0, 0.0), 0.0))
    pack = Mass("pack-1", placed(ring, ahead))
    truck.see([pack])
    now_s = drive(truck, 5.0, now_s)
    assert 0.1 < pack.distance_m(truck.driver.ring_m) < 1.0
    waits_at_m = truck.driver.at_m
    truck.see([])
    drive(truck, 5.0, now_s)
    assert truck.driver.at_m > waits_at_m + 3.0


def test_in_a_bend_it_is_seen_to_turn() -> None:
    truck = ForkTruck(Ground(), seed=1)
    now_s, turns = 0.0, []
    for _ in range(60):
        now_s = drive(truck, 0.2, now_s)
        seen = truck.seen()
        turns.append(seen.turn_rate_radps * TRUCK_CORNER_M - math.hypot(*seen.velocity_mps))
        if truck.driver.line is not None and truck.driver.line.curvature_at(truck.driver.at_m):
            assert turns[-1] == pytest.approx(0.0, abs=1e-9)
    assert any(abs(turn) < 1e-9 for turn in turns)
