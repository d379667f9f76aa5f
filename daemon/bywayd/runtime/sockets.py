"""
Every socket to the outside, with every option in this one place.

Three sockets: `requests` and `updates` are ROUTERs, `events` is an XPUB. Each binds TCP and ipc
endpoints. Without keys nobody can be told from anybody else, so an address that others can reach
is refused. What a bound means when it is reached:

* a peer that does not read its replies loses them, and the front counts it (ROUTER_MANDATORY
  with DONTWAIT: without it they vanish unsaid, or the loop stands still);
* a subscriber that falls behind loses events, and sees it by their numbers;
* a frame over the limit ends the connection of its sender.
"""

import contextlib
import fcntl
import ipaddress
import os
import resource
import stat
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Final, Literal
from urllib.parse import urlsplit

import zmq

from byway import limits

SocketName = Literal["requests", "updates", "events"]

backlog: Final = 100

#: Heartbeats find a stopped or unplugged peer within 4 s (interval + timeout); a peer that
#: ends is seen at once. They say that a process is there, not that its loop turns.
OPTIONS_OF_ALL: Final[Mapping[zmq.SocketOption, int]] = {
    zmq.LINGER: 0,
    zmq.HEARTBEAT_IVL: 1000,
    zmq.HEARTBEAT_TIMEOUT: 3000,
    zmq.HEARTBEAT_TTL: 4000,
    zmq.HANDSHAKE_IVL: 5000,
    zmq.TCP_MAXRT: 5000,
    # Newcomers that the system lets in before we have looked at them.
    zmq.BACKLOG: backlog,
}

OPTIONS: Final[Mapping[SocketName, Mapping[zmq.SocketOption, int]]] = {
    # HANDOVER stays off: clients use generated routing ids, so a second one with the same id
    # is a mistake or an impostor, never the first one come back.
    "requests": {
        zmq.ROUTER_MANDATORY: 1,
        zmq.ROUTER_HANDOVER: 0,
        zmq.SNDHWM: 100,
        zmq.RCVHWM: 100,
        zmq.MAXMSGSIZE: limits.requests_frame_bytes_max,
    },
    "updates": {
        zmq.ROUTER_MANDATORY: 1,
        zmq.ROUTER_HANDOVER: 0,
        zmq.SNDHWM: 1000,
        zmq.RCVHWM: 1000,
        zmq.MAXMSGSIZE: limits.updates_frame_bytes_max,
    },
    # Routes of a while ago are worth nothing, so the queue of a subscriber is short. VERBOSE
    # shows every subscription, so that a new subscriber can be sent the last value.
    "events": {
        zmq.SNDHWM: 64,
        zmq.RCVHWM: 1000,
        zmq.XPUB_VERBOSE: 1,
        zmq.MAXMSGSIZE: 1024,
    },
}

#: How long orderly shutdown waits for the last answers to leave.
last_words_linger_ms: Final = 500

#: The system's limit for the path of a Unix socket, less the closing zero.
ipc_path_bytes_max: Final = 107


class DoorFault(Exception):
    """The daemon cannot listen where it was told to; the text says why and what to do."""


def open_socket(context: "zmq.Context[zmq.Socket[bytes]]", name: SocketName) -> "zmq.Socket[bytes]":
    """Return the socket of this name with its options set, bound nowhere yet."""
    sock = context.socket(zmq.XPUB if name == "events" else zmq.ROUTER)
    for option, value in {**OPTIONS_OF_ALL, **OPTIONS[name]}.items():
        sock.setsockopt(option, value)
    return sock


def can_read(sock: "zmq.Socket[bytes]") -> bool:
    """Whether a message is there; a third of the cost of the exception that says there is none."""
    ready: int = sock.getsockopt(zmq.EVENTS)  # type: ignore[assignment]
    return bool(ready & zmq.POLLIN)


def check_endpoint(endpoint: str, *, has_keys: bool = False) -> None:
    """
    Refuse an endpoint that cannot be, or that other hosts could reach without keys.

    Raises:
        DoorFault: If it is neither ipc nor TCP; without keys, if not on a loopback address.
    """
    parts = urlsplit(endpoint)
    if parts.scheme == "ipc":
        path = endpoint.removeprefix("ipc://")
        if len(os.fsencode(path)) > ipc_path_bytes_max:
            raise DoorFault(
                f"the ipc path {path} has more than {ipc_path_bytes_max} bytes; shorten it"
            )
        return
    if parts.scheme == "tcp" and parts.hostname is not None:
        if has_keys or parts.hostname == "localhost":
            return
        with contextlib.suppress(ValueError):
            if ipaddress.ip_address(parts.hostname).is_loopback:
                return
        raise DoorFault(
            f"will not listen on {endpoint}: there are no keys, so anybody who reaches that "
            "address could move the obstacles; use tcp://127.0.0.1:PORT or ipc, or make keys "
            "(byway keys) and name them in the settings"
        )
    raise DoorFault(f"cannot listen on {endpoint!r}: write tcp://127.0.0.1:PORT or ipc:///path")


def told_endpoints(told: Iterable[str], bound: Iterable[str]) -> tuple[str, ...]:
    """
    Return what clients are to be told: what the settings say, or else where a socket is bound.

    A host that is told counts. The one that a socket is bound to says little about how clients
    reach it, so 0.0.0.0 is told in its place: the host that they came by.
    """
    return tuple(told) or tuple(_by_any_host(endpoint) for endpoint in bound)


def _by_any_host(endpoint: str) -> str:
    parts = urlsplit(endpoint)
    if parts.scheme != "tcp" or parts.hostname is None:
        return endpoint
    with contextlib.suppress(ValueError):
        if ipaddress.ip_address(parts.hostname).is_loopback:
            return endpoint
    return f"tcp://0.0.0.0:{parts.port}"


def ipc_folders(endpoints: Iterable[str]) -> set[Path]:
    """Return the folders that the ipc endpoints among these lie in."""
    return {Path(e.removeprefix("ipc://")).parent for e in endpoints if e.startswith("ipc://")}


class IpcFolder:
    """
    A folder of ipc endpoints, held by one daemon at a time.

    Its mode is the gate: ipc sockets have no other. The lock matters because a second bind on
    the same path would silently take the first daemon's clients away.
    """

    def __init__(self, folder: Path) -> None:
        """
        Make the folder if needed and lock it.

        Raises:
            DoorFault: If it is not ours alone, cannot be made, or another daemon holds it.
        """
        try:
            folder.mkdir(mode=0o700, parents=True, exist_ok=True)
            facts = folder.lstat()
        except OSError as fault:
            raise DoorFault(f"cannot use {folder} for ipc endpoints: {fault}") from fault
        if not stat.S_ISDIR(facts.st_mode) or facts.st_uid != os.getuid() or facts.st_mode & 0o022:
            raise DoorFault(
                f"{folder} belongs to somebody else or others may write there; "
                "give it to this user with mode 0700, or choose another folder"
            )
        self._lock = os.open(folder / "lock", os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600)
        try:
            fcntl.flock(self._lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            holder = os.pread(self._lock, 20, 0).decode(errors="replace").strip() or "?"
            os.close(self._lock)
            raise DoorFault(
                f"another daemon (process {holder}) serves from {folder}; stop it, or choose "
                "another folder for this one"
            ) from None
        os.ftruncate(self._lock, 0)
        os.pwrite(self._lock, str(os.getpid()).encode(), 0)

    def release(self) -> None:
        """Let the next daemon in. The lock file stays: to remove it would be a race."""
        os.close(self._lock)


def connections_allowed(wanted: int | None = None, reserve: int = 200) -> int:
    """
    Return how many peers may be connected at once, and raise the limit of descriptors first.

    As many as wanted, or 10,000, where there are descriptors for them.

    libzmq ends the whole process when an ipc listener runs out of descriptors, and spins a
    core when a TCP listener does. Half is kept for those that are accepted between two looks,
    `reserve` for everything that is not a peer.
    """
    soft, hard = resource.getrlimit(resource.RLIMIT_NOFILE)
    if soft < hard:
        with contextlib.suppress(ValueError, OSError):
            resource.setrlimit(resource.RLIMIT_NOFILE, (hard, hard))
            soft = hard
    if soft == resource.RLIM_INFINITY:
        soft = 1_000_000
    return max(1, min(wanted or 10_000, (soft - min(reserve, soft // 2)) // 2))
