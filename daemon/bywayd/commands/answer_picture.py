"""One answer as a drawing: the site around it, the route, what would have to move."""

from dataclasses import dataclass
from pathlib import Path

import byway
from bywayd.outlines import Points
from bywayd.picture import ALARM, INKS, Plan, box_around

Pose = tuple[float, float, float]


@dataclass(frozen=True)
class Tightest:
    """Where a route comes nearest to something."""

    pose: Pose
    at_m: float  # along the route
    clearance_m: float
    what: str


def draw_answer(
    site: byway.SiteView,
    vehicle: str,
    outline_m: Points,
    start: Pose,
    goal: Pose,
    answer: byway.Answer,
    file: Path,
    tightest: Tightest | None = None,
) -> None:
    """Draw a site with what an answer says about it."""
    layers = {n: layer for n, layer in site.layers.items() if n not in answer.left_out}
    table = None if answer.route is None else answer.route.table
    shown: list[tuple[float, float]] = [start[:2], goal[:2]]
    if answer.remedy is not None:
        shown += [(float(x), float(y)) for x, y in answer.remedy.way_m]
    if table is not None:
        shown += list(zip(table["x_m"].tolist(), table["y_m"].tolist(), strict=True))
    # A large site would leave the route a dot in it.
    box_m = box_around(shown, margin_m=15.0, within_m=site.limits_m)
    notes = [f"{answer.kind}, revision {answer.revision}, seed {answer.seed}"]
    if answer.route is not None:
        notes.append(
            f"{answer.route.length_m:.2f} m in {answer.route.duration_s:.1f} s, cost "
            f"{answer.cost:.2f} {answer.cost_unit}, gap {100 * answer.gap:.1f} %"
        )
    plan = Plan(f"One replan for {vehicle}", box_m, notes)
    for layer in layers.values():
        for patch in layer.cells:
            plan.cells(patch.corner_m, patch.cell_m, patch.cells)
        plan.polygons(layer.polygons, "building", named=True, holes=layer.holes)
        plan.discs(layer.discs, "building", named=True)
    if site.limits_m is not None:
        plan.limits(site.limits_m)
    if table is not None:
        plan.swath(outline_m, table)
        plan.route(table, INKS[0])
    if answer.remedy is not None:
        plan.way(answer.remedy.way_m, "way that would be open")
        for one in answer.remedy.movables:
            plan.mark((one.x_m, one.y_m), f"would have to move: {one.obstacle}")
    if tightest is not None:
        plan.vehicle(outline_m, tightest.pose, ALARM)
        plan.mark(tightest.pose, f"tightest: {tightest.clearance_m:.2f} m from {tightest.what}")
    plan.vehicle(outline_m, start)
    plan.goal(outline_m, goal)
    plan.save(file)
