"""
Lower bounds of what any route costs.

Two things are known of every route. It is no shorter than the shortest curve between the two
poses in an empty world. And the vehicle's origin keeps a distance from every obstacle: the body
holds a disc around the origin, and keeps its hard clearance around itself; so the route is no
shorter than the shortest way of the middle of a disc (see `chase`). Costs are at least lengths:
a metre in reverse costs a metre or more, changes of direction cost nothing or more.

The length alone is not the best that can be said where reversing or a change of direction is
dear. A route is driven forward throughout (then no shorter than the Dubins curve), or in
reverse throughout (no shorter than the Dubins curve of the turned poses, at the price of
reversing), or it changes direction at least once. The least of the three is the bound. (The
cheapest Reeds-Shepp word is not one: their words suffice for the shortest curve, not for the
cheapest.)
"""

import math
from collections.abc import Sequence
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.bounds.chase import (
    BENDS,
    CRAMPED,
    GOING,
    HOPES,
    ROOM_FOR,
    Chase,
    Ends,
    chase_kernel,
)
from byway_planning.bounds.outgrown import Outgrown, is_blocked, outgrown
from byway_planning.bounds.sight import GRAZE_M, LEFT_OUT, room_at
from byway_planning.curves.steer import steer
from byway_planning.kernel import kernel
from byway_planning.site.solids import Solids
from byway_planning.vehicles.body import CAR, FORWARD_CAR, Body

__all__ = ["LowerBound", "Outgrown", "lower_bound", "outgrown", "passing_radius_m"]

Floats = npt.NDArray[np.float64]
Whole4 = npt.NDArray[np.int32]
Marks = npt.NDArray[np.uint8]

#: Bends and hopes that a search has room for at first; most need no more.
BENDS_AT_FIRST: Final = 512
HOPES_AT_FIRST: Final = 8192
#: The exact check of a route lets it come so much nearer than its clearance.
CHECKED_M: Final = 1e-6
#: A disc below this passes everywhere: its corners would be lost in the tolerances.
RADIUS_M_MIN: Final = 100.0 * GRAZE_M
#: Of lengths, relative; far above what summing up a hundred pieces loses.
ROUNDING: Final = 1e-12


@kernel(Body)
def passing_radius_kernel(body: Body) -> float:
    """Distance of the vehicle's origin from the edge of its body; negative outside."""
    outline = body.outline_m
    n = outline.shape[0]
    if n < 3:
        return float(body.skin_m - math.hypot(outline[0, 0], outline[0, 1]))
    best = math.inf
    inside = False
    for i in range(n):
        ax, ay = outline[i - 1, 0], outline[i - 1, 1]
        bx, by = outline[i, 0], outline[i, 1]
        dx, dy = bx - ax, by - ay
        share = min(max(-(ax * dx + ay * dy) / (dx * dx + dy * dy), 0.0), 1.0)
        best = min(best, math.hypot(ax + share * dx, ay + share * dy))
        if (ay > 0.0) != (by > 0.0) and (ax * by - bx * ay > 0.0) == (by > ay):
            inside = not inside
    return float((best if inside else -best) + body.skin_m)


def passing_radius_m(body: Body, clearance_m: float | None = None) -> float:
    """
    Radius of the largest disc around the vehicle's origin that passes wherever a route passes.

    The disc around the origin that lies inside the body, and the clearance around it. Where the
    origin lies outside the body (negative radius inside), what the clearance has left.

    Args:
        clearance_m: What the route keeps everywhere; the hard clearance by default.
    """
    kept_m = body.clearance_m if clearance_m is None else min(clearance_m, body.clearance_m)
    return float(passing_radius_kernel(body)) + kept_m - CHECKED_M


@kernel(Body, "rf8[::1]", "rf8[::1]", "f8[:, ::1]", "f8[::1]")
def curves_kernel(body: Body, start: Floats, goal: Floats, segments: Floats, out: Floats) -> None:
    """
    Lengths of the shortest curves in an empty world.

    Args:
        segments: (5, 2), for the work.
        out: (3,) receives: of any curve; of one driven forward only; of one in reverse only.
    """
    radius = body.turn_radius_m
    x0, y0, h0, x1, y1, h1 = start[0], start[1], start[2], goal[0], goal[1], goal[2]
    _, out[0], _ = steer(body.kind, radius, 1.0, 0.0, x0, y0, h0, x1, y1, h1, segments)
    out[1], out[2] = out[0], math.inf
    if body.kind == CAR:
        _, out[1], _ = steer(FORWARD_CAR, radius, 1.0, 0.0, x0, y0, h0, x1, y1, h1, segments)
        h0, h1 = h0 + math.pi, h1 + math.pi
        _, out[2], _ = steer(FORWARD_CAR, radius, 1.0, 0.0, x0, y0, h0, x1, y1, h1, segments)


@kernel(Solids, Outgrown, "u1[::1]", "f8", "f8")
def room_kernel(solids: Solids, ground: Outgrown, marks: Marks, x: float, y: float) -> float:
    """
    How large a disc may be here, up to the radius of the ground; -1 inside an obstacle.

    Polygons are looked at inside and out, cells by whether this one is blocked.
    """
    row = math.floor((y - solids.corner_y_m) / solids.cell_m)
    column = math.floor((x - solids.corner_x_m) / solids.cell_m)
    if is_blocked(solids, row, column):
        return -1.0
    for p in range(solids.boxes_m.shape[0]):
        if not (solids.boxes_m[p, 0] <= x <= solids.boxes_m[p, 2]):
            continue
        if not (solids.boxes_m[p, 1] <= y <= solids.boxes_m[p, 3]):
            continue
        inside = False
        before = solids.starts[p + 1] - 1
        for i in range(solids.starts[p], solids.starts[p + 1]):
            ax, ay = solids.vertices_m[before, 0] - x, solids.vertices_m[before, 1] - y
            bx, by = solids.vertices_m[i, 0] - x, solids.vertices_m[i, 1] - y
            if (ay > 0.0) != (by > 0.0) and (ax * by - bx * ay > 0.0) == (by > ay):
                inside = not inside
            before = i
        if inside:
            return -1.0
    return room_at(ground, marks, x, y)


class LowerBound:
    """
    A lower bound of the cost of every route from start to goal, that rises with work.

    Args:
        solids: The obstacles that count for the request.
        start, goal: x_m, y_m, heading_rad, site-local.
        ground: The obstacles of the same revision, prepared by `outgrown` for a radius not
            below `passing_radius_m`; it may hold obstacles that the request leaves out.
        start_clearance_m: How far the body stays from everything at the start, where that is
            less than its hard clearance (negative: overlap): a route that gets out of an
            overlap may keep no more until it is out.

    Raises:
        ValueError: If the ground was prepared for a smaller disc or for other obstacles.
    """

    def __init__(
        self,
        solids: Solids,
        body: Body,
        start: Sequence[float] | Floats,
        goal: Sequence[float] | Floats,
        *,
        ground: Outgrown | None = None,
        start_clearance_m: float = math.inf,
    ) -> None:
        self._body = body
        poses = np.array([start, goal], np.float64)
        poses.flags.writeable = False
        self._curves = np.empty(3)
        curves_kernel(body, poses[0], poses[1], np.empty((5, 2)), self._curves)
        radius_m = passing_radius_m(body, start_clearance_m)
        self._disc_m = math.hypot(*(poses[1, :2] - poses[0, :2])) * (1.0 - ROUNDING)
        self._chase: Chase | None = None
        if radius_m >= RADIUS_M_MIN:
            ground = outgrown(solids, radius_m) if ground is None else ground
            self._prepare(solids, ground, poses, radius_m)

    def _prepare(self, solids: Solids, ground: Outgrown, poses: Floats, radius_m: float) -> None:
        polygons, discs = len(solids.boxes_m), len(solids.discs_m)
        obstacles = len(ground.corner_starts) - 1
        if ground.radius_m < radius_m:
            raise ValueError(
                f"the ground was prepared for discs up to {ground.radius_m} m, this one has "
                f"{radius_m} m"
            )
        if obstacles < polygons + discs:
            raise ValueError(
                f"the ground has {obstacles} obstacles, the solids {polygons + discs}: they are "
                "not of the same revision"
            )
        marks = np.zeros(obstacles, np.uint8)
        marks[:polygons][solids.boxes_m[:, 0] > solids.boxes_m[:, 2]] = LEFT_OUT
        marks[polygons : polygons + discs][solids.discs_m[:, 2] <= 0.0] = LEFT_OUT
        # An end may be nearer to an obstacle than the disc allows (rounding, an overlap that the
        # request accepts). A smaller disc passes wherever the larger one does.
        for x, y, _ in poses.tolist():
            radius_m = min(radius_m, room_kernel(solids, ground, marks, x, y))
        if radius_m >= RADIUS_M_MIN:
            self._ground = ground
            self._ends = Ends(radius_m, *poses[0, :2].tolist(), *poses[1, :2].tolist())
            self._chase = _new_chase(ground, marks)

    def advance(self, work_until: int) -> bool:
        """
        Go on until `work_until` units of work are done in all, one of them about 10 ns.

        Returns:
            Whether the bound is final.
        """
        if self._chase is None:
            return True
        status = CRAMPED
        while status == CRAMPED:
            status = chase_kernel(self._ground, self._ends, self._chase, work_until)
            if status == CRAMPED:
                self._chase = _roomier(self._chase)
        self._disc_m = max(self._disc_m, float(self._chase.proven[0]) * (1.0 - ROUNDING))
        if status != GOING:
            self._chase = None
        return status != GOING

    @property
    def bound_m(self) -> float:
        """The bound so far; inf where the disc has no way, so that there is no route."""
        any_m, forward_m, reverse_m = self._curves.tolist()
        if self._body.kind != CAR:
            return max(any_m, self._disc_m)
        return min(
            max(forward_m, self._disc_m),
            max(reverse_m, self._disc_m) * self._body.reverse_factor,
            max(any_m, self._disc_m) + self._body.direction_change_m,
        )


def lower_bound(
    solids: Solids,
    body: Body,
    start: Sequence[float] | Floats,
    goal: Sequence[float] | Floats,
    *,
    work_max: int,
    ground: Outgrown | None = None,
    start_clearance_m: float = math.inf,
) -> float:
    """
    Return a lower bound of the cost of every route; the same as `LowerBound` after `work_max`.

    A small bound where little work is allowed, never a wrong one. inf: there is no route.
    """
    search = LowerBound(
        solids, body, start, goal, ground=ground, start_clearance_m=start_clearance_m
    )
    search.advance(work_max)
    return search.bound_m


def _new_chase(ground: Outgrown, marks: Marks) -> Chase:
    corners = len(ground.corners)
    return Chase(
        np.zeros(6, np.int64),
        np.zeros(1),
        marks,
        np.empty(corners, np.int32),
        np.full(2 * corners, -1, np.int32),
        *_bend_arrays(BENDS_AT_FIRST),
        *_hope_arrays(HOPES_AT_FIRST),
    )


def _bend_arrays(room: int) -> tuple[Whole4, Whole4, Floats]:
    return np.empty(room, np.int32), np.empty(room, np.int32), np.empty((room, 5))


def _hope_arrays(room: int) -> tuple[Floats, Whole4, Whole4, Whole4, Floats]:
    whole = (np.empty(room, np.int32), np.empty(room, np.int32), np.empty(room, np.int32))
    return np.empty(room), *whole, np.empty(room)


def _roomier(chase: Chase) -> Chase:
    """Return the same search with more room in its arrays."""
    counts = chase.counts
    bends, hopes = len(chase.bend_at), len(chase.keys)
    if counts[BENDS] == bends:
        bends *= 2
    if counts[HOPES] + counts[ROOM_FOR] > hopes:
        hopes = 2 * (hopes + int(counts[ROOM_FOR]))
    wider = (*chase[:5], *_bend_arrays(bends), *_hope_arrays(hopes))
    for old, new in zip(chase[5:], wider[5:], strict=True):
        new[: len(old)] = old
    return Chase(*wider)
