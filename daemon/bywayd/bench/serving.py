"""
How a daemon answers: what it adds to planning, what it stands, what happens when a worker dies.

A daemon of our own is started as a child and asked through the public client, as anybody would.
Times here are of the wall clock, so they are compared within one run: with a bare echo over the
same transport, with planning in this process, with the same thing while the workers are busy.
"""

import math
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from statistics import median
from typing import Final

import numpy as np

import byway
from byway_planning import plan
from bywayd.bench.cases import Ground, Pose, Rng
from bywayd.bench.child import Child, child, memory_mb
from bywayd.bench.crashes import crashes
from bywayd.bench.echo import Echo, echo
from bywayd.bench.figures import (
    MS,
    US,
    Figures,
    Findings,
    Progress,
    quantile,
    ratio,
    spread,
    wall_s,
)
from bywayd.bench.load import capacity, stage
from bywayd.bench.served import FROM, TO, VEHICLE, WORKERS, busy, served_yard
from bywayd.bench.vehicles import VEHICLES

#: A first route is good enough for these.
GAP_ANY: Final = 0.95


@dataclass(frozen=True)
class ServingSizes:
    """How much is measured."""

    trips: int = 400
    replans: int = 80
    capacity_s: float = 1.5
    stages: tuple[float, ...] = (0.7, 1.5, 3.0)
    stage_s: float = 2.5
    crashes: int = 5


SERVING_SMALL: Final = ServingSizes(
    trips=20,
    replans=4,
    capacity_s=0.2,
    stages=(0.7,),
    stage_s=0.3,
    crashes=1,
)


def measure_serving(
    salt: int, sizes: ServingSizes, findings: Findings, progress: Progress
) -> Figures:
    """Return the figures of a daemon with two workers in a yard with stacks."""
    rng = np.random.default_rng([salt, 99])
    ground = served_yard(rng)
    told: Figures = {"workers": WORKERS}
    with (
        tempfile.TemporaryDirectory(prefix="byway-bench-") as name,
        child(Path(name), WORKERS, ground.limits_m) as daemon,
    ):
        told["start_to_ready_s"] = daemon.wait_ready()
        progress(f"daemon: ready after {told['start_to_ready_s']:.1f} s")
        with byway.Client(daemon.endpoint, client_id="bench") as client:
            client.replace_layer("stacks", polygons=ground.polygons)
            steps: list[tuple[str, Callable[[], Figures]]] = [
                ("round trips", lambda: _round_trips(daemon, client, ground, Path(name), sizes)),
                ("load", lambda: _load(client, ground, rng, sizes, progress)),
                ("crashes", lambda: crashes(daemon, client, WORKERS, sizes.crashes, findings)),
                ("memory", lambda: _memory(daemon)),
            ]
            for step, measure in steps:
                began_s = time.perf_counter()
                told |= measure()
                progress(f"daemon, {step}: {time.perf_counter() - began_s:.1f} s")
            counts = client.health().counts
            told["deadline_misses"] = counts.get("answers_late_total", 0)
            told["answers"] = sum(n for k, n in counts.items() if k.startswith("answers_"))
    return told


def _round_trips(
    daemon: Child, client: byway.Client, ground: Ground, folder: Path, sizes: ServingSizes
) -> Figures:
    """Hello and replans against the echo, idle and with busy workers."""
    with echo(f"ipc://{folder}/echo") as bare:
        told = _hellos("ipc", client, bare, sizes.trips)
    told |= _replans(client, ground, told["echo_ipc_us"]["p50"] / US, sizes.replans)
    with byway.Client(daemon.tcp_endpoint()) as over_tcp, echo("tcp://127.0.0.1:0") as bare:
        told |= _hellos("tcp", over_tcp, bare, sizes.trips)
    idle_s = [wall_s(client.hello) for _ in range(sizes.trips)]
    with byway.Client(daemon.endpoint) as other, busy(other):
        busy_s = [wall_s(client.hello) for _ in range(sizes.trips)]
    told["hello_busy_us"] = spread(busy_s, US)
    told["hello_p99_busy_to_idle"] = ratio(quantile(busy_s, 0.99), quantile(idle_s, 0.99))
    return told


def _hellos(transport: str, client: byway.Client, bare: Echo, trips: int) -> Figures:
    client.hello()
    bare.trip()
    # In turns, so that whatever else the machine does falls on both.
    pairs = [(wall_s(bare.trip), wall_s(client.hello)) for _ in range(trips)]
    echoes_s, hellos_s = [p[0] for p in pairs], [p[1] for p in pairs]
    return {
        f"echo_{transport}_us": spread(echoes_s, US),
        f"hello_{transport}_us": spread(hellos_s, US),
        f"hello_to_echo_{transport}": ratio(quantile(hellos_s, 0.5), quantile(echoes_s, 0.5)),
    }


def _replans(client: byway.Client, ground: Ground, echo_s: float, count: int) -> Figures:
    """What a replan costs beyond planning the same in this process."""
    _, snapshot = ground.build()
    vehicle = VEHICLES[VEHICLE]

    def here() -> None:
        plan(snapshot, vehicle, FROM, TO, time_left=lambda: 1.0, seed=1, gap_wanted=GAP_ANY)

    rows: list[int] = []

    def there() -> float:
        before_s = time.perf_counter()
        answer = client.replan(VEHICLE, FROM, TO, 0.5, unit="trip", seed=1, gap_wanted=GAP_ANY)
        took_s = time.perf_counter() - before_s
        rows.append(0 if answer.route is None else len(answer.route.table))
        return took_s - answer.waited_s

    for _ in range(3):
        here()
        there()
    found = [(wall_s(here), there()) for _ in range(count)]
    plan_s = median(took_s for took_s, _ in found)
    with busy(client):
        busy_s = [there() - plan_s for _ in range(count)]
    idle_s = [took_s - plan_s for _, took_s in found]
    return {
        "replan_plan_ms": plan_s * MS,
        "replan_rows": int(median(rows)),
        "replan_overhead_us": spread(idle_s, US),
        "replan_overhead_to_echo": ratio(quantile(idle_s, 0.5), echo_s),
        "replan_overhead_busy_us": spread(busy_s, US),
        "replan_overhead_p99_busy_to_idle": ratio(quantile(busy_s, 0.99), quantile(idle_s, 0.99)),
    }


def _load(
    client: byway.Client, ground: Ground, rng: Rng, sizes: ServingSizes, progress: Progress
) -> Figures:
    """Replans a second, and what comes of more or less than that."""
    pairs = _pairs(ground, rng)
    most = capacity(client, VEHICLE, pairs, sizes.capacity_s, at_once=2 * WORKERS, gap=GAP_ANY)
    told: Figures = {"replans_per_s": most, "load": []}
    for share in sizes.stages:
        told["load"].append(
            {"share": share, **stage(client, VEHICLE, pairs, share * most, sizes.stage_s, most)}
        )
        progress(f"daemon, {share:g} of capacity: done")
    return told


def _pairs(ground: Ground, rng: Rng) -> list[tuple[Pose, Pose]]:
    """Return questions: starts and goals with room."""
    width_m, height_m = ground.limits_m[2:]
    middles = np.array([ring.mean(axis=0) for ring in ground.polygons.values()])
    poses: list[Pose] = []
    while len(poses) < 64:
        x, y, heading_rad = rng.uniform(
            (4.0, 4.0, -math.pi), (width_m - 4.0, height_m - 4.0, math.pi)
        )
        if np.hypot(*(middles - (x, y)).T).min() > 4.2:
            poses.append((float(x), float(y), float(heading_rad)))
    return list(zip(poses[::2], poses[1::2], strict=True))


def _memory(daemon: Child) -> Figures:
    (front,) = daemon.processes("byway-front")
    workers = [memory_mb(pid, private=True) for pid in daemon.processes("byway-work")]
    return {
        "front_mb": memory_mb(front, private=False),
        "worker_private_mb": max(workers, default=None),
    }
