"""From sending a change of the site to its acknowledgement: then it is visible."""

import threading
import time
from contextlib import nullcontext
from typing import Final

import numpy as np

import byway
from bywayd.bench.cases import CELL_M, Rng
from bywayd.bench.figures import MS, Figures, ratio, spread, wall_s
from bywayd.bench.served import busy

#: Sources that change the site at the same time; each waits for one acknowledgement at a time.
SOURCES: Final = 8
PATCH_CELLS: Final = 64
#: Changes are made between these, x and y, so that they block no start and no goal.
AWAY_M: Final = (15.0, 30.0)


def updates(endpoint: str, rng: Rng, count: int, seconds: float) -> Figures:
    """Return how long small changes and patches take, workers idle and busy, and how many go."""
    told: Figures = {}
    with byway.Client(endpoint) as client, byway.Client(endpoint) as other:
        for state in ("idle", "busy"):
            with busy(other) if state == "busy" else nullcontext():
                told |= _one_by_one(client, rng, count, state)
        for kind in ("put", "patch"):
            one, two = told[f"{kind}_idle_ms"]["p99"], told[f"{kind}_busy_ms"]["p99"]
            told[f"{kind}_p99_busy_to_idle"] = ratio(two, one)
        with busy(other):
            told["updates_per_s"] = _many(endpoint, seconds)
        client.replace_layer("live")
        client.replace_layer("seen")
        client.replace_layer("kept")
    return told


def _one_by_one(client: byway.Client, rng: Rng, count: int, state: str) -> Figures:
    def put() -> None:
        x, y = rng.uniform(*AWAY_M, 2)
        client.put("live", polygons={"crate": _crate(float(x), float(y))})

    def durable() -> None:
        x, y = rng.uniform(*AWAY_M, 2)
        client.put("kept", polygons={"crate": _crate(float(x), float(y))})

    def patch() -> None:
        cells = (rng.uniform(size=(PATCH_CELLS, PATCH_CELLS)) < 0.02).astype(np.uint8)
        x, y = (CELL_M * round(float(v) / CELL_M) for v in rng.uniform(*AWAY_M, 2))
        client.patch("seen", (x, y), CELL_M, cells)

    client.claim("kept", durable=True)
    durable()
    put()
    patch()
    return {
        f"{kind}_{state}_ms": spread([wall_s(change) for _ in range(count)], MS)
        for kind, change in (("put", put), ("patch", patch), ("durable", durable))
    }


def _many(endpoint: str, seconds: float) -> float:
    """Return acknowledged small changes a second, of several sources at once."""
    counts = [0] * SOURCES
    begin = threading.Barrier(SOURCES + 1)
    ending = threading.Event()

    def source(index: int) -> None:
        with byway.Client(endpoint) as client:
            low_m, high_m = AWAY_M
            y = low_m + (high_m - low_m) * index / SOURCES
            client.put(f"live-{index}", polygons={"crate": _crate(low_m, y)})
            begin.wait()
            while not ending.is_set():
                x = low_m + counts[index] % (high_m - low_m)
                client.put(f"live-{index}", polygons={"crate": _crate(x, y)})
                counts[index] += 1
            client.replace_layer(f"live-{index}")

    threads = [threading.Thread(target=source, args=(i,)) for i in range(SOURCES)]
    for thread in threads:
        thread.start()
    begin.wait()
    began_s = time.perf_counter()
    time.sleep(seconds)
    made, took_s = sum(counts), time.perf_counter() - began_s
    ending.set()
    for thread in threads:
        thread.join()
    return made / took_s


def _crate(x: float, y: float) -> list[tuple[float, float]]:
    return [(x, y), (x + 1.0, y), (x + 1.0, y + 0.8), (x, y + 0.8)]
