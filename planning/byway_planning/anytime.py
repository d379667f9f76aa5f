"""
The anytime loop: search, check, tell, until the time is over or nothing can be gained.

What runs next depends on the work done; time only ends the run. The same request with the same
work therefore gives the same bits, wherever the slices fall.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import Final, cast

import numpy as np
import numpy.typing as npt

from byway_planning.bounds import LowerBound, Outgrown, outgrown
from byway_planning.outcome import Blockage, Kind, Outcome
from byway_planning.profile import StartTooFast
from byway_planning.route import make_route
from byway_planning.search.method import EXHAUSTED, FOUND, FULL
from byway_planning.search.methods import make_method
from byway_planning.search.paths import path_cost
from byway_planning.search.question import Question
from byway_planning.search.workshop import Workshop
from byway_planning.site.snapshot import Snapshot
from byway_planning.vehicles.body import DISC, Body
from byway_planning.vehicles.models import Vehicle
from byway_planning.verify import verify

Floats = npt.NDArray[np.float64]

#: Work between two looks at the clock: about half a millisecond.
SLICE: Final = 120
#: A better route is only made and checked when it gains this share of the last one's cost.
WORTH_TELLING: Final = 0.005
#: Time set aside for the last route, in runs of making and checking one, and at least.
LAST_ROUTES: Final = 1.5
LAST_S: Final = 0.0004
#: Of the budget, and of all time, kept for what would have to move while nothing is found.
REMEDY_SHARE: Final = 0.15
REMEDY_S_MAX: Final = 0.05
#: Work on the lower bound beside each slice of search, and in all: about 0.4 and 20 ms.
BOUND_SLICE: Final = 40_000
BOUND_WORK_MAX: Final = 2_000_000
#: The bound may exceed the cost by what the check lets a route miss its goal by, not by more.
BOUND_DOUBT_M: Final = 0.01
#: Work without a route after which the bound is asked whether there can be one.
PROOF_AFTER: Final = 480
#: A cost this near to the bound is the bound.
ROUNDING_M: Final = 1e-9


@dataclass(frozen=True)
class Wishes:
    """How to search, and when it is good enough."""

    method: str
    sampler: str | None
    gap_wanted: float
    work_max: float


@dataclass
class Run:
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
    start_clearance_m: float = math.inf  # less than the hard clearance: see LowerBound
    began_s: float = 0.0
    bound: float = 0.0
    bounding: LowerBound | None = None  # what raises the bound; made when there is a route
    bound_work: int = 0
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
        if cost >= self.best_cost:
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
            # It may end within the tolerance of the check, and undercut the bound by as much.
            bound=min(self.bound, cost),
            first_s=first_s,
            statistics=dict(self.statistics),
        )
        if self.on_better is not None:
            self.on_better(self.best)
        return True

    def raise_bound(self) -> None:
        """Work a little on the lower bound, in the units of `bounds`."""
        if self.bound_work >= BOUND_WORK_MAX:
            return
        if self.bounding is None:
            self.bounding = self._new_bounding()
        self.bound_work += BOUND_SLICE
        if self.bounding.advance(self.bound_work):
            self.bound_work = BOUND_WORK_MAX
        self.bound = max(self.bound, self.bounding.bound_m)

    def _new_bounding(self) -> LowerBound:
        kept, body = self.snapshot.kept, self.body
        key = ("outgrown", body.inner_radius_m + body.clearance_m)
        if key not in kept:
            kept[key] = outgrown(self.snapshot.solids(), key[1])
        solids = self.snapshot.solids(self.left_out)
        return LowerBound(
            solids,
            body,
            self.start,
            self.goal,
            ground=cast(Outgrown, kept[key]),
            start_clearance_m=self.start_clearance_m,
        )

    @property
    def reserve_s(self) -> float:
        """What is kept at the end: for a last check, or to say what would have to move."""
        if self.best is None:
            return LAST_S + min(REMEDY_SHARE * self.began_s, REMEDY_S_MAX)
        return LAST_S + LAST_ROUTES * self.check_s

    @property
    def best_cost(self) -> float:
        """Cost of the best route so far; inf without one."""
        return math.inf if self.best is None else self.best.cost

    def answer(self) -> Outcome:
        """Return the best route with what is known by now, or that nothing was found."""
        if self.best is None:
            return self.outcome("no_route" if self.bound == math.inf else "not_found")
        if self.bound > self.best_cost + BOUND_DOUBT_M:
            self.statistics["bound_above_cost_m"] = self.bound - self.best_cost
        return replace(
            self.best,
            bound=min(self.bound, self.best_cost),
            total_s=self.elapsed_s(),
            statistics=dict(self.statistics),
        )

    def _reject(self, why: str) -> bool:
        self.rejected += 1
        self.statistics["rejected"] = self.rejected
        self.statistics["rejected_why"] = why
        return False


def search(
    run: Run,
    workshop: Workshop,
    question: Question,
    wishes: Wishes,
    opening: Floats | None,
    closing: Floats | None,
) -> bool:
    """
    Search from the end of an opening to the start of a closing, offering what is found.

    Returns:
        False when this opening leads nowhere and another one should be tried.
    """
    ends = [part for part in (opening, closing) if part is not None]

    def whole(path: Floats) -> Floats:
        if not ends:
            return path
        parts = [part for part in (opening, path, closing) if part is not None]
        return np.vstack(parts)

    def good_enough() -> bool:
        if run.best is None:
            return False
        return run.best_cost - run.bound <= max(wishes.gap_wanted * run.best_cost, ROUNDING_M)

    direct = question.direct()
    if direct is not None:
        run.offer(whole(direct))
        if good_enough():
            return True
    method = make_method(wishes.method, question, wishes.sampler, workshop, direct)
    told = run.best_cost
    newest: Floats | None = None
    work = 0
    status = FOUND
    while work < wishes.work_max and run.time_left() > run.reserve_s:
        if run.best is not None or work >= PROOF_AFTER:
            run.raise_bound()
            if good_enough() or run.bound == math.inf:
                break
        status = method.advance(SLICE)
        work += SLICE
        if status == FOUND:
            newest = whole(method.path())
            cost = path_cost(newest, run.body)
            if cost < told * (1.0 - WORTH_TELLING):
                if run.offer(newest):
                    newest = None
                told = cost
                if good_enough():
                    break
        elif status in (EXHAUSTED, FULL):
            break
    run.statistics.update(
        method=wishes.method,
        work=work,
        states_checked=method.states_checked,
        slices=work // SLICE,
    )
    if newest is not None:
        run.offer(newest)
    return run.best is not None or run.bound == math.inf or status not in (EXHAUSTED, FULL)


def _continuous(path: Floats, body: Body) -> Floats:
    """Return the path with headings that do not jump by whole turns (discs turn freely)."""
    if body.kind == DISC or len(path) == 1:
        return path
    ends = path[:-1, 2] + path[:-1, 3] * path[:-1, 4]
    turns = np.round((path[1:, 2] - ends) / (2.0 * math.pi))
    out = path.copy()
    out[1:, 2] -= 2.0 * math.pi * np.cumsum(turns)
    return out
