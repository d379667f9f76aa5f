"""
The part of a vehicle that moves: it follows a line, claims ground ahead, and stops in time.

It never moves over ground it has not claimed, and stops for what its own eyes see in its way,
whatever the daemon knows of it. What it follows comes from the daemon; whether it goes on is its
own decision.
"""

import math
from collections.abc import Mapping
from typing import Any, Final

from bywayd.outlines import Points, outline_of, placed
from bywayd.yard.claims import Ground, claim_ahead, claim_here
from bywayd.yard.shapes import Masses, Pose, advanced, wrapped
from bywayd.yard.tracking import Abilities, Line, next_step, steer

#: Ground is claimed this much further than needed, so that it is not claimed anew every step.
CLAIM_SPARE_M: Final = 0.8
CLAIM_AGAIN_S: Final = 0.1
#: How near a pack may be to the route before it counts as in the way, and where to stop then. Less
#: than the clearance that routes keep from packs they know of.
PACK_GAP_M: Final = 0.05
PACK_STOP_M: Final = 0.5
#: A hand-over is due so little before its place: a vehicle that is to stop there stops just there.
HANDOVER_EARLY_M: Final = 1e-3
#: How far the true state may be from the start of a new route at the hand-over.
HANDOVER_AHEAD_M: Final = 0.5
HANDOVER_OFFSET_M: Final = 0.08
HANDOVER_TURNED_RAD: Final = 0.05
HANDOVER_FASTER_MPS: Final = 0.15


def abilities_of(vehicle: Mapping[str, Any]) -> Abilities:
    """Return what a vehicle can do, from its settings as the daemon tells them."""
    radius_m = vehicle.get("turn_radius_m_min")
    if radius_m is None:
        radius_m = float(vehicle["wheelbase_m"]) / math.tan(float(vehicle["steer_rad_max"]))
    return Abilities(
        speed_mps_max=float(vehicle["speed_mps_max"]),
        acceleration_mps2=float(vehicle["acceleration_mps2_max"]),
        deceleration_mps2=float(vehicle["deceleration_mps2_max"]),
        curvature_per_m_max=1.0 / float(radius_m),
    )


class Driver:
    """
    Owned by the world's loop; `step` is called once a time step.

    `line` is the route in use, None when it stands without one. `at_m` is how far along it is.
    """

    def __init__(self, name: str, vehicle: Mapping[str, Any], pose: Pose, ground: Ground) -> None:
        self.name = name
        self.outline_m: Points = outline_of(vehicle)
        self.can = abilities_of(vehicle)
        self._ground = ground
        self.pose = pose
        self.speed_mps = 0.0
        self.driven_m = 0.0
        self.line: Line | None = None
        #: Grows with every new line, so that answers to questions about an old one are known.
        self.line_number = 0
        self.at_m = 0.0
        self._leg_from_m = 0.0
        #: The furthest that it was beside its line.
        self.off_m_max = 0.0
        #: Since when it has been standing on its line without having arrived.
        self.held_since_s: float | None = None
        #: Where its own eyes see a pack in the way, and which; and where the daemon says to stop.
        self.seen_at_m = math.inf
        self.seen = ""
        self.told_at_m = math.inf
        self._packs = Masses(())
        self._next: tuple[Line, float] | None = None
        self._claim_again_s = 0.0
        other = ground.take(name, claim_here(self.outline_m, pose, 0.0))
        if other is not None:
            raise ValueError(f"{name} begins on ground that {other} holds")

    @property
    def ring_m(self) -> Points:
        """The true outline on the site."""
        return placed(self.outline_m, self.pose)

    @property
    def has_arrived(self) -> bool:
        """Whether it stands at the end of its line."""
        return self.line is not None and self.speed_mps == 0.0 and self.at_m >= self.line.length_m

    @property
    def blocked_at_m(self) -> float:
        """How far along its line it may go."""
        return min(self.seen_at_m, self.told_at_m)

    @property
    def changes_at_m(self) -> float | None:
        """Where it takes another route over, if it is going to."""
        return None if self._next is None else self._next[1]

    # -- routes ----------------------------------------------------------------------------

    def follow(self, line: Line) -> None:
        """Take up a route that begins where the vehicle stands."""
        self._use(line, 0.0)
        self._ground.shrink(self.name, claim_here(self.outline_m, self.pose, 0.0))

    def leave(self) -> None:
        """Be done with the route; the vehicle stands."""
        self.line = None
        self._next = None
        self._ground.shrink(self.name, claim_here(self.outline_m, self.pose, 0.0))

    def take_over_later(self, line: Line, goes_on_at_m: float) -> None:
        """Change to another route when this place on the one in use is reached."""
        self._next = (line, goes_on_at_m)

    def _use(self, line: Line, at_m: float) -> None:
        self.line, self.at_m, self._leg_from_m = line, at_m, 0.0
        self.line_number += 1
        self.told_at_m = math.inf
        self.held_since_s = None
        self._next = None
        self._claim_again_s = 0.0
        self.see(self._packs)

    def see(self, packs: Masses) -> None:
        """Look along the rest of the route for packs in the way."""
        self._packs = packs
        self.seen_at_m, self.seen = math.inf, ""
        if self.line is None or not packs.masses:
            return
        for place_m in self.line.places(self.at_m, self.line.length_m, 0.25):
            ring_m = placed(self.outline_m, self.line.pose_at(place_m))
            name = packs.nearest(ring_m, PACK_GAP_M)[1]
            if name:
                self.seen_at_m, self.seen = max(self.at_m, place_m - PACK_STOP_M), name
                return

    def stop_for(self, at_m: float) -> None:
        """Go no further than this along the line; inf: as far as it leads."""
        self.told_at_m = max(self.at_m, at_m)

    def predicted(self, ahead_s: float) -> tuple[float, float] | None:
        """
        Return place and speed after a time, if nothing holds it up.

        None when it would stand or turn round by then: nobody takes over a route there.
        """
        if self.line is None:
            return None
        at_m, speed_mps = self.at_m, self.speed_mps
        stop_m = self.line.stop_after(at_m)
        dt_s = 0.04
        for _ in range(math.ceil(ahead_s / dt_s)):
            speed_mps, moved_m = next_step(
                self.line, at_m, speed_mps, self.blocked_at_m, self.can, dt_s
            )
            at_m += moved_m
        return (at_m, speed_mps) if at_m < stop_m - 0.5 and speed_mps > 0.1 else None

    # -- time ------------------------------------------------------------------------------

    def step(self, now_s: float, dt_s: float) -> str | None:
        """
        Move by one time step.

        Returns:
            What became of a hand-over that was due in this step: "taken" or "not fitting".
        """
        if self.line is None or self.has_arrived:
            return None
        came_of_it = None
        if self._next is not None and self.at_m >= self._next[1] - HANDOVER_EARLY_M:
            came_of_it = "taken" if self._hand_over(self._next[0]) else "not fitting"
            self._next = None
        line = self.line
        self._claim(line, now_s)
        may_go_to_m = min(self._ground.claims[self.name].to_m, self.blocked_at_m)
        self.speed_mps, moved_m = next_step(
            line, self.at_m, self.speed_mps, may_go_to_m, self.can, dt_s
        )
        way = steer(line, self.at_m, moved_m, self.pose, self.can)
        self.off_m_max = max(self.off_m_max, abs(way.offset_m))
        self.pose = advanced(self.pose, way.curvature_per_m, line.gear_at(self.at_m) * moved_m)
        self.driven_m += moved_m
        stop_m = line.stop_after(self.at_m)
        self.at_m += moved_m
        if stop_m - self.at_m > 0.5:
            # Corrections to the side make the way driven a little longer than the line. Never
            # back over a change of direction: the vehicle would drive to and fro there for ever.
            self.at_m = max(self._leg_from_m, self.at_m + 0.2 * way.ahead_m)
        elif stop_m - self.at_m < 1e-4:
            self.at_m, self.speed_mps = stop_m, 0.0
            self._leg_from_m = stop_m
        self._note_standing(now_s, moved_m)
        return came_of_it

    def _note_standing(self, now_s: float, moved_m: float) -> None:
        if moved_m > 1e-6 or self.has_arrived:
            self.held_since_s = None
        elif self.held_since_s is None:
            self.held_since_s = now_s
        elif self.speed_mps == 0.0 and now_s - self.held_since_s > 2 * CLAIM_AGAIN_S:
            # Ground ahead that it cannot use now would only keep others from passing.
            self._ground.shrink(self.name, claim_here(self.outline_m, self.pose, self.at_m))

    def _needs_to_m(self, line: Line, at_m: float) -> float:
        braking_m = self.speed_mps**2 / (2 * self.can.deceleration_mps2)
        return min(at_m + braking_m + 0.1 * self.speed_mps + 0.2, line.stop_after(at_m))

    def _claim(self, line: Line, now_s: float) -> None:
        needed_m = self._needs_to_m(line, self.at_m)
        if self._ground.claims[self.name].to_m >= needed_m or now_s < self._claim_again_s:
            return
        to_m = min(needed_m + CLAIM_SPARE_M, line.stop_after(self.at_m))
        wanted = claim_ahead(line, self.outline_m, self.pose, self.at_m, to_m)
        if self._ground.take(self.name, wanted) is not None:
            self._claim_again_s = now_s + CLAIM_AGAIN_S

    def _hand_over(self, line: Line) -> bool:
        """Go on along another line, if the true state fits its start and the ground is free."""
        way = steer(line, 0.0, 0.0, self.pose, self.can)
        at_m = max(0.0, way.ahead_m)
        pose = line.pose_at(at_m)
        beside_m = math.dist(self.pose[:2], pose[:2]) - max(0.0, -way.ahead_m)
        fits = (
            abs(way.ahead_m) < HANDOVER_AHEAD_M
            and beside_m < HANDOVER_OFFSET_M
            and abs(wrapped(self.pose[2] - pose[2])) < HANDOVER_TURNED_RAD
            and self.speed_mps < line.speed_at(at_m) + HANDOVER_FASTER_MPS
        )
        if not fits:
            return False
        to_m = self._needs_to_m(line, at_m)
        wanted = claim_ahead(line, self.outline_m, self.pose, at_m, to_m)
        if self._ground.take(self.name, wanted) is not None:
            return False
        self._use(line, at_m)
        return True
