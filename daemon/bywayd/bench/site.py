"""
What a change of the site costs until a snapshot has it, in CPU of this process.

The measure is `scipy.ndimage.distance_transform_edt` of a whole grid of 1000 x 1000 cells in the
same run: what an update would cost if all distances were computed anew.
"""

import math
import resource
from dataclasses import dataclass
from statistics import median
from typing import Final

import numpy as np
from scipy import ndimage

from byway_planning import plan
from bywayd.bench.cases import CELL_M, Rng
from bywayd.bench.figures import (
    MS,
    CpuBudget,
    Figures,
    Findings,
    Progress,
    cpu_s,
    quantile,
    ratio,
    spread,
)
from bywayd.bench.growth import GROWTH_FULL, GROWTH_SMALL, GrowthSizes, measure_growth
from bywayd.bench.live import LIVE_FULL, LIVE_SMALL, LiveSizes, measure_live
from bywayd.bench.live_site import LiveSite, stacks_at_density
from bywayd.bench.vehicles import VEHICLES

GRID_CELLS: Final = 1000
#: Of a site ten times as large.
TENFOLD: Final = math.sqrt(10.0)
HUGE_M: Final = 1000.0
HUGE_STACKS: Final = 5000


@dataclass(frozen=True)
class SiteSizes:
    """How often each change is made; whether the larger sites are made as well."""

    changes: int = 60
    transforms: int = 5
    tenfold: bool = True
    huge: bool = False
    growth: GrowthSizes = GROWTH_FULL
    live: LiveSizes = LIVE_FULL


SITE_SMALL: Final = SiteSizes(
    changes=5, transforms=2, tenfold=False, growth=GROWTH_SMALL, live=LIVE_SMALL
)


def measure_site(salt: int, sizes: SiteSizes, findings: Findings, progress: Progress) -> Figures:
    """
    Return milliseconds from a change to the snapshot that has it, and ratios to the transform;
    how these grow; and what a daemon makes of changes and guarded routes.

    A patch is 64 x 64 cells that fit the site's, some of them changed; a polygon with 30
    vertices is put, moved, dropped; a scan has 720 beams of 4 to 25 m; a track walks on.
    """
    rng = np.random.default_rng([salt, 88])
    side_m = GRID_CELLS * CELL_M
    yard = LiveSite(rng, side_m, stacks_at_density(side_m))
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
        large_m = side_m * TENFOLD
        large = LiveSite(rng, large_m, stacks_at_density(large_m))
        for kind, times_s in large.measure(sizes.changes).items():
            told[f"{kind}_tenfold"] = ratio(quantile(times_s, 0.5), quantile(found[kind], 0.5))
    if sizes.huge:
        told["square_kilometre"] = _square_kilometre(rng, findings)
    told["growth"] = measure_growth(salt, sizes.growth, findings)
    progress("site: growth measured")
    return told | measure_live(salt, sizes.live, progress)


def _square_kilometre(rng: Rng, findings: Findings) -> Figures:
    """Load a square kilometre with 5,000 stacks, and ask for routes across it."""
    before_kb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    made: list[LiveSite] = []
    load_s = cpu_s(lambda: made.append(LiveSite(rng, HUGE_M, HUGE_STACKS)))
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
