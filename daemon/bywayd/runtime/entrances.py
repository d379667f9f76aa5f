"""
Where peers come in, and how to shut that without a word to those who are inside.

To unbind would cut every connection that came in by that endpoint (measured with libzmq 4.3.5:
the sessions belong to the listener). So the listener stays, and is only made unreachable:

* ipc   the socket file is renamed; connections know the file by its inode, newcomers by name,
* TCP   the listening socket, which is ours, gets a filter that drops every packet to it: a
        newcomer's first packet is repeated by its system until the filter is gone.
"""

import contextlib
import ctypes
import errno
import os
import socket
import struct
from pathlib import Path
from typing import Final, Protocol
from urllib.parse import urlsplit

import zmq

from bywayd.runtime.sockets import DoorFault, backlog, check_endpoint

_attach_filter: Final = 26  # SO_ATTACH_FILTER
_detach_filter: Final = 27  # SO_DETACH_FILTER
_return_nothing: Final = struct.pack("HBBI", 0x06, 0, 0, 0)  # BPF_RET: keep 0 bytes of it


class Entrance(Protocol):
    """One endpoint of one socket, bound."""

    #: As others can use it.
    endpoint: str

    def shut(self) -> None:
        """Let nobody else in. Raises OSError if that cannot be done."""

    def open(self) -> None:
        """Let them in again. Raises OSError if that cannot be done."""

    def leave(self) -> None:
        """Tidy up, when the socket is closed."""


class IpcEntrance:
    """A socket file in a folder of ours."""

    def __init__(self, sock: "zmq.Socket[bytes]", endpoint: str) -> None:
        self.endpoint = endpoint
        self._path = Path(endpoint.removeprefix("ipc://"))
        self._aside = self._path.with_name(f".{self._path.name}.shut")
        for left_over in (self._path, self._aside):
            left_over.unlink(missing_ok=True)
        try:
            sock.bind(endpoint)
        except zmq.ZMQError as fault:
            raise DoorFault(f"cannot listen on {endpoint}: {fault}") from fault

    def shut(self) -> None:
        self._path.rename(self._aside)

    def open(self) -> None:
        self._aside.rename(self._path)

    def leave(self) -> None:
        for path in (self._path, self._aside):
            path.unlink(missing_ok=True)


class TcpEntrance:
    """A port of an interface, or of all (host `*`); port 0 takes any that is free."""

    def __init__(self, sock: "zmq.Socket[bytes]", endpoint: str) -> None:
        parts = urlsplit(endpoint)
        host, port = str(parts.hostname), parts.port or 0
        host = "0.0.0.0" if host == "*" else host
        family = socket.AF_INET6 if ":" in host else socket.AF_INET
        try:
            self._listener = socket.create_server((host, port), family=family, backlog=backlog)
        except OSError as fault:
            why = "is another daemon there?"
            if isinstance(fault, socket.gaierror) or fault.errno == errno.EADDRNOTAVAIL:
                why = "that is no address of this host"
            raise DoorFault(f"cannot listen on {endpoint}: {fault.strerror} ({why})") from fault
        # An accept that waits would hold up all messages.
        self._listener.setblocking(False)
        shown = f"[{host}]" if ":" in host else host
        self.endpoint = f"tcp://{shown}:{self._listener.getsockname()[1]}"
        sock.setsockopt(zmq.IPV6, int(family == socket.AF_INET6))
        # The socket closes the descriptor that it is given; ours stays for the filter.
        sock.setsockopt(zmq.USE_FD, os.dup(self._listener.fileno()))
        try:
            sock.bind(self.endpoint)
        finally:
            sock.setsockopt(zmq.USE_FD, -1)

    def shut(self) -> None:
        code = ctypes.create_string_buffer(_return_nothing)
        program = struct.pack("HP", 1, ctypes.addressof(code))
        self._listener.setsockopt(socket.SOL_SOCKET, _attach_filter, program)

    def open(self) -> None:
        self._listener.setsockopt(socket.SOL_SOCKET, _detach_filter, 0)

    def leave(self) -> None:
        self._listener.close()


def bind(sock: "zmq.Socket[bytes]", endpoint: str) -> Entrance:
    """
    Bind a socket to an endpoint of this host.

    Raises:
        DoorFault: If the address cannot be had; or if others can reach it, and the socket lets
            in whoever comes.
    """
    # The socket itself is asked, not whoever calls: this is the last moment to notice.
    is_guarded = bool(sock.curve_server) and bool(sock.getsockopt(zmq.ZAP_ENFORCE_DOMAIN))
    check_endpoint(endpoint, has_keys=is_guarded)
    if endpoint.startswith("ipc://"):
        return IpcEntrance(sock, endpoint)
    return TcpEntrance(sock, endpoint)


def leave_all(entrances: list[Entrance]) -> None:
    """Tidy up after several; what cannot be tidied is left."""
    for entrance in entrances:
        with contextlib.suppress(OSError):
            entrance.leave()
