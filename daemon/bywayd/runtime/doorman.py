"""
Keeps the number of connected peers below what the process has descriptors for.

When an ipc listener of libzmq finds no descriptor left, it aborts the process; any local
program that may connect could end the daemon that way. So the doorman counts who comes and
goes by the monitor of each socket, and when too many are inside it unbinds: those inside are
served on, those outside keep trying by themselves and get in once there is room again.
"""

from collections.abc import Mapping
from typing import Final

import zmq
from zmq.utils.monitor import parse_monitor_message

from bywayd.runtime.sockets import SocketName

_watched: Final = zmq.EVENT_ACCEPTED | zmq.EVENT_DISCONNECTED | zmq.EVENT_ACCEPT_FAILED
_room_again: Final = 0.9

#: Comings and goings looked at in one turn; what is left waits in the monitor.
events_per_turn_max: Final = 200


class Doorman:
    """Watches the sockets to the outside; closes and opens their listeners together."""

    def __init__(
        self,
        context: "zmq.Context[zmq.Socket[bytes]]",
        doors: "Mapping[SocketName, tuple[zmq.Socket[bytes], list[str]]]",
        peers_max: int,
    ) -> None:
        """
        Args:
            doors: Each socket with the endpoints that it is bound to.
            peers_max: Above this many connections the listeners are closed.
        """
        self.peers_max = peers_max
        #: Connected now, over all sockets.
        self.peers = 0
        #: How often the doors had to be closed, and accepts that failed, since the start.
        self.closings = 0
        self.failures = 0
        self.is_open = True
        self._doors = dict(doors)
        self.monitors: list[zmq.Socket[bytes]] = []
        for name, (sock, _) in self._doors.items():
            address = f"inproc://doorman-{name}-{id(self)}"
            sock.monitor(address, _watched)
            monitor = context.socket(zmq.PAIR)
            # Bounded, a full monitor would hold up the thread that moves all messages.
            monitor.setsockopt(zmq.RCVHWM, 0)
            monitor.setsockopt(zmq.LINGER, 0)
            monitor.connect(address)
            self.monitors.append(monitor)

    def look(self) -> bool:
        """Take note of who came and went, act on it, and tell whether the doors moved."""
        looked = 0
        for monitor in self.monitors:
            while looked < events_per_turn_max and monitor.getsockopt(zmq.EVENTS):
                event = parse_monitor_message(monitor.recv_multipart(zmq.DONTWAIT))["event"]
                looked += 1
                if event == zmq.EVENT_ACCEPTED:
                    self.peers += 1
                elif event == zmq.EVENT_DISCONNECTED:
                    self.peers -= 1
                else:
                    self.failures += 1
        if self.is_open and self.peers >= self.peers_max:
            return self._close_doors()
        if not self.is_open and self.peers < self.peers_max * _room_again:
            return self._open_doors()
        return False

    def _close_doors(self) -> bool:
        for sock, endpoints in self._doors.values():
            for endpoint in endpoints:
                sock.unbind(endpoint)
        self.is_open = False
        self.closings += 1
        return True

    def _open_doors(self) -> bool:
        try:
            for sock, endpoints in self._doors.values():
                for endpoint in endpoints:
                    sock.bind(endpoint)
        except zmq.ZMQError:
            # The old listener may not be gone yet; the next look tries again.
            for sock, endpoints in self._doors.values():
                for endpoint in endpoints:
                    _unbind_if_bound(sock, endpoint)
            return False
        self.is_open = True
        return True

    def close(self) -> None:
        for sock, _ in self._doors.values():
            sock.disable_monitor()
        for monitor in self.monitors:
            monitor.close()


def _unbind_if_bound(sock: "zmq.Socket[bytes]", endpoint: str) -> None:
    try:
        sock.unbind(endpoint)
    except zmq.ZMQError:
        return
