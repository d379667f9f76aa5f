"""What becomes of a replan whose worker is killed, and how soon there is another worker."""

import os
import signal
import time
from typing import Final

import byway
from bywayd.bench.child import Child
from bywayd.bench.figures import MS, Figures, Findings, spread

BUDGET_S: Final = 0.15
#: When the worker is killed, so that a hundred milliseconds are left.
KILLED_AFTER_S: Final = 0.05
REPLACED_S_MAX: Final = 5.0


def crashes(
    daemon: Child, client: byway.Client, workers: int, count: int, findings: Findings
) -> Figures:
    """Kill a worker at work, several times."""
    replaced_s: list[float] = []
    in_time = attempts = 0
    for i in range(count):
        asks = [
            client.start_replan(
                "shunter", (5.0, 6.0, 0.0), (44.0, 44.0, 1.57), BUDGET_S, unit=f"crash-{i}-{k}"
            )
            for k in range(workers)
        ]
        time.sleep(KILLED_AFTER_S)
        before = set(daemon.processes("byway-work"))
        os.kill(min(before), signal.SIGKILL)  # a child of a child of ours, by its number
        killed_s = time.perf_counter()
        replaced_s.append(_until_replaced(daemon, client, before, workers) - killed_s)
        for ask in asks:
            answer = ask.wait()
            in_time += answer.kind == "route" and answer.total_s <= BUDGET_S
            attempts = max(attempts, answer.attempts)
    if in_time < count * workers:
        late = count * workers - in_time
        findings.anomalies.append(f"serving: {late} replans without a route in time after a kill")
    return {
        "kills": count,
        "kills_in_time": in_time / max(1, count * workers),
        "kills_attempts_max": attempts,
        "replaced_ms": spread(replaced_s, MS),
    }


def _until_replaced(daemon: Child, client: byway.Client, before: set[int], workers: int) -> float:
    """Return when there were as many workers as before, and one of them new and ready."""
    end_s = time.perf_counter() + REPLACED_S_MAX
    while time.perf_counter() < end_s:
        now = client.health().workers
        ready = now.get("idle", 0) + now.get("busy", 0)
        if ready == workers and set(daemon.processes("byway-work")) - before:
            return time.perf_counter()
    raise RuntimeError(f"a killed worker was not replaced within {REPLACED_S_MAX} s")
