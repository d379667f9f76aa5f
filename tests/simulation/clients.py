"""Clients of the simulated world: they ask, repeat themselves, change their minds, and wait."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import msgpack
from tests.simulation.times import SECOND

from byway import frames, messages
from byway.errors import BadValue
from bywayd.core import effects, events

if TYPE_CHECKING:
    from tests.simulation.world import World


@dataclass
class Ask:
    """One replan as its client knows it."""

    id: str
    client: int
    message: messages.Replan
    body: bytes
    epoch: str
    tries: int = 0
    ended: bool = False


@dataclass
class Client:
    identity: bytes
    epoch: str
    moves: int = 0
    open: dict[str, Ask] = field(default_factory=dict)


class Clients:
    """All clients."""

    def __init__(self, world: World) -> None:
        self.world = world
        self.clients = [Client(f"client{i}".encode(), "") for i in range(world.odds.clients)]
        self.serial = 0

    def begin(self) -> None:
        self._next_ask()
        self._next_question()

    # -- asking ---------------------------------------------------------------------------------

    def _next_ask(self) -> None:
        world = self.world
        if not world.is_calm:
            self._ask()
        world.at(world.rng.expovariate(world.odds.rates["replans"]) * SECOND, self._next_ask)

    def burst(self) -> None:
        """Ask for more than the workers can do."""
        for _ in range(3 * self.world.odds.workers + 3):
            self._ask(self.world.rng.choice([0.05, 5.0]))

    def _ask(self, budget_s: float | None = None) -> None:
        world, rng = self.world, self.world.rng
        self.serial += 1
        number = rng.randrange(len(self.clients))
        client = self.clients[number]
        unit = f"unit{rng.randrange(world.odds.units)}"
        fields: dict[str, object] = {}
        if world.chance("senseless"):
            fields = rng.choice(
                [
                    {"vehicle": "unicorn"},
                    {"leave_out": ["nowhere"]},
                    {"leave_out": ["fixed"]},
                    {"budget_s": 59.0},
                ]
            )
        elif rng.random() < 0.1:
            fields = {"leave_out": ["outlines"]}
        if rng.random() < 0.2:
            fields |= {
                "guard": True,
                "replan_on_alert": rng.random() < 0.5,
                "silence_s": rng.choice([None, 1.0]),
            }
        if budget_s is None:
            budget_s = rng.choice([0.004, 0.01, 0.02, 0.05, 0.05, 0.1, 0.25, 1.5])
        message = messages.Replan(
            **{
                "vehicle": "tug",
                "unit": unit,
                "start": (0.0, 0.0, 0.0),
                "goal": (float(self.serial), 0.0, 0.0),
                "budget_s": budget_s,
                "seed": rng.choice([None, 7]),
                **fields,
            }
        )
        ask = Ask(
            f"replan{self.serial}",
            number,
            message,
            msgpack.packb(message.model_dump()),
            client.epoch,
        )
        client.open[ask.id] = ask
        world.checkers.sent(ask.id)
        self._send(ask)
        self._change_mind(ask)

    def _change_mind(self, ask: Ask) -> None:
        world, rng = self.world, self.world.rng
        after_ns = rng.uniform(0, 1.2) * min(ask.message.budget_s, 2.0) * SECOND
        named = {"replan": ask.id} if rng.random() < 0.7 else {"unit": ask.message.unit}
        if world.chance("cancel"):
            world.at(after_ns, self._say, ask.client, messages.Cancel(**named))
        if world.chance("finish"):
            world.at(after_ns, self._say, ask.client, messages.Finish(**named))
        if world.chance("conflict"):
            other = ask.message.model_copy(update={"budget_s": 0.5})
            body = msgpack.packb(other.model_dump())
            fake = Ask(ask.id, ask.client, other, body, ask.epoch, ended=True)
            world.at(after_ns, self._send, fake)
        if world.chance("impatient"):
            world.at(after_ns, self._send, ask)

    def _send(self, ask: Ask) -> None:
        """Send a replan, and look after it for as long as it has no answer."""
        world = self.world
        client = self._reconnect_maybe(ask.client)
        header = frames.Header("replan", ask.id, epoch=ask.epoch)
        came = frames.Received(header, ask.message, ask.body, b"")
        peer = events.Peer("requests", client.identity)

        def make() -> events.Event:
            world.checkers.came(ask.message, ask.id, ask.body, world.now_ns)
            return events.Received(peer, came)

        world.to_front(make)
        ask.tries += 1
        if not ask.ended:
            # A client repeats a request when its answer is overdue.
            after_s = min(ask.message.budget_s, 2.0) * 1.2 + 0.06
            world.at(after_s * SECOND, self._look_after, ask)

    def _look_after(self, ask: Ask) -> None:
        client = self.clients[ask.client]
        if ask.ended or ask.id not in client.open:
            return
        if ask.tries >= 6 and not self.world.is_calm:
            del client.open[ask.id]  # it gives up
            return
        self._send(ask)

    def _reconnect_maybe(self, number: int) -> Client:
        client = self.clients[number]
        if self.world.chance("reconnect"):
            client.moves += 1
            client.identity = f"client{number}.{client.moves}".encode()
        return client

    # -- asking other things --------------------------------------------------------------------

    def _next_question(self) -> None:
        world, rng = self.world, self.world.rng
        question = rng.choice(
            [
                messages.Hello(versions=[1], client="somebody"),
                messages.Hello(versions=[9], client="somebody"),
                messages.Site(),
                messages.Site(layers=["fixed"]),
                messages.Site(layers=["nowhere"]),
                messages.Vehicles(),
                messages.Health(),
                messages.Cancel(unit="nobody"),
                messages.Finish(replan="nothing"),
            ]
        )
        if not world.is_calm:
            self._say(rng.randrange(len(self.clients)), question)
        world.at(world.rng.expovariate(world.odds.rates["questions"]) * SECOND, self._next_question)

    def _say(self, number: int, message: messages.Message) -> None:
        world = self.world
        client = self.clients[number]
        self.serial += 1
        peer = events.Peer("requests", client.identity)
        header = frames.Header(message.kind, f"other{self.serial}", epoch=client.epoch)
        if world.chance("garble"):
            fault = BadValue("something is wrong")
            fault.header = world.rng.choice([header, None])
            world.to_front(lambda: events.Unreadable(peer, fault))
        else:
            world.to_front(
                lambda: events.Received(peer, frames.Received(header, message, b"", b""))
            )

    # -- hearing --------------------------------------------------------------------------------

    def hear(self, effect: effects.Reply) -> None:
        """A reply has reached a client."""
        number = int(effect.peer.identity.removeprefix(b"client").split(b".")[0])
        client = self.clients[number]
        client.epoch = effect.header.epoch
        ask = client.open.get(effect.header.id)
        message = effect.message
        if ask is None or not isinstance(message, messages.AnswerMessage | messages.ErrorMessage):
            return
        conflicts = isinstance(message, messages.ErrorMessage) and message.code == "conflict"
        if conflicts and ask.tries < 6:
            return  # the other body came second; if it came first, this is the end
        ask.ended = True
        del client.open[ask.id]

    def waiting(self) -> list[str]:
        """Return who still waits for an answer."""
        return [id for client in self.clients for id in client.open]
