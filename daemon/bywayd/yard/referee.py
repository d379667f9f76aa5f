"""
The referee of the simulated yard: true outlines against everything, at every step, exactly.

It knows nothing of claims, routes or clearances that others keep. What it counts as a collision
is a touch, and it cannot be talked out of it.
"""

import itertools
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Final

import numpy as np

from bywayd.outlines import Points
from bywayd.yard.scene import LIMITS_M
from bywayd.yard.shapes import Masses, box_of, distance_m

#: Beyond this a clearance is of no interest; it bounds the work.
REACH_M: Final = 1.5


@dataclass(frozen=True)
class Near:
    """How near something came to something."""

    distance_m: float = math.inf
    unit: str = ""
    other: str = ""
    at_s: float = 0.0


@dataclass
class Referee:
    """Sees every step. `collisions` counts touches that begin, not the steps that they last."""

    fixed: Masses
    nearest: Near = field(default_factory=Near)
    nearest_units: Near = field(default_factory=Near)
    collisions: list[Near] = field(default_factory=list)
    _touching: set[tuple[str, str]] = field(default_factory=set)

    def look(self, rings_m: Mapping[str, Points], packs: Masses, now_s: float) -> None:
        """Judge one moment."""
        touching: set[tuple[str, str]] = set()

        def judge(unit: str, other: str, away_m: float) -> Near:
            found = Near(away_m, unit, other, now_s)
            if away_m <= 0.0:
                touching.add((unit, other))
                if (unit, other) not in self._touching:
                    self.collisions.append(found)
            return found

        for unit, ring_m in rings_m.items():
            for masses in (self.fixed, packs):
                away_m, name = masses.nearest(ring_m, REACH_M)
                self.nearest = min(self.nearest, judge(unit, name, away_m), key=_distance)
            away_m = _inside_limits_m(ring_m)
            self.nearest = min(self.nearest, judge(unit, "limits", away_m), key=_distance)
        for (a, ring_a), (b, ring_b) in itertools.combinations(rings_m.items(), 2):
            if _boxes_apart_m(box_of(ring_a), box_of(ring_b)) < REACH_M:
                found = judge(a, b, distance_m(ring_a, ring_b))
                self.nearest_units = min(self.nearest_units, found, key=_distance)
        self._touching = touching


def _distance(near: Near) -> float:
    return near.distance_m


def _inside_limits_m(ring_m: Points) -> float:
    inside = (box_of(ring_m) - np.array(LIMITS_M)) * (1.0, 1.0, -1.0, -1.0)
    return float(inside.min())


def _boxes_apart_m(a: Points, b: Points) -> float:
    """Return the gap between two boxes along the axis that shows most of it."""
    return float(max(a[0] - b[2], b[0] - a[2], a[1] - b[3], b[1] - a[3]))
