"""
How costs grow: with the number of obstacles, the size of the site, the number of guarded routes.

An update should cost what it touches. So the first two curves should be flat; the third, with
everything looked at at each revision, should grow slowly.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning import PolygonShape, Route, plan
from byway_planning.watching import WatchedRoute
from bywayd.bench.cases import Pose, Rng
from bywayd.bench.figures import MS, CpuBudget, Figures, Findings, cpu_s, spread
from bywayd.bench.live_site import LiveSite, stacks_at_density
from bywayd.bench.vehicles import VEHICLES

#: What curves show: changes that differ in what they touch.
KINDS: Final = ("patch", "move", "scan")
VEHICLE: Final = "shunter"
#: Of the yard in which routes are guarded.
GUARD_SIDE_M: Final = 200.0
ROUTE_M: Final = 100.0
TRIES_MAX: Final = 3000


@dataclass(frozen=True)
class GrowthSizes:
    """Where each curve has its points, and how many changes make one."""

    obstacles: tuple[int, ...] = (100, 400, 1600, 6400)
    sides_m: tuple[float, ...] = (60.0, 120.0, 240.0, 480.0)
    guards: tuple[int, ...] = (10, 50, 100, 200)
    changes: int = 30
    #: Different routes; more guards than that drive some of them twice.
    routes: int = 50


GROWTH_FULL: Final = GrowthSizes()
GROWTH_SMALL: Final = GrowthSizes((50, 100), (60.0, 80.0), (2, 4), changes=3, routes=2)


def measure_growth(salt: int, sizes: GrowthSizes, findings: Findings) -> Figures:
    """
    Return three tables, each a list of rows: `obstacles`, `sides` and `guards`.

    The first has a site of 480 m with more and more stacks on it; the second a site with as many
    stacks a hectare, larger and larger; the third what the surveyor does for guarded routes of
    about 100 m after a small change on one of them, and after one that touches everything.
    """
    rng = np.random.default_rng([salt, 77])
    most_m = sizes.sides_m[-1]
    return {
        "obstacles": [_changes(rng, n, most_m, sizes) for n in sizes.obstacles],
        "sides": [
            _changes(rng, stacks_at_density(side_m), side_m, sizes) for side_m in sizes.sides_m
        ],
        "guards": _guards(rng, sizes, findings),
    }


def _changes(rng: Rng, stacks: int, side_m: float, sizes: GrowthSizes) -> Figures:
    found = LiveSite(rng, side_m, stacks).measure(sizes.changes)
    return {
        "stacks": stacks,
        "side_m": side_m,
        **{f"{kind}_ms": spread(found[kind], MS) for kind in KINDS},
    }


def _guards(rng: Rng, sizes: GrowthSizes, findings: Findings) -> list[Figures]:
    yard = LiveSite(rng, GUARD_SIDE_M, stacks_at_density(GUARD_SIDE_M) // 8)
    routes = _routes(yard, rng, sizes.routes)
    if len(routes) < sizes.routes:
        findings.anomalies.append(f"growth: {len(routes)} routes to guard, {sizes.routes} wanted")
    rows: list[Figures] = []
    for count in sizes.guards:
        guarded = [
            WatchedRoute(VEHICLES[VEHICLE], routes[i % len(routes)].table) for i in range(count)
        ]
        for each in guarded:
            each.check(yard.snapshot, 0.0, None)
        small_s: list[float] = []
        whole_s: list[float] = []
        for i in range(sizes.changes):
            _drop_on(yard, routes[i % len(routes)], rng)
            small_s.append(_check_s(yard, guarded, yard.model.changed_m))
            whole_s.append(_check_s(yard, guarded, None))
            yard.visible(lambda: yard.model.drop("stacks", "moved"))
            _check_s(yard, guarded, yard.model.changed_m)
        rows.append(
            {"guards": count, "small_ms": spread(small_s, MS), "whole_ms": spread(whole_s, MS)}
        )
    return rows


def _check_s(
    yard: LiveSite, guarded: Sequence[WatchedRoute], changed_m: npt.NDArray[np.float64] | None
) -> float:
    def check_all() -> None:
        for each in guarded:
            each.check(yard.snapshot, 0.0, changed_m)

    return cpu_s(check_all)


def _routes(yard: LiveSite, rng: Rng, count: int) -> list[Route]:
    """Return routes of about the length wanted, first found."""
    found: list[Route] = []
    for _ in range(TRIES_MAX):
        if len(found) == count:
            break
        budget = CpuBudget(0.1)
        start, goal = pair(rng, GUARD_SIDE_M)
        outcome = plan(
            yard.snapshot, VEHICLES[VEHICLE], start, goal,
            time_left=budget, seed=1, on_better=budget.end,
        )  # fmt: skip
        if outcome.route is not None and 0.9 * ROUTE_M < outcome.route.length_m < 1.3 * ROUTE_M:
            found.append(outcome.route)
    return found


def pair(rng: Rng, side_m: float) -> tuple[Pose, Pose]:
    """Return two poses about as far apart as a route is long, on a square yard."""
    far_m = side_m - 10.0
    x, y, heading_rad, way_rad = rng.uniform(
        (10.0, 10.0, -3.0, -math.pi), (far_m, far_m, 3.0, math.pi)
    )
    gx = min(max(x + ROUTE_M * math.cos(way_rad), 10.0), far_m)
    gy = min(max(y + ROUTE_M * math.sin(way_rad), 10.0), far_m)
    return (float(x), float(y), float(heading_rad)), (float(gx), float(gy), float(way_rad))


def _drop_on(yard: LiveSite, route: Route, rng: Rng) -> None:
    """Put a crate on a route."""
    row = route.table[int(rng.integers(len(route.table) // 3, len(route.table) - 1))]
    x, y = float(row["x_m"]), float(row["y_m"])
    ring = [(x - 0.5, y - 0.5), (x + 0.5, y - 0.5), (x + 0.5, y + 0.5), (x - 0.5, y + 0.5)]
    yard.visible(lambda: yard.model.put("stacks", "moved", PolygonShape(np.array(ring))))
