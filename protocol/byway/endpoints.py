"""Where the other sockets of a daemon are, for somebody who came to the first."""

import contextlib
import ipaddress
from collections.abc import Sequence
from urllib.parse import urlsplit

from byway.errors import BadReply


def sibling(came_to: str, socket: str, offered: Sequence[str]) -> str:
    """
    Return the endpoint to use for another socket of the same daemon.

    It has the transport that the client came with. A TCP host that stands for none in particular
    (0.0.0.0, ::) or for the daemon's own (loopback) means the one that the client came by.

    Args:
        came_to: The endpoint of the requests socket.
        socket: "updates" or "events", for the error.
        offered: As the daemon lists them.

    Raises:
        BadReply: None of them has that transport.
    """
    transport = urlsplit(came_to).scheme
    for endpoint in offered:
        if urlsplit(endpoint).scheme != transport:
            continue
        if transport != "tcp":
            return endpoint
        host, _, port = endpoint.removeprefix("tcp://").rpartition(":")
        if _is_any(host):
            host, _, _ = came_to.removeprefix("tcp://").rpartition(":")
        return f"tcp://{host}:{port}"
    raise BadReply(
        f"the daemon offers no {transport} endpoint for {socket}, only {', '.join(offered)}",
        {"offered": list(offered)},
    )


def _is_any(host: str) -> bool:
    if host in ("*", "localhost"):
        return True
    with contextlib.suppress(ValueError):
        address = ipaddress.ip_address(host.strip("[]"))
        return address.is_loopback or address.is_unspecified
    return False
