"""A route as the front reads it, against plain kinematics."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.daemon.core.coursetables import circle, packed_route, straight, there_and_back

from byway.errors import BadGeometry, BadMessage, BadValue, OutsideLimits
from bywayd.core.course import Course


def course(rows: dict[str, np.ndarray]) -> Course:
    return Course(*packed_route(rows))


# -- where and when -------------------------------------------------------------------------------


def test_a_course_is_as_long_as_its_way() -> None:
    assert course(straight(10.0)).length_m == pytest.approx(10.0, abs=1e-9)
    assert course(there_and_back(4.0)).length_m == pytest.approx(8.0, abs=1e-9)
    assert course(circle(5.0, math.pi)).length_m == pytest.approx(5 * math.pi, abs=1e-9)


@given(st.floats(-1.0, 12.0))
def test_a_place_on_a_straight_lies_where_it_must(way_m: float) -> None:
    place = course(straight(10.0)).place(way_m)
    kept_m = min(max(way_m, 0.0), 10.0)
    assert place.way_m == pytest.approx(kept_m)
    assert (place.x_m, place.y_m, place.heading_rad) == pytest.approx((kept_m, 0.0, 0.0))
    expected = min(2.0, math.sqrt(max(0.0, 2 * min(kept_m, 10.0 - kept_m))))
    assert place.speed_mps == pytest.approx(expected, abs=1e-6)


@given(st.floats(0.0, 5 * math.pi))
def test_a_place_on_an_arc_lies_on_the_circle(way_m: float) -> None:
    place = course(circle(5.0, math.pi)).place(way_m)
    angle = way_m / 5.0
    # 1e-9: the table is exact, and a chord is computed from it in closed form.
    assert place.x_m == pytest.approx(5 * math.sin(angle), abs=1e-9)
    assert place.y_m == pytest.approx(5 * (1 - math.cos(angle)), abs=1e-9)
    assert place.heading_rad == pytest.approx(angle, abs=1e-9)
    assert place.curvature_per_m == pytest.approx(0.2)


@given(st.floats(0.0, 8.0))
def test_the_way_at_the_time_of_a_place_is_its_way(way_m: float) -> None:
    route = course(there_and_back(4.0))
    # Near a stand time hardly tells ways apart: 1e-6 m there.
    assert route.way_at(route.place(way_m).t_s) == pytest.approx(way_m, abs=1e-6)


def test_before_its_time_a_vehicle_is_at_the_start_and_after_it_at_the_end() -> None:
    route = course(straight(10.0))
    assert route.way_at(-1.0) == 0.0
    assert route.way_at(1e6) == route.length_m
    assert route.goal == (10.0, 0.0, 0.0)


def test_on_the_way_back_the_speed_is_negative() -> None:
    route = course(there_and_back(4.0))
    assert route.place(2.0).speed_mps > 0
    assert route.place(6.0).speed_mps < 0
    assert route.place(6.0).x_m == pytest.approx(2.0)


def test_a_route_of_one_row_is_one_place() -> None:
    rows = {name: column[-1:] for name, column in straight(3.0).items()}
    route = course(rows)
    assert route.length_m == 0.0
    assert route.place(1.0).x_m == 3.0
    assert route.place(1.0).speed_mps == 0.0
    assert route.way_at(99.0) == 0.0
    assert route.stand_after(0.0, 1.0, 1.0) == 0.0


# -- stopping -------------------------------------------------------------------------------------


def test_a_vehicle_that_brakes_stands_after_its_braking_distance() -> None:
    assert course(straight(10.0)).stand_after(3.0, 2.0, 1.0) == pytest.approx(5.0)


def test_it_stands_no_later_than_where_its_route_stops_anyhow() -> None:
    route = course(there_and_back(4.0))
    assert route.stand_after(3.0, 2.0, 1.0) == pytest.approx(4.0)
    assert route.stand_after(7.5, 2.0, 1.0) == pytest.approx(8.0)


# -- one course after another ---------------------------------------------------------------------


@pytest.mark.parametrize("braking", [None, 1.0])
def test_a_course_goes_on_where_another_begins(braking: float | None) -> None:
    old, new = course(straight(10.0)), course(straight(6.0, at=(5.0, 0.0)))
    both = old.followed_by(new, 3.1, 5.0, braking)
    assert both.length_m == pytest.approx(1.9 + 6.0)
    assert both.goal == (11.0, 0.0, 0.0)
    for way_m in np.linspace(0, both.length_m, 50):
        assert both.place(way_m).x_m == pytest.approx(3.1 + way_m, abs=1e-6)
    assert both.place(1.9).speed_mps == pytest.approx(0.0, abs=1e-6)
    assert both.place(0.0).speed_mps == pytest.approx(2.0 if braking is None else 1.949, abs=1e-3)


def test_what_begins_in_reverse_after_a_change_of_direction_goes_on_in_reverse() -> None:
    old = course(there_and_back(4.0))
    new = course({n: c.copy() for n, c in circle(5.0, 0.1).items()})
    rows = straight(2.0)
    rows["x_m"] = 2.0 - rows["x_m"]
    rows["speed_mps"] *= -1
    rows["gear"][:-1] = -1
    new = course(rows)
    both = old.followed_by(new, 3.5, 6.0, 1.0)
    assert both.length_m == pytest.approx(2.5 + 2.0)
    assert both.place(0.25).x_m == pytest.approx(3.75)
    assert both.place(2.0).x_m == pytest.approx(2.5)
    assert both.place(2.0).speed_mps < 0
    assert both.place(4.5).x_m == pytest.approx(0.0, abs=1e-6)


def test_a_lead_of_nothing_is_left_out() -> None:
    old, new = course(straight(10.0)), course(straight(6.0, at=(5.0, 0.0)))
    assert old.followed_by(new, 5.0, 5.0, None) is new


# -- what is no route -----------------------------------------------------------------------------


def broken(**columns: object) -> dict[str, np.ndarray]:
    return {**straight(5.0), **columns}  # type: ignore[dict-item]


def changed(name: str, row: int, value: float) -> dict[str, np.ndarray]:
    rows = {key: column.copy() for key, column in straight(5.0).items()}
    rows[name][row] = value
    return rows


@pytest.mark.parametrize(
    ("rows", "fault"),
    [
        ({"t_s": np.zeros(3)}, BadMessage),
        ({name: column[:0] for name, column in straight(5.0).items()}, BadValue),
        (broken(gear=np.ones(5, np.int8)), BadMessage),
        (changed("x_m", 3, math.nan), BadValue),
        (changed("y_m", 3, 1e9), OutsideLimits),
        (changed("gear", 3, 2), BadValue),
        (changed("t_s", 3, 99.0), BadValue),
        (changed("x_m", 3, 2.0), BadGeometry),
        (changed("heading_rad", 3, 1.0), BadGeometry),
    ],
)
def test_what_no_vehicle_can_drive_is_refused(rows: dict[str, np.ndarray], fault: type) -> None:
    with pytest.raises(fault):
        course(rows)
