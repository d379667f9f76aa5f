"""The public side of the check: faults in words, and the clearance of a pose."""

import functools
import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Final, Literal, NamedTuple, Protocol

import numpy as np
import numpy.typing as npt

from byway_planning.site.solids import Solids
from byway_planning.vehicles.body import DISC, Body, Limits
from byway_planning.verify.body import Hull, Notes
from byway_planning.verify.drive import FREE, drive
from byway_planning.verify.rows import JUMP, RULES, SPACING, TIME, check_rows

Floats = npt.NDArray[np.float64]
Pose = Sequence[float]
Kind = Literal["nothing", "polygon", "disc", "cell", "limits"]

KINDS: Final[tuple[Kind, ...]] = ("nothing", "polygon", "disc", "cell", "limits")

#: The body is tested drawn in by this much, so that touching is not overlapping and rounding
#: in the search is no fault. An overlap deeper than this always is one.
TOLERANCE_M: Final = 1e-6
#: A clearance of 0 still asks for this much around the drawn-in body: a hundred times what
#: rounding can hide.
NEED_M_MIN: Final = 1e-9
END_M: Final = 1e-3
END_RAD: Final = 1e-3
#: Clearances are told up to this; farther is not looked for.
CLEARANCE_TOLD_M: Final = 1.0
#: How closely the depth of an overlap is found.
DEPTH_M: Final = 1e-6
#: Nobody's site is larger: what is not met by then is not there.
NOWHERE_M: Final = 1e5
#: What counts as standing, and as the start speed asked for.
SPEED_MPS: Final = 1e-6


class Checkable(Protocol):
    """What the check needs to know of a vehicle."""

    @property
    def limits(self) -> Limits: ...

    @property
    def start_overlap_m(self) -> float: ...

    def body(self, clearance_m: float | None = None) -> Body: ...


class Timed(Protocol):
    """What the check needs of a route: its table."""

    @property
    def table(self) -> npt.NDArray[Any]: ...


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing that is wrong with a route."""

    code: str  # stable; see the table RULE_TEXTS and `verify`
    text: str
    at_s_m: float  # arc length from the start
    facts: dict[str, float | int | str] = field(default_factory=dict)


class Faults(list[Fault]):
    """All that is wrong with a route; empty if it may be driven."""

    #: The least clearance along the route, at most CLEARANCE_TOLD_M; nan if it was not driven.
    clearance_m: float = math.nan


class Nearest(NamedTuple):
    """What is nearest to a pose; an overlap counts negative."""

    distance_m: float  # inf if there is nothing at all
    kind: Kind
    number: int  # of the polygon or disc; of a cell: its row times all columns, plus its column


#: Code and text of each rule of verify.rows, in the order of its numbers.
RULE_TEXTS: Final = (
    ("time", "time must grow from row to row, row {row} is followed after {value:.9g} s"),
    ("gear", "gear {value:g} of row {row} does not fit: 1 or -1 as the speeds say, 0 at the end"),
    ("spacing", "row {row} is followed after {value:.6f} m, more than 0.3 m"),
    ("jump", "the motion that begins at row {row} ends {value:.3g} (m or rad) beside the next row"),
    ("curvature", "curvature {value:.9g} per m of row {row} is more than the vehicle can steer"),
    ("reverses", "row {row} reverses, which this vehicle cannot do"),
    ("too_fast", "speed {value:.9g} m/s after row {row} is above the vehicle's limit"),
    ("accelerates", "acceleration {value:.9g} m/s2 after row {row} is above the vehicle's limit"),
    ("brakes", "deceleration {value:.9g} m/s2 after row {row} is above the vehicle's limit"),
    ("lateral", "lateral acceleration {value:.9g} m/s2 after row {row} is above the limit"),
    ("corner", "row {row} turns by {value:.3g} rad on the spot without standing"),
    ("path_mismatch", "the table leaves its path at row {row}, {value:.6f} m along it"),
)


def verify(
    solids: Solids,
    vehicle: Checkable,
    path: Floats,
    route: Timed,
    start: Pose,
    goal: Pose,
    *,
    clearance_m: float | None = None,
    start_overlap_m: float | None = None,
    start_speed_mps: float = 0.0,
    start_curvature_per_m: float = 0.0,
) -> Faults:
    """
    Check a route by an own, exact computation, as a vehicle would drive its table.

    Args:
        solids: Every obstacle that counts.
        vehicle: Its body and limits.
        path: (m, 5), what the table claims to time.
        route: Its table: rows of t_s, x_m, y_m, heading_rad, curvature_per_m, speed_mps, gear.
        start: x_m, y_m, heading_rad; of a disc the heading is free, here and at the goal.
        goal: The same.
        clearance_m: What is kept from every obstacle and from the limits of the site; by
            default the vehicle's own.
        start_overlap_m: A start nearer than the clearance is allowed, even overlapping by no
            more than this, and then the clearance may only grow until it is kept; by default
            the vehicle's own.
        start_speed_mps: Signed speed of the first row.
        start_curvature_per_m: Steering at the start. It may be left at once (there is no limit
            of the steering rate) but must be one the vehicle can steer.

    Returns:
        At most one fault of each code. Beside those of RULE_TEXTS: `malformed`, `start_missed`,
        `goal_missed`, `start_speed`, `not_standing`, `collides` (facts: x_m, y_m, heading_rad,
        distance_m, kind, index). A table that does not hang together is not driven.
    """
    faults = Faults()
    rows = rows_of(route.table)
    if rows is None or path.ndim != 2 or path.shape[1] != 5 or not np.isfinite(path).all():
        faults.append(Fault("malformed", "table and path must be finite and not empty", 0.0))
        return faults
    body = vehicle.body()
    arcs, first = np.zeros(len(rows)), np.empty(RULES, np.int64)
    values = np.zeros(RULES)
    way = _read_only(np.ascontiguousarray(path, np.float64))
    check_rows(rows, way, body.kind, body.turn_radius_m, vehicle.limits, arcs, first, values)
    if first.max() >= 0:
        for rule, (code, text) in enumerate(RULE_TEXTS):
            row, value = int(first[rule]), float(values[rule])
            if row >= 0:
                at_m = float(np.abs(arcs[:row]).sum())
                facts: dict[str, float | int | str] = {"row": row, "value": value}
                faults.append(Fault(code, text.format(row=row, value=value), at_m, facts))
    _check_ends(faults, rows, body, start, goal, start_speed_mps, float(np.abs(arcs).sum()))
    if abs(start_curvature_per_m) * body.turn_radius_m > 1.0 + TOLERANCE_M and first[4] < 0:
        text = f"start_curvature_per_m {start_curvature_per_m} is more than the vehicle can steer"
        faults.append(Fault("curvature", text, 0.0, {"value": start_curvature_per_m}))
    if max(first[TIME], first[SPACING], first[JUMP]) < 0:
        need_m = body.clearance_m if clearance_m is None else clearance_m
        overlap_m = vehicle.start_overlap_m if start_overlap_m is None else start_overlap_m
        _check_motion(faults, solids, body, rows, arcs, need_m, overlap_m)
    return faults


def rows_of(table: npt.NDArray[Any]) -> Floats | None:
    """Return a table as floats (n, 7); None if a column is missing or a number not finite."""
    names = ("t_s", "x_m", "y_m", "heading_rad", "curvature_per_m", "speed_mps", "gear")
    if table.ndim != 1 or len(table) == 0 or not set(names) <= set(table.dtype.names or ()):
        return None
    rows = np.empty((len(table), 7))
    for column, name in enumerate(names):
        rows[:, column] = table[name]
    return rows if np.isfinite(rows).all() else None


def _check_ends(
    faults: Faults,
    rows: Floats,
    body: Body,
    start: Pose,
    goal: Pose,
    start_speed_mps: float,
    length_m: float,
) -> None:
    for code, row, pose, at_m in (
        ("start_missed", rows[0], start, 0.0),
        ("goal_missed", rows[-1], goal, length_m),
    ):
        off_m = math.hypot(row[1] - pose[0], row[2] - pose[1])
        off_rad = 0.0 if body.kind == DISC else abs(math.remainder(row[3] - pose[2], 2 * math.pi))
        if not (off_m <= END_M and off_rad <= END_RAD):
            text = f"the table misses the {code[:-7]} by {off_m:.6f} m and {off_rad:.6f} rad"
            faults.append(Fault(code, text, at_m, {"off_m": off_m, "off_rad": off_rad}))
    if not abs(rows[0, 5] - start_speed_mps) <= SPEED_MPS:
        text = f"the table starts with {rows[0, 5]:.9g} m/s instead of {start_speed_mps:.9g} m/s"
        faults.append(Fault("start_speed", text, 0.0, {"speed_mps": float(rows[0, 5])}))
    if not abs(rows[-1, 5]) <= SPEED_MPS:
        text = f"the table ends with {rows[-1, 5]:.9g} m/s instead of standing"
        faults.append(Fault("not_standing", text, length_m, {"speed_mps": float(rows[-1, 5])}))


def _check_motion(
    faults: Faults,
    solids: Solids,
    body: Body,
    rows: Floats,
    arcs: Floats,
    clearance_m: float,
    start_overlap_m: float,
) -> None:
    need_m = max(clearance_m, NEED_M_MIN)
    hull = drawn_in(body, TOLERANCE_M) or whole(body)
    depth_m = start_overlap_m
    while (inner := drawn_in(body, depth_m + TOLERANCE_M)) is None:
        # stricter, where an arm of the outline is too thin for what is allowed
        depth_m = 0.5 * depth_m if depth_m > TOLERANCE_M else -TOLERANCE_M
    told_m = max(CLEARANCE_TOLD_M + 2.0 * TOLERANCE_M, need_m)
    notes = notes_for(solids, hull)
    found = np.array([told_m, *[0.0] * 7])
    code = drive(solids, notes, hull, inner, depth_m, rows, arcs, need_m, found)
    if found[5] < 0.0 and code != FREE:  # an overlap is only told as such: how deep is it?
        found[5] = _clearance(solids, body, *found[2:5].tolist()).distance_m
        found[0] = min(max(found[0], -body.inner_radius_m), found[5])
    faults.clearance_m = min(float(found[0]) - TOLERANCE_M, CLEARANCE_TOLD_M)
    if code != FREE:
        faults.append(_collision(found, need_m))


def _collision(found: Floats, need_m: float) -> Fault:
    at_m, x_m, y_m, heading_rad, distance_m = found[1:6].tolist()
    heading_rad = math.remainder(heading_rad, 2.0 * math.pi)
    kind, index = KINDS[int(found[6])], int(found[7])
    what = kind if index < 0 else f"{kind} {index}"
    near = "overlaps" if distance_m <= 0.0 else f"comes within {distance_m:.6f} m of"
    text = (
        f"{near} {what} at {at_m:.3f} m, where the pose is "
        f"({x_m:.3f}, {y_m:.3f}, {heading_rad:.3f}); {need_m:.6f} m has to be kept"
    )
    facts: dict[str, float | int | str] = {
        "x_m": x_m,
        "y_m": y_m,
        "heading_rad": heading_rad,
        "distance_m": distance_m,
        "kind": kind,
        "index": index,
    }
    return Fault("collides", text, at_m, facts)


def clearance_m(
    solids: Solids, vehicle: Checkable, pose: Pose, *, within_m: float = DEPTH_M
) -> Nearest:
    """
    Return the exact distance of a vehicle, standing at a pose, from what is nearest.

    An overlap counts negative, by the depth to which the outline has to be drawn in, edge by
    edge, to be free; never deeper than the largest disc inside the vehicle.

    Args:
        within_m: How closely the depth of an overlap is to be found.

    Raises:
        ValueError: If the pose is not finite.
    """
    x, y, heading = (float(v) for v in pose)
    if not (math.isfinite(x) and math.isfinite(y) and math.isfinite(heading)):
        raise ValueError(f"a pose must be finite, got {tuple(pose)}")
    return _clearance(solids, vehicle.body(), x, y, heading, within_m)


def _clearance(
    solids: Solids,
    body: Body,
    x: float,
    y: float,
    heading: float,
    within_m: float = DEPTH_M,
) -> Nearest:
    care_m = 1.0
    while True:
        nearest = _nearest(solids, whole(body), x, y, heading, care_m)
        if nearest.kind != "nothing":
            break
        if care_m > NOWHERE_M:
            return Nearest(math.inf, "nothing", -1)
        care_m *= 8.0
    if nearest.distance_m > 0.0:
        return nearest
    free_m, stuck_m = body.inner_radius_m, 0.0
    while free_m - stuck_m > within_m:
        half_m = 0.5 * (free_m + stuck_m)
        inner = drawn_in(body, half_m)
        found = None if inner is None else _nearest(solids, inner, x, y, heading, DEPTH_M)
        if found is None or found.distance_m > 0.0:
            free_m = half_m
        else:
            stuck_m, nearest = half_m, found
    return Nearest(-free_m, nearest.kind, nearest.number)


def _nearest(
    solids: Solids, hull: Hull, x: float, y: float, heading: float, care_m: float
) -> Nearest:
    notes = notes_for(solids, hull)
    found = np.array([care_m, *[0.0] * 7])
    rows = np.array([[0.0, x, y, heading, 0.0, 0.0, 0.0]])
    drive(solids, notes, hull, hull, 0.0, rows, np.zeros(1), -np.inf, found)
    return Nearest(float(found[5]), KINDS[int(found[6])], int(found[7]))


def whole(body: Body) -> Hull:
    """Return the body as it is."""
    return _hull(body.outline_m.tobytes(), body.skin_m)


def drawn_in(body: Body, depth_m: float) -> Hull | None:
    """The body with its skin, and then its edges, moved inwards; None where one turns round."""
    from_skin_m = min(depth_m, body.skin_m)
    moved = _mitred(body.outline_m.tobytes(), depth_m - from_skin_m)
    return None if moved is None else _hull(moved, body.skin_m - from_skin_m)


@functools.lru_cache(maxsize=256)
def _hull(outline: bytes, skin_m: float) -> Hull:
    outline_m = np.frombuffer(outline, np.float64).reshape(-1, 2)  # read-only, as kernels want
    return Hull(outline_m, skin_m, float(np.hypot(outline_m[:, 0], outline_m[:, 1]).max()))


@functools.lru_cache(maxsize=256)
def _mitred(outline: bytes, depth_m: float) -> bytes | None:
    if depth_m <= 0.0:
        return outline
    outline_m = np.frombuffer(outline, np.float64).reshape(-1, 2)
    if len(outline_m) < 3:
        return None
    edges = np.roll(outline_m, -1, axis=0) - outline_m
    units = edges / np.hypot(edges[:, 0], edges[:, 1])[:, None]
    inward = np.column_stack([-units[:, 1], units[:, 0]])  # the outline is counter-clockwise
    before = np.roll(inward, 1, axis=0)
    # the vertex where both edges beside it have moved: v + depth (n1 + n2) / (1 + n1 . n2)
    lean = 1.0 + (before * inward).sum(axis=1)
    if lean.min() < 1e-9:
        return None
    moved = outline_m + depth_m * (before + inward) / lean[:, None]
    kept = ((np.roll(moved, -1, axis=0) - moved) * units).sum(axis=1)
    return moved.tobytes() if kept.min() > 0.0 else None


def notes_for(solids: Solids, hull: Hull) -> Notes:
    """Return room for the work of the kernels."""
    columns = solids.cells_of.shape[1] * solids.tile_cells + 2  # one beside each border
    return Notes(
        np.empty((len(hull.outline_m), 4)),
        np.empty(len(solids.boxes_m), np.int64),
        np.empty(len(solids.discs_m), np.int64),
        np.empty((2, columns), np.uint8),
        np.full(columns, -1),
    )


def _read_only(values: Floats) -> Floats:
    view = values.view()
    view.flags.writeable = False
    return view
