"""Route tables: their promises, against integration, closed forms and hand-made cases."""

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate
from tests.planning.route_scenes import after, car, disc, forward_car, line_of, path_of

from byway_planning.profile import StartTooFast
from byway_planning.route import ROUTE_TABLE, Leg, Route, make_route

START = (3.0, -2.0, 0.7)

# distance, speed limit, acceleration, deceleration, start speed -> least time; derived by hand
# (trapezoid and triangle) and confirmed by an independent optimisation.
STRAIGHT_LEGS = [
    (10.0, 2.0, 1.0, 1.0, 0.0, 7.0),
    (2.0, 2.0, 1.0, 1.0, 0.0, 2.828427124746),
    (4.0, 2.0, 1.0, 1.0, 0.0, 4.0),
    (100.0, 50.0, 2.0, 4.0, 0.0, 12.247448713916),
    (5.0, 1.5, 0.5, 1.0, 0.0, 5.583333333333),
    (10.0, 2.0, 1.0, 1.0, 1.0, 6.25),
    (0.5, 2.0, 1.0, 1.0, 0.0, 1.414213562373),
]

pieces_strategy = st.lists(
    st.tuples(
        st.sampled_from([0.0, 0.2, -0.2, 0.13, -0.05]),
        # from rounding to long: every sum of rows has to work out
        st.one_of(st.floats(0.02, 9.0), st.sampled_from([1e-7, 1e-5, 1e-3, 0.25, 0.5])),
        st.sampled_from([1.0, 1.0, -1.0]),
    ).map(lambda drawn: (drawn[0], drawn[1] * drawn[2])),
    min_size=1,
    max_size=7,
)


def arcs_of(route: Route) -> np.ndarray:
    v, t = route.table["speed_mps"], route.table["t_s"]
    return 0.5 * (v[1:] + v[:-1]) * np.diff(t)


@pytest.mark.parametrize("case", STRAIGHT_LEGS)
@pytest.mark.parametrize("way", [1.0, -1.0])
def test_a_straight_leg_takes_the_least_time(case: tuple[float, ...], way: float) -> None:
    d, top, a, b, v0, time_s = case
    vehicle = car(
        speed_mps_max=top,
        reverse_speed_mps_max=top,
        acceleration_mps2_max=a,
        deceleration_mps2_max=b,
    )
    path, _ = path_of(START, [(0.0, way * d)])
    route = make_route(path, vehicle, way * v0)
    assert route.duration_s == pytest.approx(time_s, abs=1e-9)
    assert route.length_m == d
    assert route.reverse_length_m == (d if way < 0.0 else 0.0)


@settings(max_examples=60, deadline=None, derandomize=True)
@given(pieces_strategy)
def test_every_table_keeps_its_promises(pieces: list[tuple[float, float]]) -> None:
    path, goal = path_of(START, pieces)
    vehicle = car()
    route = make_route(path, vehicle)
    table = route.table
    gear, v, k = table["gear"], table["speed_mps"], table["curvature_per_m"]
    arcs = arcs_of(route)
    assert table.dtype == ROUTE_TABLE
    assert (np.diff(table["t_s"]) > 0.0).all()
    assert table["t_s"][0] == 0.0
    assert np.abs(arcs).max() <= 0.25 + 1e-9
    assert ((table["heading_rad"] >= -math.pi) & (table["heading_rad"] < math.pi)).all()
    # gears say which way the speeds go, and change only where the vehicle stands
    assert set(gear[:-1]) <= {-1, 1}
    assert (v[:-1] * gear[:-1] >= 0.0).all()
    assert (v[1:] * gear[:-1] >= 0.0).all()
    assert v[np.nonzero(np.diff(gear))[0] + 1] == pytest.approx(0.0, abs=0.0)
    assert (v[-1], gear[-1], k[-1]) == (0.0, 0, path[-1, 3])
    # limits
    dt = np.diff(table["t_s"])
    gain = np.diff(np.abs(v))
    assert (gain <= vehicle.acceleration_mps2_max * dt * (1 + 1e-9) + 1e-9).all()
    assert (-gain <= vehicle.deceleration_mps2_max * dt * (1 + 1e-9) + 1e-9).all()
    assert v.max() <= vehicle.speed_mps_max * (1 + 1e-12)
    assert -v.min() <= vehicle.reverse_speed_mps_max * (1 + 1e-12)
    sideways = np.maximum(v[1:] ** 2, v[:-1] ** 2) * np.abs(k[:-1])
    assert sideways.max() <= vehicle.lateral_acceleration_mps2_max * (1 + 1e-9)
    # the way
    assert np.abs(arcs).sum() == pytest.approx(np.abs(path[:, 4]).sum(), abs=1e-9)
    assert (table["x_m"][-1], table["y_m"][-1]) == pytest.approx(goal[:2], abs=1e-9)


@settings(max_examples=40, deadline=None, derandomize=True)
@given(pieces_strategy)
def test_every_row_follows_from_the_one_before(pieces: list[tuple[float, float]]) -> None:
    path, _ = path_of(START, pieces)
    route = make_route(path, car())
    table = route.table
    for row, follower, arc in zip(table[:-1], table[1:], arcs_of(route), strict=True):
        x, y, heading = after(
            (row["x_m"], row["y_m"], row["heading_rad"]), row["curvature_per_m"], arc
        )
        assert (x, y) == pytest.approx((follower["x_m"], follower["y_m"]), abs=1e-9)
        assert math.cos(heading - follower["heading_rad"]) == pytest.approx(1.0, abs=1e-15)


def test_integrating_the_table_as_a_car_drives_its_poses() -> None:
    """x' = v cos h, y' = v sin h, h' = curvature v, with the speed linear between rows."""
    pieces = [(0.0, 4.0), (0.2, 7.0), (-0.13, -5.0), (0.0, -1.0), (0.2, 0.02), (-0.2, 6.0)]
    path, goal = path_of(START, pieces)
    table = make_route(path, car()).table
    pose = np.array(START)
    for row, follower in itertools.pairwise(table):
        t0, t1 = row["t_s"], follower["t_s"]
        gain = (follower["speed_mps"] - row["speed_mps"]) / (t1 - t0)

        def motion(t: float, p: np.ndarray, row=row, t0=t0, gain=gain) -> list[float]:
            v = row["speed_mps"] + gain * (t - t0)
            return [v * math.cos(p[2]), v * math.sin(p[2]), row["curvature_per_m"] * v]

        solved = integrate.solve_ivp(motion, (t0, t1), pose, rtol=1e-10, atol=1e-12)
        pose = solved.y[:, -1]
        assert pose[:2] == pytest.approx((follower["x_m"], follower["y_m"]), abs=1e-6)
    assert pose == pytest.approx(goal, abs=1e-6)


def test_every_element_of_the_path_begins_at_a_row_with_its_curvature() -> None:
    path, _ = path_of(START, [(0.0, 3.1), (0.2, 2.3), (-0.2, -1.7), (0.1, 0.6)])
    table = make_route(path, car()).table
    for x, y, _, curvature, length in path:
        at = np.nonzero((table["x_m"] == x) & (table["y_m"] == y))[0]
        assert len(at) == 1
        assert table["curvature_per_m"][at[0]] == curvature
        assert table["gear"][at[0]] == (1 if length > 0.0 else -1)


def test_a_change_of_direction_is_one_standing_row_with_the_gear_that_follows() -> None:
    path, _ = path_of(START, [(0.0, 3.0), (0.2, 2.0), (-0.2, -2.5), (0.0, 1.0)])
    route = make_route(path, car())
    first, second, third = route.legs
    assert [leg.gear for leg in route.legs] == [1, -1, 1]
    assert [leg.length_m for leg in route.legs] == pytest.approx([5.0, 2.5, 1.0])
    assert route.direction_changes == 2
    assert route.reverse_length_m == 2.5
    assert (first.first_row, third.last_row) == (0, len(route.table) - 1)
    assert (first.last_row, second.last_row) == (second.first_row, third.first_row)
    for leg in (second, third):
        assert route.table["speed_mps"][leg.first_row] == 0.0
        assert route.table["gear"][leg.first_row] == leg.gear
    assert (route.table["speed_mps"] == 0.0).sum() == 4


@pytest.mark.parametrize("length", [2e-9, 1e-6, 1e-3, 0.1, 0.25])
def test_one_short_element_between_two_stops_still_moves(length: float) -> None:
    path, _ = path_of(START, [(0.0, 3.0), (0.2, -length), (0.0, 3.0)])
    route = make_route(path, car())
    leg = route.legs[1]
    assert leg.last_row - leg.first_row >= 2
    rows = route.table[leg.first_row : leg.last_row + 1]
    assert rows["speed_mps"].min() < 0.0
    a, b = 1.0, 1.5  # the tug's: sqrt(2 d (a + b) / (a b)) for a triangle
    assert rows["t_s"][-1] - rows["t_s"][0] == pytest.approx(
        math.sqrt(2.0 * length * (a + b) / (a * b)), rel=1e-6
    )


def test_a_moving_start_keeps_its_speed_and_its_gear() -> None:
    path, _ = path_of(START, [(0.1, 6.0), (0.0, -2.0)])
    ahead = make_route(path, car(), 2.0)
    assert ahead.table["speed_mps"][0] == 2.0
    assert ahead.duration_s < make_route(path, car()).duration_s
    back, _ = path_of(START, [(0.1, -6.0), (0.0, 2.0)])
    assert make_route(back, car(), -1.5).table["speed_mps"][0] == -1.5


def test_a_start_that_can_just_be_braked_is_driven() -> None:
    path, _ = path_of(START, [(0.0, 3.0**2 / (2 * 1.5))])
    route = make_route(path, car(), 3.0)
    assert route.duration_s == pytest.approx(3.0 / 1.5)
    short, _ = path_of(START, [(0.0, 2.99)])
    with pytest.raises(StartTooFast, match=r"3\.000 m to stop"):
        make_route(short, car(), 3.0)


def test_a_disc_stands_at_corners_and_goes_forward_only() -> None:
    path, goal = line_of([(0.0, 0.0), (6.0, 0.0), (6.0, 4.0), (8.0, 4.0), (10.0, 4.0)])
    route = make_route(path, disc())
    table = route.table
    corners = np.nonzero(np.diff(table["heading_rad"]) != 0.0)[0] + 1
    assert len(corners) == 2
    assert table["speed_mps"][corners].tolist() == [0.0, 0.0]
    assert table["speed_mps"].min() == 0.0
    assert set(table["gear"][:-1]) == {1}
    assert route.legs == (Leg(0, len(table) - 1, 1, pytest.approx(14.0)),)
    assert route.direction_changes == 0
    assert (table["x_m"][-1], table["y_m"][-1]) == goal[:2]
    # no stop at (8, 4), where the direction stays
    middle = np.nonzero((table["x_m"] == 8.0) & (table["y_m"] == 4.0))[0]
    assert table["speed_mps"][middle].tolist() == pytest.approx([math.sqrt(2.0 * 1.0 * 2.0)])


def test_staying_where_it_is_takes_one_row_and_no_time() -> None:
    path, _ = path_of((1.0, 2.0, 9.0), [(0.2, 0.0)])
    route = make_route(path, car())
    assert route.table.tolist() == [(0.0, 1.0, 2.0, 9.0 - 4.0 * math.pi + 2 * math.pi, 0.2, 0.0, 0)]
    assert (route.legs, route.length_m, route.duration_s) == ((), 0.0, 0.0)
    assert route.direction_changes == 0


def test_elements_of_no_length_are_left_out() -> None:
    path, _ = path_of(START, [(0.2, 0.0), (0.0, 2.0), (-0.2, 1e-12), (0.1, 2.0), (0.0, -0.0)])
    route = make_route(path, car())
    assert route.path.tolist() == path[[1, 3]].tolist()
    assert [leg.gear for leg in route.legs] == [1]


def test_what_is_handed_out_never_changes_and_what_came_in_is_left_alone() -> None:
    path, _ = path_of(START, [(0.0, 2.0), (0.2, 2.0)])
    before = path.copy()
    route = make_route(path, car())
    path[:] = 7.0
    assert route.path.tolist() == before.tolist()
    with pytest.raises(ValueError, match="read-only"):
        route.table["x_m"][0] = 1.0
    with pytest.raises(ValueError, match="read-only"):
        route.path[0, 0] = 1.0


def test_the_same_path_gives_the_same_bits() -> None:
    path, _ = path_of(START, [(0.0, 2.0), (0.2, -3.3), (0.13, 7.0)])
    assert make_route(path, car()).table.tobytes() == make_route(path, car()).table.tobytes()


@pytest.mark.parametrize(
    ("path", "start_mps", "text"),
    [
        (np.zeros((0, 5)), 0.0, r"shape \(n, 5\)"),
        (np.zeros((3, 4)), 0.0, r"got \(3, 4\)"),
        (np.zeros(5), 0.0, r"got \(5,\)"),
        (np.full((1, 5), np.nan), 0.0, "finite"),
        (np.array([[0.0, 0.0, 0.0, 0.0, 5.0]]), math.inf, "finite"),
        (np.array([[0.0, 0.0, 0.0, 0.0, 5.0]]), -1.0, "start_speed_mps -1.0 does not fit"),
        (np.array([[0.0, 0.0, 0.0, 0.0, -5.0]]), 1.0, "start_speed_mps 1.0 does not fit"),
        (np.array([[0.0, 0.0, 0.0, 0.0, 0.0]]), 1.0, "length_m 0.0"),
    ],
)
def test_what_makes_no_sense_is_refused(path: np.ndarray, start_mps: float, text: str) -> None:
    with pytest.raises(ValueError, match=text):
        make_route(path, car(), start_mps)


def test_vehicles_that_cannot_reverse_refuse_to() -> None:
    back = np.array([[0.0, 0.0, 0.0, 0.0, -5.0]])
    with pytest.raises(ValueError, match="forward only"):
        make_route(back, disc())
    with pytest.raises(ValueError, match="forward only"):
        make_route(back, forward_car())
