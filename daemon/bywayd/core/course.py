"""
A route as the front reads it: where a vehicle on it is when, how fast, and where it can stop.

Only the few numbers that guards need; whether the route is free is for the surveyor to say. The
table is the one of the SPEC: between two rows the vehicle drives an arc of the first row's
curvature with constant acceleration, so the way from row to row is (v0 + v1) / 2 * (t1 - t0).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from byway.errors import BadGeometry, BadMessage, BadValue
from byway.packed import Bytes, Column, check_columns, check_coordinates, pack, read

Floats = npt.NDArray[np.float64]

_REALS: Final = ("t_s", "x_m", "y_m", "heading_rad", "curvature_per_m", "speed_mps")
_EXPECTED: Final = {
    **dict.fromkeys(_REALS, ("<f8", (None,))),
    "gear": ("i1", (None,)),
}

#: How far a row may lie from where the arc before it ends. Our own routes keep a micrometre; what
#: a client has put through other formats may have lost digits, but nothing may jump: what lies
#: between two rows that do not meet would never be looked at.
_JOINT_M_MAX: Final = 0.01

#: Speeds up to this are a stand.
STANDING_MPS: Final = 1e-3


@dataclass(frozen=True, slots=True)
class Place:
    """A place of a route, `way_m` along it from its start; `speed_mps` has the sign of its gear."""

    way_m: float
    t_s: float
    x_m: float
    y_m: float
    heading_rad: float
    curvature_per_m: float
    speed_mps: float


class Course:
    """
    The table of one route, read-only.

    Attributes:
        columns, packed: the seven columns as they travel.
        length_m: along the path.
    """

    __slots__ = ("_at_s", "_curvature", "_gear", "_poses", "_speed", "_way_m", "columns", "packed")

    def __init__(self, columns: Mapping[str, Column], packed: Bytes) -> None:
        """
        Take up a route.

        Raises:
            BadMessage: If the columns are not those of a route.
            BadValue, BadGeometry: If they are, and no vehicle could drive what they say.
        """
        check_columns(columns, packed, _EXPECTED)
        if len({column.shape for column in columns.values()}) != 1:
            raise BadMessage("the columns of a route have one length", {"field": "columns"})
        table = {name: read(column, packed) for name, column in columns.items()}
        if len(table["t_s"]) == 0:
            raise BadValue("a route has at least one row", {"field": "t_s"})
        for name in _REALS:
            check_coordinates(name, table[name])
        self.columns: Final = columns
        self.packed: Final = packed
        self._at_s: Final[Floats] = table["t_s"]
        self._poses: Final = np.stack([table["x_m"], table["y_m"], table["heading_rad"]], axis=1)
        self._curvature: Final[Floats] = table["curvature_per_m"]
        self._speed: Final[Floats] = np.abs(table["speed_mps"])
        self._gear: Final[npt.NDArray[np.int8]] = table["gear"]
        took_s = np.diff(self._at_s)
        if (took_s < 0.0).any() or (np.abs(self._gear) > 1).any():
            raise BadValue("times of a route rise, gears are -1, 0 or 1", {"field": "t_s"})
        steps_m = 0.5 * (self._speed[:-1] + self._speed[1:]) * took_s
        self._way_m: Final[Floats] = np.concatenate([[0.0], np.cumsum(steps_m)])
        self._check_joints(steps_m)

    def _check_joints(self, steps_m: Floats) -> None:
        ends_m = _driven(self._poses[:-1], self._curvature[:-1], self._gear[:-1] * steps_m)
        off_m = np.hypot(*(ends_m[:, :2] - self._poses[1:, :2]).T)
        if off_m.size and off_m.max() > _JOINT_M_MAX:
            row = int(off_m.argmax())
            text = f"row {row + 1} lies {off_m[row]:.3f} m from where row {row} leads"
            raise BadGeometry(text, {"row": row + 1, "off_m": float(off_m[row])})

    @property
    def length_m(self) -> float:
        """Along the path."""
        return float(self._way_m[-1])

    @property
    def size_bytes(self) -> int:
        """About how much memory it takes."""
        return 2 * len(self.packed)

    @property
    def goal(self) -> tuple[float, float, float]:
        """The pose at its end."""
        x, y, heading = self._poses[-1].tolist()
        return (x, y, heading)

    def place(self, way_m: float) -> Place:
        """Return the place so far along the route; its nearer end for what lies outside it."""
        last = len(self._way_m) - 1
        row = int(np.searchsorted(self._way_m, way_m, side="right")) - 1
        row = min(max(row, 0), max(0, last - 1))
        along_m = max(0.0, min(way_m, self.length_m) - float(self._way_m[row]))
        v0, v1 = float(self._speed[row]), float(self._speed[min(row + 1, last)])
        step_m = float(self._way_m[min(row + 1, last)] - self._way_m[row])
        share = along_m / step_m if step_m > 0.0 else 0.0
        speed = float(np.sqrt(max(0.0, v0 * v0 + (v1 * v1 - v0 * v0) * share)))
        took_s = 2.0 * along_m / (v0 + speed) if v0 + speed > 0.0 else 0.0
        # The last row has no gear: where it stands alone, nothing is driven.
        gear = int(self._gear[row])
        curvature = float(self._curvature[row])
        x, y, heading = _driven(
            self._poses[row : row + 1], np.array([curvature]), np.array([gear * along_m])
        )[0].tolist()
        return Place(
            float(self._way_m[row]) + along_m,
            float(self._at_s[row]) + took_s,
            x,
            y,
            heading,
            curvature,
            gear * speed,
        )

    def way_at(self, t_s: float) -> float:
        """Return how far along the route its own timing has a vehicle at this time."""
        last = len(self._at_s) - 1
        row = int(np.searchsorted(self._at_s, t_s, side="right")) - 1
        if row < 0:
            return 0.0
        if row >= last:
            return self.length_m
        after_s = t_s - float(self._at_s[row])
        took_s = float(self._at_s[row + 1] - self._at_s[row])
        v0, v1 = float(self._speed[row]), float(self._speed[row + 1])
        return float(self._way_m[row]) + after_s * (v0 + 0.5 * (v1 - v0) * after_s / took_s)

    def stand_after(self, way_m: float, speed_mps: float, deceleration_mps2: float) -> float:
        """
        Return where a vehicle comes to stand that brakes now: never beyond the next place where
        the route itself stops.
        """
        stops_m = self._way_m[(self._speed <= STANDING_MPS) & (self._way_m >= way_m)]
        next_m = float(stops_m[0]) if stops_m.size else self.length_m
        return min(way_m + speed_mps * speed_mps / (2.0 * deceleration_mps2), next_m)

    # -- putting two together ------------------------------------------------------------------

    def followed_by(
        self, then: Course, from_m: float, to_m: float, braking_mps2: float | None
    ) -> Course:
        """
        Return one course: this one from one place to another, and from there on the second.

        Args:
            then: begins where this one is at `to_m`.
            braking_mps2: None: the way there is driven as the table says. Otherwise the vehicle
                brakes, and stands there.
        """
        if to_m - from_m <= _JOINT_M_MAX:
            return then
        first = self.place(from_m)
        inside = (self._way_m > from_m) & (self._way_m < to_m)
        row = max(
            0, min(int(np.searchsorted(self._way_m, from_m, "right")), len(self._way_m) - 1) - 1
        )
        begin = [first.x_m, first.y_m, first.heading_rad]
        poses = np.concatenate([[begin], self._poses[inside], then._poses])
        curvature = np.concatenate([[first.curvature_per_m], self._curvature[inside]])
        gear = np.concatenate([self._gear[row : row + 1], self._gear[inside], then._gear])
        speed = np.concatenate([[abs(first.speed_mps)], self._speed[inside]])
        way_m = np.concatenate([[from_m], self._way_m[inside], [to_m]])
        if braking_mps2 is not None:
            speed = np.minimum(speed, np.sqrt(2.0 * braking_mps2 * (to_m - way_m[:-1])))
        speeds = np.concatenate([speed, then._speed])
        pace = np.maximum(speeds[: len(speed)] + speeds[1 : len(speed) + 1], STANDING_MPS)
        at_s = np.cumsum(np.concatenate([[0.0], 2.0 * np.diff(way_m) / pace]))
        columns, packed = pack(
            {
                "t_s": np.concatenate([at_s[:-1], at_s[-1] + then._at_s - then._at_s[0]]),
                "x_m": poses[:, 0],
                "y_m": poses[:, 1],
                "heading_rad": poses[:, 2],
                "curvature_per_m": np.concatenate([curvature, then._curvature]),
                "speed_mps": speeds * np.where(gear == 0, 1, gear),
                "gear": gear,
            }
        )
        return Course(columns, packed)


def _driven(poses: Floats, curvature_per_m: Floats, signed_m: Floats) -> Floats:
    """
    Return the poses after arcs from some poses.

    The chord of an arc of length s and turn a is s * sin(a / 2) / (a / 2), and points halfway
    between the two headings; exact for straight ones too.
    """
    half = 0.5 * curvature_per_m * signed_m
    chord_m = signed_m * np.sinc(half / np.pi)
    middle = poses[:, 2] + half
    return np.stack(
        [
            poses[:, 0] + chord_m * np.cos(middle),
            poses[:, 1] + chord_m * np.sin(middle),
            poses[:, 2] + 2.0 * half,
        ],
        axis=1,
    )
