"""
One socket of a client, with every option in this one place, and the knowledge whether it is lost.

A socket that has lost its daemon is not used again: what was sent on it may have arrived or not,
and nobody can tell. A fresh one is opened, and whoever waits for something sends it once more.

The monitor of ZeroMQ tells of a lost connection within a millisecond when the daemon's process
ends; heartbeats find a host that has fallen silent within four seconds.
"""

import math
import struct
import time
from collections.abc import Callable, Generator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final, Protocol, TypeAlias, TypeVar

import zmq

from byway import limits
from byway.errors import BadValue
from byway.keys import Keys
from byway.packed import Bytes

Context: TypeAlias = "zmq.Context[zmq.Socket[bytes]]"
Socket: TypeAlias = "zmq.Socket[bytes]"

OPTIONS_OF_ALL: Final[Mapping[zmq.SocketOption, int]] = {
    zmq.LINGER: 0,
    zmq.MAXMSGSIZE: limits.reply_bytes_max,
    # A peer is found to be gone after interval + timeout.
    zmq.HEARTBEAT_IVL: 1000,
    zmq.HEARTBEAT_TIMEOUT: 3000,
    zmq.HANDSHAKE_IVL: 5000,
    # A first try that comes too early is repeated soon, and one in vain does not keep a core busy.
    zmq.RECONNECT_IVL: 10,
    zmq.RECONNECT_IVL_MAX: 500,
}
#: Nothing is queued for a daemon that is not there: what is sent has a connection to go to.
DEALER_OPTIONS: Final[Mapping[zmq.SocketOption, int]] = {zmq.IMMEDIATE: 1}
#: Subscriptions are messages too, and one that is dropped would be missing for ever.
SUB_OPTIONS: Final[Mapping[zmq.SocketOption, int]] = {zmq.SNDHWM: 0}

_EVENT: Final = struct.Struct("=HI")
_WATCHED: Final = (
    zmq.EVENT_HANDSHAKE_SUCCEEDED
    | zmq.EVENT_HANDSHAKE_FAILED_NO_DETAIL
    | zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL
    | zmq.EVENT_HANDSHAKE_FAILED_AUTH
    | zmq.EVENT_DISCONNECTED
)

Result = TypeVar("Result")


class Link:
    """
    A DEALER, or a SUB with its subscriptions, connected to one endpoint.

    Args:
        context: Of the client.
        endpoint: As ZeroMQ writes it.
        topics: Prefixes to subscribe to; None for a DEALER.
        keys: Of the client, with that of the daemon.

    Raises:
        BadValue: The endpoint is none.
    """

    def __init__(
        self,
        context: Context,
        endpoint: str,
        topics: Sequence[str] | None = None,
        keys: Keys | None = None,
    ) -> None:
        self._context = context
        self._keys = keys
        self.endpoint: Final = endpoint
        self._topics = None if topics is None else list(topics)
        self.is_connected = False
        #: The connection that this socket had is gone. Only a fresh socket helps.
        self.is_lost = False
        #: The daemon has turned this socket away. It does not try again; a fresh one may be let in.
        self.is_refused = False
        #: Why there is no connection, if that is known: a sentence without its subject.
        self.trouble = ""
        self.is_closed = False
        #: Called before the socket is closed: whoever watches its descriptors must let go of them.
        self.before_close: Callable[[], object] = _nothing
        self._open()

    def _open(self) -> None:
        is_sub = self._topics is not None
        self._socket = self._context.socket(zmq.SUB if is_sub else zmq.DEALER)
        options = {**OPTIONS_OF_ALL, **(SUB_OPTIONS if is_sub else DEALER_OPTIONS)}
        for option, value in options.items():
            self._socket.setsockopt(option, value)
        if self._keys is not None:
            self._socket.curve_publickey = self._keys.public.encode()
            self._socket.curve_secretkey = self._keys.secret.encode()
            self._socket.curve_serverkey = self._keys.daemon.encode()
        for topic in self._topics or ():
            self._socket.subscribe(topic)
        self._monitor: Socket = self._socket.get_monitor_socket(_WATCHED)
        self.is_connected = self.is_lost = self.is_refused = False
        try:
            self._socket.connect(self.endpoint)
        except zmq.ZMQError as fault:
            self.close()
            raise BadValue(
                f"{self.endpoint!r} is no endpoint ({fault}); write tcp://HOST:PORT or ipc:///PATH",
                {"field": "endpoint", "value": self.endpoint},
            ) from fault

    def reopen(self) -> None:
        """Go on with a fresh socket."""
        self.close()
        self._open()
        self.is_closed = False

    def close(self) -> None:
        """Close the socket; what it still had to send is forgotten."""
        self.before_close()
        self.is_closed = True
        self._socket.disable_monitor()
        self._monitor.close(0)
        self._socket.close(0)

    def subscribe(self, topic: str) -> None:
        """Listen to one prefix more."""
        if self._topics is not None and topic not in self._topics:
            self._topics.append(topic)
            self._socket.subscribe(topic)

    def send(self, frames: Sequence[Bytes]) -> bool:
        """Send a message, if there is a connection; tell whether there was."""
        try:
            self._socket.send_multipart(frames, zmq.DONTWAIT)
        except zmq.Again:
            return False
        return True

    def receive(self) -> list[bytes] | None:
        """Return the frames of a message that has come in, if one has."""
        if _can_read(self._socket):
            return self._socket.recv_multipart(zmq.DONTWAIT)
        return None

    @property
    def descriptors(self) -> tuple[int, int]:
        """What becomes readable when something may have happened; see `is_ready`."""
        return self._socket.fileno(), self._monitor.fileno()

    def is_ready(self, *, wants_to_send: bool) -> bool:
        """
        Whether something has come, or can be sent, or there is news of the connection.

        The descriptors tell of changes only: ask before waiting for them.
        """
        mask = zmq.POLLIN | (zmq.POLLOUT if wants_to_send else 0)
        return bool(_ready(self._socket) & mask) or _can_read(self._monitor)

    def look(self) -> None:
        """Take note of what has become of the connection."""
        while _can_read(self._monitor):
            # Frames: event and value, then the endpoint. (pyzmq's own reader loads asyncio.)
            event, _ = _EVENT.unpack(self._monitor.recv_multipart(zmq.DONTWAIT)[0])
            if event == zmq.EVENT_HANDSHAKE_SUCCEEDED:
                self.is_connected, self.trouble = True, ""
            elif event != zmq.EVENT_DISCONNECTED:
                self._note_trouble(event)
            elif self.is_connected:
                self.is_connected, self.is_lost = False, True

    def _note_trouble(self, event: int) -> None:
        has_keys = self._keys is not None
        # After these two ZeroMQ does not connect again (measured with libzmq 4.3.5).
        self.is_refused = self.is_refused or event != zmq.EVENT_HANDSHAKE_FAILED_NO_DETAIL
        if event == zmq.EVENT_HANDSHAKE_FAILED_AUTH:
            self.trouble = "does not let this key in"
        elif event == zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL:
            self.trouble = "uses no keys" if has_keys else "lets nobody in without keys"
        elif has_keys and not self.is_refused:
            self.trouble = "breaks the handshake off; is its key the one in the key file?"


def _nothing() -> None:
    pass


def _ready(sock: Socket) -> int:
    # To ask costs a third of the exception that says that there is nothing.
    ready: int = sock.get(zmq.EVENTS)  # type: ignore[assignment]
    return ready


def _can_read(sock: Socket) -> bool:
    return bool(_ready(sock) & zmq.POLLIN)


@dataclass(frozen=True, slots=True)
class Waiting:
    """
    What somebody waits for.

    Attributes:
        links: Each with whether there is something to send that waits for a connection.
        until_s: A reading of the clock.
    """

    links: Sequence[tuple[Link, bool]]
    until_s: float


#: What takes a while: a generator that gives what to wait for, and returns what came of it.
#: Whoever drives it waits, be it by blocking or by an event loop, and takes the next step.
Steps: TypeAlias = Generator[Waiting, None, Result]


class Drive(Protocol):
    """Takes all steps and returns what comes of it, as `run` does."""

    def __call__(self, steps: Steps[Result], /) -> Result:
        """Take them."""


def run(steps: Steps[Result], clock: Callable[[], float]) -> Result:
    """Take all steps, blocking, and return what comes of it."""
    try:
        while True:
            waiting = next(steps)
            wait(waiting.links, waiting.until_s, clock)
    except StopIteration as stop:
        result: Result = stop.value
        return result
    finally:
        steps.close()


def wait(links: Sequence[tuple[Link, bool]], until_s: float, clock: Callable[[], float]) -> None:
    """
    Return as soon as something has happened on one of the links, at the given time at the latest.

    Args:
        links: Each with whether it has something to send and waits for a connection.
        until_s: A reading of the clock.
        clock: Seconds.
    """
    poller: Any = zmq.Poller()
    for link, wants_to_send in links:
        poller.register(link._socket, zmq.POLLIN | (zmq.POLLOUT if wants_to_send else 0))
        poller.register(link._monitor, zmq.POLLIN)
    left_s = until_s - clock()
    if not links:
        time.sleep(max(0.0, left_s))  # a poller of nothing does not wait
        return
    # Rounded up: to wake a little early would mean to poll again and again.
    poller.poll(None if math.isinf(left_s) else max(0, math.ceil(1000.0 * left_s)))
