"""Vehicles of the simulated world: they have their routes guarded, and tell where they are."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import msgpack
from tests.simulation import routes
from tests.simulation.times import SECOND

from byway import frames, messages
from bywayd.core import effects, events

if TYPE_CHECKING:
    from tests.simulation.world import World


@dataclass
class Driver:
    unit: str
    identity: bytes
    epoch: str = ""
    #: The guard that it believes in, how long the route is, and where it is on it.
    guard: str | None = None
    length_m: float = 0.0
    way_m: float = 0.0
    silent_until_ns: int = 0


class Drivers:
    """One for each unit. Replans with a guard come from clients, and surprise them."""

    def __init__(self, world: World) -> None:
        self.world = world
        self.drivers: dict[str, Driver] = {}
        for number in range(world.odds.units):
            unit = f"unit{number}"
            self.drivers[unit] = Driver(unit, f"driver-{unit}".encode())
        self.serial = 0
        #: Length of the route of each request for a guard.
        self.lengths: dict[str, float] = {}

    def begin(self) -> None:
        for driver in self.drivers.values():
            self._next(driver)

    def _next(self, driver: Driver) -> None:
        world = self.world
        if world.chance("driver_silent"):
            driver.silent_until_ns = world.now_ns + 3 * SECOND
        if world.now_ns >= driver.silent_until_ns:
            self._do(driver)
        rate = world.odds.rates["drives"] / len(self.drivers)
        world.at(min(0.4, world.rng.expovariate(rate)) * SECOND, self._next, driver)

    def _do(self, driver: Driver) -> None:
        world, rng = self.world, self.world.rng
        if driver.guard is None:
            if not world.is_calm:
                self._ask(driver)
        elif rng.random() < 0.03 and not world.is_calm:
            self._say(driver, messages.Release(unit=driver.unit, guard=driver.guard))
            driver.guard = None
        elif rng.random() < 0.05 and not world.is_calm:
            self._ask(driver)
        else:
            driver.way_m = min(driver.length_m, driver.way_m + rng.uniform(0.0, 0.5))
            way_m = driver.way_m + (99.0 if world.chance("senseless") else 0.0)
            self._say(
                driver,
                messages.Progress(
                    unit=driver.unit,
                    progress_m=way_m,
                    guard=rng.choice([None, driver.guard]),
                    speed_mps=rng.choice([None, 0.0, 0.5, 2.0, 5.0]),
                ),
            )

    def _ask(self, driver: Driver) -> None:
        world, rng = self.world, self.world.rng
        length_m = rng.choice([0.0, 3.0, 20.0, 60.0])
        begin_m = rng.choice([0.0, 5.0])
        columns, packed = routes.table(begin_m, begin_m + length_m, rng.choice([0.0, 2.0]))
        ask = messages.Guard(
            vehicle="unicorn" if world.chance("senseless") else "tug",
            unit=driver.unit,
            columns=columns,
            progress_m=rng.choice([0.0, 0.0, 1.0]) * min(length_m, 1.0),
            silence_s=rng.choice([None, 0.5, 2.0]),
            replan_on_alert=rng.random() < 0.7,
            budget_s=rng.choice([0.02, 0.2]),
            leave_out=rng.choice([[], [], ["outlines"]]),
        )
        id = self._say(driver, ask, packed)
        self.lengths[id] = length_m
        if world.chance("conflict"):
            self._say(driver, ask.model_copy(update={"budget_s": 0.5}), packed, id)

    def _say(
        self, driver: Driver, message: messages.Message, packed: bytes = b"", id: str = ""
    ) -> str:
        world = self.world
        self.serial += 1
        id = id or f"drive{self.serial}"
        body = msgpack.packb(message.model_dump())
        came = frames.Received(
            frames.Header(message.kind, id, epoch=driver.epoch), message, body, packed
        )
        peer = events.Peer("requests", driver.identity)

        def make() -> events.Event:
            world.checkers.guards.came(came, world.now_ns)
            return events.Received(peer, came)

        world.to_front(make)
        if world.chance("impatient"):
            world.at(world.rng.uniform(0, 0.3) * SECOND, world.to_front, make)
        return id

    # -- hearing ----------------------------------------------------------------------------------

    def hear(self, effect: effects.Reply) -> None:
        """A reply has reached a driver."""
        driver = self.drivers[effect.peer.identity.decode().removeprefix("driver-")]
        message = effect.message
        driver.epoch = effect.header.epoch
        if isinstance(message, messages.ErrorMessage):
            if message.code in ("unknown_request", "new_epoch"):
                driver.guard = None
        elif isinstance(message, messages.GuardIs) and effect.header.id in self.lengths:
            driver.guard, driver.way_m = message.guard, message.progress_m
            driver.length_m = self.lengths.pop(effect.header.id)

    def hear_event(self, effect: effects.Publish) -> None:
        """An event about a guard has reached its driver."""
        message = effect.message
        driver = self.drivers.get(effect.topic.removeprefix("guard."))
        if driver is None:
            return
        if isinstance(message, messages.Rerouted) and driver.guard == message.was:
            columns = frames.decode_outcome(message.outcome, effect.packed).columns
            begin_m, end_m = routes.ends(columns, effect.packed)
            driver.guard, driver.way_m, driver.length_m = message.guard, 0.0, end_m - begin_m
        elif isinstance(message, messages.GuardLost) and driver.guard == message.guard:
            driver.guard = None
