"""
The anytime loop: a budget in, better and better verified routes out.

Time comes in as a callable and only ends the run; what runs next depends on the work done, so
the same request with the same work gives the same bits, wherever the slices fall.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from typing import Final, cast

import numpy as np
import numpy.typing as npt

from byway_planning.collision import CONTACT_M
from byway_planning.kernel import ensure_warm
from byway_planning.outcome import Blockage, Kind, Outcome
from byway_planning.prefix import end_of, leaving, rolling
from byway_planning.profile import StartTooFast
from byway_planning.route import make_route
from byway_planning.search.floods import FloodGround, Window, used_tiles, window_for
from byway_planning.search.method import EXHAUSTED, FOUND, FULL
from byway_planning.search.methods import check_method, make_method
from byway_planning.search.question import (
    Guide,
    Question,
    direct_length_kernel,
    excess_kernel,
    flood_length_kernel,
    guide_for,
    middle_of,
)
from byway_planning.search.workshop import Workshop, borrowed
from byway_planning.site.site import Site
from byway_planning.site.snapshot import Snapshot
from byway_planning.vehicles.body import CAR, DISC, Body
from byway_planning.vehicles.models import Vehicle
from byway_planning.verify import clearance_m as exact_clearance_m
from byway_planning.verify import verify

Floats = npt.NDArray[np.float64]

#: Work between two looks at the clock: about half a millisecond.
SLICE: Final = 120
#: A better route is only made and checked when it gains this share of the last one's cost.
WORTH_TELLING: Final = 0.005
#: Time set aside for the last route, in runs of making and checking one, and at least.
LAST_ROUTES: Final = 1.5
LAST_S: Final = 0.0004


@dataclass
class _Run:
    """One call of `plan`: what was asked, and what there is so far."""

    snapshot: Snapshot
    vehicle: Vehicle
    body: Body
    start: Floats  # site-local
    goal: Floats
    left_out: frozenset[str]
    start_speed_mps: float
    start_curvature_per_m: float
    seed: int
    time_left: Callable[[], float]
    on_better: Callable[[Outcome], None] | None
    began_s: float = 0.0
    bound: float = 0.0
    best: Outcome | None = None
    check_s: float = 0.0  # how long making and checking the last route took
    rejected: int = 0
    statistics: dict[str, int | float | str] = field(default_factory=dict)

    def elapsed_s(self) -> float:
        return self.began_s - self.time_left()

    def outcome(self, kind: Kind, blocked_by: tuple[Blockage, ...] = ()) -> Outcome:
        return Outcome(
            kind,
            self.snapshot.revision,
            self.seed,
            bound=self.bound,
            total_s=self.elapsed_s(),
            blocked_by=blocked_by,
            statistics=self.statistics,
        )

    def offer(self, path: Floats) -> bool:
        """Make a route of a path, check it, and keep and tell it when it is the best."""
        before_s = self.time_left()
        cost = path_cost(path, self.body)
        if self.best is not None and cost >= self.best.cost:
            return False
        path = _continuous(path, self.body)
        try:
            route = make_route(path, self.vehicle, self.start_speed_mps)
        except StartTooFast as fault:
            return self._reject(str(fault))
        faults = verify(
            self.snapshot.solids(self.left_out),
            self.vehicle,
            path,
            route,
            (float(self.start[0]), float(self.start[1]), float(self.start[2])),
            (float(self.goal[0]), float(self.goal[1]), float(self.goal[2])),
            clearance_m=self.body.clearance_m,
            start_speed_mps=self.start_speed_mps,
            start_curvature_per_m=self.start_curvature_per_m,
        )
        now_s = self.time_left()
        self.check_s = before_s - now_s
        if faults:
            return self._reject(faults[0].text)
        x, y = self.snapshot.origin_m
        if x or y:
            table = route.table.copy()
            table["x_m"] += x
            table["y_m"] += y
            shift = np.array([x, y, 0.0, 0.0, 0.0])
            route = replace(route, table=table, path=route.path + shift)
        first_s = self.best.first_s if self.best is not None else self.began_s - now_s
        self.statistics["clearance_m"] = float(faults.clearance_m)
        self.best = replace(
            self.outcome("route"),
            route=route,
            cost=cost,
            first_s=first_s,
            statistics=dict(self.statistics),
        )
        if self.on_better is not None:
            self.on_better(self.best)
        return True

    def _reject(self, why: str) -> bool:
        self.rejected += 1
        self.statistics["rejected"] = self.rejected
        self.statistics["rejected_why"] = why
        return False


def plan(
    site: Site | Snapshot,
    vehicle: Vehicle,
    start: Sequence[float],
    goal: Sequence[float],
    *,
    time_left: Callable[[], float],
    seed: int,
    on_better: Callable[[Outcome], None] | None = None,
    method: str = "auto",
    sampler: str | None = None,
    clearance_m: float | None = None,
    left_out: frozenset[str] = frozenset(),
    start_speed_mps: float = 0.0,
    start_curvature_per_m: float = 0.0,
    gap_wanted: float = 0.0,
    work_max: int | None = None,
) -> Outcome:
    """
    Plan a route, and go on improving it until the time is over or nothing can be gained.

    Args:
        site: Obstacles. vehicle: Car, ForwardCar or Disc.
        start, goal: x_m, y_m, heading_rad in the site's outer coordinates.
        time_left: Returns the seconds that are left; see `countdown`.
        seed: Any whole number; the same seed and amount of work give the same bits.
        on_better: Called with every better, verified route.
        method: One of METHODS. sampler: one of SAMPLERS, for the methods that sample.
        clearance_m: Hard clearance of this replan; the vehicle's own by default.
        left_out: Layers of outlines that do not count.
        start_speed_mps: Signed speed at the start; the route keeps the gear until the vehicle
            can stop. start_curvature_per_m: the steering at the start.
        gap_wanted: Stop as soon as the gap is not above this.
        work_max: Stop after so many iterations; for tests and repeats of a run.

    Returns:
        An Outcome; see there. It is never late by more than one slice and one check, which are
        set aside from `time_left`.

    Raises:
        ValueError: If an argument makes no sense; the text says which and why.
    """
    ensure_warm()
    snapshot = site.snapshot if isinstance(site, Site) else site
    body = vehicle.body(clearance_m)
    _check_arguments(body, start, goal, start_speed_mps, start_curvature_per_m, gap_wanted)
    _check_size(snapshot, body)
    check_method(method, sampler)
    run = _Run(
        snapshot,
        vehicle,
        body,
        _local(start, snapshot),
        _local(goal, snapshot),
        left_out,
        float(start_speed_mps),
        float(start_curvature_per_m),
        seed,
        time_left,
        on_better,
        began_s=time_left(),
    )
    work = math.inf if work_max is None else work_max
    with borrowed() as workshop:
        return _planned(run, workshop, method, sampler, gap_wanted, work)


def _planned(
    run: _Run,
    workshop: Workshop,
    method: str,
    sampler: str | None,
    gap_wanted: float,
    work_max: float,
) -> Outcome:
    scene = run.snapshot.scene(run.left_out)
    blocked = _blockages(run, run.goal, 0.0)
    if blocked:
        return run.outcome("goal_blocked", blocked)
    run.bound = float(direct_length_kernel(run.body, run.start, run.goal))
    openings: list[Floats | None] = [None]
    near = bool(excess_kernel(scene, run.body, run.start) <= CONTACT_M)
    if near:
        blocked = _blockages(run, run.start, run.vehicle.start_overlap_m)
        if not blocked and run.start_speed_mps == 0.0:
            openings = list(leaving(scene, run.body, run.start, run.vehicle.start_overlap_m))
        if blocked or not openings:
            return run.outcome("start_blocked", blocked or _blockages(run, run.start, -math.inf))
    if run.start_speed_mps != 0.0:
        openings = list(_rolling(run, near))
        if not openings or not _fits_bend(run):
            return run.outcome("start_too_fast")
    guide = guide_for(_ground(run), workshop.floods, run.body, run.start, run.goal)
    if not guide.reached:
        return run.outcome("no_route")
    for opening in _ranked(run, guide, openings):
        start = run.start if opening is None else end_of(opening)
        question = Question(scene, run.body, start, run.goal, run.seed, guide)
        if _searched(run, workshop, question, opening, method, sampler, gap_wanted, work_max):
            break
    if run.best is None:
        return run.outcome("not_found")
    return replace(run.best, total_s=run.elapsed_s(), statistics=dict(run.statistics))


def _searched(
    run: _Run,
    workshop: Workshop,
    question: Question,
    opening: Floats | None,
    method: str,
    sampler: str | None,
    gap_wanted: float,
    work_max: float,
) -> bool:
    """Search from the end of one opening; False when another opening should be tried."""

    def whole(path: Floats) -> Floats:
        return path if opening is None else np.vstack([opening, path])

    def good_enough() -> bool:
        return run.best is not None and run.best.gap <= gap_wanted + 1e-12

    direct = question.direct()
    if direct is not None:
        run.offer(whole(direct))
        if good_enough():
            return True
    search = make_method(method, question, sampler, workshop)
    told = math.inf if run.best is None else run.best.cost
    newest: Floats | None = None
    work = 0
    status = FOUND
    while work < work_max and run.time_left() > LAST_S + LAST_ROUTES * run.check_s:
        status = search.advance(SLICE)
        work += SLICE
        if status == FOUND:
            path = whole(search.path())
            cost = path_cost(path, run.body)
            newest = path
            if cost < told * (1.0 - WORTH_TELLING):
                if run.offer(path):
                    newest = None
                told = cost
                if good_enough():
                    break
        elif status in (EXHAUSTED, FULL):
            break
    run.statistics.update(
        method=method, work=work, states_checked=search.states_checked, slices=work // SLICE
    )
    if newest is not None:
        run.offer(newest)
    return run.best is not None or status not in (EXHAUSTED, FULL)


def _check_arguments(
    body: Body,
    start: Sequence[float],
    goal: Sequence[float],
    start_speed_mps: float,
    start_curvature_per_m: float,
    gap_wanted: float,
) -> None:
    for name, pose in (("start", start), ("goal", goal)):
        if len(pose) != 3 or not all(math.isfinite(v) for v in pose):
            raise ValueError(f"{name} must be three finite numbers x, y, heading, got {pose}")
    if not math.isfinite(start_speed_mps) or not math.isfinite(start_curvature_per_m):
        raise ValueError(
            f"start_speed_mps and start_curvature_per_m must be finite, got {start_speed_mps} "
            f"and {start_curvature_per_m}"
        )
    if start_speed_mps < 0.0 and body.kind != CAR:
        raise ValueError(f"this vehicle cannot reverse, start_speed_mps is {start_speed_mps}")
    if body.kind != DISC and abs(start_curvature_per_m) * body.turn_radius_m > 1.0 + 1e-6:
        raise ValueError(
            f"start_curvature_per_m {start_curvature_per_m} is more than a turning radius of "
            f"{body.turn_radius_m} m allows"
        )
    if not 0.0 <= gap_wanted < 1.0:
        raise ValueError(f"gap_wanted must be at least 0 and below 1, got {gap_wanted}")


def _check_size(snapshot: Snapshot, body: Body) -> None:
    # A body that lies wholly inside an obstacle is recognised by its inscribed disc.
    cell_m = snapshot.settings.cell_m
    if body.inner_radius_m < 2.5 * cell_m:
        raise ValueError(
            f"cells of {cell_m} m are too coarse for a vehicle with an inscribed circle of "
            f"{body.inner_radius_m:.3f} m; use at most {body.inner_radius_m / 2.5:.3f} m"
        )


def _local(pose: Sequence[float], snapshot: Snapshot) -> Floats:
    x, y = snapshot.origin_m
    local = np.array([pose[0] - x, pose[1] - y, pose[2]], np.float64)
    local.flags.writeable = False
    return local


def _blockages(run: _Run, pose: Floats, overlap_m: float) -> tuple[Blockage, ...]:
    """
    Return what a pose is too near to.

    Args:
        overlap_m: How deep the bare body may overlap; 0 asks for the hard clearance.
    """
    solids = run.snapshot.solids(run.left_out)
    found = exact_clearance_m(solids, run.vehicle, [float(v) for v in pose])
    wanted_m = run.body.clearance_m if overlap_m <= 0.0 else -overlap_m
    if found.distance_m >= wanted_m - 1e-6 and overlap_m > -math.inf:
        return ()
    layer, name = "", found.kind
    if found.kind in ("polygon", "disc"):
        layer, name = run.snapshot.name_of(found.kind, found.number)  # type: ignore[assignment]
    elif found.kind == "cell":
        name = "cells"  # type: ignore[assignment]
    return (Blockage(layer, name, run.body.clearance_m - found.distance_m),)


def _fits_bend(run: _Run) -> bool:
    """Can the steering at the start be driven at the start speed?"""
    limits = run.vehicle.limits
    top = limits.speed_mps_max if run.start_speed_mps > 0.0 else limits.reverse_speed_mps_max
    return abs(run.start_speed_mps) <= top + 1e-9


def _ground(run: _Run) -> FloodGround:
    kept, scene, body = run.snapshot.kept, run.snapshot.scene(), run.body
    if "used_tiles" not in kept:
        kept["used_tiles"] = used_tiles(scene)
    used = cast(Window, kept["used_tiles"])
    margin_m = 2.0 * (body.outer_radius_m + body.turn_radius_m + body.clearance_m)
    ends = [middle_of(body, run.start), middle_of(body, run.goal)]
    window = window_for(scene, used, ends, margin_m)
    key = ("ground", body.inner_radius_m + body.clearance_m, window)
    if key not in kept:
        kept[key] = FloodGround(scene, body.inner_radius_m + body.clearance_m, window)
    return cast(FloodGround, kept[key])


def _rolling(run: _Run, near: bool) -> list[Floats]:
    """Return the opening paths of a moving vehicle."""
    return rolling(
        run.snapshot.scene(run.left_out),
        run.body,
        run.start,
        run.start_speed_mps,
        run.start_curvature_per_m,
        run.vehicle.limits,
        overlap_m=run.vehicle.start_overlap_m if near else None,
    )


def _ranked(run: _Run, guide: Guide, openings: list[Floats | None]) -> list[Floats | None]:
    """Return the openings that lead somewhere, the most promising first."""

    def estimate(opening: Floats | None) -> float:
        if opening is None:
            return 0.0
        end = end_of(opening)
        flood_length_m = float(flood_length_kernel(guide.to_goal, *middle_of(run.body, end)))
        curve_m = float(direct_length_kernel(run.body, end, run.goal))
        return path_cost(opening, run.body) + max(flood_length_m, curve_m)

    ranked = sorted((estimate(opening), i) for i, opening in enumerate(openings))
    return [openings[i] for cost, i in ranked if cost < math.inf]


def path_cost(path: Floats, body: Body) -> float:
    """Return the cost of a path (n, 5): length, reversing and changes of direction."""
    lengths = path[:, 4]
    cost = float(np.where(lengths >= 0.0, lengths, -lengths * body.reverse_factor).sum())
    if body.kind == CAR:
        signs = np.sign(lengths[lengths != 0.0])
        cost += float((np.diff(signs) != 0.0).sum()) * body.direction_change_m
    return cost


def _continuous(path: Floats, body: Body) -> Floats:
    """Return the path with headings that do not jump by whole turns (discs turn freely)."""
    if body.kind == DISC or len(path) == 1:
        return path
    ends = path[:-1, 2] + path[:-1, 3] * path[:-1, 4]
    turns = np.round((path[1:, 2] - ends) / (2.0 * math.pi))
    out = path.copy()
    out[1:, 2] -= 2.0 * math.pi * np.cumsum(turns)
    return out
