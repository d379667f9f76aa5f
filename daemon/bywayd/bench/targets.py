"""What the figures ought to be, shown beside them."""

from dataclasses import dataclass
from typing import Final


@dataclass(frozen=True)
class FamilyTarget:
    """Of one family: milliseconds to the first route; costs to the best known at 50, 500 ms."""

    first_p50_ms: float
    first_p99_ms: float
    cost_short: tuple[float, float] | None = None  # p50, p90
    cost_full: tuple[float, float] | None = None


FAMILY_TARGETS: Final = {
    "open": FamilyTarget(0.5, 1.0, (1.000, 1.003), (1.000, 1.001)),
    "stacks": FamilyTarget(0.8, 5.0, (1.002, 1.01), (1.000, 1.003)),
    "bay": FamilyTarget(0.4, 1.0, (1.015, 1.04), (1.003, 1.01)),
    "kerb": FamilyTarget(0.6, 1.5, (1.003, 1.01), (1.001, 1.003)),
    "gate": FamilyTarget(2.0, 10.0, (1.001, 1.01), (1.000, 1.003)),
    "gate_forward": FamilyTarget(10.0, 80.0, (1.02, 1.1), (1.005, 1.02)),
    "maze": FamilyTarget(1.5, 5.0, (1.01, 1.03), (1.003, 1.01)),
    "trap": FamilyTarget(0.7, 2.0, (1.001, 1.02), (1.000, 1.002)),
    "big": FamilyTarget(4.0, 10.0, (1.004, 1.01), (1.001, 1.005)),
    "clutter": FamilyTarget(1.2, 8.0, (1.003, 1.02), (1.001, 1.003)),
    "tight_start": FamilyTarget(0.4, 1.0, (1.002, 1.01), (1.001, 1.005)),
    "u_turn": FamilyTarget(0.5, 1.5, (1.006, 1.015), (1.002, 1.008)),
    "sealed": FamilyTarget(0.2, 1.0),
}


@dataclass(frozen=True)
class Target:
    """Of one figure: a text for people, and the number that it stands for."""

    name: str  # "a.b": the figure b inside a
    text: str
    most: float | None = None
    least: float | None = None

    def is_met(self, value: float) -> bool:
        """Is a value as it ought to be?"""
        return (self.most is None or value <= self.most) and (
            self.least is None or value >= self.least
        )


MICRO_TARGETS: Final = (
    Target("reeds_shepp_us", "Reeds-Shepp length, us", most=1.1),
    Target("pose_us", "pose of a box among 400 polygons, us", most=0.4),
    Target("motion_us", "motion of 1 to 4 m there, us"),
    Target("verify_us", "check of a route there, us", most=1000.0),
)
SITE_TARGETS: Final = (
    Target("transform_ms", "transform of 1000 x 1000 cells, ms"),
    Target("patch_to_transform", "patch of 64 x 64 cells, against it", most=0.02),
    Target("put_to_transform", "polygon put, against it", most=0.02),
    Target("move_to_transform", "polygon moved, against it", most=0.02),
    Target("drop_to_transform", "polygon dropped, against it", most=0.02),
    Target("scan_to_transform", "scan of 720 beams, against it"),
    Target("track_to_transform", "track that walks on, against it", most=0.02),
    Target("patch_tenfold", "patch on a site ten times as large", most=1.2),
    Target("move_tenfold", "polygon moved there", most=1.2),
    Target("scan_tenfold", "scan there", most=1.2),
    Target("put_idle_ms.p50", "small change acknowledged, ms, p50"),
    Target("put_busy_ms.p99", "the same, workers busy, p99", most=5.0),
    Target("patch_busy_ms.p99", "patch, workers busy, ms, p99", most=5.0),
    Target("durable_busy_ms.p99", "change of a durable layer, workers busy, ms, p99", most=50.0),
    Target("updates_per_s", "small changes a second, workers busy", least=500.0),
    Target("alert_ms.p50", "alert after the acknowledgement, 50 guards, ms, p50"),
    Target("alert_ms.p99", "the same, p99", most=5.0),
    Target("alerts_missed", "alerts that did not come", most=0.0),
    Target("square_kilometre.load_s", "square kilometre, 5,000 stacks: load, s", most=5.0),
    Target("square_kilometre.memory_mb", "its memory, MB", most=600.0),
    Target("square_kilometre.first_ms.p50", "first route there, ms, p50", most=20.0),
)
SERVING_TARGETS: Final = (
    Target("start_to_ready_s", "start to ready, kernels cached, s", most=3.0),
    Target("hello_ipc_us.p50", "hello over ipc, us, p50"),
    Target("hello_to_echo_ipc", "hello against the bare echo, ipc", most=2.0),
    Target("hello_to_echo_tcp", "the same, TCP", most=2.0),
    Target("hello_p99_busy_to_idle", "hello p99, workers busy against idle", most=5.0),
    Target("replan_plan_ms", "replan: planning it here, ms"),
    Target("replan_rows", "rows of its route"),
    Target("replan_overhead_us.p50", "what the daemon adds, us, p50"),
    Target("replan_overhead_to_echo", "that against the bare echo", most=6.0),
    Target("replan_overhead_p99_busy_to_idle", "that, p99, busy against idle", most=5.0),
    Target("replans_per_s", "replans a second, first routes"),
    Target("deadline_misses", "answers that left too late"),
    Target("kills_in_time", "killed worker: answered in time", least=1.0),
    Target("replaced_ms.p50", "killed worker: replaced after, ms, p50", most=50.0),
    Target("front_mb", "memory of the front, MB", most=60.0),
    Target("worker_private_mb", "private memory of a worker, MB", most=30.0),
)
#: At this share of capacity: the share of all replans that are answered in time, at least; above
#: capacity, of those that could be.
IN_TIME_TARGET: Final = 0.999
OVERLOADED_TARGET: Final = 0.9
