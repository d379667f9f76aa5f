"""Where the other sockets of a daemon are, for somebody who came to the first."""

from collections.abc import Sequence
from urllib.parse import urlsplit

from byway.errors import BadReply


def sibling(came_to: str, socket: str, offered: Sequence[str]) -> str:
    """
    Return the endpoint to use for another socket of the same daemon.

    It has the transport that the client came with. For TCP the host that the client used counts,
    for the daemon may know itself by another address; only the port is taken from the offer.

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
        host, _, _ = came_to.removeprefix("tcp://").rpartition(":")
        _, _, port = endpoint.rpartition(":")
        return f"tcp://{host}:{port}"
    raise BadReply(
        f"the daemon offers no {transport} endpoint for {socket}, only {', '.join(offered)}",
        {"offered": list(offered)},
    )
