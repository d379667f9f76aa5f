"""Following a route: the line itself, stopping, and coming back to the line in both gears."""

import math

import numpy as np
import pytest
from tests.daemon.yard.lines import COLUMNS, table

from bywayd.yard.shapes import Pose, advanced
from bywayd.yard.tracking import Abilities, Line, next_step, steer

CAN = Abilities(
    speed_mps_max=3.0, acceleration_mps2=1.0, deceleration_mps2=1.5, curvature_per_m_max=0.4
)
DT_S = 0.02


def line_of(*pieces: tuple[float, float]) -> Line:
    return Line(table(*pieces, top_mps=3.0, deceleration_mps2=1.5))


def drive(
    line: Line, pose: Pose, stop_at_m: float = math.inf, steps: int = 3000
) -> list[tuple[float, Pose, float]]:
    """Follow a line until standing; returns (place along, true pose, speed) of each step."""
    at_m, speed, trace = 0.0, 0.0, []
    for _ in range(steps):
        new_speed, moved_m = next_step(line, at_m, speed, stop_at_m, CAN, DT_S)
        if new_speed == 0.0 and moved_m < 1e-9:
            break
        curvature = steer(line, at_m, moved_m, pose, CAN).curvature_per_m
        pose = advanced(pose, curvature, line.gear_at(at_m) * moved_m)
        at_m, speed = at_m + moved_m, new_speed
        trace.append((at_m, pose, speed))
    return trace


def test_a_line_knows_its_length_poses_and_stops() -> None:
    line = line_of((0.0, 5.0), (0.3, 4.0), (-0.3, -3.0), (0.0, 2.0))
    assert line.length_m == pytest.approx(14.0, abs=1e-9)
    assert line.stops_m == pytest.approx([9.0, 12.0, 14.0], abs=1e-9)
    corner = advanced((5.0, 0.0, 0.0), 0.3, 4.0)
    assert line.pose_at(9.0) == pytest.approx(corner, abs=1e-9)
    assert line.pose_at(10.1) == pytest.approx(advanced(corner, -0.3, -1.1), abs=1e-9)
    assert line.pose_at(99.0) == pytest.approx(line.pose_at(14.0))
    assert [line.gear_at(s) for s in (1.0, 8.9, 9.1, 12.5)] == [1, 1, -1, 1]
    assert line.stop_after(0.0) == line.stop_after(8.9) == pytest.approx(9.0)
    assert line.stop_after(line.stops_m[0]) == pytest.approx(12.0)
    assert line.stop_after(14.0) == pytest.approx(14.0)


def test_speed_between_rows_is_that_of_even_acceleration() -> None:
    line = line_of((0.0, 5.0))
    assert line.speed_at(0.1) == pytest.approx(math.sqrt(2 * 1.0 * 0.1))
    assert line.speed_at(4.9) == pytest.approx(math.sqrt(2 * 1.5 * 0.1))


def test_what_is_left_costs_reverse_and_changes_of_direction() -> None:
    line = line_of((0.0, 5.0), (0.1, -3.0), (0.0, 2.0))
    assert line.cost_left(0.0, 1.0, 0.0) == pytest.approx(10.0)
    assert line.cost_left(0.0, 2.0, 4.0) == pytest.approx(5 + 6 + 2 + 8)
    assert line.cost_left(4.0, 2.0, 4.0) == pytest.approx(1 + 6 + 2 + 8)
    assert line.cost_left(9.0, 2.0, 4.0) == pytest.approx(1.0)


def test_a_route_of_one_row_is_a_line_without_length() -> None:
    line = Line(np.array([(0.0, 1.0, 2.0, 0.5, 0.0, 0.0, 0)], COLUMNS))
    assert line.length_m == 0.0
    assert line.pose_at(0.0) == (1.0, 2.0, 0.5)
    assert next_step(line, 0.0, 0.0, math.inf, CAN, DT_S) == (0.0, 0.0)


@pytest.mark.parametrize(
    "pieces", [((0.0, 6.0), (0.3, 6.0)), ((0.2, -8.0),), ((0.0, 4.0), (0.35, -4.0))]
)
def test_a_vehicle_on_the_line_stays_on_it_and_stops_at_its_end(
    pieces: tuple[tuple[float, float], ...],
) -> None:
    line = line_of(*pieces)
    trace = drive(line, (0.0, 0.0, 0.0))
    offsets = [math.dist(pose[:2], line.pose_at(at_m)[:2]) for at_m, pose, _ in trace]
    # A jump of 0.4 per metre inside a step of 6 cm puts it off by 0.4 mm at most.
    assert max(offsets) < 0.001
    assert trace[-1][0] == pytest.approx(line.length_m, abs=0.002)


@pytest.mark.parametrize("gear", [1, -1])
@pytest.mark.parametrize("offset_m", [0.15, -0.15])
@pytest.mark.parametrize("turned_rad", [0.06, -0.06])
def test_a_vehicle_beside_the_line_comes_back_in_both_gears(
    gear: int, offset_m: float, turned_rad: float
) -> None:
    line = line_of((0.0, gear * 12.0))
    trace = drive(line, (0.0, offset_m, turned_rad))
    _, (_, y_m, heading_rad), _ = trace[-1]
    assert abs(y_m) < 0.01
    assert abs(heading_rad) < 0.01
    assert max(abs(pose[1]) for _, pose, _ in trace) < 0.25


def test_speed_and_deceleration_stay_within_the_limits() -> None:
    line = line_of((0.0, 20.0))
    speeds = [speed for _, _, speed in drive(line, (0.0, 0.0, 0.0))]
    changes = np.diff([0.0, *speeds]) / DT_S
    assert max(speeds) <= 3.0 + 1e-9
    assert changes.max() <= CAN.acceleration_mps2 + 1e-9
    assert changes.min() >= -CAN.deceleration_mps2 - 1e-9


@pytest.mark.parametrize("stop_at_m", [0.5, 3.7, 9.0, 14.0])
def test_a_vehicle_stops_before_the_place_that_it_may_go_to(stop_at_m: float) -> None:
    line = line_of((0.0, 20.0))
    reached_m = drive(line, (0.0, 0.0, 0.0), stop_at_m)[-1][0]
    assert stop_at_m - 0.002 <= reached_m <= stop_at_m + 1e-9


@pytest.mark.parametrize("going_m", [2.0, 6.0, 11.0])
def test_a_stop_that_comes_at_full_speed_is_kept_when_braking_can_keep_it(going_m: float) -> None:
    """The permission shrinks to the braking distance at that moment, and is not overrun."""
    line = line_of((0.0, 30.0))
    at_m = speed = 0.0
    while at_m < going_m:
        speed, moved_m = next_step(line, at_m, speed, math.inf, CAN, DT_S)
        at_m += moved_m
    may_go_to_m = at_m + speed**2 / (2 * CAN.deceleration_mps2)
    while speed > 0.0:
        speed, moved_m = next_step(line, at_m, speed, may_go_to_m, CAN, DT_S)
        at_m += moved_m
    assert may_go_to_m - 0.002 <= at_m <= may_go_to_m + 1e-9
