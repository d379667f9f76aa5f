"""
One vehicle of the yard with its round: what it wants, what it asks, and when it gives up.

It asks for a route when it has loaded or unloaded, and has it guarded. When that is blocked the
daemon raises the alarm and publishes a new route by itself; the vehicle takes it over, or stops
before what is in the way until it is gone. On the way it asks again now and then, because a better
way may have opened, and after a while when another vehicle holds it up. A question asked on the
move starts from the state that the vehicle will have when the answer is due; the new route is taken
over at that place.
"""

import itertools
import math
import random
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Any, Final, Literal

from bywayd.yard.claims import Ground
from bywayd.yard.driver import Driver
from bywayd.yard.scene import ASIDE, Round, Station
from bywayd.yard.shapes import Mass, Masses, Pose
from bywayd.yard.tracking import Line

STANDING_BUDGET_S: Final = 0.2
MOVING_BUDGET_S: Final = 0.12
#: From the end of the budget to the hand-over: the way there and back, and a step.
HANDOVER_SPARE_S: Final = 0.12
ASK_EVERY_S: Final = 3.0
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
#: A vehicle with a blocked route stops so far from the place where it would be too near.
BLOCK_STOP_M: Final = 0.4
#: How long it waits there for the daemon's new route before it asks itself.
NEW_ROUTE_S: Final = 0.6
#: A new route is of use as long as the vehicle is not so far beyond its beginning.
MISSED_M: Final = 0.3


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
    guard: str = ""  # that stands on the route


@dataclass(frozen=True)
class Block:
    """Where a guarded route is blocked, along it, and by what."""

    at_m: float
    layer: str
    name: str
    kind: str


@dataclass(frozen=True)
class Watch:
    """A wish: to have a line guarded that the unit drives."""

    unit: str
    vehicle: str
    line: Line
    line_number: int
    at_m: float


@dataclass(frozen=True)
class News:
    """
    What the daemon says of a guard.

    "guarded" is the reply to a `Watch`; the rest are events. A new route (`line`) begins at
    `from_m` of the line that the guard `was` stood on, and `guard` stands on it already.
    """

    unit: str
    kind: Literal["guarded", "alert", "cleared", "rerouted", "reroute_failed", "guard_lost"]
    guard: str
    block: Block | None = None
    line_number: int = -1
    was: str = ""
    line: Line | None = None
    from_m: float = 0.0


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
    alerts: int = 0
    cleared: int = 0
    rerouted: int = 0  # new routes that the daemon published by itself
    rerouted_taken: int = 0
    not_rerouted: int = 0  # it found none
    guards_lost: int = 0


@dataclass(frozen=True)
class Pack:
    """Something put down in the way. `is_told`: whether somebody has told the daemon."""

    mass: Mass
    gone_s: float
    is_told: bool = True


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
        #: The guard on the line in use, and on the one that is to be taken over; "" without.
        self.guard = ""
        self._next_guard = ""
        #: Whether the line in use should be guarded, and is not, and nobody has been asked.
        self.wants_guard = False
        self._block: Block | None = None
        self._heard: News | None = None
        self._asks_at_once = False

    # -- answers ---------------------------------------------------------------------------

    def take(self, reply: Reply, now_s: float) -> None:
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
            self._adopt(reply.guard)
        elif self.driver.at_m > ask.goes_on_at_m:
            self.tally.too_late += 1
        elif self._next_guard == "" and self._is_worth_it(reply.cost, ask.goes_on_at_m):
            self.driver.take_over_later(reply.line, ask.goes_on_at_m)
        else:
            self.tally.not_needed += 1

    def _is_worth_it(self, cost: float, goes_on_at_m: float) -> bool:
        line = self.driver.line
        if line is None or self.driver.blocked_at_m < math.inf:
            return True
        left = line.cost_left(goes_on_at_m, self._reverse_factor, self._direction_change_m)
        return cost < left - SAVING_M

    def see(self, packs: Iterable[Pack]) -> None:
        """Look at the packs on the yard."""
        self.driver.see(Masses(pack.mass for pack in packs))

    # -- guards ----------------------------------------------------------------------------

    def hear(self, news: News) -> None:
        """Take in what the daemon says of a guarded route."""
        driver = self.driver
        if driver.line is None:
            return
        if news.kind == "guarded":
            if news.line_number == driver.line_number:
                self._adopt(news.guard)
                if news.block is not None:
                    self._stop_for(news.block)
            return
        self._heard = news
        if news.kind == "rerouted":
            self._hear_of_route(news)
        elif news.guard == self.guard:
            self._hear_of_guard(news)

    def _hear_of_guard(self, news: News) -> None:
        if news.kind == "alert" and news.block is not None:
            self.tally.alerts += 1
            self._stop_for(news.block)
        elif news.kind == "cleared":
            self.tally.cleared += 1
            self._go_on()
        elif news.kind == "reroute_failed":
            self.tally.not_rerouted += 1
            self._asks_at_once = True
        elif news.kind == "guard_lost":
            self.tally.guards_lost += 1
            self.guard, self.wants_guard = "", True

    def _hear_of_route(self, news: News) -> None:
        if news.was != self.guard:
            if news.was == self._next_guard:
                # The route that is to be taken over is blocked already, and its guard has gone.
                self._next_guard = "~"
            return
        self.tally.rerouted += 1
        driver = self.driver
        if news.line is None or driver.at_m > news.from_m + MISSED_M:
            self.tally.too_late += 1
            self.guard, self.wants_guard = "", True
            return
        driver.take_over_later(news.line, news.from_m)
        self._next_guard = news.guard
        if news.line.speed_at(0.0) < 0.05:
            driver.stop_for(news.from_m)

    def _adopt(self, guard: str) -> None:
        """Know the guard of the line in use; "" if there is none yet."""
        self.guard, self._next_guard = guard, ""
        self.wants_guard = not guard
        self._go_on()
        heard = self._heard
        if guard and heard is not None and heard.guard == guard and heard.kind != "rerouted":
            # It was faster than the news that this guard stands.
            self._hear_of_guard(heard)

    def _stop_for(self, block: Block) -> None:
        # Ground that other vehicles claim is kept free of by claiming, and they leave it soon.
        self._block = block
        if not block.layer.startswith("unit."):
            self.driver.stop_for(block.at_m - BLOCK_STOP_M)

    def _go_on(self) -> None:
        self._block = None
        self._asks_at_once = False
        self.driver.stop_for(math.inf)

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

    def step(self, now_s: float, dt_s: float) -> Ask | None:
        """Move by one time step; returns a question when there is one."""
        asked_from_here = self.pending is not None and self.pending.goes_on_at_m is None
        if not asked_from_here:
            came_of_it = self.driver.step(now_s, dt_s)
            if came_of_it is not None:
                self._handed_over(came_of_it == "taken")
        if self.driver.held_since_s is not None:
            self.tally.held_s += dt_s
        if self.driver.has_arrived:
            self._arrive(now_s)
        return self._question(now_s) if self.pending is None else None

    def _handed_over(self, taken: bool) -> None:
        if taken:
            self.tally.taken_over += 1
            self.tally.rerouted_taken += bool(self._next_guard)
            self._adopt("" if self._next_guard == "~" else self._next_guard)
            return
        self.tally.not_fitting += 1
        if self._next_guard:
            # The daemon has put its guard on the new route; the old one has none any more.
            self._adopt("")

    def _arrive(self, now_s: float) -> None:
        self.driver.leave()
        self.guard, self._next_guard, self.wants_guard = "", "", False
        self._go_on()
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
            stands = driver.blocked_at_m < math.inf and not self._is_blocked_by_a_mover
            patience_s = NEW_ROUTE_S if stands else PATIENCE_S - PATIENCE_PER_RANK_S * self._rank
            if now_s - driver.held_since_s > patience_s:
                return self._ask_from_here(now_s)
            return None
        if self._next_guard:
            return None
        if self._asks_at_once or now_s - self._asked_s > ASK_EVERY_S:
            self._asks_at_once = False
            return self._ask_on_the_move(now_s)
        return None

    @property
    def _is_blocked_by_a_mover(self) -> bool:
        return self._block is not None and self._block.kind == "track"

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
