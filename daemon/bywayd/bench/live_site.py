"""A site with stacks that changes, and what each kind of change costs until a snapshot has it."""

import math
from collections.abc import Callable
from typing import Any, Final

import numpy as np

from byway_planning import (
    DiscShape,
    LayerSettings,
    Memory,
    PolygonShape,
    SiteModel,
    SiteSettings,
    Snapshot,
)
from byway_planning.site.tracks import Track
from bywayd.bench.cases import CELL_M, Cells, Points, Rng
from bywayd.bench.figures import cpu_s

PATCH_CELLS: Final = 64
VERTICES: Final = 30
#: A range sensor of two revolutions' worth of half a degree.
BEAMS: Final = 720
RANGE_M_MAX: Final = 25.0
#: Stacks a hectare.
DENSITY: Final = 200
KINDS: Final = ("patch", "put", "move", "drop", "scan", "track")


def stacks_at_density(side_m: float) -> int:
    """Return how many stacks a square yard has."""
    return int(DENSITY * (side_m / 100.0) ** 2)


class LiveSite:
    """A square yard with stacks. Every change is published at once, as if it came alone."""

    def __init__(self, rng: Rng, side_m: float, stacks: int) -> None:
        self._rng, self._side_m = rng, side_m
        self.model = SiteModel(SiteSettings((0.0, 0.0, side_m, side_m), CELL_M), Memory.private())
        for layer in ("stacks", "lidar", "tracks"):
            self.model.declare(layer, LayerSettings())
        for i in range(stacks):
            self.model.put("stacks", f"s{i}", PolygonShape(self._blob(4, 2.0)))
        self.snapshot: Snapshot = self.model.publish()
        self._now_s = 0.0

    def occupied(self) -> Cells:
        """Cells of the whole site, those below the middles of stacks occupied."""
        count = round(self._side_m / CELL_M)
        cells = np.zeros((count, count), np.uint8)
        for _, _, shape in self.snapshot.obstacles():
            if isinstance(shape, PolygonShape):
                x0, y0, x1, y1 = (np.array(shape.box_m) / CELL_M).astype(int)
                cells[y0 : y1 + 1, x0 : x1 + 1] = 1
        return cells

    def measure(self, count: int) -> dict[str, list[float]]:
        """Make changes of each kind, and return their seconds of CPU."""
        times: dict[str, list[float]] = {kind: [] for kind in KINDS}
        self.visible(self.patch)  # the first change pays for what is set up once
        for _ in range(count):
            times["patch"].append(self.visible(self.patch))
            times["put"].append(self.visible(self.put))
            times["move"].append(self.visible(self.put))
            times["drop"].append(self.visible(lambda: self.model.drop("stacks", "moved")))
            times["scan"].append(self.visible(self.scan))
            times["track"].append(self.visible(self.track))
        return times

    def visible(self, change: Callable[[], Any]) -> float:
        """Make a change, publish it, and return the seconds of CPU that this took."""

        def all_of_it() -> None:
            change()
            self.snapshot = self.model.publish()
            self.model.release_before(self.snapshot.revision)

        return cpu_s(all_of_it)

    # -- kinds of changes -------------------------------------------------------------------

    def put(self) -> None:
        """A polygon with many vertices, somewhere: the one of its name is there no more."""
        self.model.put("stacks", "moved", PolygonShape(self._blob(VERTICES, 2.5)))

    def patch(self) -> None:
        """What a sensor sees of a square: some thin things, otherwise free."""
        cells = np.zeros((PATCH_CELLS, PATCH_CELLS), np.uint8)
        for _ in range(6):
            r, c = self._rng.integers(0, PATCH_CELLS - 8, 2)
            cells[r : r + self._rng.integers(1, 8), c : c + self._rng.integers(1, 8)] = 1
        most = int(self._side_m / CELL_M) - PATCH_CELLS
        column, row = self._rng.integers(0, most, 2)
        self.model.patch("lidar", (column * CELL_M, row * CELL_M), CELL_M, cells)

    def scan(self) -> None:
        """A whole turn of a range sensor between walls 4 to 20 m away, one beam in ten open."""
        self._now_s += 0.1
        x, y, heading_rad = self._rng.uniform((25.0, 25.0, -3.0), (*[self._side_m - 25.0] * 2, 3.0))
        bearings = np.linspace(-math.pi, math.pi, BEAMS, endpoint=False)
        walls = 12.0 + 8.0 * np.sin(bearings * self._rng.integers(1, 4))
        ranges = walls + self._rng.normal(0.0, 0.02, BEAMS)
        ranges[self._rng.uniform(size=BEAMS) < 0.1] = np.inf
        origin = (float(x), float(y), float(heading_rad))
        self.model.scan("lidar", origin, bearings, ranges, RANGE_M_MAX, at_s=self._now_s)

    def track(self) -> None:
        """Somebody walks on."""
        self._now_s += 0.1
        x, y = self._rng.uniform(4.0, self._side_m - 4.0, 2)
        moving = Track(
            DiscShape(0.0, 0.0, 0.3),
            (float(x), float(y), 0.0),
            velocity_mps=(1.2, 0.4),
            turn_rate_radps=0.1,
            uncertainty_m=0.1,
            growth_mps=0.2,
            at_s=self._now_s,
        )
        self.model.track("tracks", "walker", moving)
        self.model.carry(self._now_s)

    def _blob(self, vertices: int, radius_m: float) -> Points:
        """A polygon that is nearly round, somewhere."""
        middle = self._rng.uniform(4.0, self._side_m - 4.0, 2)
        angles = 2.0 * math.pi * (np.arange(vertices) + self._rng.uniform(0.0, 0.5)) / vertices
        radii_m = radius_m * self._rng.uniform(0.7, 1.0, vertices)
        corners: Points = middle + radii_m[:, None] * np.column_stack(
            [np.cos(angles), np.sin(angles)]
        )
        return corners
