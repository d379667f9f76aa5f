"""
A simulated day around the real core: virtual clock, lossy network, clients, sources, crew.

One thread, one seed. What is scheduled happens in order of virtual time; whatever reaches the
front is handed to `Front.handle`, its effects are carried out by the actors, and the checkers
look at every one. A day has two phases: in the first anything may go wrong, and nothing may be
wrong; in the second nothing goes wrong any more, and everything must come to its end.
"""

from __future__ import annotations

import hashlib
import heapq
import random
from collections import deque
from collections.abc import Callable
from typing import Any

from tests.simulation.checkers import BrokenPromise, Checkers, describes, promise
from tests.simulation.clients import Clients
from tests.simulation.crew import Crew
from tests.simulation.drivers import Drivers
from tests.simulation.freshcheck import FreshCheck
from tests.simulation.odds import Odds
from tests.simulation.sources import Sources
from tests.simulation.times import MS, SECOND

from bywayd.core import effects, events
from bywayd.core.effects import LayerFlags
from bywayd.core.front import Front, FrontSettings
from bywayd.core.front_settings import KnownVehicle
from bywayd.core.instants import Instant

#: How often the core checks all of its own state: a prime, so that it drifts over all situations.
CHECK_EVERY = 101
FORGET_EVERY = 20_011
#: A front that wants to be woken at once again and again would let no time pass.
STEPS_AT_ONCE_MAX = 1_000

MakeFront = Callable[[FrontSettings, str, int], Front]


def settings_for(odds: Odds) -> FrontSettings:
    """Return settings that let everything happen within seconds of simulated time."""
    durable = {name: LayerFlags(durable=True) for name in durable_layers(odds)}
    return FrontSettings(
        vehicles={"tug": KnownVehicle("car", {"model": "car", "name": "tug"})},
        layers={"fixed": LayerFlags(), "outlines": LayerFlags(outlines_only=True), **durable},
        keeps=bool(durable),
        clerk_silence_s=1.0,
        workers=odds.workers,
        start_time_max_s=2.0,
        surveyor_silence_s=1.0,
        backoff_max_s=1.0,
        answers_max=20_000,
        answers_bytes_max=64 * 1024 * 1024,
        answers_kept_s=30.0,
        budget_max_s=10.0,
        guards_max=odds.guards_max,
        track_expires_s=0.2,
        expiries_max=odds.expiries_max,
        expected={"outlines": (1.0, odds.when_stale)},
    )


def durable_layers(odds: Odds) -> frozenset[str]:
    """Return the layers whose acknowledged changes survive every crash."""
    return frozenset(f"layer{i}" for i in range(min(odds.durable, odds.sources)))


class World:
    """Everything that there is, on one day."""

    def __init__(self, seed: int, odds: Odds | None = None, make_front: MakeFront = Front) -> None:
        self.seed = seed
        self.rng = random.Random(seed)
        self.odds = odds or Odds.draw(self.rng)
        self.make_front = make_front
        self.settings = settings_for(self.odds)
        self.durable = durable_layers(self.odds)
        self.now_ns = 10_000 * SECOND
        self._heap: list[tuple[int, int, Callable[..., None], tuple[Any, ...]]] = []
        self._serial = 0
        self._steps_at_once = 0
        #: Events handed to any front.
        self.event_count = 0
        self.lives = 0
        #: When the front wants to be woken, if it has said so.
        self.wake_ns: int | None = None
        self.story: deque[str] = deque(maxlen=60)
        self.digest = hashlib.blake2b(digest_size=16)
        self.keep_digest = False
        self.stopped: str | None = None
        self.last_logs: deque[effects.Log] = deque(maxlen=20)
        self.counts: dict[str, int] = {}
        self.is_calm = False
        self.is_ending = False
        # Actors, then the first life of the daemon.
        self.crew = Crew(self)
        self.clients = Clients(self)
        self.sources = Sources(self)
        self.drivers = Drivers(self)
        self.restart()
        self.clients.begin()
        self.drivers.begin()
        self.sources.begin()

    # -- time ---------------------------------------------------------------------------------

    def at(self, delay_ns: float, call: Callable[..., None], *args: Any) -> None:
        """Let something happen after a while."""
        self._serial += 1
        heapq.heappush(self._heap, (self.now_ns + round(delay_ns), self._serial, call, args))

    def chance(self, fault: str) -> bool:
        """Whether a fault happens now."""
        odds = self.odds.faults[fault]
        happens = odds > 0.0 and self.rng.random() < odds
        if happens:
            self.counts[fault] = self.counts.get(fault, 0) + 1
        return happens

    def step(self) -> None:
        """Let the next thing happen."""
        at_ns, _, call, args = heapq.heappop(self._heap)
        self._steps_at_once = self._steps_at_once + 1 if at_ns == self.now_ns else 0
        promise(self._steps_at_once < STEPS_AT_ONCE_MAX, "time goes on")
        self.now_ns = at_ns
        call(*args)

    # -- the daemon ---------------------------------------------------------------------------

    def restart(self) -> None:
        """The daemon is killed with all its processes, and another takes its place."""
        self.lives += 1
        self.epoch = f"epoch{self.lives}"
        surveyor = self.crew.surveyor
        self.checkers = Checkers(
            *(self.epoch, surveyor.sees, self.settings),
            *(self.sources.is_safe, surveyor.recall_is_visible),
            FreshCheck(self.sources.terms, self.settings.expected, self.now_ns),
        )
        self.crew.all_gone()
        self.front = self.make_front(self.settings, self.epoch, self.seed + self.lives)
        self._wake_serial = 0
        self.wake_ns = None
        self.stopped = None
        self.hand_in(events.Started(self.now_ns / 1e9))

    def _killed(self) -> None:
        if not self.is_ending:
            self.restart()

    def hand_in(self, event: events.Event) -> None:
        """Give an event to the front, and carry out what comes of it."""
        if self.stopped is not None:
            return
        self.event_count += 1
        self.story.append(f"{self.now_ns / MS:.3f} {describes(event)}")
        self.checkers.guards.hands_in(event)
        out = self.front.handle(event, Instant(self.now_ns))
        if self.keep_digest:
            self.digest.update(repr(out).encode())
        for effect in out:
            self.checkers.guards.effect(effect, self.now_ns)
            self._carry_out(effect)
        self.checkers.guards.turn_ends(self.now_ns)
        self.checkers.fresh.turn_ends(self.now_ns)
        if self.stopped is None:
            self.crew.surveyor.check_carried()
        if self.event_count % CHECK_EVERY == 0:
            self.front.check()
            self.checkers.guards.check(self.now_ns)
            self._check_bounds()
        if self.event_count % FORGET_EVERY == 0:
            self.checkers.forget(self.now_ns, 60 * SECOND)
        if self.chance("restart"):
            self.at(0, self._killed)

    def _carry_out(self, effect: effects.Effect) -> None:
        match effect:
            case effects.Reply():
                self.checkers.reply(effect, self.now_ns)
                self._send_reply(effect)
            case effects.Publish():
                self.checkers.publish(effect, self.now_ns)
                if effect.topic == "health" and not self.chance("lose"):
                    self.at(self._transit_ns(), self.sources.hear_health, effect)
                elif effect.topic.startswith("guard.") and not self.chance("lose"):
                    self.at(self._transit_ns(), self.drivers.hear_event, effect)
            case effects.Wake():
                self._wake_serial += 1
                self.wake_ns = effect.at.ns
                lag_ns = self.rng.uniform(0, 0.2 * MS) if self.chance("lag") else 0
                delay_ns = max(0, effect.at.ns - self.now_ns) + lag_ns
                self.at(delay_ns, self._tick, self.epoch, self._wake_serial)
            case effects.Log():
                self.last_logs.append(effect)
            case effects.Stop():
                self.stopped = effect.why
            case _:
                self.crew.carry_out(effect)

    def _tick(self, epoch: str, serial: int) -> None:
        if epoch == self.epoch and serial == self._wake_serial:
            self.wake_ns = None
            self.hand_in(events.Tick())

    # -- the network --------------------------------------------------------------------------

    def to_front(self, make: Callable[[], events.Event]) -> None:
        """Send a message to the front: it may be lost, come twice, or late."""
        if self.chance("lose"):
            return
        self.at(self._transit_ns(), self._arrive, make)
        if self.chance("repeat"):
            self.at(self._transit_ns() * 3, self._arrive, make)

    def _arrive(self, make: Callable[[], events.Event]) -> None:
        if self.stopped is None:
            self.hand_in(make())

    def _send_reply(self, effect: effects.Reply) -> None:
        receiver: Clients | Drivers | Sources = self.sources
        if effect.peer.channel == "requests":
            is_driver = effect.peer.identity.startswith(b"driver")
            receiver = self.drivers if is_driver else self.clients
        if self.chance("lose"):
            if self.rng.random() < 0.5:
                self.at(0, self.hand_in, events.Undeliverable(effect.peer))
            return
        self.at(self._transit_ns(), receiver.hear, effect)
        if self.chance("repeat"):
            self.at(self._transit_ns() * 3, receiver.hear, effect)

    def _transit_ns(self) -> float:
        if self.chance("hold_up"):
            return self.rng.uniform(0.1, 50) * MS
        return self.rng.uniform(0.03, 0.3) * MS

    # -- checks that need everything ------------------------------------------------------------

    def _check_bounds(self) -> None:
        front, settings = self.front, self.settings
        open_max = settings.waiting_max + 2 * settings.workers + len(front.guards)
        promise(len(front.answering.open) <= open_max, "open replans are bounded")
        promise(len(front.snapshots.pins()) <= 2 * settings.workers + 1, "pins are bounded")
        ledger = front.ledger.statistics()
        keep_max = settings.source_window * self.odds.sources + settings.expiries_max
        promise(front.keeping.pending <= keep_max, "what waits for the disk is bounded")
        promise(ledger.expiries <= settings.expiries_max, "what may expire is bounded")
        promise(ledger.sources <= self.odds.sources, "sources are known once")
        promise(ledger.layers <= self.odds.sources + 3, "layers are known once")
        promise(ledger.pending_bytes <= settings.pending_bytes_max, "what is pending is bounded")
        promise(front.outbox.stream_count <= settings.units_max + 1, "streams are bounded")

    # -- a day ----------------------------------------------------------------------------------

    def run(self, event_count: int, *, calm: bool = True) -> None:
        """
        Let anything happen; then calm down, and see that everything ends; then ask for the end.

        Without the calm the end is asked for while things go wrong.
        """
        try:
            while self.event_count < event_count:
                self.step()
            if calm:
                self.calm_down()
            self.drain()
        except BaseException as fault:
            raise type(fault)(
                f"{fault}\nseed={self.seed} after {self.event_count} events, lives={self.lives}\n"
                f"{self.odds}\nlast events:\n  " + "\n  ".join(self.story)
            ) from fault

    def calm_down(self, limit_ns: int = 120 * SECOND) -> None:
        """Nothing goes wrong any more: everything that is open comes to its end."""
        self.odds.calm()
        self.is_calm = True
        end_ns = self.now_ns + limit_ns
        while not self._is_settled():
            if self.now_ns > end_ns:
                raise BrokenPromise(f"not settled: {self._unsettled()}")
            self.step()
        self.front.check()
        self.crew.surveyor.check_site()
        self.crew.clerk.check_disk()

    def _unsettled(self) -> list[str]:
        workers = self.front.workers.statistics()
        found = {
            "replans are open": self.checkers.open(),
            "clients wait": self.clients.waiting(),
            "changes are not acknowledged": self.sources.unacknowledged(),
            "sources live in the past": self.sources.belated(),
            "workers are missing": workers.idle + workers.busy < self.settings.workers,
            "guards are asked for": self.checkers.guards.waiting(self.now_ns),
            "alerts are due": self.crew.surveyor.unheard(),
            "no surveyor": not self.front.surveying.is_ready,
            "changes are not on the disk": self.front.keeping.pending,
            "obstacles that have expired are there": self.crew.surveyor.overdue(),
        }
        return [f"{what} {who}" for what, who in found.items() if who]

    def _is_settled(self) -> bool:
        return not self._unsettled()

    def drain(self) -> None:
        """Ask for the end while replans are open: all are answered, and it ends in two seconds."""
        self.odds.faults["restart"] = 0.0
        self.is_ending = self.checkers.fresh.is_ending = True
        self.clients.burst()
        asked_ns = self.now_ns
        while self.now_ns < asked_ns + 2 * MS:
            self.step()
        self.hand_in(events.StopAsked("the day is over"))
        while self.stopped is None:
            promise(self.now_ns <= asked_ns + 2 * SECOND, "the daemon ends within two seconds")
            self.step()
        promise(not self.checkers.open(), "everything open is answered", self.checkers.open())
