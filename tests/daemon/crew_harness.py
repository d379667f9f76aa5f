"""A real crew without a front: the template, its processes, and a list of what they said."""

import os
import time
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from bywayd.crew.kinship import adopt_orphans
from bywayd.crew.memory import SiteMemory
from bywayd.runtime.staff import Role, Staff, StaffReports, StaffSettings
from bywayd.runtime.watch import Watch

ROOT = Path(__file__).resolve().parents[2]
STANDIN = "tests.daemon.standin_skills"


class Crew:
    """Turns by hand: `until` polls until something is true, and fails when it takes too long."""

    def __init__(self) -> None:
        # The template is a fresh interpreter and must find the stand-in by its name.
        os.environ["PYTHONPATH"] = str(ROOT)
        adopt_orphans()
        self.memory = SiteMemory.create(64 * 1024 * 1024)
        self.watch = Watch()
        self.heard: list[tuple[Role, int, dict[str, Any]]] = []
        self.losses: list[tuple[Role, int, str]] = []
        self.progress: list[tuple[int, int, str]] = []
        self.warm_count = 0
        self.said: list[str] = []
        self.template_losses: list[str] = []
        self.staff = Staff(
            StaffSettings(STANDIN, nice=10),
            self.memory,
            self.watch,
            StaffReports(
                message=lambda role, number, message: self.heard.append((role, number, message)),
                lost=lambda role, number, why: self.losses.append((role, number, why)),
                progress=lambda done, total, name: self.progress.append((done, total, name)),
                warm=self._count_warm,
                said=self.said.append,
                template_lost=self.template_losses.append,
            ),
        )
        self.staff.start()

    def _count_warm(self) -> None:
        self.warm_count += 1

    def turn(self, timeout_ms: int = 20) -> None:
        for handler in self.watch.wait(0 if self.staff.backlog else timeout_ms):
            handler()
        self.staff.hear_backlog()

    def until(self, holds: Callable[[], Any], within_s: float = 10.0) -> Any:
        end_s = time.monotonic() + within_s
        while not (found := holds()):
            assert time.monotonic() < end_s, f"heard {self.heard[-5:]}, {self.losses}, {self.said}"
            self.turn()
        return found

    def told(self, role: Role, number: int, say: str) -> list[dict[str, Any]]:
        return [m for r, n, m in self.heard if (r, n) == (role, number) and m["say"] == say]

    def hear(self, role: Role, number: int, say: str, within_s: float = 10.0) -> dict[str, Any]:
        """Wait for a message of this kind and return it; the next call wants the next one."""
        message = self.until(lambda: self.told(role, number, say), within_s)[0]
        self.heard.remove((role, number, message))
        return message

    def lost(self, role: Role, number: int, within_s: float = 10.0) -> str:
        return self.until(
            lambda: [why for r, n, why in self.losses if (r, n) == (role, number)], within_s
        )[0]

    def pid(self, role: Role, number: int) -> int:
        member = self.staff.members[role, number]
        self.until(lambda: member.pid is not None)
        assert member.pid is not None
        return member.pid

    # -- the usual orders

    def spawn_surveyor(self, number: int, published: Mapping[str, Any] | None = None) -> dict:
        order: dict[str, Any] = {"do": "begin", "settings": {}, "revision": None}
        if published is not None:
            handle = published["handle"]
            order |= {"revision": published["revision"], "handle": handle, "in_use": [handle]}
        self.staff.spawn("surveyor", number, order)
        return self.hear("surveyor", number, "ready")

    def spawn_worker(self, number: int) -> None:
        self.staff.spawn("worker", number)
        self.hear("worker", number, "ready")

    def apply(self, surveyor: int, batch: int, *layers: str) -> dict[str, Any]:
        self.send_batch(surveyor, batch, *layers)
        return self.hear("surveyor", surveyor, "snapshot")

    def send_batch(self, surveyor: int, batch: int, *layers: str) -> None:
        changes = [{"what": "put", "layer": layer, "body": None} for layer in layers]
        self.staff.put(
            "surveyor",
            surveyor,
            {"do": "apply", "batch": batch, "changes": changes, "at_s": time.monotonic()},
        )

    def plan(
        self, worker: int, job: int, published: Mapping[str, Any], method: str, budget_s: float
    ) -> None:
        self.staff.put("worker", worker, {"do": "plan", **a_job(job, published, method, budget_s)})

    def end(self) -> None:
        self.staff.end()
        self.memory.close()


def a_job(job: int, published: Mapping[str, Any], method: str, budget_s: float) -> dict[str, Any]:
    return {
        "job": job,
        "vehicle": {"model": "car"},
        "start": [0.0, 0.0, 0.0],
        "goal": [5.0, 0.0, 0.0],
        "deadline_ns": time.monotonic_ns() + round(budget_s * 1e9),
        "seed": job,
        "method": method,
        "left_out": [],
        "clearance_m": None,
        "start_speed_mps": 0.0,
        "start_curvature_per_m": 0.0,
        "gap_wanted": 0.0,
        "revision": published["revision"],
        "handle": published["handle"],
    }
