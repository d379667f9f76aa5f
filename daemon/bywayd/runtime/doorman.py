"""
Keeps the number of connected peers below what the process has descriptors for.

When an ipc listener of libzmq finds no descriptor left it aborts the process, and a TCP
listener spins; any local program that may connect could end the daemon that way. So the
doorman counts who comes and goes, by the monitor of each socket, and when too many are inside
it shuts the entrances: those inside are served on, those outside keep trying by themselves and
get in once there is room again.
"""

import contextlib
from typing import Final

import zmq
from zmq.utils.monitor import parse_monitor_message

from bywayd.runtime.entrances import Entrance
from bywayd.runtime.sockets import can_read

_watched: Final = zmq.EVENT_ACCEPTED | zmq.EVENT_DISCONNECTED | zmq.EVENT_ACCEPT_FAILED
_room_again: Final = 0.9

#: Comings and goings looked at in one turn; what is left waits in the monitor.
events_per_turn_max: Final = 200


class Doorman:
    """Watches the sockets to the outside; shuts and opens their entrances together."""

    def __init__(
        self,
        context: "zmq.Context[zmq.Socket[bytes]]",
        sockets: "list[zmq.Socket[bytes]]",
        entrances: list[Entrance],
        peers_max: int,
    ) -> None:
        """
        Args:
            peers_max: At this many connections the entrances are shut.
        """
        self.peers_max = peers_max
        #: Connected now, over all sockets.
        self.peers = 0
        #: How often the entrances were shut, and accepts that failed, since the start.
        self.shut_count = 0
        self.failures = 0
        self.is_open = True
        self._sockets = sockets
        self._entrances = entrances
        self.monitors: list[zmq.Socket[bytes]] = []
        for index, sock in enumerate(sockets):
            address = f"inproc://doorman-{index}-{id(self)}"
            sock.monitor(address, _watched)
            monitor = context.socket(zmq.PAIR)
            # Bounded, a full monitor would hold up the thread that moves all messages.
            monitor.setsockopt(zmq.RCVHWM, 0)
            monitor.setsockopt(zmq.LINGER, 0)
            monitor.connect(address)
            self.monitors.append(monitor)

    def look(self) -> bool:
        """Take note of who came and went, act on it, and tell whether the entrances moved."""
        looked = 0
        for monitor in self.monitors:
            while looked < events_per_turn_max and can_read(monitor):
                self._note(parse_monitor_message(monitor.recv_multipart(zmq.DONTWAIT))["event"])
                looked += 1
        if self.is_open and self.peers >= self.peers_max:
            self.shut_count += 1
            self._move(False)
            return True
        if not self.is_open and self.peers < self.peers_max * _room_again:
            self._move(True)
            return True
        return False

    def _note(self, event: int) -> None:
        if event == zmq.EVENT_ACCEPTED:
            self.peers += 1
        elif event == zmq.EVENT_DISCONNECTED:
            self.peers -= 1
        else:
            self.failures += 1

    def _move(self, to_open: bool) -> None:
        self.is_open = to_open
        for entrance in self._entrances:
            # One that cannot be moved (somebody took the file away) must not stop the others.
            with contextlib.suppress(OSError):
                if to_open:
                    entrance.open()
                else:
                    entrance.shut()

    def close(self) -> None:
        for sock in self._sockets:
            sock.disable_monitor()
        for monitor in self.monitors:
            monitor.close()
