"""
From a path to a route: a table of timed poses that a controller can follow row by row.

A row holds until the next one: between two rows the vehicle drives an arc of the first row's
curvature, forward or back as its gear says, with constant acceleration, so that the way driven
is (v0 + v1) / 2 * (t1 - t0). Rows stand at every path element boundary, at every point where
acceleration switches (so that even one short element between two stops has its peak), and at
most ROW_STEP_M apart.
"""

import math
from dataclasses import dataclass
from typing import Any, Final, Protocol

import numpy as np
import numpy.typing as npt

from byway_planning.curves.word import advance, wrap
from byway_planning.kernel import kernel
from byway_planning.profile import (
    check_profile,
    node_speeds,
    peak_between,
    speed_cap_mps,
)
from byway_planning.vehicles.body import CAR, Body, Limits

Floats = npt.NDArray[np.float64]

ROW_STEP_M: Final = 0.25  # promised: rows at most 0.3 m apart

#: Below this, a stretch of acceleration or braking is joined with its neighbour: rows closer
#: than this could not be told apart at site coordinates of a kilometre. It costs less than a
#: microsecond of driving.
MERGED_M: Final = 1e-6

#: Path elements shorter than this are dropped; they are rounding.
ELEMENT_M_MIN: Final = 1e-9

#: The columns of a route table. Aligned: seven columns of eight bytes, the last one padded.
ROUTE_TABLE: Final = np.dtype(
    [
        ("t_s", "<f8"),
        ("x_m", "<f8"),
        ("y_m", "<f8"),
        ("heading_rad", "<f8"),
        ("curvature_per_m", "<f8"),
        ("speed_mps", "<f8"),
        ("gear", "i1"),
    ],
    align=True,
)


class Drivable(Protocol):
    """What a route needs to know of a vehicle."""

    @property
    def limits(self) -> Limits: ...

    def body(self, clearance_m: float | None = None) -> Body: ...


@dataclass(frozen=True, slots=True)
class Leg:
    """One stretch of a route without a change of direction."""

    first_row: int
    last_row: int
    gear: int  # 1 forward, -1 reverse
    length_m: float  # always positive


@dataclass(frozen=True, slots=True, eq=False)
class Route:
    """
    Timed poses and the path they follow; both arrays are read-only.

    Attributes:
        table: Structured array of ROUTE_TABLE, n >= 1 rows. Headings lie in [-pi, pi), the
            curvature is that of the steering (heading change = curvature x signed arc length),
            speeds are signed. The last row has speed 0 and gear 0. At a change of direction
            there is one row, with speed 0 and the gear of what follows.
        path: (m, 5) x_m, y_m, heading_rad at the start of each element, curvature_per_m,
            signed length_m.
        legs: In driving order; none if the route has length 0.
    """

    table: npt.NDArray[Any]
    path: Floats
    legs: tuple[Leg, ...]

    @property
    def length_m(self) -> float:
        return sum(leg.length_m for leg in self.legs)

    @property
    def reverse_length_m(self) -> float:
        return sum(leg.length_m for leg in self.legs if leg.gear < 0)

    @property
    def duration_s(self) -> float:
        return float(self.table["t_s"][-1])

    @property
    def direction_changes(self) -> int:
        return max(len(self.legs) - 1, 0)


@kernel()
def _put_row(
    rows: Floats, i: int, path: Floats, j: int, s_m: float, t_s: float, v_mps: float
) -> None:
    """Row i: the pose of path element j after the unsigned arc length s_m."""
    gear = 1.0 if path[j, 4] >= 0.0 else -1.0
    x, y, heading = advance(path[j, 0], path[j, 1], path[j, 2], path[j, 3], s_m * gear)
    rows[i, 0] = t_s
    rows[i, 1], rows[i, 2], rows[i, 3] = x, y, wrap(heading)
    rows[i, 4] = path[j, 3]
    rows[i, 5] = v_mps * gear + 0.0  # + 0.0: a standing row never shows -0
    rows[i, 6] = 0.0


@kernel()
def _put_phase(rows: Floats, row: int, path: Floats, j: int, part: Any, speeds: Any) -> Any:
    """
    Rows of one phase of constant acceleration: part (from, to) of element j, its first row
    included, its last one left to what follows. Returns the next free row, with its time set.
    """
    from_m, to_m = part
    v0, v1 = speeds
    pieces = max(math.ceil((to_m - from_m) / ROW_STEP_M - 1e-9), 1)
    t_s = rows[row, 0]
    for i in range(pieces):
        ratio = i / pieces
        v = math.sqrt(v0 * v0 + (v1 * v1 - v0 * v0) * ratio)
        s_m = from_m + (to_m - from_m) * ratio
        # constant acceleration from v0: the time at which the arc length is reached
        passed_s = 2.0 * (s_m - from_m) / (v0 + v) if i else 0.0
        _put_row(rows, row + i, path, j, s_m, t_s + passed_s, v)
    rows[row + pieces, 0] = t_s + 2.0 * (to_m - from_m) / (v0 + v1)
    return row + pieces


@kernel("rf8[:, ::1]", "i8", Limits, "f8", "f8[::1]", "f8[:, ::1]", "i1[::1]", "f8[:, ::1]")
def _fill_table(
    path: Floats,
    kind: int,
    limits: Limits,
    start_mps: float,
    speeds: Floats,
    rows: Floats,
    gears: npt.NDArray[np.int8],
    legs: Floats,
) -> Any:
    """
    Fill rows (as ROUTE_TABLE), gears and legs (first row, last row, gear, length).

    Returns (code of the profile, number of rows, number of legs).
    """
    code = node_speeds(path, kind, limits, start_mps, speeds)
    if code != 0:
        return code, 0, 0
    row, leg = 0, -1
    rows[0, 0] = 0.0
    for j in range(path.shape[0]):
        length = abs(path[j, 4])
        gear = 1 if path[j, 4] >= 0.0 else -1
        if leg < 0 or legs[leg, 2] != gear:
            leg += 1
            legs[leg, 0], legs[leg, 2], legs[leg, 3] = row, gear, 0.0
        first = row
        v0, v1 = speeds[j], speeds[j + 1]
        cap = speed_cap_mps(path[j, 3], path[j, 4], limits)
        gained, held, peak = peak_between(length, v0, v1, cap, limits)
        at, v_at = 0.0, v0
        standing = v0 + v1 == 0.0  # without a row at its peak it would never move
        if standing or min(gained, length - gained) > MERGED_M:
            row = _put_phase(rows, row, path, j, (0.0, gained), (v0, peak))
            at, v_at = gained, peak
        if min(held - at, length - held) > MERGED_M:
            row = _put_phase(rows, row, path, j, (at, held), (v_at, peak))
            at, v_at = held, peak
        row = _put_phase(rows, row, path, j, (at, length), (v_at, v1))
        gears[first:row] = gear
        legs[leg, 1] = row
        legs[leg, 3] += length
    last = path.shape[0] - 1
    _put_row(rows, row, path, last, abs(path[last, 4]), rows[row, 0], 0.0)
    gears[row] = 0
    return code, row + 1, leg + 1


def make_route(path: Floats, vehicle: Drivable, start_speed_mps: float = 0.0) -> Route:
    """
    Time a path: the fastest speeds within the vehicle's limits, as a route table.

    Args:
        path: Shape (n, 5), n >= 1: x_m, y_m, heading_rad at the start of each element,
            curvature_per_m, signed length_m. Elements join end to end.
        vehicle: Its limits, and whether it is a disc (which stops at corners).
        start_speed_mps: Signed; negative while reversing. Its sign must be that of the first
            element.

    Raises:
        ValueError: If the path is not such an array, or the start speed has the wrong sign.
        StartTooFast: (a ValueError) If the path asks for less speed than can be reached by
            braking.
    """
    path = np.array(path, np.float64, order="C")  # our own: what is handed out never changes
    if path.ndim != 2 or path.shape[1] != 5 or len(path) == 0:
        raise ValueError(f"path must have shape (n, 5) with n >= 1, got {path.shape}")
    if not (np.isfinite(path).all() and math.isfinite(start_speed_mps)):
        raise ValueError("path and start_speed_mps must be finite")
    kind, limits = vehicle.body().kind, vehicle.limits
    lengths_m = np.abs(path[:, 4])
    driven = path if lengths_m.min() > ELEMENT_M_MIN else path[lengths_m > ELEMENT_M_MIN]
    if kind != CAR and path[:, 4].min() < 0.0:
        raise ValueError("this vehicle drives forward only, got an element of negative length_m")
    if start_speed_mps != 0.0 and (len(driven) == 0 or start_speed_mps * driven[0, 4] < 0.0):
        raise ValueError(
            f"start_speed_mps {start_speed_mps} does not fit the path's first element "
            f"of length_m {path[0, 4]}"
        )
    if len(driven) == 0:
        return _standing(path[:1])
    return _timed(driven, kind, limits, start_speed_mps)


def _timed(path: Floats, kind: int, limits: Limits, start_mps: float) -> Route:
    path.flags.writeable = False
    n = len(path)
    # every phase rounds up once, and an element has three
    rows_max = int(np.abs(path[:, 4]).sum() / ROW_STEP_M) + 4 * n + 2
    rows = np.empty((rows_max, 7))
    gears = np.empty(rows_max, np.int8)
    legs = np.empty((n, 4))
    code, row_count, leg_count = _fill_table(
        path, kind, limits, abs(start_mps), np.empty(n + 1), rows, gears, legs
    )
    check_profile(code, start_mps, limits)
    table = rows[:row_count].view(ROUTE_TABLE)[:, 0]
    table["gear"] = gears[:row_count]
    table.flags.writeable = False
    return Route(
        table,
        path,
        tuple(
            Leg(int(first), int(last), int(gear), length)
            for first, last, gear, length in legs[:leg_count].tolist()
        ),
    )


def _standing(path: Floats) -> Route:
    table = np.zeros(1, ROUTE_TABLE)
    table["x_m"], table["y_m"] = path[0, 0], path[0, 1]
    table["heading_rad"] = (path[0, 2] + math.pi) % (2.0 * math.pi) - math.pi
    table["curvature_per_m"] = path[0, 3]
    table.flags.writeable = path.flags.writeable = False
    return Route(table, path, ())
