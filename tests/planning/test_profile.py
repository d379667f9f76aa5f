"""Speeds along a path, against closed forms, published figures and a slow twin."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.planning.route_scenes import Floats, line_of, path_of

from byway_planning.profile import (
    CANNOT_STOP,
    FASTER_THAN_BEND,
    PROFILE_FOUND,
    StartTooFast,
    check_profile,
    node_speeds,
    peak_between,
    speed_cap_mps,
    stopping_distance_m,
)
from byway_planning.vehicles.body import CAR, DISC, Limits

# distance, speed limit, acceleration, deceleration, speed at start and end -> peak, least time.
# Derived by hand (trapezoid and triangle) and confirmed by an independent optimisation.
CLOSED_FORMS = [
    (10.0, 2.0, 1.0, 1.0, 0.0, 0.0, 2.0, 7.0),
    (2.0, 2.0, 1.0, 1.0, 0.0, 0.0, 1.414213562373, 2.828427124746),
    (4.0, 2.0, 1.0, 1.0, 0.0, 0.0, 2.0, 4.0),
    (100.0, 50.0, 2.0, 4.0, 0.0, 0.0, 16.329931618555, 12.247448713916),
    (5.0, 1.5, 0.5, 1.0, 0.0, 0.0, 1.5, 5.583333333333),
    (10.0, 2.0, 1.0, 1.0, 1.0, 0.0, 2.0, 6.25),
    (10.0, 3.0, 1.0, 2.0, 0.5, 1.5, 3.0, 4.5625),
    (0.5, 2.0, 1.0, 1.0, 0.0, 0.0, 0.707106781187, 1.414213562373),
]

# Braking distance in metres of the AASHTO stopping sight distance (Texas Roadway Design Manual),
# 3.4 m/s2, as published: 0.039 V^2 / a with V in km/h. 0.039 is 1 / (2 x 3.6^2) = 0.03858
# rounded up, so the published values are 1.1 % long, and rounded to 0.1 m.
BRAKING_KMH_M = [(20, 4.6), (40, 18.4), (60, 41.3), (80, 73.4), (100, 114.7), (130, 193.9)]

# v^2 / (2 mu g) from 5 m/s with the friction factors of Noon (1994): asphalt dry and wet,
# gravel, snow, ice.
FRICTION_M = [
    (0.65, 1.960993),
    (0.5, 2.549291),
    (0.35, 3.641844),
    (0.2, 6.373226),
    (0.1, 12.746453),
]


def speeds_on(path: Floats, limits: Limits, start: float = 0.0, kind: int = CAR) -> Floats:
    path.flags.writeable = False
    speeds = np.empty(len(path) + 1)
    assert node_speeds(path, kind, limits, start, speeds) == PROFILE_FOUND
    return speeds


def time_of(path: Floats, speeds: Floats, limits: Limits) -> float:
    """The time of the fastest way through every element between the speeds at its ends."""
    total = 0.0
    for row, v0, v1 in zip(path, speeds[:-1], speeds[1:], strict=True):
        cap = speed_cap_mps(row[3], row[4], limits)
        length = abs(row[4])
        gained, held, peak = peak_between(length, v0, v1, cap, limits)
        total += 2.0 * gained / (v0 + peak) + (held - gained) / peak
        total += 2.0 * (length - held) / (peak + v1)
    return total


@pytest.mark.parametrize("case", CLOSED_FORMS)
def test_one_straight_element_takes_the_least_time(case: tuple[float, ...]) -> None:
    d, top, a, b, v0, v1, peak, time_s = case
    limits = Limits(top, top, a, b, 1.0)
    gained, held, found = peak_between(d, v0, v1, top, limits)
    assert found == pytest.approx(peak, abs=1e-9)
    assert 0.0 <= gained <= held <= d
    path = np.array([[0.0, 0.0, 0.0, 0.0, d]])
    assert time_of(path, np.array([v0, v1]), limits) == pytest.approx(time_s, abs=1e-9)


@pytest.mark.parametrize(("speed_kmh", "braking_m"), BRAKING_KMH_M)
def test_stopping_distance_is_the_published_one(speed_kmh: float, braking_m: float) -> None:
    limits = Limits(50.0, 50.0, 1.0, 3.4, 1.0)
    ours_m = stopping_distance_m(speed_kmh / 3.6, limits)
    assert ours_m * 0.039 * 2.0 * 3.6**2 == pytest.approx(braking_m, abs=0.0501)
    assert stopping_distance_m(-speed_kmh / 3.6, limits) == ours_m


@pytest.mark.parametrize(("friction", "braking_m"), FRICTION_M)
def test_stopping_distance_on_a_surface(friction: float, braking_m: float) -> None:
    limits = Limits(50.0, 50.0, 1.0, friction * 9.80665, 1.0)
    assert stopping_distance_m(5.0, limits) == pytest.approx(braking_m, abs=1e-6)


def test_a_speed_that_is_no_number_has_no_stopping_distance() -> None:
    with pytest.raises(ValueError, match="finite"):
        stopping_distance_m(math.nan, Limits(1.0, 1.0, 1.0, 1.0, 1.0))


def naive_speeds(path: Floats, limits: Limits, start: float) -> Floats:
    """Two passes over squared speeds on a fine grid that has all boundaries on it."""
    top2, ds, nodes = [], [], [0]
    for row in path:
        cells = math.ceil(abs(row[4]) / 0.01)
        top = limits.speed_mps_max if row[4] > 0 else limits.reverse_speed_mps_max
        bend = abs(row[3])
        square = min(top**2, limits.lateral_acceleration_mps2_max / bend if bend else np.inf)
        top2 += [square] * cells
        ds += [abs(row[4]) / cells] * cells
        nodes.append(nodes[-1] + cells)
    v2 = np.minimum(np.append(top2, np.inf), np.insert(np.array(top2), 0, np.inf))
    for i in range(1, len(path)):
        if path[i - 1, 4] * path[i, 4] < 0.0:
            v2[nodes[i]] = 0.0
    v2[0], v2[-1] = start**2, 0.0
    for i in range(len(ds)):
        v2[i + 1] = min(v2[i + 1], v2[i] + 2.0 * limits.acceleration_mps2_max * ds[i])
    for i in range(len(ds) - 1, -1, -1):
        v2[i] = min(v2[i], v2[i + 1] + 2.0 * limits.deceleration_mps2_max * ds[i])
    return np.sqrt(v2[nodes])


pieces_strategy = st.lists(
    st.tuples(
        st.sampled_from([0.0, 0.2, -0.2, 0.13, 0.05]),
        st.floats(0.02, 9.0),
        st.sampled_from([1.0, 1.0, -1.0]),
    ).map(lambda drawn: (drawn[0], drawn[1] * drawn[2])),
    min_size=1,
    max_size=7,
)
limits_strategy = st.builds(
    Limits,
    st.floats(0.3, 6.0),
    st.floats(0.3, 3.0),
    st.floats(0.2, 3.0),
    st.floats(0.2, 4.0),
    st.floats(0.2, 3.0),
)


@settings(max_examples=60, deadline=None, derandomize=True)
@given(pieces_strategy, limits_strategy)
def test_node_speeds_equal_those_of_a_fine_grid(
    pieces: list[tuple[float, float]], limits: Limits
) -> None:
    """Squared speeds are piecewise linear, so a grid with the boundaries on it is exact."""
    path, _ = path_of((0.0, 0.0, 0.0), pieces)
    # 1e-7: square roots of differences of squared speeds, near 0
    assert speeds_on(path, limits) == pytest.approx(naive_speeds(path, limits, 0.0), abs=1e-7)


@settings(max_examples=40, deadline=None, derandomize=True)
@given(pieces_strategy, limits_strategy, st.integers(0, 4), st.floats(1.0, 2.0))
def test_a_wider_limit_never_costs_time(
    pieces: list[tuple[float, float]], limits: Limits, which: int, factor: float
) -> None:
    path, _ = path_of((0.0, 0.0, 0.0), pieces)
    wider = Limits(*(v * (factor if i == which else 1.0) for i, v in enumerate(limits)))
    before_s = time_of(path, speeds_on(path, limits), limits)
    assert time_of(path, speeds_on(path, wider), wider) <= before_s * (1.0 + 1e-9)


def test_the_slower_of_two_bends_rules_their_boundary() -> None:
    path, _ = path_of((0.0, 0.0, 0.0), [(0.0, 40.0), (0.2, 5.0), (0.05, 15.0), (0.0, 40.0)])
    speeds = speeds_on(path, Limits(9.0, 9.0, 2.0, 2.0, 1.8))
    assert speeds[1] == pytest.approx(math.sqrt(1.8 / 0.2))
    assert speeds[2] == pytest.approx(math.sqrt(1.8 / 0.2))
    assert speeds[3] == pytest.approx(math.sqrt(1.8 / 0.05))


def test_a_disc_stands_at_its_corners_and_nowhere_else() -> None:
    path, _ = line_of([(0.0, 0.0), (9.0, 0.0), (18.0, 0.0), (18.0, 9.0)])
    speeds = speeds_on(path, Limits(2.0, 0.0, 1.0, 1.0, math.inf), kind=DISC)
    assert speeds.tolist() == [0.0, 2.0, 0.0, 0.0]


@pytest.mark.parametrize(
    ("pieces", "start", "code"),
    [
        ([(0.0, 5.0)], 3.0, PROFILE_FOUND),
        ([(0.0, 4.5)], 3.0, PROFILE_FOUND),  # 3^2 / (2 x 1) = 4.5: it just stops
        ([(0.0, 4.49)], 3.0, CANNOT_STOP),
        ([(0.0, 2.0), (0.0, -5.0)], 3.0, CANNOT_STOP),  # the change of direction comes too soon
        ([(0.0, 1.9), (0.2, 9.0)], 3.0, CANNOT_STOP),  # so does the bend, sqrt(1/0.2) m/s
        ([(0.0, 2.0), (0.2, 9.0)], 2.9, PROFILE_FOUND),
        ([(0.2, 9.0)], 2.3, FASTER_THAN_BEND),
        ([(0.2, 9.0)], 2.2, PROFILE_FOUND),
    ],
)
def test_a_start_speed_needs_room(
    pieces: list[tuple[float, float]], start: float, code: int
) -> None:
    path, _ = path_of((0.0, 0.0, 0.0), pieces)
    path.flags.writeable = False
    limits = Limits(3.0, 3.0, 1.0, 1.0, 1.0)
    assert node_speeds(path, CAR, limits, start, np.empty(len(path) + 1)) == code
    if code == PROFILE_FOUND:
        check_profile(code, start, limits)
    else:
        with pytest.raises(StartTooFast, match=str(start)):
            check_profile(code, start, limits)
