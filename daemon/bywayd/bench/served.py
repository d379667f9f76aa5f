"""The yard that a daemon of our own serves, and how its workers are kept busy."""

import contextlib
import math
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Final

import byway
from bywayd.bench.cases import Ground, Pose, Rng, Yard

WORKERS: Final = 2
VEHICLE: Final = "shunter"
YARD_M: Final = (70.0, 60.0)
BUSY_S_MAX: Final = 5.0
#: A route of some two hundred rows, between these.
FROM: Final[Pose] = (5.0, 6.0, 0.0)
TO: Final[Pose] = (44.0, 44.0, 0.5 * math.pi)


@contextmanager
def busy(client: byway.Client) -> Iterator[None]:
    """Have all workers at work, on replans that can be bettered for long."""
    asks = [
        client.start_replan(VEHICLE, FROM, TO, 30.0, unit=f"busy-{i}", seed=i)
        for i in range(WORKERS)
    ]
    end_s = time.perf_counter() + BUSY_S_MAX
    while client.health().workers.get("busy", 0) < WORKERS:
        if time.perf_counter() > end_s:
            raise RuntimeError("the workers cannot be kept busy")
        time.sleep(0.005)
    try:
        yield
    finally:
        for ask in asks:
            ask.cancel()
            with contextlib.suppress(byway.BywayError):
                ask.wait()


def served_yard(rng: Rng) -> Ground:
    """Stacks without order, with room around the two poses that are asked for again and again."""
    width_m, height_m = YARD_M
    yard = Yard(width_m, height_m)
    while len(yard.polygons) < 60:
        x, y = float(rng.uniform(0.0, width_m)), float(rng.uniform(0.0, height_m))
        if min(math.dist((x, y), FROM[:2]), math.dist((x, y), TO[:2])) < 7.0:
            continue
        if all(math.dist(ring.mean(axis=0), (x, y)) > 5.5 for ring in yard.polygons.values()):
            yard.block(x, y, 2.4, 1.2, float(rng.uniform(0.0, math.pi)))
    return yard.ground()
