"""Sources of the simulated world: they number their changes, repeat them, and begin anew."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from tests.simulation.freshcheck import Terms
from tests.simulation.times import MS, SECOND

from byway import frames, messages
from byway.errors import BadMessage
from byway.packed import pack
from bywayd.core import effects, events

if TYPE_CHECKING:
    from tests.simulation.world import World

WINDOW = 16
POOL = 6
KINDS = ("put", "drop", "replace", "patch", "claim", "track", "scan")


def obstacles(token: int, ids: list[str]) -> tuple[dict[str, object], bytes]:
    """Return the fields and the packed frame of a put: discs whose place tells who put them."""
    columns, packed = pack(
        {
            "ids": np.frombuffer("\n".join(ids).encode(), np.uint8),
            "starts": np.zeros(1, np.int64),
            "vertices_m": np.empty((0, 2)),
            "discs_m": np.full((len(ids), 3), float(token)),
        }
    )
    return {"polygons": 0, "discs": len(ids), "columns": columns}, packed


def tracks(token: int, ids: list[str]) -> tuple[dict[str, object], bytes]:
    """Return the fields and the packed frame of discs that move, told apart in the same way."""
    count = len(ids)
    columns, packed = pack(
        {
            "ids": np.frombuffer("\n".join(ids).encode(), np.uint8),
            "starts": np.zeros(1, np.int64),
            "vertices_m": np.empty((0, 2)),
            "radii_m": np.ones(count),
            "poses": np.full((count, 3), float(token)),
            "velocities": np.ones((count, 3)),
            "uncertainties": np.zeros((count, 2)),
        }
    )
    return {"discs": count, "columns": columns}, packed


@dataclass
class Source:
    name: str
    identity: bytes
    epoch: str = ""
    next: int = 1
    moves: int = 0
    #: What is not acknowledged: number, message, packed.
    unacked: deque[tuple[int, messages.Change, bytes]] = field(default_factory=deque)
    silent_until_ns: int = 0
    #: What each of its numbers may have been seen by the site as.
    layer: str = ""


class Sources:
    """All sources. The surveyor of this world knows each change by its token."""

    def __init__(self, world: World) -> None:
        self.world = world
        self.sources: dict[str, Source] = {}
        for i in range(world.odds.sources):
            name = f"source{i}"
            self.sources[name] = Source(name, name.encode(), layer=f"layer{i}")
        #: (epoch, source, number) of each token.
        self.tokens: dict[int, tuple[str, str, int]] = {}
        #: Token and layer of each of them.
        self.made: dict[tuple[str, str, int], tuple[int, str]] = {}
        self.serial = 0
        #: What whoever tells anything of a layer tells of it, on this day.
        self.terms = {source.layer: self._terms() for source in self.sources.values()}
        self.terms[f"layer{len(self.sources)}"] = self._terms()
        self.terms["outlines"] = Terms(1.0, world.odds.when_stale)

    def _terms(self) -> Terms:
        rng = self.world.rng
        when_stale: messages.WhenStale = rng.choice(["ignore", "report", "report", "refuse"])
        # Where replans are refused too often, nothing else can be seen.
        return Terms(
            rng.choice([0.3, 1.0, 3.0] if when_stale == "refuse" else [0.05, 0.3, 1.0]), when_stale
        )

    def begin(self) -> None:
        for source in self.sources.values():
            source.epoch = self.world.epoch  # as a hello would have told
            self._next_change(source)
            self._mind(source)

    # -- sending --------------------------------------------------------------------------------

    def _next_change(self, source: Source) -> None:
        world = self.world
        if world.chance("fall_silent"):
            source.silent_until_ns = world.now_ns + 2 * SECOND
        quiet = world.is_calm or world.now_ns < source.silent_until_ns
        if not quiet and len(source.unacked) < WINDOW:
            self._change(source)
        world.at(
            world.rng.expovariate(world.odds.rates["changes"] / len(self.sources)) * SECOND,
            self._next_change,
            source,
        )

    def _change(self, source: Source) -> None:
        world, rng = self.world, self.world.rng
        layer = source.layer
        if world.chance("trespass"):
            others = [f"layer{i}" for i in range(len(self.sources) + 1)]
            layer = rng.choice([*others, "outlines"])
        self.serial += 1
        token = self.serial
        self._name(token, source, layer)
        ids = rng.sample([f"o{i}" for i in range(POOL)], rng.randint(1, 2))
        expires = rng.choice([None, None, 0.02, 0.1, 0.5])
        packed = b""
        message: messages.Change
        match rng.choice([*KINDS, "put", "put", "track"]):
            case "put":
                fields, packed = obstacles(token, ids)
                message = messages.Put(layer=layer, expires_in_s=expires, **fields)
            case "replace":
                fields, packed = obstacles(token, ids)
                lease = rng.choice([None, 1.0])
                message = messages.ReplaceLayer(
                    layer=layer, expires_in_s=expires, lease_s=lease, **fields
                )
            case "drop":
                message = messages.Drop(layer=layer, ids=[*ids, f"token{token}"])
            case "patch":
                message = messages.Patch(
                    layer=layer, corner_m=(float(token), 0.0), cell_m=0.1, columns={}
                )
            case "scan":
                message = messages.Scan(
                    layer=layer,
                    origin=(float(token), 0.0, 0.0),
                    range_m_max=9.0,
                    age_s=rng.choice([0.0, 0.05]),
                    columns={},
                )
            case "track":
                fields, packed = tracks(token, ids)
                message = messages.Track(
                    layer=layer, expires_in_s=expires, age_s=rng.choice([0.0, 0.05]), **fields
                )
            case _:
                flag = rng.choice([None, None, False, True])
                # Where nothing is kept it will be refused.
                durable = (not world.durable or layer in world.durable) and token % 8 == 0
                told: dict[str, object] = {}
                if world.chance("expectant"):
                    terms = self.terms[layer]
                    told = {"expected_period_s": terms.period_s, "when_stale": terms.when_stale}
                message = messages.Claim(
                    layer=layer,
                    lease_s=1.0,
                    unknown_blocks=flag,
                    # Who comes second with another time is refused.
                    decay_s=rng.choice([None, None, None, 0.5, 1.0]),
                    durable=durable or None,
                    **told,
                )
                del self.made[self.tokens.pop(token)]
        self._send_new(source, message, packed)

    def _name(self, token: int, source: Source, layer: str) -> None:
        key = (source.epoch, source.name, source.next)
        self.tokens[token] = key
        self.made[key] = (token, layer)

    def is_safe(self, epoch: str, source: str, number: int) -> bool:
        """Whether a change need not be on the disk, or has been put there."""
        token, layer = self.made.get((epoch, source, number), (0, ""))
        return layer not in self.world.durable or self.world.crew.clerk.has(token)

    def _send_new(self, source: Source, message: messages.Change, packed: bytes) -> None:
        entry = (source.next, message, packed)
        if isinstance(message, messages.Claim) and source.epoch == self.world.epoch:
            numbers = self.world.checkers.sources[source.name]
            numbers.traceless[source.next] = message
        source.next += 1
        source.unacked.append(entry)
        self._send(source, entry)

    def _send(self, source: Source, entry: tuple[int, messages.Change, bytes]) -> None:
        world = self.world
        number, message, packed = entry
        if world.chance("reconnect"):
            source.moves += 1
            source.identity = f"{source.name}.{source.moves}".encode()
        peer = events.Peer("updates", source.identity)
        header = frames.Header(message.kind, source=source.name, number=number, epoch=source.epoch)
        if world.chance("garble"):
            fault = BadMessage("something is wrong")
            fault.header = world.rng.choice([header, None])

            def make_garbage() -> events.Event:
                if fault.header is not None:
                    world.checkers.fresh.heard_ns[source.name] = world.now_ns
                return events.Unreadable(peer, fault)

            world.to_front(make_garbage)
            return
        came = frames.Received(header, message, b"body", packed)

        def make() -> events.Event:
            world.checkers.fresh.heard_ns[source.name] = world.now_ns
            world.crew.surveyor.site_arrives(came)
            return events.Received(peer, came)

        world.to_front(make)

    def _mind(self, source: Source) -> None:
        """Repeat what is not acknowledged in time."""
        world = self.world
        if source.unacked and world.now_ns >= source.silent_until_ns:
            for entry in list(source.unacked):
                self._send(source, entry)
        world.at(40 * MS, self._mind, source)

    # -- hearing --------------------------------------------------------------------------------

    def hear(self, effect: effects.Reply) -> None:
        """A reply has reached a source."""
        source = self.sources[effect.peer.identity.decode().split(".")[0]]
        message, epoch = effect.message, effect.header.epoch
        match message:
            case messages.Acknowledged() if epoch == source.epoch:
                while source.unacked and source.unacked[0][0] <= message.number:
                    source.unacked.popleft()
                checkers = self.world.checkers
                if epoch == checkers.epoch:
                    checkers.known_revision = max(checkers.known_revision, message.revision)
            case messages.Resend(reason="epoch"):
                if epoch == self.world.epoch and epoch != source.epoch:
                    self._begin_anew(source, epoch)
            case messages.Resend() if epoch == source.epoch:
                for entry in list(source.unacked):
                    if entry[0] > message.have:
                        self._send(source, entry)
            case _:
                pass

    def hear_health(self, effect: effects.Publish) -> None:
        """The health record has reached the sources: it names the epoch."""
        epoch = effect.header.epoch
        for source in self.sources.values():
            if epoch == self.world.epoch and epoch != source.epoch:
                self._begin_anew(source, epoch)

    def belated(self) -> list[str]:
        """Return who does not know of the daemon's present life."""
        return [s.name for s in self.sources.values() if s.epoch != self.world.epoch]

    def _begin_anew(self, source: Source, epoch: str) -> None:
        """A new life of the daemon knows nothing: send the whole layer, from number 1."""
        source.epoch = epoch
        source.next = 1
        source.unacked.clear()
        self.serial += 1
        self._name(self.serial, source, source.layer)
        fields, packed = obstacles(self.serial, ["o0", "o1"])
        self._send_new(source, messages.ReplaceLayer(layer=source.layer, **fields), packed)

    def unacknowledged(self) -> list[str]:
        """Return what is not acknowledged."""
        return [
            f"{source.name}: {[entry[0] for entry in source.unacked]}"
            for source in self.sources.values()
            if source.unacked
        ]
