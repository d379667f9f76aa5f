"""A desk that plans by itself: the yard without daemon, clock or threads, the same every time."""

from collections import Counter
from collections.abc import Mapping, Sequence
from typing import Any

import byway_planning
from bywayd.settings import load
from bywayd.yard.claims import Claim, told_outlines
from bywayd.yard.scene import BUILDINGS, LIMITS_M, STACKS
from bywayd.yard.shapes import Mass
from bywayd.yard.tracking import Line
from bywayd.yard.unit import Ask, Reply
from bywayd.yard.world import STEP_S, World

#: How often the site hears of the vehicles, in steps; the daemon hears of them as often.
SHOW_EVERY_STEPS = 10
WORK_MAX = 1500


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
        for layer in ("fixed", "packs"):
            self._model.declare(layer, byway_planning.LayerSettings())
        for mass in (*BUILDINGS, *STACKS):
            self._put("fixed", mass.name, mass)
        self._snapshot = self._model.publish()
        self._steps = 0
        self._open: list[tuple[int, Ask]] = []
        self._told: list[str] = []
        self.kinds: Counter[str] = Counter()

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
        return [self._plan(ask) for ask in due]

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
        self.kinds[outcome.kind] += 1
        line = None if outcome.route is None else Line(outcome.route.table)
        return Reply(ask, outcome.kind, line, outcome.cost)

    def put(self, mass: Mass) -> None:
        """Take a pack into the site at once."""
        self._put("packs", mass.name, mass)
        self._snapshot = self._model.publish()
        self._told.append(mass.name)

    def drop(self, name: str) -> None:
        """Take a pack out of the site at once."""
        self._model.drop("packs", name)
        self._snapshot = self._model.publish()

    def told(self) -> Sequence[str]:
        """Return the packs taken in since the last call."""
        told, self._told = self._told, []
        return told

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
        self._snapshot = self._model.publish()


def run_world(seconds: float, seed: int) -> tuple[World, PlanningDesk]:
    """Let the yard work for so many simulated seconds."""
    desk = PlanningDesk()
    world = World(desk.vehicles, desk, seed)
    while world.now_s < seconds:
        world.step()
    return world, desk
