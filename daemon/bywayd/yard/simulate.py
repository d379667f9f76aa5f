"""
The simulated yard as a process: the world, driven by the wall clock, and a desk to the daemon.

It prints one JSON object a line, for whoever started it: `progress` about once a second, `report`
at the end. Simulated time is wall time. A step that comes late is made up for at once, with
the same length; what keeps vehicles apart does not depend on when it is computed.
"""

import contextlib
import gc
import json
import signal
import sys
import time
from collections.abc import Iterator, Mapping
from dataclasses import asdict
from pathlib import Path
from typing import Any, Final

from bywayd.yard.desk import LiveDesk
from bywayd.yard.report import Report, draw, make_report
from bywayd.yard.scene import ROUNDS
from bywayd.yard.world import STEP_S, World

PROGRESS_EVERY_S: Final = 1.0
#: After a pause of the whole process (a suspended machine) time is not made up for.
CATCH_UP_S_MAX: Final = 1.0


def simulate(
    endpoint: str, seconds: float, seed: int, picture: Path | None, keys: Path | None = None
) -> Report:
    """Run the yard for so many seconds against a daemon, and report."""
    desk = LiveDesk(endpoint, [round_.unit for round_ in ROUNDS], keys)
    world = World(desk.vehicles(), desk, seed)
    desk.open(world.claims)
    # What exists now stays; the collector need not go through it in the middle of a step.
    gc.collect()
    gc.freeze()
    try:
        late_steps_s = _run(world, desk, seconds)
    finally:
        desk.close()
    report = make_report(
        world,
        desk.asked,
        revision=desk.revision,
        faults=desk.faults,
        late_steps_s=late_steps_s,
        heard=desk.heard,
    )
    if picture is not None:
        draw(world, report, picture)
    return report


def _run(world: World, desk: LiveDesk, seconds: float) -> float:
    """Return by how much the latest step was late."""
    began_s = time.monotonic()
    next_progress_s = latest_s = 0.0
    with _interrupts() as interrupted:
        while world.now_s < seconds and not interrupted:
            behind_s = time.monotonic() - began_s - world.now_s
            latest_s = max(latest_s, behind_s)
            if behind_s > CATCH_UP_S_MAX:
                began_s += behind_s - STEP_S
            elif behind_s < STEP_S:
                time.sleep(STEP_S - behind_s)
            world.step()
            if world.now_s >= next_progress_s:
                next_progress_s = world.now_s + PROGRESS_EVERY_S
                _say({"progress": _progress(world, desk)})
    return latest_s


def _progress(world: World, desk: LiveDesk) -> dict[str, Any]:
    recent = [1e3 * one.first_s for one in desk.asked[-20:] if one.first_s == one.first_s]
    return {
        "seconds": round(world.now_s, 1),
        "deliveries": world.deliveries,
        "replans": len(desk.asked),
        "first_ms": round(sorted(recent)[len(recent) // 2], 2) if recent else None,
        "collisions": len(world.referee.collisions),
        "packs": len(world.crane.packs),
        "units": {name: unit.doing for name, unit in world.units.items()},
    }


@contextlib.contextmanager
def _interrupts() -> Iterator[list[int]]:
    """Note SIGINT and SIGTERM instead of dying of them: a run cut short still reports."""
    seen: list[int] = []
    before = {
        number: signal.signal(number, lambda n, _: seen.append(n))
        for number in (signal.SIGINT, signal.SIGTERM)
    }
    try:
        yield seen
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def _say(line: Mapping[str, Any]) -> None:
    sys.stdout.write(json.dumps(line) + "\n")
    sys.stdout.flush()


def main(arguments: list[str]) -> None:
    """Entry of the process: endpoint, seconds, seed, and paths or empty texts: picture, keys."""
    endpoint, seconds, seed, *texts = arguments
    picture, keys = (Path(text) if text else None for text in texts)
    report = simulate(endpoint, float(seconds), int(seed), picture, keys)
    _say({"report": {**asdict(report), "went_wrong": report.went_wrong()}})


if __name__ == "__main__":
    main(sys.argv[1:])
