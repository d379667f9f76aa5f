"""
The yard as a whole, one time step after the other.

The world has no clock and no sockets: time comes in, and questions go out to a desk. In the demo
the desk talks to a daemon; in tests it plans by itself, and an hour takes a minute.
"""

from collections.abc import Mapping, Sequence
from typing import Any, Final, Protocol

from bywayd.yard.claims import Claim, Ground
from bywayd.yard.crane import Crane, stations_m
from bywayd.yard.referee import Referee
from bywayd.yard.scene import BUILDINGS, ROUNDS, STACKS, Round
from bywayd.yard.shapes import Mass, Masses, Pose
from bywayd.yard.unit import Ask, Reply, Unit

STEP_S: Final = 0.02
TRACE_EVERY_S: Final = 0.1


class Desk(Protocol):
    """Where questions and news of the yard go. Nothing here may wait."""

    def ask(self, ask: Ask) -> None:
        """Take a question; one a unit is open at a time."""

    def replies(self) -> Sequence[Reply]:
        """Return what came of questions since the last call."""

    def put(self, mass: Mass) -> None:
        """Tell the daemon of a pack."""

    def drop(self, name: str) -> None:
        """Tell the daemon that a pack is gone."""

    def told(self) -> Sequence[str]:
        """Return the packs of which the daemon has learned since the last call."""

    def show(self, claims: Mapping[str, Claim]) -> None:
        """Tell the daemon, when there is time, what ground the vehicles claim now."""


class World:
    """Owned by one loop. Vehicles are as the daemon tells them: {name: settings}."""

    def __init__(
        self,
        vehicles: Mapping[str, Mapping[str, Any]],
        desk: Desk,
        seed: int,
        rounds: Sequence[Round] = ROUNDS,
    ) -> None:
        self._desk = desk
        self._ground = Ground()
        self.units = {
            round_.unit: Unit(round_, vehicles[round_.vehicle], self._ground, seed + rank)
            for rank, round_ in enumerate(rounds)
        }
        everyone = list(self.units.values())
        self.crane = Crane(everyone, stations_m(everyone), seed)
        self.referee = Referee(Masses((*BUILDINGS, *STACKS)))
        self.traces: dict[str, list[Pose]] = {name: [] for name in self.units}
        self.now_s = 0.0
        self._packs = Masses(())
        self._trace_s = 0.0

    def step(self) -> None:
        """Let STEP_S pass."""
        self.now_s += STEP_S
        for reply in self._desk.replies():
            self.units[reply.ask.unit].take(reply, self.crane.packs, self.now_s)
        for name in self._desk.told():
            self.crane.told(name, self.now_s)
        for unit in self.units.values():
            ask = unit.step(self.crane.packs, self.now_s, STEP_S)
            if ask is not None:
                self._desk.ask(ask)
        self._work_the_crane()
        self._desk.show(self._ground.claims)
        rings = {name: unit.driver.ring_m for name, unit in self.units.items()}
        self.referee.look(rings, self._packs, self.now_s)
        if self.now_s >= self._trace_s:
            self._trace_s = self.now_s + TRACE_EVERY_S
            for name, unit in self.units.items():
                self.traces[name].append(unit.driver.pose)

    def _work_the_crane(self) -> None:
        put, gone = self.crane.step(self._ground, self.now_s)
        for pack in put:
            self._desk.put(pack.mass)
        for pack in gone:
            self._desk.drop(pack.mass.name)
        if put or gone:
            self._packs = Masses(pack.mass for pack in self.crane.packs)
            for unit in self.units.values():
                unit.see(self.crane.packs)

    @property
    def claims(self) -> Mapping[str, Claim]:
        """What ground the vehicles claim now."""
        return self._ground.claims

    @property
    def deliveries(self) -> int:
        """How many loads have reached their place."""
        return sum(unit.tally.deliveries for unit in self.units.values())
