"""
What a change of the site costs until a snapshot has it, in CPU of this process.

The measure is `scipy.ndimage.distance_transform_edt` of a whole grid of 1000 x 1000 cells in the
same run: what an update would cost if all distances were computed anew.
"""

import math
import resource
from collections.abc import Callable
from dataclasses import dataclass
from statistics import median
from typing import Any, Final

import numpy as np
from scipy import ndimage

from byway_planning import (
    LayerSettings,
    Memory,
    PolygonShape,
    SiteModel,
    SiteSettings,
    Snapshot,
    plan,
)
from bywayd.bench.cases import CELL_M, Cells, Points, Rng
from bywayd.bench.figures import MS, CpuBudget, Figures, Findings, cpu_s, quantile, ratio, spread
from bywayd.bench.vehicles import VEHICLES

GRID_CELLS: Final = 1000
PATCH_CELLS: Final = 64
VERTICES: Final = 30
#: Of a site ten times as large.
TENFOLD: Final = math.sqrt(10.0)
#: Stacks a hectare.
DENSITY: Final = 200
HUGE_M: Final = 1000.0
HUGE_STACKS: Final = 5000


@dataclass(frozen=True)
class SiteSizes:
    """How often each change is made; whether the larger sites are made as well."""

    changes: int = 60
    transforms: int = 5
    tenfold: bool = True
    huge: bool = False


SITE_SMALL: Final = SiteSizes(changes=5, transforms=2, tenfold=False)


def measure_site(salt: int, sizes: SiteSizes, findings: Findings) -> Figures:
    """
    Return milliseconds from a change to the snapshot that has it, and ratios to the transform.

    A patch is 64 x 64 cells that fit the site's, a third of them changed; a polygon with 30
    vertices is put, moved, dropped.
    """
    rng = np.random.default_rng([salt, 88])
    side_m = GRID_CELLS * CELL_M
    yard = _Live(rng, side_m, _stacks(side_m))
    cells = yard.occupied()
    transforms = [
        cpu_s(lambda: ndimage.distance_transform_edt(cells == 0)) for _ in range(sizes.transforms)
    ]
    transform_s = median(transforms)
    found = yard.measure(sizes.changes)
    told: Figures = {"transform_ms": transform_s * MS, "site_m": side_m}
    for kind, times_s in found.items():
        told[f"{kind}_ms"] = spread(times_s, MS)
        told[f"{kind}_to_transform"] = ratio(quantile(times_s, 0.5), transform_s)
    if sizes.tenfold:
        large = _Live(rng, side_m * TENFOLD, _stacks(side_m * TENFOLD))
        for kind, times_s in large.measure(sizes.changes).items():
            told[f"{kind}_tenfold"] = ratio(quantile(times_s, 0.5), quantile(found[kind], 0.5))
    if sizes.huge:
        told["square_kilometre"] = _square_kilometre(rng, findings)
    return told


def _stacks(side_m: float) -> int:
    return int(DENSITY * (side_m / 100.0) ** 2)


class _Live:
    """A site with stacks that changes."""

    def __init__(self, rng: Rng, side_m: float, stacks: int) -> None:
        self._rng, self._side_m = rng, side_m
        self._model = SiteModel(SiteSettings((0.0, 0.0, side_m, side_m), CELL_M), Memory.private())
        self._model.declare("stacks", LayerSettings())
        self._model.declare("lidar", LayerSettings())
        for i in range(stacks):
            self._model.put("stacks", f"s{i}", PolygonShape(self._blob(4, 2.0)))
        self.snapshot: Snapshot = self._model.publish()

    def _blob(self, vertices: int, radius_m: float) -> Points:
        """A polygon that is nearly round, somewhere."""
        middle = self._rng.uniform(4.0, self._side_m - 4.0, 2)
        angles = 2.0 * math.pi * (np.arange(vertices) + self._rng.uniform(0.0, 0.5)) / vertices
        radii_m = radius_m * self._rng.uniform(0.7, 1.0, vertices)
        corners: Points = middle + radii_m[:, None] * np.column_stack(
            [np.cos(angles), np.sin(angles)]
        )
        return corners

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
        """Make changes of each kind, and return their seconds."""
        times: dict[str, list[float]] = {"patch": [], "put": [], "move": [], "drop": []}
        self._visible(lambda: self._patch())  # the first change pays for what is set up once
        for _ in range(count):
            times["patch"].append(self._visible(self._patch))
            times["put"].append(self._visible(self._put))
            times["move"].append(self._visible(self._put))
            times["drop"].append(self._visible(lambda: self._model.drop("stacks", "moved")))
        return times

    def _visible(self, change: Callable[[], Any]) -> float:
        def all_of_it() -> None:
            change()
            self.snapshot = self._model.publish()
            self._model.release_before(self.snapshot.revision)

        return cpu_s(all_of_it)

    def _put(self) -> None:
        self._model.put("stacks", "moved", PolygonShape(self._blob(VERTICES, 2.5)))

    def _patch(self) -> None:
        """What a sensor sees of a square: some thin things, otherwise free."""
        cells = np.zeros((PATCH_CELLS, PATCH_CELLS), np.uint8)
        for _ in range(6):
            r, c = self._rng.integers(0, PATCH_CELLS - 8, 2)
            cells[r : r + self._rng.integers(1, 8), c : c + self._rng.integers(1, 8)] = 1
        most = int(self._side_m / CELL_M) - PATCH_CELLS
        column, row = self._rng.integers(0, most, 2)
        self._model.patch("lidar", (column * CELL_M, row * CELL_M), CELL_M, cells)


def _square_kilometre(rng: Rng, findings: Findings) -> Figures:
    """Load a square kilometre with 5,000 stacks, and ask for routes across it."""
    before_kb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    made: list[_Live] = []
    load_s = cpu_s(lambda: made.append(_Live(rng, HUGE_M, HUGE_STACKS)))
    grown_kb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before_kb
    vehicle = VEHICLES["shunter"]
    firsts_s: list[float] = []
    while len(firsts_s) < 20:
        start, goal = (
            tuple(rng.uniform((20, 20, -math.pi), (HUGE_M - 20, HUGE_M - 20, math.pi)))
            for _ in range(2)
        )
        budget = CpuBudget(0.5)
        outcome = plan(
            made[0].snapshot,
            vehicle,
            [float(v) for v in start],
            [float(v) for v in goal],
            time_left=budget,
            seed=1,
            on_better=budget.end,
        )
        if outcome.kind.endswith("_blocked"):
            continue
        if outcome.first_s is None:
            findings.anomalies.append(f"square kilometre: {outcome.kind} from {start} to {goal}")
        firsts_s.append(math.inf if outcome.first_s is None else outcome.first_s)
    return {
        "stacks": HUGE_STACKS,
        "load_s": load_s,
        "memory_mb": grown_kb / 1024.0,
        "first_ms": spread(firsts_s, MS),
    }
