"""What planning answers."""

import math
from dataclasses import dataclass, field
from typing import Literal

from byway_planning.remedy import Remedy
from byway_planning.route import Route

Kind = Literal["route", "start_blocked", "goal_blocked", "start_too_fast", "no_route", "not_found"]


@dataclass(frozen=True)
class Blockage:
    """One obstacle in the way of a pose."""

    layer: str  # "" for the limits of the site
    obstacle: str  # id of a polygon or disc; "cells" for a cell, "limits" for the site's limits
    depth_m: float  # how far the body, with its hard clearance around it, reaches into it


@dataclass(frozen=True)
class Outcome:
    """
    One answer of `plan`.

    | kind | meaning |
    |---|---|
    | route | a verified route |
    | start_blocked, goal_blocked | the pose has no room; `blocked_by` says why |
    | start_too_fast | the vehicle cannot stop before it hits something |
    | no_route | proved: not even the inscribed circle gets through |
    | not_found | nothing found in the time, no proof |
    """

    kind: Kind
    revision: int
    seed: int
    route: Route | None = None
    cost: float = math.inf
    cost_unit: Literal["m"] = "m"
    bound: float = 0.0  # no route for this request can cost less
    first_s: float | None = None  # when the first verified route was there
    total_s: float = 0.0
    blocked_by: tuple[Blockage, ...] = ()
    #: Without a route: what would have to move, where time was left to look. For `not_found` the
    #: disc may be larger than the inscribed one, and nothing is proved. Site's outer coordinates.
    remedy: Remedy | None = None
    statistics: dict[str, int | float | str] = field(default_factory=dict)

    @property
    def gap(self) -> float:
        """(cost - bound) / cost: how much could still be gained at most; 1 without a route."""
        if not math.isfinite(self.cost):
            return 1.0
        return max(0.0, (self.cost - self.bound) / self.cost) if self.cost > 0.0 else 0.0
