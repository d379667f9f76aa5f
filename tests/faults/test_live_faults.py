"""
The real daemon while everything moves and its processes are killed: nothing leaks, nothing tears.

Sources send scans, tracks and obstacles without a pause, vehicles guard routes and replan, and
workers and surveyors are killed in the middle of it, again and again.
"""

import math
import os
import signal
import threading
import time
from pathlib import Path

import numpy as np
import pytest
import shapely
from tests.daemon.daemon_harness import Daemon, eventually

import byway

#: A wall with one way round it; it stands from the first acknowledgement on.
WALL = [(10.0, -30.0), (12.0, -30.0), (12.0, 8.0), (10.0, 8.0)]
FOOTPRINT = np.array([(-0.6, -0.7), (2.2, -0.7), (2.2, 0.7), (-0.6, 0.7)])
CLEARANCE_M = 0.1
KILLS = 12


@pytest.fixture
def daemon(tmp_path):
    started = Daemon(tmp_path / "daemon", skills="bywayd.crew.trade")
    yield started
    started.end()


def endpoint(daemon: Daemon) -> str:
    return daemon.endpoints["requests"]


def ready(daemon: Daemon) -> None:
    def is_ready() -> bool:
        try:
            with byway.Client(endpoint(daemon)) as client:
                return client.hello().state == "ready"
        except byway.BywayError:
            return False

    eventually(is_ready, within_s=200.0)  # from a cold cache


class Traffic(threading.Thread):
    """Scans, tracks and moved obstacles, as fast as they are acknowledged."""

    def __init__(self, daemon: Daemon) -> None:
        super().__init__(daemon=True)
        self._endpoint = endpoint(daemon)
        self.ending = threading.Event()
        self.acknowledged = 0
        self.faults: list[str] = []

    def run(self) -> None:
        bearings = np.linspace(-3.0, 3.0, 180)
        with byway.Client(self._endpoint, timeout_s=30.0, reconnect_s=30.0) as client:
            client.claim("lidar", decay_s=0.5)
            step = 0
            while not self.ending.is_set():
                step += 1
                x, y = 40.0 + 5.0 * math.cos(step / 9), 40.0 + 5.0 * math.sin(step / 9)
                try:
                    client.scan("lidar", (x, y, 0.1 * step), bearings, np.full(180, 6.0), 20.0)
                    walker = byway.Track(pose=(60.0, step % 40, 0.0), radius_m=0.3,
                                         velocity_mps=(0.0, 1.0), growth_mps=0.2)  # fmt: skip
                    client.track("people", {"walker": walker}, expires_in_s=1.0)
                    client.put("pallets", boxes={f"p{step % 7}": (-50.0, step % 50, 0.3, 1.2, 1.0)})
                except byway.BywayError as fault:
                    self.faults.append(str(fault))
                    continue
                self.acknowledged += 3


def body_hits_wall(table: np.ndarray) -> bool:
    wall = shapely.Polygon(WALL)
    c, s = np.cos(table["heading_rad"]), np.sin(table["heading_rad"])
    x = table["x_m"][:, None] + c[:, None] * FOOTPRINT[:, 0] - s[:, None] * FOOTPRINT[:, 1]
    y = table["y_m"][:, None] + s[:, None] * FOOTPRINT[:, 0] + c[:, None] * FOOTPRINT[:, 1]
    bodies = shapely.polygons(np.stack([x, y], axis=2))
    return bool((shapely.distance(bodies, wall) < CLEARANCE_M - 1e-6).any())


def descriptors(pid: int) -> int:
    return len(list(Path(f"/proc/{pid}/fd").iterdir()))


def kill_one(daemon: Daemon, kind: str) -> None:
    found = [pid for name, pid in daemon.family().items() if name.startswith(kind)]
    if found:
        os.kill(found[0], signal.SIGKILL)


def test_nothing_leaks_and_nothing_tears_while_processes_are_killed(daemon) -> None:
    ready(daemon)
    traffic = Traffic(daemon)
    with byway.Client(endpoint(daemon), timeout_s=30.0, client_id="tug-1") as driver:
        driver.replace_layer("fixed", polygons={"wall": WALL})
        traffic.start()
        answer = driver.replan("tug", (0.0, 0.0, 0.0), (24.0, 0.0, 0.0), 0.2)
        assert answer.kind == "route"
        driver.guard(answer, silence_s=120.0)
        assert answer.route is not None
        place = answer.route.table[2 * len(answer.route.table) // 3]
        memory: list[int] = []
        files: list[int] = []
        front = next(p for n, p in daemon.family().items() if n.startswith("byway-front"))
        for i in range(KILLS):
            ask = driver.start_replan("tug", (0.0, 0.0, 0.0), (24.0, 0.0, 0.0), 0.25, seed=i)
            time.sleep(0.03)
            kill_one(daemon, "byway-work" if i % 3 else "byway-surv")
            answer = ask.wait()
            assert answer.kind == "route", answer
            assert answer.route is not None
            assert not body_hits_wall(answer.route.table)
            health = driver.health()
            memory.append(health.memory_bytes["site"])
            files.append(descriptors(front))
        # Its successors have the site, the guard and the tracks.
        seen = eventually(lambda: (s := driver.site(guards=True)).tracks and s.guards and s)
        assert set(seen.layers["fixed"].polygons) == {"wall"}
        assert np.allclose(seen.layers["fixed"].polygons["wall"], WALL)
        assert seen.guards[0].unit == "tug-1"
        traffic.ending.set()
        traffic.join(60.0)
        assert traffic.faults == []
        assert traffic.acknowledged > 3 * KILLS
        # Whoever was sent to the guarded route after the deaths is still seen there.
        drum = (float(place["x_m"]), float(place["y_m"]), 0.5)
        driver.put("sudden", discs={"drum": drum})
        assert eventually(lambda: driver.progress(0.0).state == "blocked")
        assert set(driver.site().layers["pallets"].polygons) == {f"p{i}" for i in range(7)}
        # Memory and descriptors are what they were when the second half began.
        assert max(memory[KILLS // 2 :]) <= 2 * memory[KILLS // 2]
        assert max(files) <= min(files) + 4
        counts = driver.health().counts
        assert counts["workers_lost_total"] >= KILLS // 2
        assert counts["surveyors_lost_total"] >= 2
