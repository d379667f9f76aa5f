"""
A simulated range sensor on the nose of a vehicle: noise, beams that fail, and what is in sight.

What the sensor's own software does is simulated too: what the site has already (buildings, packs
that were told of) and what tells of itself (vehicles) is left out, so that a scan says what is new.
"""

import math
import random
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from bywayd.outlines import Points
from bywayd.yard.shapes import Mass, Pose

BEAMS: Final = 241
#: Half of the field; beams further round would meet the vehicle itself.
FIELD_RAD: Final = math.radians(90.0)
RANGE_M_MAX: Final = 18.0
RANGE_M_MIN: Final = 0.1
NOISE_M: Final = 0.015
#: The share of beams that fail: wet ground, sun, glass.
DROPOUT_RATIO: Final = 0.04
#: How far ahead of the nose the sensor is.
AHEAD_M: Final = 0.05

Beams = npt.NDArray[np.float32]


@dataclass(frozen=True)
class Scan:
    """One sweep; infinite where a beam met nothing."""

    origin: Pose
    bearings_rad: Beams
    ranges_m: Beams


class Sensor:
    """
    Owned by the world's loop.

    Args:
        known: What the site has, and what is in the way of beams therefore without news.
        nose_m: Of the vehicle's outline, ahead of its origin.
    """

    def __init__(self, known: Iterable[Mass], nose_m: float, seed: int) -> None:
        self._known = _Edges(known)
        self._nose_m = nose_m
        self._dice = np.random.default_rng(random.Random(seed).getrandbits(64))
        self._bearings = np.linspace(-FIELD_RAD, FIELD_RAD, BEAMS)

    def sweep(self, pose: Pose, news: Iterable[Mass], left_out: Iterable[Mass]) -> Scan:
        """
        Measure from a vehicle's pose.

        Args:
            news: What the site does not have yet.
            left_out: What else is in sight, without news: other vehicles, packs that are known.
        """
        x_m, y_m, heading_rad = pose
        ahead_m = self._nose_m + AHEAD_M
        eye = (x_m + ahead_m * math.cos(heading_rad), y_m + ahead_m * math.sin(heading_rad))
        turned = heading_rad + self._bearings
        beams = np.column_stack([np.cos(turned), np.sin(turned)])
        to_news = _Edges(news).ranges_m(eye, beams)
        to_others = np.minimum(
            self._known.ranges_m(eye, beams), _Edges(left_out).ranges_m(eye, beams)
        )
        in_sight = np.minimum(to_news, to_others)
        measured = np.where(in_sight < RANGE_M_MAX, in_sight, np.inf)
        measured += self._dice.normal(0.0, NOISE_M, BEAMS)
        has_failed = self._dice.random(BEAMS) < DROPOUT_RATIO
        says = ~has_failed & ((to_news <= to_others) | (in_sight >= RANGE_M_MAX))
        return Scan(
            (*eye, heading_rad),
            self._bearings[says].astype(np.float32),
            np.maximum(measured[says], 0.0).astype(np.float32),
        )


class _Edges:
    """Masses as what beams meet: edges of polygons, and discs."""

    def __init__(self, masses: Iterable[Mass]) -> None:
        rings: list[Points] = []
        discs: list[Sequence[float]] = []
        for mass in masses:
            if len(mass.ring_m) > 1:
                rings.append(mass.ring_m)
            else:
                discs.append((*mass.ring_m[0].tolist(), mass.radius_m))
        edges = [np.hstack([ring, np.roll(ring, -1, axis=0)]) for ring in rings]
        self._edges = np.vstack(edges) if edges else np.empty((0, 4))
        self._discs = np.array(discs, np.float64).reshape(-1, 3)

    def ranges_m(self, eye: tuple[float, float], beams: Points) -> Points:
        """Return how far each beam, a unit vector, gets from the eye; inf if it meets nothing."""
        found = np.full(len(beams), np.inf)
        if len(self._edges):
            a, b = self._edges[:, :2] - eye, self._edges[:, 2:] - eye
            along = b - a
            # eye + t beam = a + s along: two lines meet, by Cramer's rule.
            across = beams[:, :1] * along[:, 1] - beams[:, 1:] * along[:, 0]
            safe = np.where(across == 0.0, np.nan, across)
            t = (a[:, 0] * along[:, 1] - a[:, 1] * along[:, 0]) / safe
            s = (a[:, 0] * beams[:, 1:] - a[:, 1] * beams[:, :1]) / safe
            meets = (t >= 0.0) & (s >= 0.0) & (s <= 1.0)
            found = np.where(meets, t, np.inf).min(axis=1)
        if len(self._discs):
            to = self._discs[:, :2] - eye
            middle = beams @ to.T
            off2 = (to * to).sum(axis=1) - middle * middle
            half = np.sqrt(np.maximum(self._discs[:, 2] ** 2 - off2, 0.0))
            meets = (off2 <= self._discs[:, 2] ** 2) & (middle - half >= 0.0)
            found = np.minimum(found, np.where(meets, middle - half, np.inf).min(axis=1))
        return found
