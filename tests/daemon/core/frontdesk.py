"""A front on a desk: events by hand, time by hand, effects to look at, every state checked."""

from __future__ import annotations

from typing import TypeVar

import msgpack

from byway import frames, messages
from byway.packed import pack
from bywayd.core import effects, events
from bywayd.core.effects import LayerFlags
from bywayd.core.front import Front, FrontSettings
from bywayd.core.front_settings import KnownVehicle
from bywayd.core.instants import Duration, Instant

Kind = TypeVar("Kind")

START = Instant(5_000_000_000_000)


def ms(milliseconds: float) -> Duration:
    return Duration.of_s(milliseconds / 1000)


def settings(**fields: object) -> FrontSettings:
    told: dict[str, object] = {
        "vehicles": {"tug": KnownVehicle("car", {"model": "car", "turn_radius_m_min": 2.6})},
        "layers": {"fixed": LayerFlags(), "outlines": LayerFlags(outlines_only=True)},
        "workers": 1,
        **fields,
    }
    return FrontSettings(**told)  # type: ignore[arg-type]


def route(cost: float, mark: str = "") -> events.Outcome:
    body = f"route {cost} {mark}".encode()
    return events.Outcome("route", cost, body, b"columns of the route", path="path")


def nothing(kind: events.OutcomeKind = "not_found") -> events.Outcome:
    return events.Outcome(kind, float("inf"), kind.encode())


class Desk:
    """Drives one front; `out` holds what the last event brought about."""

    def __init__(self, front_settings: FrontSettings | None = None) -> None:
        self.front = Front(front_settings or settings(), "now", seed=1)
        self.now = START
        self.out: list[effects.Effect] = []
        self.peer = events.Peer("requests", b"client")
        self.source = events.Peer("updates", b"source")
        self.revision = 1
        #: The last number of each source.
        self.numbers: dict[str, int] = {}

    # -- events ---------------------------------------------------------------------------------

    def hand_in(self, event: events.Event, after_ms: float = 0.0) -> list[effects.Effect]:
        """Let some time pass without a word, then let an event happen."""
        self.now = self.now + ms(after_ms)
        self.out = self.front.handle(event, self.now)
        self.front.check()
        return self.out

    def tick(self, after_ms: float) -> list[effects.Effect]:
        return self.hand_in(events.Tick(), after_ms)

    def open(self, workers: int | None = None) -> Desk:
        """Bring the front up, with a site and workers."""
        self.hand_in(events.Started(1e9))
        spawned = self.all_of(effects.SpawnWorker)
        self.hand_in(events.SurveyorReady(1, self.revision, handle(self.revision)))
        for spawn in spawned[:workers]:
            self.hand_in(events.WorkerReady(spawn.worker))
        return self

    def ask(
        self, id: str = "a", *, after_ms: float = 0.0, epoch: str = "", **fields: object
    ) -> list[effects.Effect]:
        """A client asks for a replan; 100 ms for a unit of the same name unless told."""
        told: dict[str, object] = {
            "vehicle": "tug",
            "unit": f"unit-{id}",
            "start": (0.0, 0.0, 0.0),
            "goal": (9.0, 0.0, 0.0),
            "budget_s": 0.1,
            **fields,
        }
        return self.say(messages.Replan(**told), id, after_ms=after_ms, epoch=epoch)  # type: ignore[arg-type]

    def say(
        self,
        message: messages.Message,
        id: str = "q",
        packed: bytes = b"",
        *,
        after_ms: float = 0.0,
        epoch: str = "",
    ) -> list[effects.Effect]:
        """A client sends any message."""
        header = frames.Header(message.kind, id, epoch=epoch, traceparent=f"trace-{id}")
        body = msgpack.packb(message.model_dump())
        came = frames.Received(header, message, body, packed)
        return self.hand_in(events.Received(self.peer, came), after_ms)

    def better(self, cost: float, job: int = 1, worker: int = 1, after_ms: float = 1.0) -> None:
        self.hand_in(events.WorkerBetter(worker, job, route(cost)), after_ms)

    def done(
        self,
        outcome: events.Outcome,
        job: int = 1,
        worker: int = 1,
        after_ms: float = 1.0,
    ) -> None:
        self.hand_in(events.WorkerDone(worker, job, outcome), after_ms)

    def change(
        self,
        message: messages.Message,
        packed: bytes = b"",
        *,
        source: str = "s",
        number: int | None = None,
        epoch: str = "now",
        after_ms: float = 0.0,
    ) -> list[effects.Effect]:
        """A source sends its next change, or one with a number of its own."""
        if number is None:
            number = self.numbers.get(source, 0) + 1
        self.numbers[source] = max(number, self.numbers.get(source, 0))
        header = frames.Header(message.kind, source=source, number=number, epoch=epoch)
        came = frames.Received(header, message, b"body", packed)
        return self.hand_in(events.Received(self.source, came), after_ms)

    def publish(
        self, batch: int, *refusals: events.Refusal, surveyor: int = 1, after_ms: float = 1.0
    ) -> list[effects.Effect]:
        """The surveyor has made the next revision out of a batch."""
        self.revision += 1
        event = events.SnapshotReady(
            surveyor, batch, self.revision, handle(self.revision), refusals, 4096, {"fixed": 3}
        )
        return self.hand_in(event, after_ms)

    # -- effects --------------------------------------------------------------------------------

    def all_of(self, kind: type[Kind]) -> list[Kind]:
        return [effect for effect in self.out if isinstance(effect, kind)]

    def one(self, kind: type[Kind]) -> Kind:
        found = self.all_of(kind)
        assert len(found) == 1, f"{len(found)} {kind.__name__} in {self.out}"
        return found[0]

    def replies(self) -> list[tuple[str, messages.Message]]:
        return [(reply.header.id, reply.message) for reply in self.all_of(effects.Reply)]

    def reply(self) -> messages.Message:
        """The message of the only reply."""
        return self.one(effects.Reply).message

    def answer(self, id: str) -> messages.Message:
        """How a request was ended by the last event."""
        found = [message for answered, message in self.replies() if answered == id]
        assert len(found) == 1, f"{len(found)} replies to {id} in {self.out}"
        return found[0]

    def error(self, id: str = "a") -> str:
        """The code of the error that ended a request."""
        message = self.answer(id)
        assert isinstance(message, messages.ErrorMessage), message
        return message.code

    def outcome(self, id: str = "a") -> tuple[bytes, int]:
        """Body and revision of the answer that ended a request."""
        message = self.answer(id)
        assert isinstance(message, messages.AnswerMessage), message
        return message.outcome, message.revision

    def count(self, name: str) -> int:
        return self.front.health.counts().get(name, 0)


def handle(revision: int) -> dict[str, int]:
    return {"revision": revision}


def put(layer: str, *ids: str, **fields: object) -> tuple[messages.Put, bytes]:
    """A put of discs, with its packed frame."""
    columns, packed = _discs(ids)
    return messages.Put(layer=layer, discs=len(ids), columns=columns, **fields), packed  # type: ignore[arg-type]


def replace(layer: str, *ids: str, **fields: object) -> tuple[messages.ReplaceLayer, bytes]:
    """A replacement of a layer by discs, with its packed frame."""
    columns, packed = _discs(ids)
    message = messages.ReplaceLayer(layer=layer, discs=len(ids), columns=columns, **fields)  # type: ignore[arg-type]
    return message, packed


def _discs(ids: tuple[str, ...]) -> tuple[dict[str, object], bytes]:
    import numpy as np

    columns, packed = pack(
        {
            "ids": np.frombuffer("\n".join(ids).encode(), np.uint8),
            "starts": np.zeros(1, np.int64),
            "vertices_m": np.empty((0, 2)),
            "discs_m": np.ones((len(ids), 3)),
        }
    )
    return dict(columns), packed
