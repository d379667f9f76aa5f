"""
Messages between the front and one process of its crew, over a stream socket pair.

Each message is a msgpack map behind a four-byte length. Nothing here waits unless the name
says so: the front must never stand still because a worker does. Both directions are bounded.
What a stopped worker does not read piles up to `unsent_bytes_max` and then raises
`ChannelFull`; a length that no healthy process would send, or bytes that are not msgpack,
raise `ChannelBroken`. For the front both mean the same: that process is to be replaced.
"""

import select
import socket
from collections import deque
from collections.abc import Mapping
from typing import Any, Final

import msgpack

#: Largest message: a batch of changes with several patches of the largest size that the
#: protocol lets in (4 MiB each), or a route of a few hundred metres (some hundred kB).
message_bytes_max: Final = 64 * 1024 * 1024

#: Messages that one `take` hands out, so that one busy process cannot hold the loop.
messages_per_take: Final = 32

_length_bytes: Final = 4
_receive_bytes: Final = 256 * 1024


class ChannelClosed(Exception):
    """The process at the other end is gone, or has closed its end."""


class ChannelFull(Exception):
    """The other end does not read, and more must not be kept for it."""


class ChannelBroken(Exception):
    """What arrived is not a message: the other end has gone wild."""


def channel_pair() -> tuple[socket.socket, socket.socket]:
    """Return the two ends of a new stream; the caller closes them or hands them over."""
    return socket.socketpair(socket.AF_UNIX, socket.SOCK_STREAM | socket.SOCK_CLOEXEC)


class Channel:
    """One end of a stream of messages. Owned by one thread; owns its socket."""

    def __init__(self, end: socket.socket, *, unsent_bytes_max: int = message_bytes_max) -> None:
        end.setblocking(False)
        self._socket = end
        self._unsent_bytes_max = unsent_bytes_max
        #: Encoded, not yet taken by the kernel; the first may be partly gone.
        self._unsent: deque[memoryview] = deque()
        self._unsent_bytes = 0
        #: Arrived, not yet handed out; `_read_from` is where the next message begins.
        self._arrived = bytearray()
        self._read_from = 0
        self._ended = False

    def fileno(self) -> int:
        return self._socket.fileno()

    @property
    def wants_to_send(self) -> bool:
        """Whether something waits until the other end reads; then call `flush` when writable."""
        return bool(self._unsent)

    @property
    def unsent_bytes(self) -> int:
        return self._unsent_bytes

    @property
    def has_message(self) -> bool:
        """Whether `take` has something to hand out, or to complain of, without reading on."""
        try:
            return self._whole_message() is not None
        except ChannelBroken:
            return True

    def put(self, message: Mapping[str, Any]) -> None:
        """
        Send a message as far as the other end has room, and keep the rest for `flush`.

        Raises:
            ChannelFull: If more than `unsent_bytes_max` would have to be kept; nothing is sent.
            ChannelClosed: If the other end is gone.
            ValueError: If the message is larger than `message_bytes_max`.
        """
        body = msgpack.packb(message)
        if len(body) > message_bytes_max:
            raise ValueError(f"a message of {len(body)} bytes; the most is {message_bytes_max}")
        size = _length_bytes + len(body)
        # A single message may be larger than the bound; then it must at least be the only one.
        if self._unsent and self._unsent_bytes + size > self._unsent_bytes_max:
            raise ChannelFull(f"{self._unsent_bytes} bytes wait already")
        self._unsent.append(memoryview(len(body).to_bytes(_length_bytes, "little") + body))
        self._unsent_bytes += size
        self.flush()

    def flush(self) -> None:
        """
        Send what waits, as far as the other end has room.

        Raises:
            ChannelClosed: If the other end is gone.
        """
        while self._unsent:
            first = self._unsent[0]
            try:
                sent = self._socket.send(first, socket.MSG_NOSIGNAL)
            except BlockingIOError:
                return
            except OSError as fault:
                raise ChannelClosed(str(fault)) from fault
            self._unsent_bytes -= sent
            if sent == len(first):
                self._unsent.popleft()
            else:
                self._unsent[0] = first[sent:]

    def wait_put(self, message: Mapping[str, Any]) -> None:
        """Send a message whole, waiting for the other end: for the crew, never for the front."""
        self.put(message)
        while self._unsent:
            select.select([], [self._socket], [])
            self.flush()

    def take(self, count_max: int = messages_per_take) -> list[dict[str, Any]]:
        """
        Return the messages that have arrived, at most `count_max`, without waiting.

        Raises:
            ChannelClosed: If the other end is gone and all its messages are handed out.
            ChannelBroken: If what arrived is not a message.
        """
        if not self._ended and not self.has_message:
            self._receive()
        messages: list[dict[str, Any]] = []
        while len(messages) < count_max:
            span = self._whole_message()
            if span is None:
                break
            messages.append(_decode(memoryview(self._arrived)[span]))
            self._read_from = span.stop
        self._forget_handed_out()
        if self._ended and not messages:
            raise ChannelClosed("the other end has closed")
        return messages

    def wait_take(self, timeout_s: float | None = None) -> list[dict[str, Any]]:
        """Like `take`, but wait until something arrives or the time is over."""
        if not self._ended and not self.has_message:
            select.select([self._socket], [], [], timeout_s)
        return self.take()

    def close(self) -> None:
        self._socket.close()

    def _receive(self) -> None:
        try:
            piece = self._socket.recv(_receive_bytes)
        except BlockingIOError:
            return
        except OSError:  # reset: as good as closed
            piece = b""
        if piece:
            self._arrived += piece
        else:
            self._ended = True

    def _whole_message(self) -> slice | None:
        body_from = self._read_from + _length_bytes
        if len(self._arrived) < body_from:
            return None
        length = int.from_bytes(self._arrived[self._read_from : body_from], "little")
        if length > message_bytes_max:
            raise ChannelBroken(f"a message of {length} bytes was announced")
        if len(self._arrived) < body_from + length:
            return None
        return slice(body_from, body_from + length)

    def _forget_handed_out(self) -> None:
        if self._read_from:
            del self._arrived[: self._read_from]
            self._read_from = 0


def _decode(body: memoryview) -> dict[str, Any]:
    try:
        message = msgpack.unpackb(body, strict_map_key=False, max_ext_len=0)
    except Exception as fault:  # msgpack documents no single base class
        raise ChannelBroken(f"not msgpack: {fault}") from fault
    finally:
        # A view keeps the buffer from being shortened.
        body.release()
    if not isinstance(message, dict):
        raise ChannelBroken(f"a {type(message).__name__} where a map was due")
    return message
