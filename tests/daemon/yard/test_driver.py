"""A driver: it stops for what others hold and for packs, and takes routes over where they fit."""

import itertools
import math

import pytest
from tests.daemon.yard.lines import CART, arc, table

from bywayd.yard.claims import Ground
from bywayd.yard.driver import Driver, abilities_of
from bywayd.yard.shapes import Mass, Masses, advanced, distance_m, rectangle
from bywayd.yard.tracking import Line

DT_S = 0.02


def drive(driver: Driver, until_s: float, from_s: float = 0.0) -> float:
    now_s = from_s
    while now_s < until_s:
        now_s += DT_S
        driver.step(now_s, DT_S)
    return now_s


def test_what_a_vehicle_can_do_follows_from_its_settings() -> None:
    steered = {**CART, "turn_radius_m_min": None, "wheelbase_m": 2.0, "steer_rad_max": 0.5}
    assert abilities_of(CART).curvature_per_m_max == pytest.approx(0.5)
    assert abilities_of(steered).curvature_per_m_max == pytest.approx(math.tan(0.5) / 2.0)


def test_a_driver_arrives_and_holds_only_the_ground_it_stands_on() -> None:
    ground = Ground()
    driver = Driver("a", CART, (0.0, 0.0, 0.0), ground)
    driver.follow(arc((0.0, 0.0, 0.0), 0.0, 10.0))
    drive(driver, 9.0)
    assert driver.has_arrived
    assert driver.pose == pytest.approx((10.0, 0.0, 0.0), abs=1e-3)
    driver.leave()
    (piece,) = ground.claims["a"].pieces
    assert piece[:, 0].min() == pytest.approx(9.5, abs=1e-3)


def test_a_driver_stops_before_ground_that_another_holds_and_goes_on_when_it_is_free() -> None:
    ground = Ground()
    driver = Driver("a", CART, (0.0, 0.0, 0.0), ground)
    other = Driver("b", CART, (8.0, 0.5, 0.0), ground)
    driver.follow(arc((0.0, 0.0, 0.0), 0.0, 15.0))
    now_s = drive(driver, 8.0)
    assert driver.speed_mps == 0.0
    assert driver.held_since_s is not None
    assert 0.24 < distance_m(driver.ring_m, other.ring_m) < 1.6
    other.follow(arc((8.0, 0.5, 0.0), 0.0, 20.0))
    while now_s < 22.0:
        now_s += DT_S
        other.step(now_s, DT_S)
        driver.step(now_s, DT_S)
        assert distance_m(driver.ring_m, other.ring_m) > 0.24
    assert driver.has_arrived


@pytest.mark.parametrize("behind_m", [-0.1, 0.1])
def test_a_driver_that_is_ahead_or_behind_turns_round_once(behind_m: float) -> None:
    """At a change of direction the place on the line must not go back over it."""
    line = Line(table((0.0, 4.0), (0.3, -5.0), (0.0, 6.0)))
    driver = Driver("a", CART, (-behind_m, 0.02, 0.02), Ground())
    driver.follow(line)
    places = [0.0]
    for step in range(1500):
        driver.step(step * DT_S, DT_S)
        places.append(driver.at_m)
    assert driver.has_arrived
    gears = [line.gear_at(place) for place in places]
    assert sum(a != b for a, b in itertools.pairwise(gears)) == 2
    assert driver.off_m_max < 0.1
    assert math.dist(driver.pose[:2], line.pose_at(line.length_m)[:2]) < 0.12


def test_two_that_meet_head_on_both_stop_apart() -> None:
    ground = Ground()
    a = Driver("a", CART, (0.0, 0.0, 0.0), ground)
    b = Driver("b", CART, (16.0, 0.0, math.pi), ground)
    a.follow(arc(a.pose, 0.0, 15.0))
    b.follow(arc(b.pose, 0.0, 15.0))
    for step in range(500):
        a.step(step * DT_S, DT_S)
        b.step(step * DT_S, DT_S)
        assert distance_m(a.ring_m, b.ring_m) > 0.24
    assert a.held_since_s is not None
    assert b.held_since_s is not None


def test_a_pack_on_the_route_is_seen_and_stopped_for() -> None:
    driver = Driver("a", CART, (0.0, 0.0, 0.0), Ground())
    driver.follow(arc((0.0, 0.0, 0.0), 0.0, 15.0))
    now_s = drive(driver, 1.0)
    pack = rectangle(9.0, 0.2, 1.0, 1.0)
    driver.see(Masses([Mass("pack", pack)]))
    assert 6.0 < driver.blocked_at_m < 7.0
    drive(driver, 9.0, now_s)
    assert driver.held_since_s is not None
    assert 0.1 < distance_m(driver.ring_m, pack) < 0.9
    driver.see(Masses([]))
    assert driver.blocked_at_m == math.inf


def test_a_pack_beside_the_route_is_not_in_the_way() -> None:
    driver = Driver("a", CART, (0.0, 0.0, 0.0), Ground())
    driver.follow(arc((0.0, 0.0, 0.0), 0.0, 15.0))
    driver.see(Masses([Mass("pack", rectangle(9.0, 1.2, 1.0, 1.0))]))
    assert driver.blocked_at_m == math.inf


def test_the_predicted_state_is_the_one_that_comes() -> None:
    driver = Driver("a", CART, (0.0, 0.0, 0.0), Ground())
    driver.follow(arc((0.0, 0.0, 0.0), 0.0, 15.0))
    now_s = drive(driver, 1.0)
    state = driver.predicted(0.8)
    assert state is not None
    drive(driver, now_s + 0.8, now_s)
    # Prediction has steps of twice the length.
    assert (driver.at_m, driver.speed_mps) == pytest.approx(state, abs=0.03)


def test_nothing_is_predicted_where_the_vehicle_stands_by_then() -> None:
    driver = Driver("a", CART, (0.0, 0.0, 0.0), Ground())
    assert driver.predicted(0.5) is None
    driver.follow(arc((0.0, 0.0, 0.0), 0.0, 2.0))
    drive(driver, 1.5)
    assert driver.predicted(1.5) is None


def test_a_route_that_fits_is_taken_over_on_the_move() -> None:
    driver = Driver("a", CART, (0.0, 0.0, 0.0), Ground())
    old = arc((0.0, 0.0, 0.0), 0.0, 20.0)
    driver.follow(old)
    now_s = drive(driver, 1.5)
    state = driver.predicted(0.4)
    assert state is not None
    new = arc(old.pose_at(state[0]), 0.1, 12.0, state[1])
    driver.take_over_later(new, state[0])
    came_of_it = None
    while came_of_it is None:
        now_s += DT_S
        came_of_it = driver.step(now_s, DT_S)
    assert came_of_it == "taken"
    assert driver.line is new
    assert driver.speed_mps > 1.5
    drive(driver, now_s + 12.0, now_s)
    assert driver.has_arrived
    assert math.dist(driver.pose[:2], new.pose_at(12.0)[:2]) < 0.01


@pytest.mark.parametrize(
    ("offset_m", "turned_rad", "from_mps"), [(0.3, 0.0, 2.0), (0.0, 0.2, 2.0), (0.0, 0.0, 0.5)]
)
def test_a_route_that_begins_in_another_state_is_not_taken_over(
    offset_m: float, turned_rad: float, from_mps: float
) -> None:
    driver = Driver("a", CART, (0.0, 0.0, 0.0), Ground())
    old = arc((0.0, 0.0, 0.0), 0.0, 20.0)
    driver.follow(old)
    now_s = drive(driver, 3.0)
    x_m, y_m, heading_rad = old.pose_at(driver.at_m)
    start = (x_m, y_m + offset_m, heading_rad + turned_rad)
    driver.take_over_later(arc(start, 0.0, 12.0, from_mps), driver.at_m)
    assert driver.step(now_s, DT_S) == "not fitting"
    assert driver.line is old


def test_a_route_over_ground_that_another_holds_is_not_taken_over() -> None:
    ground = Ground()
    driver = Driver("a", CART, (0.0, 0.0, 0.0), ground)
    old = arc((0.0, 0.0, 0.0), 0.0, 20.0)
    driver.follow(old)
    now_s = drive(driver, 3.0)
    Driver("b", CART, advanced(driver.pose, 0.3, 3.5), ground)
    new = arc(old.pose_at(driver.at_m), 0.3, 12.0, driver.speed_mps)
    driver.take_over_later(new, driver.at_m)
    assert driver.step(now_s, DT_S) == "not fitting"
    assert driver.line is old


def test_nobody_begins_on_ground_that_another_holds() -> None:
    ground = Ground()
    Driver("a", CART, (0.0, 0.0, 0.0), ground)
    with pytest.raises(ValueError, match="b begins on ground that a holds"):
        Driver("b", CART, (1.0, 0.0, 0.0), ground)
