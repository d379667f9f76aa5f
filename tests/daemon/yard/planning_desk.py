"""A desk that plans by itself: the yard without daemon, clock or threads, the same every time."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from typing import Any

import byway_planning
from byway_planning.site.tracks import Track
from byway_planning.watching import Blocked, WatchedRoute
from bywayd.settings import load
from bywayd.yard.claims import Claim, told_outlines
from bywayd.yard.fork_truck import Moving
from bywayd.yard.scene import BUILDINGS, LIMITS_M, STACKS
from bywayd.yard.sensor import RANGE_M_MAX, RANGE_M_MIN, Scan
from bywayd.yard.shapes import Mass, Pose
from bywayd.yard.telling import DECAY_S
from bywayd.yard.tracking import Line
from bywayd.yard.unit import Ask, Block, News, Reply, Watch
from bywayd.yard.world import STEP_S, World

#: How often the site hears of the vehicles, in steps; the daemon hears of them as often.
SHOW_EVERY_STEPS = 10
WORK_MAX = 1500
#: From an alert to where the new route begins, as a daemon with a budget of 0.2 s has it.
AHEAD_S = 0.25
BRAKING_M = 3.0


class Watched:
    """A guard: a route, where its unit is on it, and what was in the way when it was looked at."""

    def __init__(self, name: str, ask: Ask, line: Line, watched: WatchedRoute) -> None:
        self.name, self.ask, self.line, self.watched = name, ask, line, watched
        self.at_m = self.speed_mps = 0.0
        self.block: Blocked | None = None


class PlanningDesk:
    """Answers come when their budget is over in simulated time; the work is a fixed amount."""

    def __init__(self) -> None:
        sections = load().vehicles
        self.vehicles = {
            name: {"model": section.model, **section.arguments()}
            for name, section in sections.items()
        }
        self._made = {
            name: byway_planning.vehicle_from_settings(vehicle)
            for name, vehicle in self.vehicles.items()
        }
        self._model = byway_planning.SiteModel(byway_planning.SiteSettings(limits_m=LIMITS_M))
        for layer in ("fixed", "packs", "movers"):
            self._model.declare(layer, byway_planning.LayerSettings())
        self._model.declare("lidar", byway_planning.LayerSettings(decay_s=DECAY_S))
        for mass in (*BUILDINGS, *STACKS):
            self._put("fixed", mass.name, mass)
        self._snapshot = self._model.publish()
        self._steps = 0
        self._open: list[tuple[int, Ask]] = []
        self._news: list[News] = []
        self._guards: dict[str, Watched] = {}
        self._guards_made = 0
        #: How every question ended, and every guard was told of.
        self.kinds: Counter[str] = Counter()
        self.heard: Counter[str] = Counter()

    def _put(self, layer: str, name: str, mass: Mass) -> None:
        if len(mass.ring_m) > 1:
            shape: Any = byway_planning.PolygonShape(mass.ring_m)
        else:
            x_m, y_m = mass.ring_m[0].tolist()
            shape = byway_planning.DiscShape(x_m, y_m, mass.radius_m)
        self._model.put(layer, name, shape)

    def ask(self, ask: Ask) -> None:
        """Plan now, on the site as it is now; the answer is given out later."""
        due = self._steps + round(ask.budget_s / STEP_S) + 1
        self._open.append((due, ask))

    def replies(self) -> Sequence[Reply]:
        """Return the answers whose budget is over."""
        self._steps += 1
        due = [ask for at, ask in self._open if at <= self._steps]
        self._open = [(at, ask) for at, ask in self._open if at > self._steps]
        return [self._reply(ask) for ask in due]

    def _reply(self, ask: Ask) -> Reply:
        reply = self._plan(ask)
        self.kinds[reply.kind] += 1
        if reply.line is None or ask.goes_on_at_m is not None:
            return reply
        guard = self._guard(ask, reply.line)
        return Reply(ask, reply.kind, reply.line, reply.cost, guard.name)

    def _plan(self, ask: Ask) -> Reply:
        outcome = byway_planning.plan(
            self._snapshot,
            self._made[ask.vehicle],
            ask.start,
            ask.goal,
            time_left=lambda: 10.0,
            seed=self._steps,
            work_max=WORK_MAX,
            left_out=frozenset({f"unit.{ask.unit}"}),
            start_speed_mps=ask.start_speed_mps,
            start_curvature_per_m=ask.start_curvature_per_m,
        )
        line = None if outcome.route is None else Line(outcome.route.table, (ask, outcome.route))
        return Reply(ask, outcome.kind, line, outcome.cost)

    def put(self, mass: Mass) -> None:
        """Take a pack into the site at once."""
        self._put("packs", mass.name, mass)
        self._publish()

    def drop(self, name: str) -> None:
        """Take a pack out of the site at once."""
        self._model.drop("packs", name)
        self._publish()

    def show(self, claims: Mapping[str, Claim]) -> None:
        """Take the vehicles' ground into the site now and then."""
        if self._steps % SHOW_EVERY_STEPS:
            return
        for unit, claim in claims.items():
            layer = f"unit.{unit}"
            self._model.declare(layer, byway_planning.LayerSettings(outlines_only=True))
            self._model.clear(layer)
            for index, ring_m in enumerate(told_outlines(claim)):
                self._model.put(layer, f"ground-{index}", byway_planning.PolygonShape(ring_m))
        self._publish()

    @property
    def now_s(self) -> float:
        """What the site takes for the time."""
        return self._steps * STEP_S

    def scan(self, scan: Scan, news: Sequence[Mass]) -> None:
        """Take a scan into the site; it is seen with the next change."""
        self._model.scan(
            "lidar", scan.origin, scan.bearings_rad, scan.ranges_m, RANGE_M_MAX,
            range_m_min=RANGE_M_MIN, at_s=self.now_s,
        )  # fmt: skip

    def track(self, moving: Moving) -> None:
        """Take in where something moves; it is seen with the next change."""
        track = Track(
            byway_planning.PolygonShape(moving.outline_m),
            moving.pose,
            moving.velocity_mps,
            moving.turn_rate_radps,
            moving.uncertainty_m,
            moving.growth_mps,
            self.now_s,
        )
        self._model.track("movers", moving.name, track)

    def _publish(self) -> None:
        self._model.carry(self.now_s)
        self._snapshot = self._model.publish()
        for unit, guard in list(self._guards.items()):
            self._look(unit, guard)

    # -- guards ------------------------------------------------------------------------------

    def watch(self, watch: Watch) -> None:
        """Let a guard stand on a line."""
        ask, _ = watch.line.found
        guard = self._guard(ask, watch.line)
        guard.at_m = watch.at_m
        guard.block = guard.watched.check(self._snapshot, watch.at_m)
        self._tell(
            News(watch.unit, "guarded", guard.name, block_of(guard), line_number=watch.line_number)
        )

    def progress(self, unit: str, guard: str, at_m: float, speed_mps: float) -> None:
        """Take in where a unit is."""
        found = self._guards.get(unit)
        if found is not None and found.name == guard:
            found.at_m, found.speed_mps = at_m, speed_mps

    def release(self, unit: str) -> None:
        """Look after a unit no more."""
        self._guards.pop(unit, None)

    def news(self) -> Sequence[News]:
        """Return what there is to say of guards since the last call."""
        told, self._news = self._news, []
        return told

    def _tell(self, news: News) -> None:
        self.heard[news.kind] += 1
        self._news.append(news)

    def _guard(self, ask: Ask, line: Line) -> Watched:
        self._guards_made += 1
        _, route = line.found
        watched = WatchedRoute(
            self._made[ask.vehicle], route.table, left_out=frozenset({f"unit.{ask.unit}"})
        )
        guard = Watched(f"g-{self._guards_made}", ask, line, watched)
        self._guards[ask.unit] = guard
        return guard

    def _look(self, unit: str, guard: Watched) -> None:
        was, guard.block = guard.block, guard.watched.check(self._snapshot, guard.at_m)
        if guard.block is None:
            if was is not None:
                self._tell(News(unit, "cleared", guard.name))
        elif was is None or (was.layer, was.obstacle) != (guard.block.layer, guard.block.obstacle):
            self._tell(News(unit, "alert", guard.name, block_of(guard)))
            self._reroute(unit, guard)

    def _reroute(self, unit: str, guard: Watched) -> None:
        """Search from where the unit will be, as the daemon does after an alert."""
        line, block = guard.line, guard.block
        from_m = guard.at_m + AHEAD_S * guard.speed_mps
        if block is None or from_m + BRAKING_M > block.at_m or from_m > line.length_m - 1.0:
            self._tell(News(unit, "reroute_failed", guard.name))
            return
        start: Pose = line.pose_at(from_m)
        ask = Ask(
            unit, guard.ask.vehicle, start, guard.ask.goal, 0.2, 0, 0.0, None,
            line.speed_at(from_m) * line.gear_at(from_m), line.curvature_at(from_m),
        )  # fmt: skip
        reply = self._plan(ask)
        if reply.line is None:
            self._tell(News(unit, "reroute_failed", guard.name))
            return
        new = self._guard(ask, reply.line)
        self._tell(News(unit, "rerouted", new.name, was=guard.name, line=reply.line, from_m=from_m))


def block_of(guard: Watched) -> Block | None:
    """Return where a guarded route is blocked, in the words of the yard."""
    block = guard.block
    return None if block is None else Block(block.at_m, block.layer, block.obstacle, block.kind)


def run_world(seconds: float, seed: int) -> tuple[World, PlanningDesk]:
    """Let the yard work for so many simulated seconds."""
    desk = PlanningDesk()
    world = World(desk.vehicles, desk, seed)
    while world.now_s < seconds:
        world.step()
    return world, desk
