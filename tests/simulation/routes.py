"""Routes of the simulated world: straight lines along x, with an honest table."""

from __future__ import annotations

from collections.abc import Mapping
from functools import lru_cache

import msgpack
import numpy as np

from byway.packed import Bytes, Column, pack, read

TOP_MPS = 2.0


@lru_cache(maxsize=256)
def table(x0_m: float, x1_m: float, first_mps: float) -> tuple[dict[str, Column], bytes]:
    """Columns of a route from one x to another that ends at a stand."""
    length_m = x1_m - x0_m
    if length_m <= 0.0:
        ways, speeds = np.zeros(1), np.zeros(1)
    else:
        ways = np.array([0.0, 0.5, 1.0]) * length_m
        speeds = np.array([first_mps, TOP_MPS, 0.0])
    count = len(ways)
    took_s = 2.0 * np.diff(ways) / (speeds[1:] + speeds[:-1])
    gear = np.ones(count, np.int8)
    gear[-1] = 0
    return pack(
        {
            "t_s": np.concatenate([[0.0], np.cumsum(took_s)]),
            "x_m": x0_m + ways,
            **{name: np.zeros(count) for name in ("y_m", "heading_rad", "curvature_per_m")},
            "speed_mps": speeds,
            "gear": gear,
        }
    )


def ends(columns: Mapping[str, Column], packed: Bytes) -> tuple[float, float]:
    """Return where a route begins and ends on x."""
    x_m = read(columns["x_m"], packed)
    return float(x_m[0]), float(x_m[-1])


def body(
    columns: Mapping[str, Column], cost: float | None, kind: str = "route", **facts: object
) -> bytes:
    """Return an outcome as a worker packs it."""
    told: dict[str, object] = {
        "kind": kind,
        "gap": 1.0,
        "seed": 1,
        "statistics": facts,
        "columns": {name: column.model_dump() for name, column in columns.items()},
    }
    if cost is not None:
        told["cost"] = cost
    packed: bytes = msgpack.packb(told)
    return packed
