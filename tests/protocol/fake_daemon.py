"""
A daemon that plans nothing: real sockets, the protocol's rules, and faults on demand.

It keeps to protocol/SPEC.md, in one thread of its own, with no clock: what it does follows from
what it is sent and told alone.
"""

import queue
import threading
from collections import Counter
from collections.abc import Callable, Iterable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import zmq

from byway import frames, limits, messages, obstacles, tracks
from byway.answer import ROUTE_TABLE
from byway.client import Client
from byway.errors import SenderFault
from byway.frames import Header, Received
from byway.packed import pack

Parts = list[Any]


def route_table(length_m: float = 2.0) -> np.ndarray:
    """Straight ahead from the origin in three rows."""
    table = np.zeros(3, ROUTE_TABLE)
    table["t_s"] = [0.0, 1.0, 2.0]
    table["x_m"] = [0.0, 0.5 * length_m, length_m]
    table["speed_mps"] = [0.0, length_m, 0.0]
    table["gear"] = [1, 1, 0]
    return table


def outcome(cost: float | None = 1.0, **changes: Any) -> tuple[bytes, bytes]:
    """The outcome and packed columns of a route that costs so much, but for the changes."""
    length_m = 1.0 if cost is None else cost
    table = route_table(length_m)
    columns, packed = pack({name: table[name] for name in ROUTE_TABLE.names or ()})
    leg = messages.LegIs(first=0, last=2, gear=1, length_m=length_m)
    fields: dict[str, Any] = {
        "kind": "route",
        "cost": cost,
        "bound": 1.0,
        "gap": (length_m - 1.0) / length_m,
        "seed": 7,
        "length_m": length_m,
        "duration_s": 2.0,
        "legs": [leg],
        "columns": columns,
    }
    told = messages.OutcomeIs(**{**fields, **changes})
    return frames.encode_body(told), packed


def set_patience(client: Client, **changes: float) -> None:
    """
    Change how long a client waits from now on.

    Short only where it is to be found wanting: what shall succeed has all the time it needs,
    however busy the machine is.
    """
    contact: Any = client._contact
    contact.patience = replace(contact.patience, **changes)
    for conversation in (contact._requests, contact._updates):
        if conversation is not None:
            conversation._patience = contact.patience


class FakeDaemon:
    """
    Started at once. Set its attributes between calls of the client under test.

    Attributes:
        lose: How many of the next messages of a kind are lost on the way in.
        mute: How many of the next replies of a kind are lost on the way out.
        instead: Frames to reply with to the next request of a kind, whatever they are.
        holds: Replans stay open until `release`, `cancel` or `finish`.
        refuses: An error that the next replan, change or site gets, by kind of the message.
        got: How many messages of each kind came in.
    """

    def __init__(self, folder: Path | None) -> None:
        """Listen in this folder, or on free TCP ports of this host."""
        self.endpoints = {
            name: "tcp://127.0.0.1:*" if folder is None else f"ipc://{folder}/{name}"
            for name in ("requests", "updates", "events")
        }
        self.offered: dict[str, list[str]] = {}
        self.lose: Counter[str] = Counter()
        self.mute: Counter[str] = Counter()
        self.instead: dict[str, Parts] = {}
        self.refuses: dict[str, messages.ErrorMessage] = {}
        self.refuses_change: dict[str, tuple[str, str]] = {}
        self.holds = False
        self.state = "ready"
        self.confirms_subscriptions = True
        self.costs = [5.0]
        self.got: Counter[str] = Counter()
        self.log: list[Received] = []
        self._topics: set[str] = set()
        self._news = threading.Condition()
        self._lives = 0
        self._thread: threading.Thread | None = None
        self.start()

    # -- its life ------------------------------------------------------------------------------

    def start(self) -> None:
        """Begin a life: a new epoch, nothing known."""
        self._lives += 1
        self.epoch = f"epoch-{self._lives}"
        self.revision = 0
        self.layers: dict[str, dict[str, Any]] = {}
        self.have: Counter[str] = Counter()
        self.refused: dict[tuple[str, int], messages.Refused] = {}
        self.answered: dict[str, tuple[bytes, list[Parts]]] = {}
        self.open: dict[str, tuple[bytes, Received]] = {}
        self.guards: dict[str, messages.GuardIs] = {}
        self._numbers: Counter[str] = Counter()
        self._topics.clear()
        self._orders: queue.SimpleQueue[Callable[[], None] | None] = queue.SimpleQueue()
        self._context = zmq.Context()
        self._poke = self._context.socket(zmq.PAIR)
        self._poked = self._context.socket(zmq.PAIR)
        self._poked.bind("inproc://poke")
        self._poke.connect("inproc://poke")
        self._sockets = {}
        for name, kind in (("requests", zmq.ROUTER), ("updates", zmq.ROUTER), ("events", zmq.XPUB)):
            sock = self._socket(kind)
            sock.setsockopt(zmq.LINGER, 0)
            if kind == zmq.XPUB:
                sock.setsockopt(zmq.XPUB_VERBOSE, 1)
            sock.bind(self.endpoints[name])
            self.endpoints[name] = sock.getsockopt_string(zmq.LAST_ENDPOINT)
            self.offered.setdefault(name, [self.endpoints[name]])
            self._sockets[name] = sock
        self._thread = threading.Thread(target=self._live, name="fake-daemon")
        self._thread.start()

    def _socket(self, kind: int) -> Any:
        return self._context.socket(kind)

    def stop(self) -> None:
        """End as a killed process does: all connections gone, what was queued as well."""
        if self._thread is None:
            return
        self._orders.put(None)
        self._poke.send(b"")
        self._thread.join(10.0)
        assert not self._thread.is_alive()
        self._thread = None
        self._poke.close(0)
        self._context.term()

    def restart(self) -> None:
        """End and begin again."""
        self.stop()
        self.start()

    def do(self, action: Callable[[], None]) -> None:
        """Have something done by the daemon's thread, and wait for it."""
        done = threading.Event()
        faults: list[BaseException] = []

        def act() -> None:
            try:
                action()
            except BaseException as fault:
                faults.append(fault)
            done.set()

        self._orders.put(act)
        self._poke.send(b"")
        assert done.wait(10.0)
        assert not faults, faults

    def _live(self) -> None:
        poller = zmq.Poller()
        for sock in (*self._sockets.values(), self._poked):
            poller.register(sock, zmq.POLLIN)
        while True:
            for sock, _ in poller.poll():
                if sock is self._poked:
                    sock.recv()
                    order = self._orders.get()
                    if order is None:
                        for each in (*self._sockets.values(), self._poked):
                            each.close(0)
                        return
                    order()
                elif sock is self._sockets["events"]:
                    self._subscribed(sock.recv())
                else:
                    identity, *parts = sock.recv_multipart()
                    self._take(sock, identity, parts)

    # -- requests ------------------------------------------------------------------------------

    def _take(self, sock: Any, identity: bytes, parts: Parts) -> None:
        is_request = sock is self._sockets["requests"]
        try:
            came = frames.decode(parts, frames.REQUESTS if is_request else frames.UPDATES)
        except SenderFault as fault:
            id = "" if fault.header is None else fault.header.id
            self._reply(sock, identity, id, frames.error_message(fault))
            return
        kind = came.header.kind
        if self.lose[kind]:
            self.lose[kind] -= 1
            return
        self.got[kind] += 1
        self.log.append(came)
        if kind in self.instead:
            sock.send_multipart([identity, *self.instead.pop(kind)])
        elif kind in self.refuses:
            self._reply(sock, identity, came.header.id, self.refuses.pop(kind))
        elif is_request:
            self._request(sock, identity, came)
        else:
            self._change(sock, identity, came)

    def _reply(
        self, sock: Any, identity: bytes, id: str, message: messages.Message, packed: bytes = b""
    ) -> None:
        if self.mute[message.kind]:
            self.mute[message.kind] -= 1
            return
        header = Header(message.kind, id, epoch=self.epoch)
        sock.send_multipart([identity, *frames.encode(header, message, packed)])

    def _request(self, sock: Any, identity: bytes, came: Received) -> None:
        id, message = came.header.id, came.message
        match message:
            case messages.Hello():
                told: messages.Message = self._welcome()
            case messages.Replan():
                self._replan(sock, identity, came, message)
                return
            case messages.Cancel() | messages.Finish():
                told = self._steer(sock, message)
            case messages.Vehicles():
                known = messages.VehicleIs(vehicle="tug", model="car", settings={"r_m": 5.0})
                told = messages.VehiclesAre(vehicles=[known])
            case messages.Health():
                told = self.health()
            case messages.Guard() | messages.Progress() | messages.Release():
                told = self._guard(message)
            case _:
                self._reply(sock, identity, id, *self._site())
                return
        self._reply(sock, identity, id, told)

    def _guard(
        self, message: messages.Guard | messages.Progress | messages.Release
    ) -> messages.Message:
        if isinstance(message, messages.Guard):
            told = messages.GuardIs(
                unit=message.unit,
                guard=f"g-{len(self.log)}",
                state="clear",
                revision=self.revision,
                progress_m=message.progress_m,
            )
        elif message.unit not in self.guards:
            return messages.ErrorMessage(code="unknown_request", text="no guard stands")
        else:
            changes: dict[str, Any] = {"state": "released"}
            if isinstance(message, messages.Progress):
                changes = {"progress_m": message.progress_m}
            told = self.guards.pop(message.unit).model_copy(update=changes)
        if told.state != "released":
            self.guards[message.unit] = told
        return told

    def _welcome(self) -> messages.Welcome:
        return messages.Welcome(
            version=1,
            state=self.state,
            updates_endpoints=self.offered["updates"],
            events_endpoints=self.offered["events"],
            vehicles=["tug"],
            revision=self.revision,
            wall_s=1.0e9,
            limits=limits.told(),
        )

    def health(self) -> messages.HealthIs:
        """The record of a daemon at rest."""
        return messages.HealthIs(
            state=self.state,
            revision=self.revision,
            uptime_s=1.0,
            waiting=0,
            planning=len(self.open),
        )

    def _site(self) -> tuple[messages.SiteIs, bytes]:
        shapes = obstacles.Shapes({}, {})
        columns, packed = pack(
            {
                "ids": obstacles.pack_ids(shapes.polygons),
                "starts": np.zeros(1, np.int64),
                "vertices_m": np.empty((0, 2)),
                "discs_m": np.empty((0, 3)),
            }
        )
        return messages.SiteIs(revision=self.revision, layers=[], columns=columns), packed

    # -- replans -------------------------------------------------------------------------------

    def _replan(self, sock: Any, identity: bytes, came: Received, message: messages.Replan) -> None:
        id = came.header.id
        if came.header.epoch not in ("", self.epoch):
            error = messages.ErrorMessage(code="new_epoch", text="started again")
            self._reply(sock, identity, id, error)
            return
        accepted = messages.Accepted(unit=message.unit, budget_s=message.budget_s, revision=1)
        if id in self.answered or id in self.open:
            known, replies = self.answered.get(id) or (self.open[id][1].body, [])
            assert known == came.body, "a repeat has the same body"
            for parts in replies:
                sock.send_multipart([identity, *parts])
            if id in self.open:
                self.open[id] = (identity, came)
            return
        self._reply(sock, identity, id, accepted)
        with self._news:
            self.open[id] = (identity, came)
            self._news.notify_all()
        if not self.holds:
            for cost in self.costs[:-1]:
                self._better(id, message.unit, cost)
            self._answer(id)

    def wait_for_replans(self, count: int = 1) -> None:
        """Return when so many replans are open."""
        with self._news:
            assert self._news.wait_for(lambda: len(self.open) == count, 10.0)

    def better(self, *costs: float) -> None:
        """Publish better routes for all open replans."""
        self.wait_for_replans(len(self.open) or 1)

        def publish() -> None:
            for id, (_, came) in self.open.items():
                for cost in costs:
                    self._better(id, came.message.unit, cost)

        self.do(publish)

    def release(self) -> None:
        """Answer all open replans."""
        self.wait_for_replans(len(self.open) or 1)
        self.do(lambda: [self._answer(id) for id in list(self.open)])

    def _better(self, id: str, unit: str, cost: float) -> None:
        body, packed = outcome(cost)
        told = messages.BetterMessage(unit=unit, revision=1, elapsed_s=0.01, outcome=body)
        self.publish(f"better.{unit}", told, packed, id=id)

    def _answer(self, id: str, error: str = "") -> None:
        identity, came = self.open.pop(id)
        body, packed = outcome(self.costs[-1])
        message: messages.Message
        if error:
            message, packed = messages.ErrorMessage(code=error, text=error), b""
        else:
            message = messages.AnswerMessage(
                unit=came.message.unit,
                revision=self.revision,
                first_s=0.01,
                waited_s=0.0,
                total_s=0.02,
                outcome=body,
            )
        parts = frames.encode(Header(message.kind, id, epoch=self.epoch), message, packed)
        self.answered[id] = (came.body, [parts])
        if self.mute["answer"]:
            self.mute["answer"] -= 1
            return
        self._sockets["requests"].send_multipart([identity, *parts])

    def _steer(self, sock: Any, message: messages.Cancel | messages.Finish) -> messages.Message:
        found = [
            id
            for id, (_, came) in self.open.items()
            if message.replan == id or message.unit == came.message.unit
        ]
        if not found:
            return messages.ErrorMessage(code="unknown_request", text="nothing is open")
        for id in found:
            self._answer(id, "cancelled" if isinstance(message, messages.Cancel) else "")
        return messages.Noted(replans=found)

    # -- events --------------------------------------------------------------------------------

    def _subscribed(self, frame: bytes) -> None:
        topic = frame[1:].decode()
        with self._news:
            self._topics.add(topic)
            self._news.notify_all()
        if frame[:1] == b"\x01" and self.confirms_subscriptions:
            header = Header("listening", epoch=self.epoch)
            told = frames.encode(header, messages.Listening(topic=topic))
            self._sockets["events"].send_multipart([frame[1:], *told])

    def wait_for_subscription(self, topic: str) -> None:
        """Return when somebody listens to this topic."""
        with self._news:
            assert self._news.wait_for(lambda: topic in self._topics, 10.0)

    def publish(
        self,
        topic: str,
        message: messages.Message,
        packed: bytes = b"",
        *,
        id: str = "",
        skip: int = 0,
    ) -> None:
        """Publish one event; `skip` numbers are lost before it. For the daemon's thread."""
        self._numbers[topic] += 1 + skip
        header = Header(message.kind, id, number=self._numbers[topic], epoch=self.epoch)
        self.send_event(topic.encode(), frames.encode(header, message, packed))

    def send_event(self, topic: bytes, parts: Iterable[Any]) -> None:
        """Publish frames as they are. For the daemon's thread."""
        self._sockets["events"].send_multipart([topic, *parts])

    # -- changes -------------------------------------------------------------------------------

    def _change(self, sock: Any, identity: bytes, came: Received) -> None:
        source, number = came.header.source, came.header.number
        self.identity = identity

        def tell(message: messages.Message) -> None:
            self._reply(sock, identity, came.header.id, message)

        def resend(reason: str) -> None:
            tell(messages.Resend(source=source, reason=reason, have=self.have[source]))

        if came.header.epoch not in ("", self.epoch):
            resend("epoch")
            return
        if number > self.have[source] + 1:
            resend("gap")
            return
        if number == self.have[source] + 1:
            self.have[source] = number
            no = self._apply(source, came)
            if no is not None:
                code, text = no
                self.refused[source, number] = messages.Refused(
                    source=source, number=number, code=code, text=text
                )
        if (source, number) in self.refused:
            tell(self.refused[source, number])
        tell(messages.Acknowledged(source=source, number=self.have[source], revision=self.revision))

    def _apply(self, source: str, came: Received) -> tuple[str, str] | None:
        message = came.message
        assert isinstance(message, messages.Change)
        no = self.refuses_change.pop(message.layer, None)
        layer = self.layers.get(message.layer)
        claims = isinstance(message, messages.Claim | messages.ReplaceLayer)
        if no is not None:
            return no
        if layer is None or (claims and layer["owner"] != source):
            layer = self.layers.setdefault(
                message.layer, {"obstacles": {}, "patches": [], "scans": []}
            )
            layer["owner"] = source
        if layer["owner"] != source:
            return "not_owner", "it belongs to another source"
        self.revision += 1
        match message:
            case messages.ReplaceLayer() | messages.Put():
                if isinstance(message, messages.ReplaceLayer):
                    layer["obstacles"].clear()
                    layer["patches"].clear()
                found = obstacles.unpack_shapes(message, came.packed)
                for kind in (found.polygons, found.discs, found.boxes):
                    for obstacle_id, shape in kind.items():
                        layer["obstacles"][obstacle_id] = np.asarray(shape).tolist()
            case messages.Drop():
                for obstacle_id in message.ids:
                    layer["obstacles"].pop(obstacle_id, None)
            case messages.Patch():
                layer["patches"].append(message.corner_m)
            case messages.Scan():
                layer["scans"].append((message.origin, message.age_s))
            case messages.Track():
                for track_id in tracks.unpack_tracks(message, came.packed):
                    layer["obstacles"][track_id] = message.age_s
        return None
