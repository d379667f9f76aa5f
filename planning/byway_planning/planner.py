"""
A budget in, better and better routes out: what is asked, what can be answered at once, and how
a route has to begin and end. The search itself is in `anytime`.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import cast

import numpy as np
import numpy.typing as npt

from byway_planning.anytime import Run, Wishes, search
from byway_planning.bounds import curve_bound
from byway_planning.collision import CONTACT_M
from byway_planning.kernel import ensure_warm
from byway_planning.outcome import Blockage, Outcome
from byway_planning.prefix import end_of, leaving, reversed_path, rolling
from byway_planning.remedy import Remedy, remedy, squares_in
from byway_planning.search.floods import FloodGround, Window, used_tiles, window_for
from byway_planning.search.methods import check_method
from byway_planning.search.paths import path_cost
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

Floats = npt.NDArray[np.float64]


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
    run = Run(
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
    wishes = Wishes(method, sampler, gap_wanted, math.inf if work_max is None else work_max)
    with borrowed() as workshop:
        outcome = _planned(run, workshop, wishes)
    if outcome.kind in ("no_route", "not_found"):
        return replace(outcome, remedy=_remedy(run, outcome.kind), total_s=run.elapsed_s())
    return outcome


def _remedy(run: Run, kind: str) -> Remedy | None:
    """
    Look for what would have to move, with half of the time that is left.

    Where nothing is proved the inscribed disc mostly gets through: then a larger one, half way to
    the one round the whole vehicle, tells which obstacles make it tight.
    """
    run.statistics["proved_s" if kind == "no_route" else "searched_s"] = run.elapsed_s()
    body, (x, y) = run.body, run.snapshot.origin_m
    start, goal = middle_of(body, run.start), middle_of(body, run.goal)
    radii_m = [body.inner_radius_m]
    if kind == "not_found":
        radii_m.append(0.5 * (body.inner_radius_m + body.outer_radius_m))
    found: Remedy | None = None
    for radius_m in radii_m:
        squares = squares_in(0.5 * run.time_left())
        reach_m = radius_m + body.clearance_m
        found = remedy(run.snapshot, run.left_out, start, goal, reach_m, squares) or found
        if found is not None and found.movables:
            break
    return None if found is None else found.moved(x, y)


def _planned(run: Run, workshop: Workshop, wishes: Wishes) -> Outcome:
    scene = run.snapshot.scene(run.left_out)
    closing: Floats | None = None
    if _is_near(run, run.goal):
        blocked = _blockages(run, run.goal, 0.0)
        if blocked:
            return run.outcome("goal_blocked", blocked)
        closing = _closing(run)
        if closing is None:
            return run.outcome("not_found")
    near = _is_near(run, run.start)
    if near:
        blocked = _blockages(run, run.start, run.vehicle.start_overlap_m)
        if blocked:
            return run.outcome("start_blocked", blocked)
        run.start_clearance_m = min(0.0, run.body.clearance_m) - run.vehicle.start_overlap_m
    openings: list[Floats] = []
    if run.start_speed_mps != 0.0:
        openings = _rolling(run, near)
        if not openings or not _fits_limits(run):
            return run.outcome("start_too_fast")
    elif near:
        openings = leaving(scene, run.body, run.start, run.vehicle.start_overlap_m)
        if not openings:
            return run.outcome("start_blocked", _blockages(run, run.start, -math.inf))
    run.bound = curve_bound(run.body, run.start, run.goal)
    goal = run.goal if closing is None else _read_only(closing[0, :3])
    # What starts too near to something has room for less than the hard clearance around there.
    ground = _ground(run, min(run.body.clearance_m, run.start_clearance_m))
    guide = guide_for(ground, workshop.floods, run.body, run.start, goal)
    if not guide.reached:
        return run.outcome("no_route")
    if not openings:
        question = Question(scene, run.body, run.start, goal, run.seed, guide)
        search(run, workshop, question, wishes, None, closing)
    ground = _ground(run, run.body.clearance_m)
    for opening in _ranked(run, guide, openings):
        start = end_of(opening)
        guide = guide_for(ground, workshop.floods, run.body, start, goal)
        question = Question(scene, run.body, start, goal, run.seed, guide)
        if guide.reached and search(run, workshop, question, wishes, opening, closing):
            break
    return run.answer()


def _is_near(run: Run, pose: Floats) -> bool:
    """Is a pose too near to an obstacle for a search to start or end there?"""
    return bool(excess_kernel(run.snapshot.scene(run.left_out), run.body, pose) <= CONTACT_M)


def _closing(run: Run) -> Floats | None:
    """
    Return the last motion to a goal that just keeps the hard clearance (a dock, say).

    It is a way out of the goal, driven the other way round.
    """
    scene = run.snapshot.scene(run.left_out)
    ways = leaving(scene, run.body, run.goal, 0.0, backward=run.body.kind != DISC)
    return reversed_path(ways[0], run.body) if ways else None


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
    return _read_only(local)


def _blockages(run: Run, pose: Floats, overlap_m: float) -> tuple[Blockage, ...]:
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


def _fits_limits(run: Run) -> bool:
    """Is the start speed one that the vehicle may have?"""
    limits = run.vehicle.limits
    top = limits.speed_mps_max if run.start_speed_mps > 0.0 else limits.reverse_speed_mps_max
    return abs(run.start_speed_mps) <= top + 1e-9


def _ground(run: Run, clearance_m: float) -> FloodGround:
    kept, scene, body = run.snapshot.kept, run.snapshot.scene(), run.body
    if "used_tiles" not in kept:
        kept["used_tiles"] = used_tiles(scene)
    used = cast(Window, kept["used_tiles"])
    margin_m = 2.0 * (body.outer_radius_m + body.turn_radius_m + body.clearance_m)
    ends = [middle_of(body, run.start), middle_of(body, run.goal)]
    window = window_for(scene, used, ends, margin_m)
    key = ("ground", body.inner_radius_m + clearance_m, window)
    if key not in kept:
        kept[key] = FloodGround(scene, body.inner_radius_m + clearance_m, window)
    return cast(FloodGround, kept[key])


def _rolling(run: Run, near: bool) -> list[Floats]:
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


def _ranked(run: Run, guide: Guide, openings: list[Floats]) -> list[Floats]:
    """
    Return the openings, the most promising first.

    Those to which the flood did not come are last: it may only have stopped before.
    """

    def estimate(opening: Floats) -> tuple[bool, float]:
        end = end_of(opening)
        flood_length_m = float(flood_length_kernel(guide.to_goal, *middle_of(run.body, end)))
        cost = path_cost(opening, run.body)
        cost += float(direct_length_kernel(run.body, end, run.goal))
        if flood_length_m == math.inf:
            return True, cost
        return False, max(cost, path_cost(opening, run.body) + flood_length_m)

    return sorted(openings, key=estimate)


def _read_only(pose: Floats) -> Floats:
    kept = np.array(pose, np.float64)
    kept.flags.writeable = False
    return kept
