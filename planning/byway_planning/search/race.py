"""
`auto`: the mixture that measured best.

First a race, in growing slices, of lattice searches from both ends, coarse at first and finer
when that does not help. Then, taking turns for good: searches in other corridors, allowed to be
a little worse than the best path because polishing gains some, and polishing of the best path.
Which corridor a path takes decides more than how well it is polished.
"""

import math
from collections.abc import Generator, Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.search.improve import IDLE, Polish, improve_kernel
from byway_planning.search.lattice import (
    EXPANSIONS,
    STATES,
    Lattice,
    advance_lattice_kernel,
    path_of,
    restart,
)
from byway_planning.search.method import EXHAUSTED, FOUND, RUNNING
from byway_planning.search.paths import cost_of, load_course_kernel, path_from
from byway_planning.search.question import Question
from byway_planning.search.trees import ConnectedTrees
from byway_planning.search.workshop import Workshop
from byway_planning.vehicles.body import DISC

Floats = npt.NDArray[np.float64]

#: cell_m, headings, arc_m of the lattices, for a turning radius of 5 m.
COARSE: Final = (1.0, 48, 1.6)
MIDDLE: Final = (0.7, 64, 1.2)
FINE: Final = (0.5, 72, 0.8)
FINEST: Final = (0.3, 96, 0.4)
#: In the order in which they join the race.
LEVELS: Final = (COARSE, MIDDLE, FINE, FINEST)
WEIGHT: Final = 2.0
FIRST_SLICE: Final = 24
SLICE_GROWTH: Final = 1.5
#: Expansions after which each next pair joins the race.
FINER_AFTER: Final = 1000
#: Work of one slice stays below 2 ms.
SLICE_MAX: Final = 300
IDLE_MAX: Final = 400
#: The first path is polished so long before anything else is looked at.
FIRST_IDLE_MAX: Final = 400
#: Lattices and weights that look for other corridors, from both ends each.
OTHERS: Final = ((FINE, 1.3), (FINE, 1.1))
#: How much worse than the best an alternative may be before it is polished.
ALLOWANCE: Final = 1.10
CHANGE_M: Final = 0.5  # a change of direction in the race; the first path should have few
TURN_SLICE: Final = 100
TREE_SLICE: Final = 40


def scale_of(question: Question) -> float:
    """Return how much larger than usual the lattice should be for this vehicle."""
    if question.body.kind == DISC:
        return min(max(question.body.inner_radius_m / 0.6, 0.3), 3.0)
    radius = question.body.turn_radius_m
    return min(max(radius / 5.0, 0.4), 3.0)


@dataclass
class _Runner:
    """One lattice in the race."""

    lattice: Lattice
    backward: bool


class Auto:
    """See the module text; a `Method` that goes on finding better paths."""

    name = "auto"

    def __init__(self, question: Question, workshop: Workshop, first: Floats | None = None) -> None:
        self._q = question
        self._workshop = workshop
        self._lattices: list[Lattice] = []
        self._scale = scale_of(question)
        self._polish = workshop.polish(question.seed)
        self._other = workshop.polish(question.seed + 1)
        self._winner_backward = False
        self._work = 0
        self._states = 0
        self._best = math.inf
        self._share = 0
        self._first = first
        self._turns = self._run()

    @property
    def states_checked(self) -> int:
        return self._states + sum(int(lattice.marks[STATES]) for lattice in self._lattices)

    @cached_property
    def _trees(self) -> ConnectedTrees:
        return ConnectedTrees(self._q)

    @property
    def cost(self) -> float:
        """Cost of the best path so far."""
        return self._best

    @property
    def work(self) -> int:
        """Iterations done so far."""
        return self._work

    def advance(self, iterations: int) -> int:
        """Run slices until so many iterations are done, or a better path is found."""
        until = self._work + iterations
        while self._work < until:
            status = next(self._turns, EXHAUSTED)
            if status != RUNNING:
                return status
        return RUNNING

    def path(self) -> Floats:
        return path_from(self._polish.course)

    # -- the schedule -----------------------------------------------------------------------

    def _run(self) -> Iterator[int]:
        known = self._first is not None and self._keep(self._first)
        if not known and not (yield from self._race()):
            yield EXHAUSTED
            return
        yield from self._improve(self._polish, FIRST_IDLE_MAX)
        others = self._others()
        while True:
            share = max(TURN_SLICE, self._work // 20)
            yield from self._take(others, share)
            yield from self._improve(self._polish, 10**9, share)

    def _take(self, turns: Iterator[int], share: int) -> Iterator[int]:
        until = self._work + share
        while self._work < until:
            status = next(turns, EXHAUSTED)
            if status == EXHAUSTED:
                return
            yield status

    def _lattice(self) -> Lattice:
        self._lattices.append(self._workshop.lattice())
        return self._lattices[-1]

    def _set_up(
        self,
        lattice: Lattice,
        size: tuple[float, int, float],
        weight: float,
        *,
        backward: bool,
        change_m: float,
        bound_m: float = math.inf,
    ) -> None:
        cell_m, headings, arc_m = size
        restart(
            lattice,
            backward=backward,
            start=self._q.start,
            goal=self._q.goal,
            cell_m=cell_m * self._scale,
            headings=headings,
            arc_m=arc_m * self._scale,
            weight=weight,
            change_m=change_m,
            bound_m=bound_m,
        )

    def _advance(self, lattice: Lattice, *, backward: bool, iterations: int) -> int:
        q = self._q
        flood = q.to_start if backward else q.to_goal
        before = int(lattice.marks[EXPANSIONS])
        status = int(advance_lattice_kernel(q.scene, q.body, lattice, flood, q.lengths, iterations))
        # A search that only threw entries away has worked too.
        self._work += max(int(lattice.marks[EXPANSIONS]) - before, 1)
        return status

    def _race(self) -> Generator[int, None, bool]:
        """Find a first path; tell whether there is one."""
        change_m = max(CHANGE_M, self._q.body.direction_change_m)
        waiting = {backward: list(LEVELS) for backward in (False, True)}
        runners: list[_Runner] = []
        size = FIRST_SLICE
        while True:
            due = len(LEVELS) - 1 - self._work // FINER_AFTER
            for backward, levels in waiting.items():
                alone = not any(runner.backward == backward for runner in runners)
                if levels and (alone or len(levels) > due):
                    # An exhausted search says early that its cells are too coarse there.
                    level = levels.pop(-1 if alone and len(levels) < len(LEVELS) else 0)
                    lattice = self._lattice()
                    self._set_up(lattice, level, WEIGHT, backward=backward, change_m=change_m)
                    runners.append(_Runner(lattice, backward))
            if not runners:
                return (yield from self._grow_trees(math.inf))
            for runner in tuple(runners):
                status = self._advance(runner.lattice, backward=runner.backward, iterations=size)
                if status == FOUND and self._keep(path_of(runner.lattice, self._q.body)):
                    self._winner_backward = runner.backward
                    yield FOUND
                    return True
                if status != RUNNING:
                    runners = [other for other in runners if other is not runner]
                yield RUNNING
            size = min(int(size * SLICE_GROWTH), SLICE_MAX)

    def _keep(self, path: Floats) -> bool:
        """Take a first path for the best one, unless it has too many elements to be polished."""
        if not load_course_kernel(path, self._q.body, self._polish.course):
            return False
        self._best = cost_of(self._polish.course)
        return True

    def _improve(self, polish: Polish, idle_max: int, tries: int = 10**9) -> Iterator[int]:
        """Polish a path; the best one tells when it got better."""
        q = self._q
        before = cost_of(polish.course)
        while tries > 0 and polish.marks[IDLE] < idle_max:
            done = int(improve_kernel(q.scene, q.body, polish, min(tries, SLICE_MAX), idle_max))
            self._work += done
            tries -= done
            if polish is self._polish and cost_of(polish.course) < before:
                before = self._best = cost_of(polish.course)
                yield FOUND
            else:
                yield RUNNING

    def _others(self) -> Iterator[int]:
        """Look in other corridors, for ever."""
        first = self._winner_backward
        change_m = self._q.body.direction_change_m
        lattice = self._lattices[0] if self._lattices else self._lattice()
        for size, weight in OTHERS:
            for backward in (first, not first):
                self._set_up(
                    lattice,
                    size,
                    weight,
                    backward=backward,
                    change_m=change_m,
                    bound_m=ALLOWANCE * self._best,
                )
                status = RUNNING
                while status == RUNNING:
                    status = self._advance(lattice, backward=backward, iterations=SLICE_MAX // 3)
                    yield RUNNING
                if status == FOUND:
                    yield from self._adopt(path_of(lattice, self._q.body))
        while True:
            if (yield from self._grow_trees(ALLOWANCE * self._best, load=False)):
                yield from self._adopt(self._trees.path())

    def _grow_trees(self, bound_m: float, *, load: bool = True) -> Generator[int, None, bool]:
        self._trees.restart(bound_m)
        while True:
            status = self._trees.advance(TREE_SLICE)
            self._work += 3 * TREE_SLICE  # a sample costs about three expansions
            if status == FOUND and not load:
                return True
            if status == FOUND and self._keep(self._trees.path()):
                yield FOUND
                return True
            yield RUNNING
            if status != RUNNING:
                self._trees.restart(bound_m)

    def _adopt(self, path: Floats) -> Iterator[int]:
        """Polish an alternative until it idles; keep the better of it and the best."""
        if not load_course_kernel(path, self._q.body, self._other.course):
            return
        self._other.marks[IDLE] = 0
        yield from self._improve(self._other, IDLE_MAX)
        if cost_of(self._other.course) < self._best:
            self._polish, self._other = self._other, self._polish
            self._best = cost_of(self._polish.course)
            yield FOUND
