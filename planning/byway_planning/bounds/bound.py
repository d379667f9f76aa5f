"""
Lower bounds of what any route costs.

Two things are known of every route. It is no shorter than the shortest curve between the two
poses in an empty world. And discs pass with the vehicle that keep a distance from every
obstacle, so that it is no shorter than their shortest ways (see `passing` and `chase`). Costs
are at least lengths: a metre in reverse costs a metre or more, changes of direction cost nothing
or more.

The length alone is not the best that can be said where reversing or a change of direction is
dear. A route is driven forward throughout (then no shorter than the Dubins curve), or in
reverse throughout (no shorter than the Dubins curve of the turned poses, at the price of
reversing), or it changes direction at least once. The least of the three is the bound. (The
cheapest Reeds-Shepp word is not one: their words suffice for the shortest curve, not for the
cheapest.)

The bound is of routes that end exactly at the goal. One that stops short of it within the
tolerance of the check may undercut it by as much.
"""

import math
from collections.abc import Sequence
from typing import Final, TypeVar

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
from byway_planning.bounds.passing import CHECKED_M, curve_lengths_m, passing_discs
from byway_planning.bounds.sight import GRAZE_M, LEFT_OUT, WORK, room_at
from byway_planning.kernel import kernel
from byway_planning.site.solids import Solids
from byway_planning.vehicles.body import CAR, Body

Floats = npt.NDArray[np.float64]
Whole4 = npt.NDArray[np.int32]
Marks = npt.NDArray[np.uint8]
T = TypeVar("T", bound=np.generic)

#: Bends and hopes that a search has room for at first; most need no more.
BENDS_AT_FIRST: Final = 512
HOPES_AT_FIRST: Final = 8192
#: An end is so much outside the circles that the string bends round: tangents from it exist.
APART_M: Final = 10.0 * GRAZE_M
#: A disc below this passes everywhere: its corners would be lost in the tolerances.
RADIUS_M_MIN: Final = 100.0 * GRAZE_M
#: Of lengths, relative; far above what summing up a hundred pieces loses.
ROUNDING: Final = 1e-12


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


class _DiscWay:
    """The shortest way of one disc: a chase, and what it has proved of the route."""

    def __init__(
        self, solids: Solids, ground: Outgrown, ends: Ends, stretch: float, straight_m: float
    ) -> None:
        self._ground = ground
        self._ends = ends
        self._stretch = stretch
        self._chase = _new_chase(ground, _marks_of(solids, ground))
        self.least_m = straight_m * (1.0 - ROUNDING) / stretch
        self.work = 0
        # An end may be nearer to an obstacle than the disc allows (rounding, an overlap that the
        # request accepts). A smaller disc passes wherever the larger one does.
        radius_m = ends.radius_m
        for x, y in ((ends.start_x_m, ends.start_y_m), (ends.goal_x_m, ends.goal_y_m)):
            room_m = room_kernel(solids, ground, self._chase.marks, x, y)
            radius_m = min(radius_m, room_m - APART_M)
        self._ends = ends._replace(radius_m=radius_m)
        # ends that are one and the same place have no tangent between them, and no way to measure
        self.done = radius_m < RADIUS_M_MIN or straight_m < APART_M

    def advance(self, work_until: int) -> None:
        status = CRAMPED
        while status == CRAMPED:
            status = chase_kernel(self._ground, self._ends, self._chase, work_until)
            if status == CRAMPED:
                self._chase = _roomier(self._chase)
        proven_m = float(self._chase.proven[0]) * (1.0 - ROUNDING) / self._stretch
        self.least_m = max(self.least_m, proven_m)
        self.work = int(self._chase.counts[WORK])
        self.done = status != GOING


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
        ValueError: If the ground was prepared for smaller discs or for other obstacles.
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
        self._lengths_m = curve_lengths_m(body, poses)
        kept_m = min(body.clearance_m, start_clearance_m) - CHECKED_M
        discs = [disc for disc in passing_discs(body) if disc[2] + kept_m >= RADIUS_M_MIN]
        if ground is None:
            ground = outgrown(solids, max((disc[2] + kept_m for disc in discs), default=0.0))
        _check_ground(ground, solids, [disc[2] + kept_m for disc in discs])
        self._ways: list[_DiscWay] = []
        for x, y, radius_m, stretch in discs:
            ends = Ends(radius_m + kept_m, *_carried(poses[0], x, y), *_carried(poses[1], x, y))
            straight_m = math.hypot(ends.goal_x_m - ends.start_x_m, ends.goal_y_m - ends.start_y_m)
            self._ways.append(_DiscWay(solids, ground, ends, stretch, straight_m))

    def advance(self, work_until: int) -> bool:
        """
        Go on until `work_until` units of work are done in all, one of them about 10 ns.

        Returns:
            Whether the bound is final.
        """
        for way in self._ways:
            if not way.done:
                others = sum(other.work for other in self._ways if other is not way)
                way.advance(work_until - others)
            if not way.done:
                return False
        return True

    @property
    def bound_m(self) -> float:
        """The bound so far; inf where a disc has no way, so that there is no route."""
        least_m = max((way.least_m for way in self._ways), default=0.0)
        return _cost_bound(self._body, self._lengths_m, least_m)


def curve_bound(
    body: Body, start: Sequence[float] | Floats, goal: Sequence[float] | Floats
) -> float:
    """Return what the curves alone say, whatever stands in the way: the bound before any work."""
    poses = np.array([start, goal], np.float64)
    poses.flags.writeable = False
    return _cost_bound(body, curve_lengths_m(body, poses), 0.0)


def _cost_bound(body: Body, lengths_m: tuple[float, float, float], least_m: float) -> float:
    any_m, forward_m, reverse_m = lengths_m
    if body.kind != CAR:
        return max(any_m, least_m)
    return min(
        max(forward_m, least_m),
        max(reverse_m, least_m) * body.reverse_factor,
        max(any_m, least_m) + body.direction_change_m,
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


def _carried(pose: Floats, x: float, y: float) -> tuple[float, float]:
    """Where a point of the vehicle's frame is at a pose."""
    c, s = math.cos(pose[2]), math.sin(pose[2])
    return float(pose[0] + c * x - s * y), float(pose[1] + s * x + c * y)


def _check_ground(ground: Outgrown, solids: Solids, radii_m: list[float]) -> None:
    if any(radius_m > ground.radius_m for radius_m in radii_m):
        raise ValueError(
            f"the ground was prepared for discs up to {ground.radius_m} m, these have {radii_m} m"
        )
    wanted, found = len(solids.boxes_m) + len(solids.discs_m), len(ground.corner_starts) - 1
    if found < wanted:
        raise ValueError(
            f"the ground has {found} obstacles, the solids {wanted}: they are not of the same "
            "revision"
        )


def _marks_of(solids: Solids, ground: Outgrown) -> Marks:
    polygons, discs = len(solids.boxes_m), len(solids.discs_m)
    marks = np.zeros(len(ground.corner_starts) - 1, np.uint8)
    marks[:polygons][solids.boxes_m[:, 0] > solids.boxes_m[:, 2]] = LEFT_OUT
    marks[polygons : polygons + discs][solids.discs_m[:, 2] <= 0.0] = LEFT_OUT
    return marks


def _new_chase(ground: Outgrown, marks: Marks) -> Chase:
    return Chase(
        counts=np.zeros(6, np.int64),
        proven=np.zeros(1),
        marks=marks,
        met=np.empty(len(ground.corners), np.int32),
        last_bend=np.full(2 * len(ground.corners), -1, np.int32),
        bend_at=np.empty(BENDS_AT_FIRST, np.int32),
        bend_before=np.empty(BENDS_AT_FIRST, np.int32),
        bends=np.empty((BENDS_AT_FIRST, 5)),
        keys=np.empty(HOPES_AT_FIRST),
        values=np.empty(HOPES_AT_FIRST, np.int32),
        hope_from=np.empty(HOPES_AT_FIRST, np.int32),
        hope_to=np.empty(HOPES_AT_FIRST, np.int32),
        hope_length=np.empty(HOPES_AT_FIRST),
    )


def _roomier(chase: Chase) -> Chase:
    """Return the same search with more room in its arrays."""
    bends, hopes = len(chase.bend_at), len(chase.keys)
    if chase.counts[BENDS] == bends:
        bends *= 2
    if chase.counts[HOPES] + chase.counts[ROOM_FOR] > hopes:
        hopes = 2 * (hopes + int(chase.counts[ROOM_FOR]))
    return chase._replace(
        bend_at=_longer(chase.bend_at, bends),
        bend_before=_longer(chase.bend_before, bends),
        bends=_longer(chase.bends, bends),
        keys=_longer(chase.keys, hopes),
        values=_longer(chase.values, hopes),
        hope_from=_longer(chase.hope_from, hopes),
        hope_to=_longer(chase.hope_to, hopes),
        hope_length=_longer(chase.hope_length, hopes),
    )


def _longer(array: npt.NDArray[T], room: int) -> npt.NDArray[T]:
    longer = np.empty((room, *array.shape[1:]), array.dtype)
    longer[: len(array)] = array
    return longer
