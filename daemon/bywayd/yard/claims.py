"""
Who may use which ground: the rule that keeps the yard's vehicles from meeting.

A vehicle moves only over ground that it has claimed: from where it is to where it can stop. Two
claims never come nearer than GAP_M to each other. A claim grows only when the new ground is
free of the claims of others; when it is not, the vehicle brakes, and braking ends inside the claim
it has. So no two vehicles touch, whatever the planner says, however late an answer comes.

What each vehicle claims is also what the daemon is told about it: the outline, stretched by the
braking distance.
"""

import itertools
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np

from bywayd.outlines import Points, placed
from bywayd.yard.shapes import (
    Pose,
    box_of,
    boxes_within,
    convex_apart,
    distance_m,
    grown,
    hull,
)
from bywayd.yard.tracking import Line

#: Between claims. It also covers what hulls of turned outlines leave out (2 cm).
GAP_M: Final = 0.25
#: The daemon is told of claims grown by this. With the hard clearance that it keeps itself, 0.1 m
#: and more, its routes stay outside the gap, so they can be claimed; and a vehicle that stands
#: at the edge of the gap does not stand in an obstacle, so it can start.
GROWN_M: Final = 0.2
#: Between two poses of a claim. On the tightest arc of the yard's vehicles a corner swings out of
#: the hull of two such poses by less than 2 cm.
STEP_M: Final = 0.6


@dataclass(frozen=True)
class Claim:
    """Ground as convex pieces, and how far along its line the unit may go on it."""

    pieces: tuple[Points, ...]
    boxes_m: Points  # one row a piece
    to_m: float


def claim_ahead(line: Line, outline_m: Points, pose: Pose, from_m: float, to_m: float) -> Claim:
    """Return the ground between two places on a line, the true pose at the first included."""
    rings = [placed(outline_m, pose)]
    rings += [placed(outline_m, line.pose_at(s)) for s in line.places(from_m, to_m, STEP_M)]
    return _claim([hull(np.vstack(pair)) for pair in itertools.pairwise(rings)], to_m)


def claim_here(outline_m: Points, pose: Pose, at_m: float) -> Claim:
    """Return the ground under a vehicle that stands."""
    return _claim([hull(placed(outline_m, pose))], at_m)


def _claim(pieces: list[Points], to_m: float) -> Claim:
    return Claim(tuple(pieces), np.array([box_of(piece) for piece in pieces]), to_m)


def apart(a: Claim, b: Claim, gap_m: float = GAP_M) -> bool:
    """Whether two claims keep their distance."""
    for piece, box in zip(a.pieces, a.boxes_m, strict=True):
        for index in boxes_within(b.boxes_m, box, gap_m):
            other = b.pieces[index]
            # The first proves most distances for a tenth of the work.
            if not convex_apart(piece, other, gap_m) and distance_m(piece, other) < gap_m:
                return False
    return True


def told_outlines(claim: Claim) -> list[Points]:
    """Return a claim as the daemon is told of it: few outlines, and grown."""
    pairs = [claim.pieces[k : k + 2] for k in range(0, len(claim.pieces), 2)]
    return [grown(np.vstack(pair), GROWN_M) for pair in pairs]


class Ground:
    """The claims in force, by unit. They are apart from each other at every moment."""

    def __init__(self) -> None:
        self._claims: dict[str, Claim] = {}

    @property
    def claims(self) -> Mapping[str, Claim]:
        """The claims in force."""
        return self._claims

    def who_is_in_the_way(self, unit: str, wanted: Claim) -> str | None:
        """Return another unit whose claim is too near, or None."""
        for other, held in self._claims.items():
            if other != unit and not apart(wanted, held):
                return other
        return None

    def take(self, unit: str, wanted: Claim) -> str | None:
        """Put a claim in force in place of the unit's old one, or return who is in the way."""
        other = self.who_is_in_the_way(unit, wanted)
        if other is None:
            self._claims[unit] = wanted
        return other

    def shrink(self, unit: str, rest: Claim) -> None:
        """Give ground back: `rest` lies within the claim in force."""
        self._claims[unit] = rest

    def clear_of_all(self, ring_m: Points, gap_m: float) -> bool:
        """Whether a convex polygon keeps a distance from every claim."""
        found = _claim([hull(ring_m)], 0.0)
        return all(apart(found, held, gap_m) for held in self._claims.values())
