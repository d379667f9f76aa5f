"""
One vehicle of the yard with its round: what it wants, what it asks, and when it gives up.

It asks for a route when it has loaded or unloaded. On the way it asks again: now and then,
because a better way may have opened; at once when a pack of timber lies on its route; and after
a while when another vehicle holds it up. A question asked on the move starts from the state
that the vehicle will have when the answer is due; the new route is taken over at that place.
"""

import itertools
import math
import random
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Any, Final

from bywayd.yard.claims import Ground
from bywayd.yard.driver import Driver
from bywayd.yard.scene import ASIDE, Round, Station
from bywayd.yard.shapes import Mass, Masses, Pose
from bywayd.yard.tracking import Line

STANDING_BUDGET_S: Final = 0.2
MOVING_BUDGET_S: Final = 0.12
#: From the end of the budget to the hand-over: the way there and back, and a step.
HANDOVER_SPARE_S: Final = 0.12
ASK_EVERY_S: Final = 1.5
#: Never more often than this, whatever happens: the workers are there for all units.
ASK_PAUSE_S: Final = 0.3
RETRY_S: Final = 0.4
LOADING_S: Final = 0.8
#: A new route must save this much, or a vehicle would swing between routes of the same cost.
SAVING_M: Final = 0.4
#: How long a unit of rank 0 lets itself be held up before it asks again; lower ranks sooner.
PATIENCE_S: Final = 1.6
PATIENCE_PER_RANK_S: Final = 0.5
#: After so many questions without a route a unit of rank 0 makes way; lower ranks sooner.
FAILURES_MAX: Final = 6
FAILURES_PER_RANK: Final = 2
ASIDE_CHOICE: Final = 3


@dataclass(frozen=True)
class Ask:
    """A question to the daemon. `goes_on_at_m` is where the new route begins on the line in use."""

    unit: str
    vehicle: str
    start: Pose
    goal: Pose
    budget_s: float
    line_number: int
    asked_s: float
    goes_on_at_m: float | None = None
    start_speed_mps: float = 0.0
    start_curvature_per_m: float = 0.0


@dataclass(frozen=True)
class Reply:
    """What came of a question. `kind` is that of the answer, or "error:" and its code."""

    ask: Ask
    kind: str
    line: Line | None = None
    cost: float = math.inf


@dataclass
class Tally:
    """What happened to one unit so far."""

    deliveries: int = 0
    asked: int = 0
    routes: int = 0
    taken_over: int = 0  # new routes that were taken over on the move
    not_needed: int = 0  # the old route was as good
    too_late: int = 0  # the answer came after the place of the hand-over
    not_fitting: int = 0  # the state was not as predicted, or the new ground was taken
    held_s: float = 0.0
    made_way: int = 0


@dataclass(frozen=True)
class Pack:
    """A pack of timber that the crane has put down. `told_s`: when the daemon had it, or inf."""

    mass: Mass
    told_s: float
    gone_s: float


class Unit:
    """Owned by the world's loop; `step` is called once a time step."""

    def __init__(
        self, round_: Round, vehicle: Mapping[str, Any], ground: Ground, seed: int
    ) -> None:
        self.name, self.vehicle = round_.unit, round_.vehicle
        self.stations = round_.stations
        self.driver = Driver(round_.unit, vehicle, round_.begins, ground)
        self.tally = Tally()
        self._rank = round_.rank
        self._reverse_factor = float(vehicle["reverse_factor"])
        self._direction_change_m = float(vehicle["direction_change_m"])
        self._ground = ground
        self._dice = random.Random(seed)
        # The round begins loaded, so with the second station.
        self._stations = itertools.cycle(round_.stations)
        next(self._stations)
        self.goal = next(self._stations)
        self._is_loaded = True
        self._aside: Station | None = None
        self._stands_until_s = LOADING_S
        self.pending: Ask | None = None
        self._ask_again_s = 0.0
        self._asked_s = -ASK_PAUSE_S
        self._failures = 0
        #: Packs that the daemon knew before this moment are known to the route in use.
        self._known_s = 0.0
        self._known_next_s = 0.0

    # -- answers ---------------------------------------------------------------------------

    def take(self, reply: Reply, packs: Iterable[Pack], now_s: float) -> None:
        """Take in what came of the pending question."""
        ask, self.pending = reply.ask, None
        if ask.line_number != self.driver.line_number:
            return
        if reply.line is None:
            self._ask_again_s = now_s + RETRY_S * (1 + self._dice.random())
            if ask.goes_on_at_m is None:
                self._failures += 1
            return
        self.tally.routes += 1
        self._failures = 0
        if ask.goes_on_at_m is None:
            self.driver.follow(reply.line)
            self._known_s = ask.asked_s
            self.see(packs)
        elif self.driver.at_m > ask.goes_on_at_m:
            self.tally.too_late += 1
        elif self._is_worth_it(reply.cost, ask.goes_on_at_m):
            self.driver.take_over_later(reply.line, ask.goes_on_at_m)
            self._known_next_s = ask.asked_s
        else:
            self.tally.not_needed += 1

    def _is_worth_it(self, cost: float, goes_on_at_m: float) -> bool:
        line = self.driver.line
        if line is None or self.driver.blocked_at_m < math.inf:
            return True
        left = line.cost_left(goes_on_at_m, self._reverse_factor, self._direction_change_m)
        return cost < left - SAVING_M

    def see(self, packs: Iterable[Pack]) -> None:
        """Look at the packs on the yard; those that the route knows of are not in its way."""
        self.driver.see(Masses(pack.mass for pack in packs if pack.told_s >= self._known_s))

    @property
    def doing(self) -> str:
        """What it does now, in a few words."""
        where = (self._aside or self.goal).name
        if self.pending is not None and self.pending.goes_on_at_m is None:
            return f"asking the way to {where}"
        if self.driver.line is None:
            return "loading" if self._is_loaded else "unloading"
        return f"held up on the way to {where}" if self.driver.held_since_s else f"to {where}"

    # -- time ------------------------------------------------------------------------------

    def step(self, packs: Iterable[Pack], now_s: float, dt_s: float) -> Ask | None:
        """Move by one time step; returns a question when there is one."""
        asked_from_here = self.pending is not None and self.pending.goes_on_at_m is None
        if not asked_from_here:
            came_of_it = self.driver.step(now_s, dt_s)
            if came_of_it == "taken":
                self.tally.taken_over += 1
                self._known_s = self._known_next_s
                self.see(packs)
            elif came_of_it is not None:
                self.tally.not_fitting += 1
        if self.driver.held_since_s is not None:
            self.tally.held_s += dt_s
        if self.driver.has_arrived:
            self._arrive(now_s)
        return self._question(now_s) if self.pending is None else None

    def _arrive(self, now_s: float) -> None:
        self.driver.leave()
        self._stands_until_s = now_s + LOADING_S
        self._ask_again_s = 0.0
        if self._aside is not None:
            self._aside = None
            return
        if self._is_loaded:
            self.tally.deliveries += 1
        self._is_loaded = not self._is_loaded
        self.goal = next(self._stations)

    def _question(self, now_s: float) -> Ask | None:
        driver = self.driver
        if now_s < max(self._ask_again_s, self._stands_until_s, self._asked_s + ASK_PAUSE_S):
            return None
        if driver.line is None:
            return self._ask_from_here(now_s)
        if driver.held_since_s is not None:
            blocked = driver.blocked_at_m < math.inf
            patience_s = 0.3 if blocked else PATIENCE_S - PATIENCE_PER_RANK_S * self._rank
            if now_s - driver.held_since_s > patience_s:
                return self._ask_from_here(now_s)
            return None
        if driver.blocked_at_m < math.inf or now_s - self._asked_s > ASK_EVERY_S:
            return self._ask_on_the_move(now_s)
        return None

    def _ask_from_here(self, now_s: float) -> Ask:
        if self._failures > FAILURES_MAX - FAILURES_PER_RANK * self._rank:
            self._make_way()
        return self._ask(now_s, self.driver.pose, STANDING_BUDGET_S)

    def _ask_on_the_move(self, now_s: float) -> Ask | None:
        driver = self.driver
        state = driver.predicted(MOVING_BUDGET_S + HANDOVER_SPARE_S)
        if state is None or driver.line is None:
            return None
        at_m, speed_mps = state
        start = driver.line.pose_at(at_m)
        ask = self._ask(now_s, start, MOVING_BUDGET_S)
        self.pending = replace(
            ask,
            goes_on_at_m=at_m,
            start_speed_mps=speed_mps * driver.line.gear_at(at_m),
            start_curvature_per_m=driver.line.curvature_at(at_m),
        )
        return self.pending

    def _ask(self, now_s: float, start: Pose, budget_s: float) -> Ask:
        self._asked_s = now_s
        self.tally.asked += 1
        goal = (self._aside or self.goal).pose
        number = self.driver.line_number
        self.pending = Ask(self.name, self.vehicle, start, goal, budget_s, number, now_s)
        return self.pending

    def _make_way(self) -> None:
        """Wait somewhere else than here, or come back from there."""
        self._failures = 0
        if self._aside is not None:
            self._aside = None
            return
        self.tally.made_way += 1
        x_m, y_m, _ = self.driver.pose
        nearest = sorted(ASIDE, key=lambda place: math.dist(place.pose[:2], (x_m, y_m)))
        # Not always the same: two that make way must not meet there again and again.
        self._aside = self._dice.choice(nearest[:ASIDE_CHOICE])
