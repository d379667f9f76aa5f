"""
The front's sockets as the loop uses them: messages in, replies and events out.

Nothing here waits. A reply that cannot be handed to its peer at once is dropped and counted:
the peer is gone, or does not read, and will ask again.
"""

from collections import OrderedDict
from collections.abc import Callable
from pathlib import Path
from typing import Final, Literal, TypeAlias

import zmq

from byway import frames
from byway.errors import BadValue, SenderFault
from byway.keys import Keys
from byway.messages import Listening
from byway.packed import Bytes
from bywayd.core import effects, events
from bywayd.core.rights import Rights
from bywayd.runtime.doorman import Doorman
from bywayd.runtime.entrances import Entrance, bind, leave_all
from bywayd.runtime.sockets import (
    DoorFault,
    SocketName,
    can_read,
    connections_allowed,
    last_words_linger_ms,
    open_socket,
)
from bywayd.runtime.zap import Admission, Tell

#: Messages of one socket in one turn. Decoding and handling one takes some 0.1 ms, and a turn
#: shall not take longer than a millisecond or two.
messages_per_turn: Final = 16

#: Topics whose last event is kept for new subscribers: those of health, and one per unit.
topics_kept_max: Final = 1024
#: Events that one subscription brings at once; the queue of a subscriber holds 64.
replayed_max: Final = 48
#: A frame from this size on is handed over instead of copied.
large_bytes: Final = 64 * 1024

Channel: TypeAlias = Literal["requests", "updates"]
Hand: TypeAlias = Callable[[events.Event], None]

_DOORS: Final = {"requests": frames.REQUESTS, "updates": frames.UPDATES}


class Outside:
    """Owns context, sockets, entrances and the last events of each topic."""

    def __init__(
        self,
        endpoints: dict[SocketName, tuple[str, ...]],
        epoch: str,
        *,
        list_file: Path | None = None,
        keys: Keys | None = None,
        peers_max: int | None = None,
        tell: Tell = lambda event, **facts: None,
    ) -> None:
        """
        Open and bind all sockets.

        Args:
            keys: Of the daemon; without, whoever reaches a socket may do everything.
            list_file: Who is allowed, with keys.
            peers_max: How many may be connected at once; None: as many as can be.
            tell: Called with what the log should have.

        Raises:
            DoorFault: If an endpoint cannot be had, or the list cannot be used; then all are
                closed again.
        """
        self._epoch = epoch
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._entrances: list[Entrance] = []
        self.sockets: dict[SocketName, zmq.Socket[bytes]] = {}
        self.endpoints: dict[SocketName, list[str]] = {}
        #: Frames of the last event of each topic, in the order of their last change.
        self._last: OrderedDict[bytes, list[Bytes]] = OrderedDict()
        #: Replies that could not be handed over, and events that no queue had room for.
        self.undelivered = 0
        #: None: everybody is let in.
        self.admission: Admission | None = None
        try:
            if keys is not None and list_file is not None:
                self.admission = Admission(self._context, keys, list_file, tell)
            for name, wanted in endpoints.items():
                self.sockets[name] = open_socket(self._context, name)
                if self.admission is not None:
                    self.admission.guard(self.sockets[name])
                bound = [bind(self.sockets[name], endpoint) for endpoint in wanted]
                self._entrances += bound
                self.endpoints[name] = [entrance.endpoint for entrance in bound]
        except BadValue as fault:
            self._close_sockets(0)
            raise DoorFault(fault.text) from fault
        except BaseException:
            self._close_sockets(0)
            raise
        self.doorman = Doorman(
            self._context,
            list(self.sockets.values()),
            self._entrances,
            connections_allowed(peers_max),
        )

    # -- in ---------------------------------------------------------------------------------

    def receive(self, name: SocketName, hand: Hand) -> None:
        """Hand on what has come in on one of the ROUTER sockets, a turn's worth of it."""
        sock, door = self.sockets[name], _DOORS[name]
        for _ in range(messages_per_turn):
            # To ask first costs a third of the exception that says that there is nothing more.
            if not can_read(sock):
                return
            identity, rights = self._sender_of(sock)
            rest = sock.recv_multipart(zmq.DONTWAIT)
            channel: Channel = "requests" if name == "requests" else "updates"
            peer = events.Peer(channel, identity, rights)
            try:
                came = frames.decode(rest, door)
            except SenderFault as fault:
                hand(events.Unreadable(peer, fault))
            else:
                hand(events.Received(peer, came))

    def _sender_of(self, sock: "zmq.Socket[bytes]") -> tuple[bytes, Rights | None]:
        """Take in the first frame of a message: who sent it, and what he may do."""
        if self.admission is None:
            return sock.recv(zmq.DONTWAIT), None
        frame = sock.recv(zmq.DONTWAIT, copy=False)
        return frame.bytes, self.admission.rights_of(frame)

    def receive_subscriptions(self) -> None:
        """Tell new subscribers that they are heard, and what was said last."""
        sock = self.sockets["events"]
        for _ in range(messages_per_turn):
            if not can_read(sock):
                return
            frame = sock.recv(zmq.DONTWAIT)
            if frame[:1] == b"\x01":
                self._welcome_subscriber(frame[1:])

    def _welcome_subscriber(self, prefix: bytes) -> None:
        topic = prefix.decode("ascii", errors="replace")
        header = frames.Header(Listening.kind, epoch=self._epoch)
        self._send_event(prefix, frames.encode(header, Listening(topic=topic)))
        # XPUB cannot send to one subscriber: all who know these events get them once more, see
        # their numbers, and pass over them.
        known = [each for each in reversed(self._last) if each.startswith(prefix)]
        for each in reversed(known[:replayed_max]):
            self._send_event(each, self._last[each])

    # -- out --------------------------------------------------------------------------------

    def reply(self, effect: effects.Reply) -> bool:
        """Send a reply; tell whether it could be handed over."""
        parts = frames.encode(effect.header, effect.message, effect.packed)
        try:
            _send(self.sockets[effect.peer.channel], [effect.peer.identity, *parts])
        except zmq.ZMQError as fault:
            # EHOSTUNREACH: the peer is gone. EAGAIN: its queue is full.
            if fault.errno not in (zmq.EHOSTUNREACH, zmq.EAGAIN):
                raise
            self.undelivered += 1
            return False
        return True

    def publish(self, effect: effects.Publish) -> None:
        """Send an event to all who listen, and keep it for those who will."""
        topic = effect.topic.encode()
        parts = frames.encode(effect.header, effect.message, effect.packed)
        self._last[topic] = parts
        self._last.move_to_end(topic)
        if len(self._last) > topics_kept_max:
            self._last.popitem(last=False)
        self._send_event(topic, parts)

    def _send_event(self, topic: bytes, parts: list[Bytes]) -> None:
        try:
            _send(self.sockets["events"], [topic, *parts])
        except zmq.Again:
            self.undelivered += 1

    # -- the end ----------------------------------------------------------------------------

    def close(self) -> None:
        """Give the last replies a moment to leave, then close everything."""
        self.doorman.close()
        self._close_sockets(last_words_linger_ms)

    def _close_sockets(self, linger_ms: int) -> None:
        for sock in self.sockets.values():
            sock.close(linger=linger_ms)
        if self.admission is not None:
            self.admission.close()
        self._context.term()
        leave_all(self._entrances)


def _send(sock: "zmq.Socket[bytes]", parts: list[Bytes]) -> None:
    large = sum(len(part) for part in parts) >= large_bytes
    sock.send_multipart(parts, zmq.DONTWAIT, copy=not large)
