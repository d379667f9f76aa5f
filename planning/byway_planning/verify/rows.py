"""
The rules of a route table, row by row, and whether the table is that of its path.

A table is taken as a controller takes it: from a row on, its curvature holds, and the signed
way to the next row is (v0 + v1) / 2 * (t1 - t0).
"""

from typing import Any, Final

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel
from byway_planning.vehicles.body import CAR, DISC, Limits
from byway_planning.verify.geometry import driven, turned

Floats = npt.NDArray[np.float64]

TIME: Final = 0
GEAR: Final = 1
SPACING: Final = 2
JUMP: Final = 3
CURVATURE: Final = 4
REVERSE: Final = 5
SPEED: Final = 6
ACCELERATION: Final = 7
BRAKING: Final = 8
LATERAL: Final = 9
CORNER: Final = 10
PATH: Final = 11
RULES: Final = 12

JUMP_M: Final = 1e-6
TURN_RAD: Final = 1e-6
SPACING_M: Final = 0.3
OVER_RATIO: Final = 1e-6  # limits may be exceeded by rounding
SPEED_MPS: Final = 1e-9  # so may speeds that have to be 0, or to differ


@kernel()
def _note(first: Any, values: Floats, rule: int, row: int, value: float) -> None:
    if first[rule] < 0:
        first[rule] = row
        values[rule] = value


@kernel()
def _check_interval(
    rows: Floats, arcs: Floats, i: int, kind: int, limits: Limits, first: Any, values: Floats
) -> None:
    """Rules of the motion from row i to the next, without its place."""
    gear = rows[i, 6]
    v0, v1 = rows[i, 5], rows[i + 1, 5]
    dt = rows[i + 1, 0] - rows[i, 0]
    if abs(gear) != 1.0 or v0 * gear < 0.0 or v1 * gear < 0.0:
        _note(first, values, GEAR, i, gear)
    if gear < 0.0 and kind != CAR:
        _note(first, values, REVERSE, i, gear)
    if abs(arcs[i]) > SPACING_M * (1.0 + OVER_RATIO):
        _note(first, values, SPACING, i, abs(arcs[i]))
    top = limits.speed_mps_max if gear > 0.0 else limits.reverse_speed_mps_max
    if max(abs(v0), abs(v1)) > top * (1.0 + OVER_RATIO):
        _note(first, values, SPEED, i, max(abs(v0), abs(v1)))
    sideways = max(v0 * v0, v1 * v1) * abs(rows[i, 4])
    if sideways > limits.lateral_acceleration_mps2_max * (1.0 + OVER_RATIO):
        _note(first, values, LATERAL, i, sideways)
    if not dt > 0.0:
        _note(first, values, TIME, i, dt)
        return
    gain = abs(v1) - abs(v0)
    if gain > limits.acceleration_mps2_max * dt * (1.0 + OVER_RATIO) + SPEED_MPS:
        _note(first, values, ACCELERATION, i, gain / dt)
    if -gain > limits.deceleration_mps2_max * dt * (1.0 + OVER_RATIO) + SPEED_MPS:
        _note(first, values, BRAKING, i, -gain / dt)


@kernel()
def _check_join(rows: Floats, arcs: Floats, i: int, kind: int, first: Any, values: Floats) -> None:
    """Whether the motion that begins at row i ends at the next row."""
    x, y, heading = driven(rows[i, 1], rows[i, 2], rows[i, 3], rows[i, 4], arcs[i])
    off = np.hypot(x - rows[i + 1, 1], y - rows[i + 1, 2])
    if not off <= JUMP_M:
        _note(first, values, JUMP, i, off)
    turn = abs(turned(rows[i + 1, 3] - heading))
    if not turn <= TURN_RAD:
        if kind != DISC:
            _note(first, values, JUMP, i, turn)
        elif abs(rows[i + 1, 5]) > SPEED_MPS:
            _note(first, values, CORNER, i + 1, turn)


@kernel()
def _is_beside(rows: Floats, r: int, x: float, y: float, heading: float, kind: int) -> bool:
    """Whether a row stands at a pose; the heading of a disc is free."""
    if not np.hypot(rows[r, 1] - x, rows[r, 2] - y) <= 2.0 * JUMP_M:
        return False
    return kind == DISC or abs(turned(rows[r, 3] - heading)) <= 2.0 * TURN_RAD


@kernel()
def _check_path(
    path: Floats, rows: Floats, arcs: Floats, kind: int, first: Any, values: Floats
) -> None:
    """Every element of the path ends at a row, and is driven with its curvature and gear."""
    n, r = rows.shape[0], 0
    way, passed = 0.0, 0.0
    for j in range(path.shape[0]):
        x, y, heading = driven(path[j, 0], path[j, 1], path[j, 2], path[j, 3], path[j, 4])
        way += abs(path[j, 4])
        while r < n - 1 and passed + 0.5 * abs(arcs[r]) < way:
            other = arcs[r] * path[j, 4] < 0.0 or rows[r, 4] != path[j, 3]
            if other and arcs[r] != 0.0:
                _note(first, values, PATH, r, passed)
            passed += abs(arcs[r])
            r += 1
        if not _is_beside(rows, r, x, y, heading, kind) or abs(passed - way) > JUMP_M * (1.0 + way):
            _note(first, values, PATH, r, way)
    for i in range(r, n - 1):
        passed += abs(arcs[i])
    if passed - way > JUMP_M * (1.0 + way):
        _note(first, values, PATH, r, way)


@kernel("f8[:, ::1]", "rf8[:, ::1]", "i8", "f8", Limits, "f8[::1]", "i8[::1]", "f8[::1]")
def check_rows(
    rows: Floats,
    path: Floats,
    kind: int,
    turn_radius_m: float,
    limits: Limits,
    arcs: Floats,
    first: npt.NDArray[np.int64],
    values: Floats,
) -> None:
    """
    Check a table (columns as in a route, the gear last) and fill `arcs`, its signed lengths.

    For every rule, `first` gets the first row that breaks it, or -1, and `values` by what.
    """
    n = rows.shape[0]
    first[:] = -1
    for i in range(n - 1):
        arcs[i] = 0.5 * (rows[i, 5] + rows[i + 1, 5]) * (rows[i + 1, 0] - rows[i, 0])
        _check_interval(rows, arcs, i, kind, limits, first, values)
        _check_join(rows, arcs, i, kind, first, values)
    for i in range(n):
        curvature = abs(rows[i, 4])
        tight = curvature > 0.0 if kind == DISC else curvature * turn_radius_m > 1.0 + OVER_RATIO
        if tight:
            _note(first, values, CURVATURE, i, curvature)
    if rows[n - 1, 6] != 0.0:
        _note(first, values, GEAR, n - 1, rows[n - 1, 6])
    _check_path(path, rows, arcs, kind, first, values)
