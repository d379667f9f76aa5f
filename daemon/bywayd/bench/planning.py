"""
How well and how fast `plan` answers, family by family.

Times are CPU of this process, budgets too. First routes are measured on many cases, on a revision
that nothing is known of yet (fresh) and once more on the same one (known); costs on fewer, with
whole budgets. A digest of answers whose work is bounded by iterations, not by time, tells whether
a change of the code changed an answer.
"""

import hashlib
import math
import time
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from statistics import median
from typing import Final

from byway_planning import Memory, Outcome, Snapshot, plan, verify
from bywayd.bench.cases import Case
from bywayd.bench.families_tight import SEALED, draw
from bywayd.bench.figures import MS, US, CpuBudget, Figures, Findings, Progress, quantile, spread

#: "Solved" means a route within this.
SOLVED_S: Final = 0.1
#: Iterations of one run for the digest, and its cases: the same in every mode, so that the digest
#: of a small run can be compared with that of a long one.
DIGEST_WORK: Final = 600
DIGEST_CASES: Final = 3
SEED: Final = 1
OTHER_SEED: Final = 2
#: A goal may be missed by a millimetre, and the bound is of routes that end exactly there.
GOAL_SLACK_M: Final = 0.002


@dataclass(frozen=True)
class Sizes:
    """How much is measured."""

    firsts: int = 100
    costs: int = 10
    first_budget_s: float = 0.3
    short_s: float = 0.05
    full_s: float = 0.5
    #: A much longer run with another seed, for a better idea of the best route; 0 for none.
    long_s: float = 0.0


SMALL: Final = Sizes(firsts=3, costs=1, first_budget_s=0.05, short_s=0.01, full_s=0.04)


class Sites:
    """The site of the last case: neighbours in a family may share one."""

    def __init__(self) -> None:
        self._of = b""
        self._made: tuple[Memory, Snapshot] | None = None

    def of(self, case: Case) -> tuple[Memory, Snapshot]:
        """Return the memory and a snapshot of the site of a case."""
        key = case.ground.to_bytes()
        if self._made is None or key != self._of:
            self._of, self._made = key, case.ground.build()
        return self._made


@dataclass
class _Notes:
    """What was seen of one family."""

    fresh_s: list[float] = field(default_factory=list)
    known_s: list[float] = field(default_factory=list)
    short_to_best: list[float] = field(default_factory=list)
    full_to_best: list[float] = field(default_factory=list)
    short_to_bound: list[float] = field(default_factory=list)
    full_to_bound: list[float] = field(default_factory=list)
    bound_to_best: list[float] = field(default_factory=list)
    states_per_s: list[float] = field(default_factory=list)
    verify_s: list[float] = field(default_factory=list)
    rejected: int = 0


def measure_planning(
    families: Iterable[str], salt: int, sizes: Sizes, findings: Findings, progress: Progress
) -> Figures:
    """Return the figures of families by their names."""
    found = {}
    for family in families:
        began_s = time.perf_counter()
        found[family] = _family(family, salt, sizes, findings)
        progress(f"{family}: {time.perf_counter() - began_s:.1f} s")
    return found


def digest_of(families: Iterable[str], salt: int) -> str:
    """
    Return a digest of answers, the same for the same families and salt on one build and CPU type.

    Costs are rounded to a micrometre; the work is bounded by iterations.
    """
    total = hashlib.sha256()
    sites = Sites()
    for family in families:
        for number in range(DIGEST_CASES):
            case = draw(family, salt, number)
            _, snapshot = sites.of(case)
            outcome = plan(
                snapshot,
                case.vehicle,
                case.start,
                case.goal,
                time_left=lambda: 1.0,
                seed=SEED,
                work_max=DIGEST_WORK,
            )
            rows = 0 if outcome.route is None else len(outcome.route.table)
            total.update(f"{case.digest()} {outcome.kind} {outcome.cost:.6f} {rows};".encode())
    return total.hexdigest()[:16]


def _family(family: str, salt: int, sizes: Sizes, findings: Findings) -> Figures:
    notes, sites = _Notes(), Sites()
    for number in range(max(sizes.firsts, sizes.costs)):
        case = draw(family, salt, number)
        memory, snapshot = sites.of(case)
        if number < sizes.firsts:
            fresh = Snapshot.attach(memory, snapshot.handle)
            notes.fresh_s.append(_first_s(case, fresh, sizes, notes, findings))
            notes.known_s.append(_first_s(case, fresh, sizes, notes, findings))
        if number < sizes.costs and not case.sealed:
            _costs(case, snapshot, sizes, notes, findings)
    solved = sum(first_s <= SOLVED_S for first_s in notes.known_s)
    return {
        "cases": len(notes.known_s),
        "solved": solved / max(1, len(notes.known_s)),
        "first_known_ms": spread(notes.known_s, MS),
        "first_fresh_ms": spread(notes.fresh_s, MS),
        "cost_cases": len(notes.full_to_bound),
        "short_ms": sizes.short_s * MS,
        "full_ms": sizes.full_s * MS,
        "cost_short_to_best": spread(notes.short_to_best),
        "cost_full_to_best": spread(notes.full_to_best),
        "cost_short_to_bound": spread(notes.short_to_bound),
        "cost_full_to_bound": spread(notes.full_to_bound),
        "bound_to_best": quantile(notes.bound_to_best, 0.5),
        "states_per_s": median(notes.states_per_s) if notes.states_per_s else None,
        "verify_us": spread(notes.verify_s, US),
        "not_proved": sum(map(math.isinf, notes.known_s)) if family == SEALED else 0,
        "rejected": notes.rejected,
        "digest": digest_of([family], salt),
    }


def _first_s(
    case: Case, snapshot: Snapshot, sizes: Sizes, notes: _Notes, findings: Findings
) -> float:
    """Return CPU seconds to the first route, or to the proof that there is none."""
    # Nothing comes after a proof, and it comes at once or not at all.
    budget = CpuBudget(min(SOLVED_S, sizes.first_budget_s) if case.sealed else sizes.first_budget_s)
    outcome = _planned(case, snapshot, budget, SEED, findings, notes, budget.end)
    if outcome.kind == "no_route" and case.sealed:
        return float(outcome.statistics["proved_s"])  # then it looks for what would have to move
    if case.sealed:
        return math.inf
    if outcome.first_s is None:
        findings.anomalies.append(
            f"{case.name}: {outcome.kind} after {sizes.first_budget_s * MS:g} ms"
        )
        return math.inf
    return outcome.first_s


def _costs(case: Case, snapshot: Snapshot, sizes: Sizes, notes: _Notes, findings: Findings) -> None:
    """Note costs after both budgets, relative to the bound and to the best that any run found."""
    short = _planned(case, snapshot, CpuBudget(sizes.short_s), SEED, findings, notes)
    before_s = time.process_time()
    full = _planned(case, snapshot, CpuBudget(sizes.full_s), SEED, findings, notes)
    took_s = time.process_time() - before_s
    runs = [short, full]
    if sizes.long_s > 0.0:
        budget = CpuBudget(sizes.long_s)
        runs.append(_planned(case, snapshot, budget, OTHER_SEED, findings, notes))
    if full.cost > short.cost * (1.0 + 1e-9):
        findings.faults.append(
            f"{case.name}: cost {full.cost:.6f} after {sizes.full_s * MS:g} ms, but "
            f"{short.cost:.6f} after {sizes.short_s * MS:g} ms"
        )
    states = full.statistics.get("states_checked", 0)
    if isinstance(states, int) and states:
        notes.states_per_s.append(states / took_s)
    best, bound = min(run.cost for run in runs), max(run.bound for run in runs)
    if not math.isfinite(best):
        findings.anomalies.append(f"{case.name}: {full.kind} after {sizes.full_s * MS:g} ms")
        notes.short_to_best.append(math.inf)
        notes.full_to_best.append(math.inf)
        return
    if bound > best + GOAL_SLACK_M:
        findings.faults.append(f"{case.name}: a route of {best:.6f}, below the bound {bound:.6f}")
    notes.short_to_best.append(short.cost / best)
    notes.full_to_best.append(full.cost / best)
    if bound > 0.0:
        notes.short_to_bound.append(short.cost / bound)
        notes.full_to_bound.append(full.cost / bound)
        notes.bound_to_best.append(bound / best)


def _planned(
    case: Case,
    snapshot: Snapshot,
    budget: CpuBudget,
    seed: int,
    findings: Findings,
    notes: _Notes,
    on_better: object = None,
) -> Outcome:
    """Plan, check what comes back once more, and note what should not have happened."""
    outcome = plan(
        snapshot,
        case.vehicle,
        case.start,
        case.goal,
        time_left=budget,
        seed=seed,
        on_better=budget.end if on_better is not None else None,
    )
    rejected = outcome.statistics.get("rejected", 0)
    if rejected:
        notes.rejected += int(rejected)
        why = outcome.statistics.get("rejected_why", "")
        findings.anomalies.append(f"{case.name}: {rejected} routes turned down, seed {seed}: {why}")
    if outcome.route is not None:
        if case.sealed:
            findings.faults.append(f"{case.name}: a route where there is none")
        _checked(case, snapshot, outcome, findings, notes)
    elif outcome.kind == "no_route" and not case.sealed:
        findings.faults.append(f"{case.name}: no_route, but there is a way")
    elif outcome.kind.endswith("_blocked"):
        findings.faults.append(f"{case.name}: {outcome.kind}, but there is room")
    return outcome


def _checked(
    case: Case, snapshot: Snapshot, outcome: Outcome, findings: Findings, notes: _Notes
) -> None:
    if outcome.route is None:
        return
    before_s = time.process_time()
    wrong: Sequence[object] = verify(
        snapshot.solids(),
        case.vehicle,
        outcome.route.path,
        outcome.route,
        case.start,
        case.goal,
        clearance_m=case.vehicle.clearance_m,
    )
    notes.verify_s.append(time.process_time() - before_s)
    findings.faults.extend(f"{case.name}: verify says: {fault}" for fault in wrong)
