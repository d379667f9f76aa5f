"""
What a case of the benchmark is, and what families draw it with.

Everything is drawn with numbers from one seed and plain arithmetic, without any code that is
measured: a change in the planner must not change the questions.
"""

import hashlib
import math
import zlib
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning import (
    Disc,
    DiscShape,
    LayerSettings,
    Memory,
    PolygonShape,
    SiteModel,
    SiteSettings,
    Snapshot,
    Vehicle,
)
from bywayd.bench.vehicles import VEHICLES

Points = npt.NDArray[np.float64]
Cells = npt.NDArray[np.uint8]
Pose = tuple[float, float, float]
Rng = np.random.Generator

CELL_M: Final = 0.1
SHAPES: Final = "shapes"
CELLS: Final = "cells"


@dataclass(frozen=True)
class Size:
    """What families need to know of a vehicle to make its ground neither roomy nor hopeless."""

    front_m: float  # from its origin
    rear_m: float
    width_m: float
    radius_m: float  # least turning radius; 0 for a disc
    reverses: bool

    @property
    def length_m(self) -> float:
        """From end to end."""
        return self.front_m + self.rear_m

    @property
    def middle_m(self) -> float:
        """How far ahead of its origin the middle of the vehicle is."""
        return 0.5 * (self.front_m - self.rear_m)

    @property
    def around_m(self) -> float:
        """Radius of a disc around its middle that holds all of it."""
        return 0.5 * math.hypot(self.length_m, self.width_m)

    @property
    def turn_width_m(self) -> float:
        """How wide two aisles should be for turning from one into the other in one go."""
        half_m = 0.5 * self.width_m
        outer_m = math.hypot(self.radius_m + half_m, self.front_m)
        swept_m = outer_m - max(0.0, self.radius_m - half_m) * math.sqrt(0.5)
        return max(swept_m + 0.6, self.width_m + 1.0)


def size_of(vehicle: Vehicle) -> Size:
    """Return the size of a vehicle."""
    if isinstance(vehicle, Disc):
        r = vehicle.radius_m
        return Size(r, r, 2.0 * r, 0.0, False)
    xs, ys = np.array(vehicle.footprint_m).T
    width_m = 2.0 * float(np.abs(ys).max())
    return Size(
        float(xs.max()), float(-xs.min()), width_m, vehicle.turn_radius_m, vehicle.model == "car"
    )


@dataclass(frozen=True, eq=False)
class Ground:
    """The obstacles of a case; several cases may share one."""

    limits_m: tuple[float, float, float, float]
    polygons: dict[str, Points] = field(default_factory=dict)
    discs: dict[str, tuple[float, float, float]] = field(default_factory=dict)
    #: Lower left corner at that of the limits, cells of CELL_M.
    cells: Cells | None = None

    def to_bytes(self) -> bytes:
        """Return all of it as bytes: equal grounds have equal bytes."""
        parts = [np.array(self.limits_m).tobytes()]
        parts += [name.encode() + ring.tobytes() for name, ring in self.polygons.items()]
        parts += [name.encode() + np.array(disc).tobytes() for name, disc in self.discs.items()]
        parts += [] if self.cells is None else [self.cells.tobytes()]
        return b"|".join(parts)

    def build(self) -> tuple[Memory, Snapshot]:
        """Make the site. A fresh revision of it is `Snapshot.attach(memory, snapshot.handle)`."""
        memory = Memory.private()
        model = SiteModel(SiteSettings(self.limits_m, CELL_M), memory)
        model.declare(SHAPES, LayerSettings())
        for name, ring in self.polygons.items():
            model.put(SHAPES, name, PolygonShape(ring))
        for name, disc in self.discs.items():
            model.put(SHAPES, name, DiscShape(*disc))
        if self.cells is not None:
            model.declare(CELLS, LayerSettings())
            model.patch(CELLS, self.limits_m[:2], CELL_M, self.cells)
        return memory, model.publish()


@dataclass(frozen=True, eq=False)
class Case:
    """One question to the planner."""

    family: str
    salt: int
    number: int
    vehicle_name: str
    start: Pose
    goal: Pose
    ground: Ground
    sealed: bool = False  # the goal cannot be reached

    @property
    def vehicle(self) -> Vehicle:
        """The vehicle itself."""
        return VEHICLES[self.vehicle_name]

    @property
    def name(self) -> str:
        """With this a case can be drawn again: family, number, salt."""
        return f"{self.family} {self.number} salt {self.salt} ({self.vehicle_name})"

    def to_bytes(self) -> bytes:
        """Return all of it as bytes: equal cases have equal bytes."""
        ends = np.array([self.start, self.goal]).tobytes()
        return b"|".join([self.name.encode(), ends, bytes([self.sealed]), self.ground.to_bytes()])

    def digest(self) -> str:
        """Return a short digest of all of it."""
        return hashlib.sha256(self.to_bytes()).hexdigest()[:16]


@dataclass(frozen=True)
class Lot:
    """Which case of a family is drawn."""

    family: str
    salt: int
    number: int

    def rng(self, *, shared_by: int = 1) -> Rng:
        """
        Return a source of random numbers.

        Args:
            shared_by: So many cases, one after the other, get the same one.
        """
        of_family = zlib.crc32(self.family.encode())
        return np.random.default_rng([self.salt, of_family, self.number // shared_by, shared_by])

    def vehicle(self, names: Sequence[str]) -> tuple[str, Size]:
        """Return the vehicle of this case and its size; the vehicles take turns."""
        name = names[self.number % len(names)]
        return name, size_of(VEHICLES[name])

    def case(self, vehicle: str, start: Pose, goal: Pose, ground: Ground) -> Case:
        """Return the case."""
        return Case(self.family, self.salt, self.number, vehicle, start, goal, ground)


Family = Callable[[Lot], Case]


class Yard:
    """Obstacles while they are drawn, and the places that must stay free."""

    def __init__(self, width_m: float, height_m: float) -> None:
        self.width_m, self.height_m = width_m, height_m
        self.polygons: dict[str, Points] = {}
        self.discs: dict[str, tuple[float, float, float]] = {}
        self._free: list[tuple[float, float, float]] = []

    def keep_free(
        self, pose: Pose, size: Size, *, lead_m: float = 0.0, room_m: float = 0.4
    ) -> None:
        """Keep loose obstacles away from a pose, and from its way `lead_m` ahead and behind."""
        steps = max(1, math.ceil(2.0 * lead_m / size.around_m))
        for i in range(steps + 1):
            at_m = size.middle_m + lead_m * (2.0 * i / steps - 1.0)
            x = pose[0] + at_m * math.cos(pose[2])
            y = pose[1] + at_m * math.sin(pose[2])
            self._free.append((x, y, size.around_m + room_m))

    def is_kept_free(self, x: float, y: float, radius_m: float) -> bool:
        """Would a disc here reach into a place that must stay free?"""
        return any(math.hypot(x - a, y - b) < radius_m + r for a, b, r in self._free)

    def block(
        self,
        x: float,
        y: float,
        length_m: float,
        width_m: float,
        heading_rad: float = 0.0,
        *,
        loose: bool = False,
    ) -> bool:
        """Put a box with its middle at (x, y); a loose one only where nothing must stay free."""
        if loose and self.is_kept_free(x, y, 0.5 * math.hypot(length_m, width_m)):
            return False
        c, s = math.cos(heading_rad), math.sin(heading_rad)
        half = 0.5 * np.array([(-1, -1), (1, -1), (1, 1), (-1, 1)]) * (length_m, width_m)
        self.polygons[f"b{len(self.polygons)}"] = half @ np.array([[c, s], [-s, c]]) + (x, y)
        return True

    def span(self, x0: float, y0: float, x1: float, y1: float) -> None:
        """Put an upright box by its corners; nothing if it has no area."""
        if x1 - x0 > 1e-6 and y1 - y0 > 1e-6:
            self.block(0.5 * (x0 + x1), 0.5 * (y0 + y1), x1 - x0, y1 - y0)

    def post(self, x: float, y: float, radius_m: float, *, loose: bool = False) -> bool:
        """Put a disc; a loose one only where nothing must stay free."""
        if loose and self.is_kept_free(x, y, radius_m):
            return False
        self.discs[f"d{len(self.discs)}"] = (x, y, radius_m)
        return True

    def ground(self) -> Ground:
        """Return what was put."""
        return Ground((0.0, 0.0, self.width_m, self.height_m), self.polygons, self.discs)


def row_of_packs(
    rng: Rng, yard: Yard, x0: float, x1: float, y0: float, y1: float, *, holes: float = 0.0
) -> None:
    """Fill a strip with packs of timber and pallets of bricks, end to end with small gaps."""
    x = x0
    while x < x1 - 0.5:
        length_m = min(float(rng.choice([1.2, 2.4, 4.2, 6.0])), x1 - x)
        if rng.uniform() >= holes:
            shy_m = float(rng.uniform(0.0, 0.15))
            yard.span(x, y0 + shy_m, x + length_m, y1 - float(rng.uniform(0.0, 0.15)))
        x += length_m + float(rng.uniform(0.05, 0.25))


def pose_from_middle(x: float, y: float, heading_rad: float, size: Size) -> Pose:
    """Return the pose whose vehicle has its middle at (x, y)."""
    return (
        x - size.middle_m * math.cos(heading_rad),
        y - size.middle_m * math.sin(heading_rad),
        heading_rad,
    )
