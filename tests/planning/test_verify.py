"""The rules of a table: a good one passes, and every kind of fault is found by its code."""

import ast
import inspect
import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from tests.planning.route_scenes import (
    Floats,
    Pose,
    after,
    car,
    disc,
    forward_car,
    line_of,
    path_of,
    solids_of,
)

from byway_planning.route import ROUTE_TABLE, make_route
from byway_planning.vehicles.models import Car, Disc, ForwardCar
from byway_planning.verify import CLEARANCE_TOLD_M, Faults, verify
from byway_planning.verify.check import RULE_TEXTS
from byway_planning.verify.rows import RULES

Table = npt.NDArray[Any]

START = (3.0, -2.0, 0.7)
#: Forward along a line and a bend, back, and forward again: two changes of direction.
PIECES = [(0.0, 6.0), (0.2, 7.0), (-0.13, -5.0), (0.0, 4.0)]
FREE = solids_of()


@dataclass
class Edited:
    """A route whose table somebody has changed."""

    table: Table


@dataclass
class Case:
    """A vehicle with a path, its good table, and the ends that were asked for."""

    vehicle: Car | ForwardCar | Disc
    path: Floats
    table: Table
    start: Pose
    goal: Pose

    def check(self, table: Table | None = None, **how: Any) -> Faults:
        edited = Edited(self.table if table is None else table)
        start, goal = how.pop("start", self.start), how.pop("goal", self.goal)
        path = how.pop("path", self.path)
        return verify(FREE, self.vehicle, path, edited, start, goal, **how)


def driven_by(vehicle: Car | ForwardCar, pieces: list[tuple[float, float]]) -> Case:
    path, goal = path_of(START, pieces)
    return Case(vehicle, path, make_route(path, vehicle).table.copy(), START, goal)


def the_car() -> Case:
    return driven_by(car(), PIECES)


def the_forward_car() -> Case:
    return driven_by(forward_car(), PIECES[:2])


def the_disc() -> Case:
    vehicle = disc()
    path, goal = line_of([(0.0, 0.0), (6.0, 0.0), (6.0, 4.0), (9.0, 4.0)])
    return Case(vehicle, path, make_route(path, vehicle).table.copy(), tuple(path[0, :3]), goal)


def timed(rows: list[tuple[float, ...]]) -> Table:
    """A table from rows of x, y, heading, curvature, speed, gear; times follow from the way."""
    table = np.zeros(len(rows), ROUTE_TABLE)
    names = ("x_m", "y_m", "heading_rad", "curvature_per_m", "speed_mps", "gear")
    for i, row in enumerate(rows):
        for name, value in zip(names, row, strict=True):
            table[name][i] = value
        if i:
            way = math.hypot(rows[i][0] - rows[i - 1][0], rows[i][1] - rows[i - 1][1])
            table["t_s"][i] = table["t_s"][i - 1] + 2.0 * way / abs(rows[i][4] + rows[i - 1][4])
    return table


# -- what is good --------------------------------------------------------------------


@pytest.mark.parametrize("make", [the_car, the_forward_car, the_disc])
def test_a_good_table_has_no_faults(make: Callable[[], Case]) -> None:
    faults = make().check()
    assert faults == []
    assert not faults
    assert faults.clearance_m == CLEARANCE_TOLD_M


def test_every_rule_has_a_code_of_its_own() -> None:
    names = [code for code, _ in RULE_TEXTS]
    assert len(names) == len(set(names)) == RULES


def test_random_good_tables_pass() -> None:
    rng = np.random.default_rng(4)
    for _ in range(60):
        radius = rng.uniform(0.5, 9.0)
        count = rng.integers(1, 7)
        bends = rng.choice([0.0, 1.0, -1.0, 0.37], count) / radius
        lengths = rng.choice([1e-6, 1e-3, 0.3, 2.0, 8.0], count) * rng.choice([-1.0, 1.0], count)
        path, goal = path_of(
            (*rng.uniform(-900.0, 900.0, 2).tolist(), float(rng.uniform(-9.0, 9.0))),
            list(zip(bends.tolist(), lengths.tolist(), strict=True)),
        )
        vehicle = car(turn_radius_m_min=radius, lateral_acceleration_mps2_max=rng.uniform(0.2, 3))
        route = make_route(path, vehicle)
        assert verify(FREE, vehicle, path, route, tuple(path[0, :3]), goal) == []


def test_standing_is_a_route_too() -> None:
    path, goal = path_of(START, [(0.1, 0.0)])
    vehicle = car()
    assert verify(FREE, vehicle, path, make_route(path, vehicle), START, goal) == []


def test_a_moving_start_is_checked_against_what_was_asked() -> None:
    path, goal = path_of(START, PIECES)
    vehicle = car()
    route = make_route(path, vehicle, 2.5)
    asked = {"start_speed_mps": 2.5, "start_curvature_per_m": 0.2}
    assert verify(FREE, vehicle, path, route, START, goal, **asked) == []
    (fault,) = verify(FREE, vehicle, path, route, START, goal)
    assert fault.code == "start_speed"
    (fault,) = verify(
        FREE, vehicle, path, route, START, goal, start_speed_mps=2.5, start_curvature_per_m=0.201
    )
    assert fault.code == "curvature"


def test_waiting_on_the_way_is_allowed() -> None:
    case = the_car()
    at = int(np.nonzero(case.table["speed_mps"] == 0.0)[0][1])  # the first change of direction
    table = np.insert(case.table, at, case.table[at])
    table["t_s"][at + 1 :] += 5.0
    assert case.check(table) == []


# -- one edit, one fault -------------------------------------------------------------

Edit = Callable[[Table], None]


def shift(table: Table) -> None:
    table["x_m"][9:] += 2e-6


def turn(table: Table) -> None:
    table["heading_rad"][9:12] += 1e-4


def back_in_time(table: Table) -> None:
    table["t_s"][10:] -= 1.0


def no_time(table: Table) -> None:
    table["t_s"][10:] += table["t_s"][9] - table["t_s"][10]


def wrong_gear(table: Table) -> None:
    table["gear"][5] = -1


def unknown_gear(table: Table) -> None:
    table["gear"][5] = 2


def gear_at_the_end(table: Table) -> None:
    table["gear"][-1] = 1


def back_at_the_end(table: Table) -> None:
    table["speed_mps"][-1] = -1e-3


def bent_row(table: Table) -> None:
    table["curvature_per_m"][-1] = 0.21


@pytest.mark.parametrize(
    ("edit", "code", "row"),
    [
        (shift, "jump", 8),
        (turn, "jump", 8),
        (back_in_time, "time", 9),
        (no_time, "time", 9),
        (wrong_gear, "gear", 5),
        (unknown_gear, "gear", 5),
        (gear_at_the_end, "gear", -1),
        (bent_row, "curvature", -1),
        (back_at_the_end, "gear", -2),
    ],
)
def test_an_edited_table_is_faulted(edit: Edit, code: str, row: int) -> None:
    case = the_car()
    edit(case.table)
    faults = {fault.code: fault for fault in case.check()}
    assert code in faults
    assert faults[code].facts["row"] == range(len(case.table))[row]
    assert str(faults[code].facts["row"]) in faults[code].text


def stretched(case: Case, factor: float) -> Table:
    """The same way, driven faster by a factor: every speed rises, every time shrinks."""
    table = case.table.copy()
    table["t_s"] /= factor
    table["speed_mps"] *= factor
    return table


@pytest.mark.parametrize(
    ("limits", "code"),
    [
        ({"speed_mps_max": 2.9999}, "too_fast"),
        ({"reverse_speed_mps_max": 1.4999}, "too_fast"),
        ({"acceleration_mps2_max": 0.9999}, "accelerates"),
        ({"deceleration_mps2_max": 1.4999}, "brakes"),
        ({"lateral_acceleration_mps2_max": 1.4999}, "lateral"),
        ({"turn_radius_m_min": 5.001}, "curvature"),
    ],
)
def test_a_table_that_uses_a_limit_breaks_a_lower_one(limits: dict[str, float], code: str) -> None:
    """The fastest table uses every limit, so exactly one fault appears when one is lowered."""
    case = the_car()
    case.vehicle = car(**limits)
    (fault,) = case.check()
    assert fault.code == code
    assert 0.0 <= fault.at_s_m <= 22.0
    # and not when it is lowered by less than rounding
    name, value = next(iter(limits.items()))
    rounded = round(value, 1)
    change = 1.0 + 1e-8 if name == "turn_radius_m_min" else 1.0 - 1e-8
    case.vehicle = car(**{name: rounded * change})
    assert case.check() == []


def test_driving_everything_faster_breaks_every_limit_in_time() -> None:
    case = the_car()
    found = {fault.code for fault in case.check(stretched(case, 1.001))}
    assert found == {"too_fast", "accelerates", "brakes", "lateral"}
    assert case.check(stretched(case, 0.9)) == []


def test_rows_too_far_apart_are_faulted() -> None:
    case = driven_by(car(), [(0.0, 20.0)])
    kept = np.delete(case.table, len(case.table) // 2)  # at constant speed: nothing else is wrong
    (fault,) = case.check(kept)
    assert fault.code == "spacing"
    assert fault.facts["value"] == pytest.approx(0.5, abs=0.01)


@pytest.mark.parametrize("make", [the_forward_car, the_disc])
def test_a_vehicle_that_cannot_reverse_must_not(make: Callable[[], Case]) -> None:
    case = make()
    # back along the first line, as a car would do it
    x, y, heading = case.start
    c, s = math.cos(heading), math.sin(heading)
    way = np.linspace(0.0, 2.0, 9)
    speeds = [0.0, 0.2, 0.2, 0.2, 0.2, 0.2, 0.2, 0.2, 0.0]
    rows = [
        (x - c * d, y - s * d, heading, 0.0, -v, -1.0) for d, v in zip(way, speeds, strict=True)
    ]
    table = timed(rows)
    table["gear"][-1] = 0
    path = np.array([(*case.start, 0.0, -2.0)])
    goal = after(case.start, 0.0, -2.0)
    found = {fault.code for fault in case.check(table, path=path, goal=goal)}
    assert found == {"reverses", "too_fast"}, "its speed limit in reverse is 0"


def test_a_disc_turns_only_where_it_stands() -> None:
    case = the_disc()
    # straight at constant speed round the first corner, without stopping there
    rows = [(0.2 * i, 0.0, 0.0, 0.0, 0.5, 1.0) for i in range(31)]
    rows[-1] = (6.0, 0.0, math.pi / 2, 0.0, 0.5, 1.0)
    rows += [(6.0, 0.2 * i, math.pi / 2, 0.0, 0.5, 1.0) for i in range(1, 21)]
    rows[-1] = (6.0, 4.0, math.pi / 2, 0.0, 0.0, 0.0)
    rows[0] = (0.0, 0.0, 0.0, 0.0, 0.0, 1.0)
    (fault,) = case.check(timed(rows), path=case.path[:2], goal=(6.0, 4.0, 0.0))
    assert (fault.code, fault.facts["row"]) == ("corner", 30)
    assert fault.facts["value"] == pytest.approx(math.pi / 2)


def test_a_disc_drives_no_bends() -> None:
    case = the_disc()
    case.table["curvature_per_m"][-1] = 1e-3
    assert [fault.code for fault in case.check()] == ["curvature"]


@pytest.mark.parametrize("end", ["start", "goal"])
@pytest.mark.parametrize(
    ("off", "missed"),
    [
        ((0.0009, 0.0, 0.0), False),
        ((0.0011, 0.0, 0.0), True),
        ((0.0, -0.0011, 0.0), True),
        ((0.0, 0.0, 0.0009), False),
        ((0.0, 0.0, -0.0011), True),
        ((0.0, 0.0, 2.0 * math.pi), False),
        ((0.0, 0.0, math.pi), True),
    ],
)
def test_both_ends_are_met(end: str, off: Pose, missed: bool) -> None:
    case = the_car()
    asked = tuple(a + b for a, b in zip(getattr(case, end), off, strict=True))
    faults = case.check(**{end: asked})
    assert [fault.code for fault in faults] == ([f"{end}_missed"] if missed else [])


def test_the_heading_of_a_disc_is_free_at_both_ends() -> None:
    case = the_disc()
    assert case.check(start=(0.0, 0.0, 2.2), goal=(9.0, 4.0, -1.0)) == []


def test_a_table_that_does_not_end_standing_is_faulted() -> None:
    case = driven_by(car(), [(0.0, 20.0)])
    cut = case.table[: len(case.table) // 2].copy()
    cut["gear"][-1] = 0
    goal = (float(cut["x_m"][-1]), float(cut["y_m"][-1]), START[2])
    path = np.array([(*START, 0.0, math.dist(goal[:2], START[:2]))])
    (fault,) = case.check(cut, goal=goal, path=path)
    assert (fault.code, fault.facts["speed_mps"]) == ("not_standing", pytest.approx(3.0))


# -- the path ------------------------------------------------------------------------


@pytest.mark.parametrize(
    "pieces",
    [
        PIECES[:3],  # the table goes on
        [*PIECES, (0.0, 0.01)],  # the table ends before
        [(0.0, 6.0), (0.2, 7.0), (-0.13, -5.0), (0.0, 4.001)],  # the last element is longer
        [(0.0, 6.1), (0.2, 6.9), (-0.13, -5.0), (0.0, 4.0)],  # a boundary is elsewhere
        [(0.0, 6.0), (-0.2, 7.0), (-0.13, -5.0), (0.0, 4.0)],  # it bends the other way
        [(0.0, 6.0), (0.2, 7.0), (0.13, 5.0), (0.0, 4.0)],  # it goes ahead where the table reverses
    ],
)
def test_a_table_is_that_of_its_path(pieces: list[tuple[float, float]]) -> None:
    case = the_car()
    path, _ = path_of(START, pieces)
    assert [fault.code for fault in case.check(path=path)] == ["path_mismatch"]


def test_a_circle_the_other_way_round_is_another_path() -> None:
    """Both begin and end at the same pose, after the same way."""
    case = driven_by(car(), [(0.0, 2.0), (0.2, 10.0 * math.pi)])
    path, _ = path_of(START, [(0.0, 2.0), (-0.2, 10.0 * math.pi)])
    assert [fault.code for fault in case.check(path=path)] == ["path_mismatch"]


def test_a_path_that_does_not_hang_together_is_faulted() -> None:
    case = the_car()
    for column, change in ((0, 1e-3), (1, -1e-3), (2, 1e-3)):
        path = case.path.copy()
        path[2, column] += change
        assert [fault.code for fault in case.check(path=path)] == ["path_mismatch"]


def test_elements_of_no_length_are_no_mismatch() -> None:
    path, goal = path_of(START, [(0.2, 0.0), (0.0, 6.0), (-0.1, 1e-12), (0.2, 3.0), (0.0, 0.0)])
    vehicle = car()
    assert verify(FREE, vehicle, path, make_route(path, vehicle), START, goal) == []


# -- what is no table ----------------------------------------------------------------


@pytest.mark.parametrize("column", ROUTE_TABLE.names[:6])
@pytest.mark.parametrize("value", [math.nan, math.inf])
def test_numbers_that_are_none_are_malformed(column: str, value: float) -> None:
    case = the_car()
    case.table[column][7] = value
    faults = case.check()
    assert [fault.code for fault in faults] == ["malformed"]
    assert math.isnan(faults.clearance_m)


def test_no_table_at_all_is_malformed() -> None:
    case = the_car()
    assert [f.code for f in case.check(case.table[:0])] == ["malformed"]
    assert [f.code for f in case.check(np.zeros((3, 7)))] == ["malformed"]
    assert [f.code for f in case.check(case.table[["t_s", "x_m", "y_m"]])] == ["malformed"]
    assert [f.code for f in case.check(path=np.zeros((2, 4)))] == ["malformed"]
    assert [f.code for f in case.check(path=np.full((1, 5), np.nan))] == ["malformed"]


def test_columns_are_found_by_name_in_any_layout() -> None:
    case = the_car()
    packed = np.dtype([(name, ROUTE_TABLE[name]) for name in reversed(ROUTE_TABLE.names)])
    table = np.empty(len(case.table), packed)
    for name in ROUTE_TABLE.names:
        table[name] = case.table[name]
    assert case.check(table) == []


def test_a_table_that_jumps_is_not_driven() -> None:
    """Its motion is unknown, so no clearance is claimed for it."""
    case = the_car()
    shift(case.table)
    wall = [(0.0, -9.0), (9.0, -9.0), (9.0, 9.0), (0.0, 9.0)]
    faults = verify(
        solids_of([wall]), case.vehicle, case.path, Edited(case.table), case.start, case.goal
    )
    assert "jump" in [fault.code for fault in faults]
    assert "collides" not in [fault.code for fault in faults]
    assert math.isnan(faults.clearance_m)


def test_a_table_too_fast_and_in_a_wall_has_both_faults() -> None:
    case = the_car()
    wall = [(0.0, -9.0), (9.0, -9.0), (9.0, 9.0), (0.0, 9.0)]
    faults = verify(
        solids_of([wall]),
        case.vehicle,
        case.path,
        Edited(stretched(case, 1.01)),
        case.start,
        case.goal,
    )
    assert {"too_fast", "collides"} <= {fault.code for fault in faults}


def test_the_vehicles_own_clearance_is_the_one_that_counts_by_default() -> None:
    post = after(START, 0.0, -1.0 - 0.25)  # 0.05 m behind the rear, and backed up to by 0.02 m
    solids = solids_of(discs=[(*post[:2], 0.2)])
    path, goal = path_of(START, [(0.0, -0.02), (0.0, 3.0)])
    for own, asked, expected in (
        (0.02, None, []),
        (0.04, None, ["collides"]),
        (0.04, 0.02, []),
        (0.02, 0.04, ["collides"]),
    ):
        vehicle = car(clearance_m=own)
        route = make_route(path, vehicle)
        faults = verify(solids, vehicle, path, route, START, goal, clearance_m=asked)
        assert [fault.code for fault in faults] == expected
        if not expected:
            assert faults.clearance_m == pytest.approx(0.03, abs=2e-6)


# -- independence --------------------------------------------------------------------


def test_the_check_shares_no_code_with_what_it_checks() -> None:
    """A mistake in the search, its curves, its collisions or its tables must not be in both."""
    allowed = {
        "byway_planning.kernel",
        "byway_planning.site.solids",
        "byway_planning.vehicles.body",
    }
    files = sorted(Path(inspect.getfile(verify)).parent.glob("*.py"))
    assert len(files) > 5
    for file in files:
        for node in ast.walk(ast.parse(file.read_text())):
            named: list[str] = []
            if isinstance(node, ast.ImportFrom):
                assert node.level == 0
                named = [node.module or ""]
            elif isinstance(node, ast.Import):
                named = [alias.name for alias in node.names]
            for name in named:
                ours = name.startswith("byway_planning")
                inside = name.startswith("byway_planning.verify")
                assert not ours or inside or name in allowed, f"{file.name} imports {name}"
