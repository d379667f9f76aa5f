"""
Routes that vehicles are driving, looked at again on every new snapshot.

What is asked is what `verify` asks of the motion: does the body keep its clearance at every point
between rows. It is asked of what lies ahead of the vehicle only, and again only where something
has changed; the answer is the same as if all had been looked at.
"""

import math
from collections.abc import Hashable
from dataclasses import dataclass
from typing import Any, Final, Literal

import numpy as np
import numpy.typing as npt

from byway_planning.site.snapshot import Snapshot
from byway_planning.site.solids import Solids
from byway_planning.site.tracks import PIECE, base_id
from byway_planning.vehicles.models import Vehicle
from byway_planning.verify.body import Notes
from byway_planning.verify.check import (
    KINDS,
    NEED_M_MIN,
    TOLERANCE_M,
    clearance_m,
    drawn_in,
    notes_for,
    rows_of,
    whole,
)
from byway_planning.verify.drive import BULGE_M
from byway_planning.verify.watch import ANSWER, watch_kernel

Floats = npt.NDArray[np.float64]
Kind = Literal["polygon", "disc", "cell", "limits", "track"]

#: A part of a route is about so long: what a small change makes be looked at again.
PART_M: Final = 8.0
#: Behind the place of contact the depth is looked for at these distances.
DEPTHS_M: Final = (0.2, 0.7, 2.0)
#: How closely the depth is told; who brakes for it does not mind a centimetre.
DEPTH_M: Final = 0.01
#: A clearance that is missed by less than this is rounding: `verify` let it pass.
GRACE_M: Final = 1e-6
_NOTHING: Final = np.empty((0, 4))


@dataclass(frozen=True)
class Blocked:
    """Where a route is blocked first, and by what."""

    at_m: float  # along the route, from its start
    t_s: float  # by its own timing
    x_m: float  # pose of the vehicle there, in the site's outer coordinates
    y_m: float
    heading_rad: float
    kind: Kind
    layer: str  # "" where it cannot be said
    obstacle: str
    depth_m: float  # how deep the body with its clearance would be in it


class WatchedRoute:
    """
    One route and what is known of it.

    Args:
        vehicle: What drives it.
        table: Its table (ROUTE_TABLE), in the site's outer coordinates.
        clearance_m: What it has to keep; the vehicle's own by default.
        left_out: Layers of outlines that do not count.

    Raises:
        ValueError: A table that no vehicle could drive: not finite, time that stands still, rows
            that do not follow from each other.
    """

    def __init__(
        self,
        vehicle: Vehicle,
        table: npt.NDArray[Any],
        *,
        clearance_m: float | None = None,
        left_out: frozenset[str] = frozenset(),
    ) -> None:
        rows = rows_of(table)
        if rows is None or len(rows) < 2:
            raise ValueError("a route to watch needs at least two rows of finite numbers")
        steps_s = np.diff(rows[:, 0])
        if not (steps_s > 0.0).all():
            row = int(np.argmax(steps_s <= 0.0))
            raise ValueError(f"time must grow from row to row, it does not after row {row}")
        self._vehicle = vehicle
        self._left_out = left_out
        self._rows = np.ascontiguousarray(rows)
        self._arcs = 0.5 * (rows[:-1, 5] + rows[1:, 5]) * steps_s
        self._along = np.concatenate([[0.0], np.cumsum(np.abs(self._arcs))])
        body = vehicle.body()
        kept_m = body.clearance_m if clearance_m is None else clearance_m
        self._need_m = max(kept_m - GRACE_M, NEED_M_MIN)
        self._hull = drawn_in(body, TOLERANCE_M) or whole(body)
        self._lenient = drawn_in(body, vehicle.start_overlap_m + TOLERANCE_M) or self._hull
        self._origin: tuple[float, float] = (0.0, 0.0)
        self._out_m = -1.0
        self._parts = np.empty(0, np.int64)
        self._boxes = np.empty((0, 4))
        self._due = np.empty(0, np.uint8)
        self._answers = np.empty((0, ANSWER))
        self._is_begun = False
        self._told: tuple[bytes, Blocked] | None = None

    @property
    def length_m(self) -> float:
        """Of the whole route."""
        return float(self._along[-1])

    def poses(self) -> Floats:
        """Return x_m, y_m, heading_rad of its rows, (n, 3), in the site's outer coordinates."""
        return self._rows[:, 1:4] + (*self._origin, 0.0)

    def check(
        self, snapshot: Snapshot, progress_m: float, changed_m: Floats | None = None
    ) -> Blocked | None:
        """
        Return the first place ahead that is blocked on a snapshot; None if there is none.

        Args:
            progress_m: How far along the route the vehicle is.
            changed_m: Boxes (n, 4) around all that differs from the snapshot of the last call,
                site-local metres; None if that is not known.
        """
        solids = snapshot.solids(self._left_out)
        notes = self._notes(snapshot, solids)
        if not self._is_begun:
            self._begin(snapshot, solids)
        if changed_m is None:
            self._due[:] = 1
        settings = np.array([progress_m, self._need_m, self._out_m, NEED_M_MIN])
        part = watch_kernel(
            solids,
            notes,
            self._hull,
            self._lenient,
            self._rows,
            self._arcs,
            self._along,
            self._parts,
            self._boxes,
            self._due,
            _NOTHING if changed_m is None else np.ascontiguousarray(changed_m),
            settings,
            self._answers,
        )
        if part < 0:
            self._told = None
            return None
        # The same answer of the same part is told in the same words.
        answer = self._answers[part].tobytes()
        if self._told is None or self._told[0] != answer:
            self._told = answer, self._block(snapshot, solids, self._answers[part])
        return self._told[1]

    def _notes(self, snapshot: Snapshot, solids: Solids) -> Notes:
        """Room for the kernels, shared by all routes that are watched on a snapshot."""
        key: Hashable = ("watching", len(self._hull.outline_m), self._left_out)
        notes = snapshot.kept.get(key)
        if not isinstance(notes, Notes):
            corners = max(self._hull, self._lenient, key=lambda hull: len(hull.outline_m))
            notes = snapshot.kept[key] = notes_for(solids, corners)
        return notes

    def _begin(self, snapshot: Snapshot, solids: Solids) -> None:
        """Cut the route into parts; the way out of a start that is too near is one of its own."""
        self._is_begun = True
        self._origin = snapshot.origin_m
        self._rows[:, 1] -= self._origin[0]
        self._rows[:, 2] -= self._origin[1]
        out = 0
        while out < len(self._rows) - 1 and self._is_near(solids, out):
            out += 1
        self._out_m = float(self._along[out]) if out else -1.0
        wanted = np.arange(self._along[out], self._along[-1], PART_M)
        firsts = np.searchsorted(self._along, wanted, side="left")
        cuts = {0, out, len(self._rows) - 1, *firsts.tolist()}
        self._parts = np.array(sorted(cuts), np.int64)
        count = len(self._parts) - 1
        margin = self._hull.reach_m + self._hull.skin_m + self._need_m + BULGE_M
        self._boxes = np.empty((count, 4))
        for p in range(count):
            places = self._rows[self._parts[p] : self._parts[p + 1] + 1, 1:3]
            self._boxes[p, :2] = places.min(axis=0) - margin
            self._boxes[p, 2:] = places.max(axis=0) + margin
        self._boxes.flags.writeable = False
        self._due = np.ones(count, np.uint8)
        self._answers = np.zeros((count, ANSWER))

    def _is_near(self, solids: Solids, row: int) -> bool:
        pose = self._rows[row, 1:4].tolist()
        return clearance_m(solids, self._vehicle, pose).distance_m < self._need_m

    def _block(self, snapshot: Snapshot, solids: Solids, answer: Floats) -> Blocked:
        at_m, x_m, y_m, heading_rad = answer[2:6].tolist()
        found = KINDS[int(answer[7])]
        index = int(answer[8])
        layer, name = "", ""
        kind: Kind = "limits"
        if found == "cell":
            kind, layer = "cell", snapshot.layer_of_cell(index)
        elif found in ("polygon", "disc"):
            layer, name = snapshot.name_of(found, index)
            kind = "track" if PIECE in name else found
        return Blocked(
            at_m=at_m,
            t_s=self._time_at(at_m),
            x_m=x_m + self._origin[0],
            y_m=y_m + self._origin[1],
            heading_rad=math.remainder(heading_rad, 2.0 * math.pi),
            kind=kind,
            layer=layer,
            obstacle=base_id(name),
            depth_m=self._depth_m(solids, at_m),
        )

    def _time_at(self, at_m: float) -> float:
        """By its timing, when the vehicle is at a place: constant acceleration between rows."""
        i = int(np.searchsorted(self._along, at_m, side="right")) - 1
        i = min(max(i, 0), len(self._arcs) - 1)
        into = min(max(at_m - float(self._along[i]), 0.0), abs(float(self._arcs[i])))
        v0, v1 = abs(float(self._rows[i, 5])), abs(float(self._rows[i + 1, 5]))
        step_s = float(self._rows[i + 1, 0] - self._rows[i, 0])
        a = (v1 - v0) / step_s
        root = math.sqrt(max(v0 * v0 + 2.0 * a * into, 0.0))
        # 2 s / (v0 + v1): the same for any acceleration, and no difference of like numbers.
        passed_s = 2.0 * into / (v0 + root) if v0 + root > 0.0 else 0.0
        return float(self._rows[i, 0]) + min(passed_s, step_s)

    def _depth_m(self, solids: Solids, at_m: float) -> float:
        """How deep the body gets in the next metres, by what its clearance is there."""
        deepest = 0.0
        for behind_m in DEPTHS_M:
            place = min(at_m + behind_m, self.length_m)
            nearest = clearance_m(solids, self._vehicle, self._pose_at(place), within_m=DEPTH_M)
            deepest = max(deepest, self._need_m + GRACE_M - nearest.distance_m)
        return deepest

    def _pose_at(self, at_m: float) -> tuple[float, float, float]:
        i = int(np.searchsorted(self._along, at_m, side="right")) - 1
        i = min(max(i, 0), len(self._arcs) - 1)
        _, x, y, heading, k, *_ = self._rows[i].tolist()
        length = math.copysign(at_m - float(self._along[i]), self._arcs[i])
        half = 0.5 * k * length
        chord = length * (math.sin(half) / half if half else 1.0)
        return (
            x + chord * math.cos(heading + half),
            y + chord * math.sin(heading + half),
            heading + 2.0 * half,
        )
