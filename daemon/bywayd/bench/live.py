"""The site as a daemon of our own serves it: acknowledgements, changes a second, alerts."""

import math
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np

import byway
from bywayd.bench.alerts import alerts
from bywayd.bench.cases import Ground, Rng, Yard
from bywayd.bench.child import child
from bywayd.bench.figures import Figures, Progress
from bywayd.bench.served import TO, WORKERS
from bywayd.bench.updates import updates

SIDE_M: Final = 200.0
STACKS: Final = 150
#: Where changes are made and no stack stands, so that they block nobody: x and y up to this.
FREE_M: Final = 40.0


@dataclass(frozen=True)
class LiveSizes:
    """How much is measured."""

    updates: int = 100
    updates_s: float = 1.5
    guards: int = 50
    alerts: int = 200


LIVE_FULL: Final = LiveSizes()
LIVE_SMALL: Final = LiveSizes(updates=4, updates_s=0.1, guards=2, alerts=2)


def measure_live(salt: int, sizes: LiveSizes, progress: Progress) -> Figures:
    """Return the figures of a daemon with two workers on a yard of 200 x 200 m."""
    rng = np.random.default_rng([salt, 66])
    ground = _yard(rng)
    told: Figures = {}
    with (
        tempfile.TemporaryDirectory(prefix="byway-bench-") as name,
        child(Path(name), WORKERS, ground.limits_m) as daemon,
    ):
        daemon.wait_ready()
        with byway.Client(daemon.endpoint, client_id="bench") as client:
            client.replace_layer("stacks", polygons=ground.polygons)
            steps: list[tuple[str, Callable[[], Figures]]] = [
                ("updates", lambda: updates(daemon.endpoint, rng, sizes.updates, sizes.updates_s)),
                ("alerts", lambda: alerts(daemon.endpoint, rng, SIDE_M, sizes)),
            ]
            for step, measure in steps:
                began_s = time.perf_counter()
                told |= measure()
                progress(f"site, {step}: {time.perf_counter() - began_s:.1f} s")
    return told


def _yard(rng: Rng) -> Ground:
    yard = Yard(SIDE_M, SIDE_M)
    while len(yard.polygons) < STACKS:
        x, y = (float(v) for v in rng.uniform(0.0, SIDE_M, 2))
        if max(x, y) > FREE_M and math.dist((x, y), TO[:2]) > 8.0:
            yard.block(x, y, 2.4, 1.2, float(rng.uniform(0.0, math.pi)))
    return yard.ground()
