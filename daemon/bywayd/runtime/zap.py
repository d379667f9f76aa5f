"""
Who is let in: ZeroMQ asks at every handshake, and the loop answers.

There is no thread for it that could die unseen. As long as nobody answers, nobody gets in: the
sockets enforce their domain, without which ZeroMQ would let everybody in (measured with libzmq
4.3.5). A handshake that is not answered within 5 s ends.
"""

import os
from collections.abc import Callable
from pathlib import Path
from typing import Final, TypeAlias

import zmq
from zmq.utils import z85

from byway.errors import BadValue
from byway.keys import Keys
from bywayd.allowed import load_allowed
from bywayd.core.rights import Rights
from bywayd.runtime.sockets import can_read

#: Where libzmq looks for whoever decides, in every context.
_place: Final = "inproc://zeromq.zap.01"
domain: Final = "byway"

#: Handshakes answered in one turn; each takes two messages and 4 microseconds between them.
answers_per_turn: Final = 32

#: Strangers who are told of in the log, per second. They can knock as often as they like.
told_per_look: Final = 5

#: Called with an event and its facts when there is something for the log.
Tell: TypeAlias = Callable[..., object]

_unknown: Final = Rights(None, "")


class Admission:
    """
    The list of who is allowed, and the socket by which ZeroMQ asks about it.

    Raises:
        BadValue: The list cannot be used.
    """

    def __init__(
        self, context: "zmq.Context[zmq.Socket[bytes]]", keys: Keys, file: Path, tell: Tell
    ) -> None:
        self.keys: Final = keys
        self._file = file
        self._tell = tell
        self._stamp = _stamp(file)
        self._allowed = load_allowed(file)
        #: Handshakes let through and turned away since the start.
        self.admitted = 0
        self.rejected = 0
        self._told = 0
        self.socket: Final = context.socket(zmq.ROUTER)
        self.socket.setsockopt(zmq.LINGER, 0)
        self.socket.bind(_place)

    def guard(self, sock: "zmq.Socket[bytes]") -> None:
        """Let nobody into a socket of this context who is not on the list."""
        sock.setsockopt(zmq.ZAP_DOMAIN, domain.encode())
        # First of all: without it, whoever finds nobody who decides is let in.
        sock.setsockopt(zmq.ZAP_ENFORCE_DOMAIN, 1)
        sock.curve_secretkey = self.keys.secret.encode()
        sock.curve_publickey = self.keys.public.encode()
        sock.curve_server = True

    def __len__(self) -> int:
        return len(self._allowed)

    def rights_of(self, frame: "zmq.Frame") -> Rights:
        """Return what the sender of a message may do."""
        try:
            key = frame.get("User-Id")
        except zmq.ZMQError:
            return _unknown
        # One that has been taken off the list meanwhile is still connected.
        return self._allowed.get(str(key), _unknown)

    def answer(self) -> None:
        """Answer those who ask now, a turn's worth of them."""
        for _ in range(answers_per_turn):
            if not can_read(self.socket):
                return
            self._answer(self.socket.recv_multipart(zmq.DONTWAIT))

    def _answer(self, asked: list[bytes]) -> None:
        # ZAP 1.0 (rfc.zeromq.org/spec/27): after the envelope version, request, domain, address,
        # identity, mechanism, credentials.
        envelope, fields = asked[:2], asked[2:]
        if len(fields) != 7 or fields[0] != b"1.0":
            return  # not by libzmq, and not to be answered in any way that it knows
        request, place, address, mechanism, credentials = (fields[i] for i in (1, 2, 3, 5, 6))
        is_ours = place == domain.encode() and mechanism == b"CURVE" and len(credentials) == 32
        key = z85.encode(credentials).decode() if is_ours else ""
        rights = self._allowed.get(key)
        if rights is not None:
            self.admitted += 1
            status, why, user = b"200", b"", key.encode()
        else:
            self.rejected += 1
            self._tell_of(key, address)
            status, why, user = b"400", b"not on the list", b""
        self.socket.send_multipart(
            [*envelope, b"1.0", request, status, why, user, b""], zmq.DONTWAIT
        )

    def _tell_of(self, key: str, address: bytes) -> None:
        self._told += 1
        if self._told <= told_per_look:
            where = address.decode("ascii", "replace")
            self._tell("keys.turned_away", public=key, address=where)

    def look(self) -> None:
        """
        Read the list again if it is another; to be called about once a second.

        One that cannot be used changes nothing.
        """
        if self._told > told_per_look:
            self._tell("keys.turned_away.more", count=self._told - told_per_look)
        self._told = 0
        stamp = _stamp(self._file)
        if stamp == self._stamp:
            return
        self._stamp = stamp
        try:
            self._allowed = load_allowed(self._file)
        except BadValue as fault:
            self._tell("keys.list_refused", why=fault.text)
        else:
            self._tell("keys.list_read", allowed=len(self._allowed))

    def close(self) -> None:
        """Answer nobody any more: nobody else gets in."""
        self.socket.close(0)


def _stamp(file: Path) -> tuple[int, int, int] | None:
    try:
        facts = os.stat(file)
    except OSError:
        return None
    return facts.st_ino, facts.st_mtime_ns, facts.st_size
