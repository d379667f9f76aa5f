"""
The search methods side by side: how often, how soon and how well each answers.

Every method gets the same cases and the same CPU time, alone, and keeps improving for as long as
it can; those that end with their first route are shown as they ended. Costs are relative to the
best that any method found for the case in this run.
"""

import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Final

from byway_planning import METHODS, Outcome, Snapshot, Vehicle, plan
from bywayd.bench.cases import Case, Pose
from bywayd.bench.families_tight import SEALED, draw
from bywayd.bench.figures import MS, CpuBudget, Figures, Progress, quantile, spread
from bywayd.bench.planning import Sites

#: Moments at which the best cost so far is taken, seconds of CPU.
MOMENTS_S: Final = (0.003, 0.01, 0.03, 0.1, 0.3, 1.0, 3.0)
SEED: Final = 1


@dataclass(frozen=True)
class MethodSizes:
    """How much is measured."""

    cases: int = 3
    budget_s: float = 1.0


METHODS_FULL: Final = MethodSizes()
METHODS_SMALL: Final = MethodSizes(cases=1, budget_s=0.03)


@dataclass(frozen=True)
class _Run:
    """When one method had which cost."""

    steps: tuple[tuple[float, float], ...]  # seconds, cost

    def cost_at(self, moment_s: float) -> float:
        """Return the best cost by a moment; inf before the first route."""
        return min((cost for at_s, cost in self.steps if at_s <= moment_s), default=math.inf)

    @property
    def first_s(self) -> float:
        return self.steps[0][0] if self.steps else math.inf

    @property
    def best(self) -> float:
        return self.cost_at(math.inf)


def measure_methods(
    families: Iterable[str], salt: int, sizes: MethodSizes, progress: Progress
) -> Figures:
    """
    Return for each method its figures over all cases of all families.

    Sealed goals are left out: no sampling method ever says that there is no route.
    """
    sites = Sites()
    cases: list[Case] = []
    runs: dict[str, list[_Run]] = {name: [] for name in METHODS}
    for family in families:
        for number in range(0 if family == SEALED else sizes.cases):
            case = draw(family, salt, number)
            _, snapshot = sites.of(case)
            cases.append(case)
            for method, found in runs.items():
                ask = (snapshot, case.vehicle, case.start, case.goal)
                found.append(_one(*ask, method, sizes.budget_s))
        progress(f"methods: {family}")
    return tabled(runs, sizes.budget_s) | {"families": sorted({case.family for case in cases})}


def measure_one(
    snapshot: Snapshot, vehicle: Vehicle, start: Pose, goal: Pose, budget_s: float
) -> Figures:
    """Return the same for one question of the user's."""
    runs = {name: [_one(snapshot, vehicle, start, goal, name, budget_s)] for name in METHODS}
    return tabled(runs, budget_s)


def _one(
    snapshot: Snapshot, vehicle: Vehicle, start: Pose, goal: Pose, method: str, budget_s: float
) -> _Run:
    budget = CpuBudget(budget_s)
    steps: list[tuple[float, float]] = []

    def note(better: Outcome) -> None:
        steps.append((budget_s - budget(), better.cost))

    plan(snapshot, vehicle, start, goal, time_left=budget, seed=SEED, method=method, on_better=note)
    return _Run(tuple(steps))


def tabled(runs: dict[str, list[_Run]], budget_s: float) -> Figures:
    """Return figures by method: solved, first routes, and costs to the best known over time."""
    count = len(next(iter(runs.values())))
    best = [min(found[i].best for found in runs.values()) for i in range(count)]
    known = [i for i in range(count) if best[i] < math.inf]
    moments = [moment_s for moment_s in MOMENTS_S if moment_s <= budget_s] or [budget_s]
    told: Figures = {"cases": count, "moments_ms": [moment_s * MS for moment_s in moments]}
    told["methods"] = {
        name: {
            "solved": sum(run.best < math.inf for run in found) / max(1, count),
            "first_ms": spread([run.first_s for run in found], MS),
            "cost_to_best": [
                quantile([found[i].cost_at(moment_s) / best[i] for i in known], 0.5)
                for moment_s in moments
            ],
            "solved_by": [
                sum(run.cost_at(moment_s) < math.inf for run in found) / max(1, count)
                for moment_s in moments
            ],
        }
        for name, found in runs.items()
    }
    return told
