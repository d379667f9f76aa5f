"""
The yard as a whole, one time step after the other.

The world has no clock and no sockets: time comes in, and questions go out to a desk. In the demo
the desk talks to a daemon; in tests it plans by itself, and an hour takes a minute.
"""

from collections.abc import Mapping, Sequence
from typing import Any, Final, Protocol

from bywayd.yard.claims import Claim, Ground
from bywayd.yard.crane import Crane, stations_m
from bywayd.yard.driver import Driver
from bywayd.yard.fork_truck import NAME as FORK_TRUCK
from bywayd.yard.fork_truck import ForkTruck, Moving
from bywayd.yard.referee import Referee
from bywayd.yard.scene import BUILDINGS, ROUNDS, SENSOR_ON, STACKS, Round
from bywayd.yard.sensor import Scan, Sensor
from bywayd.yard.shapes import Mass, Masses, Pose
from bywayd.yard.unit import Ask, News, Reply, Unit, Watch

STEP_S: Final = 0.02
TRACE_EVERY_S: Final = 0.1
SCAN_EVERY_S: Final = 0.1
TRACK_EVERY_S: Final = 0.2
PROGRESS_EVERY_S: Final = 0.2
#: A vehicle that has stopped for something for so long says so.
TELL_S: Final = 0.3


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

    def show(self, claims: Mapping[str, Claim]) -> None:
        """Tell the daemon, when there is time, what ground the vehicles claim now."""

    def scan(self, scan: Scan, news: Sequence[Mass]) -> None:
        """Pass a sweep of the range sensor on; `news` is the truth behind it, for the report."""

    def track(self, moving: Moving) -> None:
        """Tell the daemon how something moves."""

    def watch(self, watch: Watch) -> None:
        """Have a line guarded."""

    def progress(self, unit: str, guard: str, at_m: float, speed_mps: float) -> None:
        """Tell where on its guarded route a unit is."""

    def release(self, unit: str) -> None:
        """Tell that a unit drives no more."""

    def news(self) -> Sequence[News]:
        """Return what was heard of guards since the last call."""


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
        self.truck = ForkTruck(self._ground, seed)
        self.referee = Referee(Masses((*BUILDINGS, *STACKS)))
        self.traces: dict[str, list[Pose]] = {name: [] for name in (*self.units, FORK_TRUCK)}
        self.now_s = 0.0
        self._packs = Masses(())
        self._trace_s = self._scan_s = self._track_s = self._progress_s = 0.0
        self._sensor: Sensor | None = None
        if SENSOR_ON in self.units:
            nose_m = float(self.units[SENSOR_ON].driver.outline_m[:, 0].max())
            self._sensor = Sensor((*BUILDINGS, *STACKS), nose_m, seed)

    def step(self) -> None:
        """Let STEP_S pass."""
        self.now_s += STEP_S
        for reply in self._desk.replies():
            self.units[reply.ask.unit].take(reply, self.now_s)
        for news in self._desk.news():
            self.units[news.unit].hear(news)
        for unit in self.units.values():
            self._let_move(unit)
        self.truck.step(self.now_s, STEP_S)
        self._work_the_crane()
        self._tell()
        rings = {name: unit.driver.ring_m for name, unit in self.units.items()}
        rings[FORK_TRUCK] = self.truck.driver.ring_m
        self.referee.look(rings, self._packs, self.now_s)
        if self.now_s >= self._trace_s:
            self._trace_s = self.now_s + TRACE_EVERY_S
            for name, driver in self._drivers():
                self.traces[name].append(driver.pose)

    def _drivers(self) -> list[tuple[str, Driver]]:
        units = [(name, unit.driver) for name, unit in self.units.items()]
        return [*units, (FORK_TRUCK, self.truck.driver)]

    def _let_move(self, unit: Unit) -> None:
        had_guard = bool(unit.guard)
        ask = unit.step(self.now_s, STEP_S)
        if ask is not None:
            self._desk.ask(ask)
        driver = unit.driver
        if unit.wants_guard and driver.line is not None:
            unit.wants_guard = False
            self._desk.watch(
                Watch(unit.name, unit.vehicle, driver.line, driver.line_number, driver.at_m)
            )
        elif had_guard and driver.line is None:
            self._desk.release(unit.name)
        held_since_s = driver.held_since_s
        if driver.seen and held_since_s is not None and self.now_s - held_since_s > TELL_S:
            # What nobody has told of, and the sensor has not seen either: who stands before it
            # says so.
            mass = self.crane.tell(driver.seen)
            if mass is not None:
                self._desk.put(mass)

    def _tell(self) -> None:
        """Tell the daemon what is to be told now."""
        self._desk.show(self.claims)
        if self.now_s >= self._track_s:
            self._track_s = self.now_s + TRACK_EVERY_S
            self._desk.track(self.truck.seen())
        if self.now_s >= self._scan_s and self._sensor is not None:
            self._scan_s = self.now_s + SCAN_EVERY_S
            self._scan(self._sensor)
        if self.now_s >= self._progress_s:
            self._progress_s = self.now_s + PROGRESS_EVERY_S
            for name, unit in self.units.items():
                if unit.guard:
                    driver = unit.driver
                    self._desk.progress(name, unit.guard, driver.at_m, driver.speed_mps)

    def _scan(self, sensor: Sensor) -> None:
        carrier = self.units[SENSOR_ON].driver
        news = [pack.mass for pack in self.crane.packs if not pack.is_told]
        others = [pack.mass for pack in self.crane.packs if pack.is_told]
        others += [Mass(n, d.ring_m) for n, d in self._drivers() if d is not carrier]
        self._desk.scan(sensor.sweep(carrier.pose, news, others), news)

    def _work_the_crane(self) -> None:
        put, gone = self.crane.step(self._ground, self.now_s)
        for pack in put:
            if pack.is_told:
                self._desk.put(pack.mass)
        for pack in gone:
            if pack.is_told:
                self._desk.drop(pack.mass.name)
        if put or gone:
            masses = [pack.mass for pack in self.crane.packs]
            self._packs = Masses(masses)
            self.truck.see(masses)
            for unit in self.units.values():
                unit.see(self.crane.packs)

    @property
    def claims(self) -> Mapping[str, Claim]:
        """What ground the vehicles claim now; the fork truck is told as a track."""
        return {name: self._ground.claims[name] for name in self.units}

    @property
    def deliveries(self) -> int:
        """How many loads have reached their place."""
        return sum(unit.tally.deliveries for unit in self.units.values())
