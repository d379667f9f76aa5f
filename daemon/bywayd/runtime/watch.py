"""One poller for everything the front waits for: zmq sockets and plain descriptors alike."""

from collections.abc import Callable
from typing import Protocol, TypeAlias

import zmq


class Descriptor(Protocol):
    """Anything with a file descriptor."""

    def fileno(self) -> int: ...


Watched: TypeAlias = "zmq.Socket[bytes] | Descriptor | int"


class Watch:
    """Who is called when something can be read (or, if asked for, written)."""

    def __init__(self) -> None:
        self._poller = zmq.Poller()
        self._handlers: dict[object, Callable[[], None]] = {}

    def add(self, watched: Watched, handler: Callable[[], None]) -> None:
        """Call the handler whenever there is something to read."""
        key = _key(watched)
        self._poller.register(key, zmq.POLLIN)
        self._handlers[key] = handler

    def also_writable(self, watched: Watched, wanted: bool) -> None:
        """Call its handler when it can be written to, too; or no longer."""
        key = _key(watched)
        if key in self._handlers:
            self._poller.modify(key, zmq.POLLIN | (zmq.POLLOUT if wanted else 0))

    def remove(self, watched: Watched) -> None:
        """Forget it; nothing happens if it is not watched. Call this before it is closed."""
        key = _key(watched)
        if self._handlers.pop(key, None) is not None:
            self._poller.unregister(key)

    def wait(self, timeout_ms: int) -> list[Callable[[], None]]:
        """Wait until something happens or the time is over; return whom to call."""
        ready = self._poller.poll(timeout_ms)
        return [self._handlers[key] for key, _ in ready if key in self._handlers]


def _key(watched: Watched) -> object:
    # zmq polls its own sockets as they are, everything else by number.
    return watched if isinstance(watched, zmq.Socket | int) else watched.fileno()
