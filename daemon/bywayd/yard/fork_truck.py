"""
A fork truck that a person drives, round and round: nobody plans for it, it is only seen.

It keeps away from vehicles as a person would, and it is told to the daemon as a track: where it is,
how it moves, how sure that is. It cannot go round what is in its way; it waits.
"""

import math
import random
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from bywayd.outlines import Points
from bywayd.yard.claims import GROWN_M, Ground
from bywayd.yard.driver import Driver
from bywayd.yard.scene import TRUCK_CORNER_M, TRUCK_CORNERS
from bywayd.yard.shapes import Mass, Masses, Pose, advanced, wrapped
from bywayd.yard.tracking import Line

NAME: Final = "fork-9"
TRUCK: Final[dict[str, Any]] = {
    "footprint_m": [(-0.6, -0.6), (1.5, -0.6), (2.3, -0.4), (2.3, 0.4), (1.5, 0.6), (-0.6, 0.6)],
    "turn_radius_m_min": 1.5,
    "speed_mps_max": 1.4,
    "acceleration_mps2_max": 0.8,
    "deceleration_mps2_max": 1.2,
}
#: How long it stands between two rounds.
PAUSE_S: Final = (1.0, 3.0)
ROW_M: Final = 0.25
#: Of where it is seen, and how fast it seems to go.
NOISE_M: Final = 0.02
NOISE_MPS: Final = 0.05
#: How fast who sees it loses it, while it moves.
GROWTH_MPS: Final = 0.1

ROUTE: Final = np.dtype(
    [
        *(("t_s", "f8"), ("x_m", "f8"), ("y_m", "f8"), ("heading_rad", "f8")),
        *(("curvature_per_m", "f8"), ("speed_mps", "f8"), ("gear", "i1")),
    ]
)


@dataclass(frozen=True)
class Moving:
    """A thing that moves, as it is seen now."""

    name: str
    outline_m: Points
    pose: Pose
    velocity_mps: tuple[float, float]
    turn_rate_radps: float
    uncertainty_m: float
    growth_mps: float


class ForkTruck:
    """Owned by the world's loop; `step` is called once a time step."""

    def __init__(self, ground: Ground, seed: int) -> None:
        self._round = round_of(TRUCK_CORNERS, TRUCK_CORNER_M)
        self._dice = random.Random(seed)
        self._starts_s = 0.0
        self.driver = Driver(NAME, TRUCK, self._round.pose_at(0.0), ground)
        self.rounds = 0

    @property
    def mass(self) -> Mass:
        """What is in the way of others and of beams."""
        return Mass(NAME, self.driver.ring_m)

    def see(self, packs: Iterable[Mass]) -> None:
        """Look at the packs on the yard."""
        self.driver.see(Masses(packs))

    def step(self, now_s: float, dt_s: float) -> None:
        """Move by one time step."""
        driver = self.driver
        if driver.has_arrived:
            driver.leave()
            self.rounds += 1
            self._starts_s = now_s + self._dice.uniform(*PAUSE_S)
        elif driver.line is None and now_s >= self._starts_s:
            driver.follow(self._round)
        driver.step(now_s, dt_s)

    def seen(self) -> Moving:
        """Return it as the yard's cameras see it."""
        driver = self.driver
        x_m, y_m, heading_rad = driver.pose
        off = [self._dice.gauss(0.0, NOISE_M) for _ in range(2)]
        speed_mps = driver.speed_mps
        if speed_mps > 0.0:
            speed_mps = max(0.0, speed_mps + self._dice.gauss(0.0, NOISE_MPS))
        curvature = 0.0 if driver.line is None else driver.line.curvature_at(driver.at_m)
        return Moving(
            NAME,
            driver.outline_m,
            (x_m + off[0], y_m + off[1], heading_rad),
            (speed_mps * math.cos(heading_rad), speed_mps * math.sin(heading_rad)),
            speed_mps * curvature,
            # As outlines of vehicles are told (see claims.py), so that routes can be claimed.
            GROWN_M,
            GROWTH_MPS if speed_mps > 0.0 else 0.0,
        )


def round_of(corners: Iterable[tuple[float, float]], radius_m: float) -> Line:
    """Return a closed way along corners, rounded; from the middle of its first side."""
    points = np.array(list(corners), np.float64)
    sides = np.roll(points, -1, axis=0) - points
    lengths_m, towards = np.hypot(*sides.T), np.arctan2(sides[:, 1], sides[:, 0])
    turns = [wrapped(towards[(k + 1) % len(points)] - towards[k]) for k in range(len(points))]
    cuts_m = [radius_m * math.tan(abs(turn) / 2) for turn in turns]
    middle = points[0] + 0.5 * sides[0]
    pose: Pose = (float(middle[0]), float(middle[1]), float(towards[0]))
    pieces: list[tuple[float, float]] = []
    for k, turn in enumerate(turns):
        straight_m = 0.5 * lengths_m[0] if k == 0 else lengths_m[k] - cuts_m[k - 1]
        pieces.append((0.0, straight_m - cuts_m[k]))
        pieces.append((math.copysign(1 / radius_m, turn), radius_m * abs(turn)))
    pieces.append((0.0, 0.5 * lengths_m[0] - cuts_m[-1]))
    return Line(_table(pose, pieces))


def _table(pose: Pose, pieces: Iterable[tuple[float, float]]) -> Any:
    """Return a route table of arcs (curvature, length), with speeds from stand to stand."""
    rows: list[tuple[float, Pose, float]] = []
    at_m = 0.0
    for curvature, length_m in pieces:
        count = math.ceil(length_m / ROW_M)
        for k in range(count):
            there = advanced(pose, curvature, length_m * k / count)
            rows.append((at_m + length_m * k / count, there, curvature))
        at_m += length_m
        pose = advanced(pose, curvature, length_m)
    rows.append((at_m, pose, 0.0))
    table = np.zeros(len(rows), ROUTE)
    for row, (done_m, there, curvature) in zip(table, rows, strict=True):
        up = math.sqrt(2 * TRUCK["acceleration_mps2_max"] * done_m)
        down = math.sqrt(2 * TRUCK["deceleration_mps2_max"] * (at_m - done_m))
        row["x_m"], row["y_m"], row["heading_rad"] = there
        row["curvature_per_m"] = curvature
        row["speed_mps"] = min(TRUCK["speed_mps_max"], up, down)
        row["gear"] = 1
    table["gear"][-1] = 0
    return table
