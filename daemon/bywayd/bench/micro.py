"""What the parts of planning cost one by one, in microseconds of CPU."""

import hashlib
import math
from collections.abc import Callable
from dataclasses import dataclass
from statistics import median
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning import Snapshot, plan, verify
from bywayd.bench.cases import Case, Ground, Yard
from bywayd.bench.figures import US, CpuBudget, Figures, Findings, cpu_s
from bywayd.bench.loops import lengths_loop, motions_loop, poses_loop
from bywayd.bench.vehicles import VEHICLES

Floats = npt.NDArray[np.float64]

YARD_M: Final = (70.0, 60.0)
OBSTACLES: Final = 400
ROUNDS: Final = 5


@dataclass(frozen=True)
class MicroSizes:
    """How often each is done in a round."""

    lengths: int = 100_000
    poses: int = 50_000
    motions: int = 10_000
    verifies: int = 40


MICRO_SMALL: Final = MicroSizes(lengths=5_000, poses=2_000, motions=500, verifies=3)


def measure_micro(salt: int, sizes: MicroSizes, findings: Findings) -> Figures:
    """
    Return microseconds of CPU per query, pose, motion and check: medians of five rounds.

    Poses and motions are those of a box among four hundred polygons, drawn anywhere; motions are
    arcs of one to four metres that begin at free poses. `digest` is of their answers.
    """
    rng = np.random.default_rng([salt, 77])
    _, snapshot = _pallets(rng).build()
    body, scene = VEHICLES["shunter"].body(), snapshot.scene()
    queries = _fixed(rng.uniform((-8.0, -8.0, -math.pi), (8.0, 8.0, math.pi), (sizes.lengths, 3)))
    width_m, height_m = YARD_M
    poses = _fixed(rng.uniform((0, 0, -math.pi), (width_m, height_m, math.pi), (sizes.poses, 3)))
    free = np.zeros(sizes.poses, np.uint8)
    poses_loop(scene, body, poses, free)
    starts = poses[free == 1]
    starts = starts[np.arange(sizes.motions) % len(starts)]
    signs = rng.choice([-1.0, 1.0], sizes.motions)
    motions = _fixed(
        np.column_stack(
            [
                starts,
                rng.choice([-1.0, 0.0, 1.0], sizes.motions) / body.turn_radius_m,
                signs * rng.uniform(1.0, 4.0, sizes.motions),
            ]
        )
    )
    clear = np.zeros(sizes.motions, np.uint8)
    total_m = lengths_loop(queries)
    found: Figures = {
        "reeds_shepp_us": _each(lambda: lengths_loop(queries), sizes.lengths),
        "pose_us": _each(lambda: poses_loop(scene, body, poses, free), sizes.poses),
        "motion_us": _each(lambda: motions_loop(scene, body, motions, clear), sizes.motions),
        "poses_free": float(free.mean()),
        "motions_free": float(clear.mean()),
    }
    answers = f"{total_m:.4f} {free.tobytes().hex()} {clear.tobytes().hex()}"
    found["digest"] = hashlib.sha256(answers.encode()).hexdigest()[:16]
    return found | _verify(snapshot, sizes.verifies, findings)


def _each(work: Callable[[], object], count: int) -> float:
    work()
    return median(cpu_s(work) for _ in range(ROUNDS)) / count * US


def _verify(snapshot: Snapshot, count: int, findings: Findings) -> Figures:
    """Time the exact check of one route of some fifty metres among four hundred polygons."""
    case = Case("micro", 0, 0, "shunter", _START, _GOAL, Ground((0.0, 0.0, *YARD_M)))
    outcome = plan(snapshot, case.vehicle, _START, _GOAL, time_left=CpuBudget(0.2), seed=1)
    if outcome.route is None:
        findings.anomalies.append(f"micro: {outcome.kind} between the pallets")
        return {"verify_us": None, "verify_route_m": None, "verify_rows": None}
    route = outcome.route

    def check() -> None:
        wrong = verify(snapshot.solids(), case.vehicle, route.path, route, _START, _GOAL)
        findings.faults.extend(f"micro: verify says: {fault.text}" for fault in wrong)

    check()
    return {
        "verify_us": median(cpu_s(check) for _ in range(count)) * US,
        "verify_route_m": route.length_m,
        "verify_rows": len(route.table),
    }


_START: Final = (4.0, 6.0, 0.0)
_GOAL: Final = (56.0, 50.0, 0.5 * math.pi)


def _pallets(rng: np.random.Generator) -> Ground:
    """Four hundred pallets, but for two corners."""
    width_m, height_m = YARD_M
    yard = Yard(width_m, height_m)
    while len(yard.polygons) < OBSTACLES:
        x, y = float(rng.uniform(0.0, width_m)), float(rng.uniform(0.0, height_m))
        corner = min(math.dist((x, y), _START[:2]), math.dist((x, y), _GOAL[:2]))
        near = any(math.dist(ring.mean(axis=0), (x, y)) < 2.4 for ring in yard.polygons.values())
        if corner > 6.0 and not near:
            side_m = float(rng.uniform(0.2, 0.5))
            yard.block(x, y, side_m, side_m, float(rng.uniform(0.0, math.pi)))
    return yard.ground()


def _fixed(values: Floats) -> Floats:
    kept = np.ascontiguousarray(values, np.float64)
    kept.flags.writeable = False
    return kept
