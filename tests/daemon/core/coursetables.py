"""Route tables by hand, for tests of guards: plain kinematics, no planning."""

from __future__ import annotations

import math

import msgpack
import numpy as np

from byway import messages
from byway.packed import Column, pack
from bywayd.core import events

#: How all these vehicles speed up and brake.
RATE_MPS2 = 1.0


def straight(
    length_m: float, at: tuple[float, float] = (0, 0), first_mps: float = 0.0
) -> dict[str, np.ndarray]:
    """Along x to a stand, with 2 m/s where that can be reached; a row every 0.25 m."""
    ways = np.linspace(0.0, length_m, max(2, round(length_m / 0.25) + 1))
    squares = np.minimum(first_mps**2 + 2 * RATE_MPS2 * ways, 2 * RATE_MPS2 * (length_m - ways))
    speeds = np.minimum(2.0, np.sqrt(squares))
    return table(ways, speeds, lambda way: (at[0] + way, at[1], 0.0), lambda way: 0.0)


def circle(radius_m: float, turn_rad: float, speed_mps: float = 1.0) -> dict[str, np.ndarray]:
    """Leftwards around (0, radius_m) from the origin, steadily; only the last row is a stand."""
    ways = np.linspace(0.0, radius_m * turn_rad, 41)
    speeds = np.full(len(ways), speed_mps)
    speeds[-1] = 0.0

    def pose(way: float) -> tuple[float, float, float]:
        a = way / radius_m
        return (radius_m * math.sin(a), radius_m * (1 - math.cos(a)), a)

    return table(ways, speeds, pose, lambda way: 1 / radius_m)


def table(ways, speeds, pose, curvature) -> dict[str, np.ndarray]:
    took_s = 2 * np.diff(ways) / (speeds[:-1] + speeds[1:])
    poses = np.array([pose(way) for way in ways])
    gear = np.ones(len(ways), np.int8)
    gear[-1] = 0
    return {
        "t_s": np.concatenate([[0.0], np.cumsum(took_s)]),
        "x_m": poses[:, 0],
        "y_m": poses[:, 1],
        "heading_rad": poses[:, 2],
        "curvature_per_m": np.array([curvature(way) for way in ways]),
        "speed_mps": speeds,
        "gear": gear,
    }


def there_and_back(length_m: float) -> dict[str, np.ndarray]:
    """Forward along x, and back to the start: one change of direction."""
    forth = straight(length_m)
    back = {name: column[1:].copy() for name, column in forth.items()}
    back["x_m"] = length_m - back["x_m"]
    back["t_s"] += forth["t_s"][-1]
    back["speed_mps"] *= -1
    back["gear"][:-1] = -1
    both = {name: np.concatenate([forth[name], back[name]]) for name in forth}
    both["gear"][len(forth["t_s"]) - 1] = -1
    return both


def packed_route(rows: dict[str, np.ndarray]) -> tuple[dict[str, Column], bytes]:
    return pack(rows)


def outcome(rows: dict[str, np.ndarray], cost: float = 5.0) -> events.Outcome:
    """A route as a worker sends it."""
    columns, packed = pack(rows)
    told = messages.OutcomeIs(kind="route", cost=cost, gap=0.0, seed=1, columns=columns)
    body = msgpack.packb(told.model_dump(exclude_none=True))
    return events.Outcome("route", cost, body, packed, path="path")
