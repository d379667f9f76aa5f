"""
The least that an exchange of messages costs: a ROUTER that sends back what comes.

Run as a process of its own, `python echo.py ENDPOINT`; it prints where it listens, and ends when
its standard input is closed.
"""

import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Final

import zmq

#: Bytes of the two frames, about those of a hello.
FRAMES: Final = (b"h" * 60, b"b" * 90)


def main() -> None:
    """Echo until standard input is closed."""
    context = zmq.Context()
    sock = context.socket(zmq.ROUTER)
    sock.setsockopt(zmq.LINGER, 0)
    sock.bind(sys.argv[1])
    print(sock.getsockopt_string(zmq.LAST_ENDPOINT), flush=True)
    poller = zmq.Poller()
    poller.register(sock, zmq.POLLIN)
    poller.register(sys.stdin.fileno(), zmq.POLLIN)
    while sys.stdin.fileno() not in dict(poller.poll()):
        sock.send_multipart(sock.recv_multipart())
    sock.close()
    context.term()


class Echo:
    """The other end: a DEALER that waits for what it has sent."""

    def __init__(self, endpoint: str) -> None:
        self._context = zmq.Context()
        self._socket = self._context.socket(zmq.DEALER)
        self._socket.setsockopt(zmq.LINGER, 0)
        self._socket.setsockopt(zmq.RCVTIMEO, 5000)
        self._socket.connect(endpoint)

    def trip(self) -> None:
        """Send two frames and wait until they are back."""
        self._socket.send_multipart(FRAMES)
        self._socket.recv_multipart()

    def close(self) -> None:
        """Close the socket."""
        self._socket.close()
        self._context.term()


@contextmanager
def echo(endpoint: str) -> Iterator[Echo]:
    """Run the echo at an endpoint (tcp with port 0: any that is free), and talk to it."""
    process = subprocess.Popen(
        # By its file: as a module of the package it would load all of the planning room first.
        [sys.executable, __file__, endpoint],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    try:
        if process.stdin is None or process.stdout is None:
            raise RuntimeError("the echo has no pipes")
        other = Echo(process.stdout.readline().strip())
        try:
            yield other
        finally:
            other.close()
    finally:
        process.communicate(timeout=10.0)


if __name__ == "__main__":
    main()
