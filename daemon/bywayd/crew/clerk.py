"""
The clerk: the process that writes durable layers to the disk, so that nobody else waits for it.

It is started beside the template and needs no compiler: some tenths of a second after the front
it can say what is kept, long before there is a site to put it in. It works off one order after
the other. A disk that is full or busy makes it try again for as long as it takes, and say so; a
file that cannot be used at all is reported once, and it ends.
"""

import argparse
import contextlib
import faulthandler
import os
import socket
import sys
import time
from collections import deque
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any, Final

from bywayd.crew.channel import Channel, ChannelClosed
from bywayd.crew.keep_store import Change, Hindered, KeepFault, KeepStore
from bywayd.crew.kinship import call_oneself, die_with

#: How often a busy clerk says that it is alive.
alive_every_s: Final = 0.2

#: How long it waits before it tries again what the disk would not take.
retry_s: Final = 0.5

#: After so long without work it tidies up.
idle_s: Final = 0.25

#: What one answer to "recall" holds at most: a piece that the front gets through in a few turns.
recall_count_max: Final = 64
recall_bytes_max: Final = 1024 * 1024


class Clerk:
    """The life of one clerk process; `run` returns when the file cannot be used."""

    def __init__(self, channel: Channel) -> None:
        self._channel = channel
        self._waiting: deque[dict[str, Any]] = deque()
        self._alive_s = 0.0

    def run(self) -> None:
        """Open the file, say ready, then do what comes until the channel is closed."""
        try:
            store = KeepStore.open(Path(self._next()["file"]), _wall_s())
        except KeepFault as fault:
            self._channel.wait_put({"say": "unfit", "text": str(fault)})
            return
        self._say("ready", store)
        try:
            self._work(store)
        except KeepFault as fault:
            self._channel.wait_put({"say": "unfit", "text": str(fault)})
        finally:
            store.close()

    def _work(self, store: KeepStore) -> None:
        while True:
            message = self._next_within(idle_s)
            if message is None:
                if store.tidy():
                    self._sign_of_life()
                continue
            what = message["do"]
            if what == "keep":
                self._keep(store, message)
            elif what == "recall":
                self._recall(store, message)
            elif what == "ping":
                self._channel.wait_put({"say": "alive"})

    def _next(self) -> dict[str, Any]:
        while (message := self._next_within(None)) is None:
            pass
        return message

    def _next_within(self, timeout_s: float | None) -> dict[str, Any] | None:
        """Return the next order, if one comes in time."""
        if not self._waiting:
            self._waiting.extend(self._channel.wait_take(timeout_s))
        return self._waiting.popleft() if self._waiting else None

    def _keep(self, store: KeepStore, message: Mapping[str, Any]) -> None:
        """Commit a batch, whatever time it takes, and say so."""
        while True:
            try:
                self._with_signs_of_life(store.commit(_with_expiries(message["changes"])))
                break
            except Hindered as fault:
                self._channel.wait_put({"say": "hindered", "text": str(fault)})
            # Whatever comes in meanwhile is for later, or the end of us.
            self._waiting.extend(self._channel.wait_take(retry_s))
        self._say("kept", store, task=message["task"])

    def _with_signs_of_life(self, work: Iterable[None]) -> None:
        for _ in work:
            self._sign_of_life()

    def _recall(self, store: KeepStore, message: Mapping[str, Any]) -> None:
        table, after = message["place"]
        found, place = store.recall((table, after), _wall_s(), recall_count_max, recall_bytes_max)
        self._channel.wait_put(
            {"say": "recalled", "task": message["task"], "changes": found, "place": place}
        )

    def _sign_of_life(self) -> None:
        now_s = time.monotonic()
        if now_s >= self._alive_s:
            self._alive_s = now_s + alive_every_s
            self._channel.wait_put({"say": "alive"})

    def _say(self, what: str, store: KeepStore, **more: Any) -> None:
        told = {"size_bytes": store.size_bytes, "patches": store.patch_count}
        self._channel.wait_put({"say": what, **told, **more})


def _wall_s() -> float:
    # The one clock that goes on while the machine is off; it may jump, and a later end is better
    # than none.
    return time.time_ns() * 1e-9


def _with_expiries(changes: Iterable[Mapping[str, Any]]) -> Iterable[Change]:
    """Turn the time that is left, as the front tells it, into one of the wall clock."""
    wall_s, host_ns = _wall_s(), time.monotonic_ns()
    for change in changes:
        expires_ns = change["expires_ns"]
        left_s = None if expires_ns is None else (expires_ns - host_ns) * 1e-9
        yield {**change, "expires_s": None if left_s is None else wall_s + left_s}


def main(arguments: list[str]) -> int:
    parser = argparse.ArgumentParser(prog="byway-clerk")
    parser.add_argument("--front-pid", type=int, required=True)
    parser.add_argument("--channel", type=int, required=True, help="descriptor")
    parser.add_argument("--number", type=int, required=True)
    told = parser.parse_args(arguments)
    die_with(told.front_pid)
    call_oneself(f"byway-clerk-{told.number}")
    faulthandler.enable()
    os.umask(0o077)  # what is kept is for the daemon's own eyes
    clerk = Clerk(Channel(socket.socket(fileno=told.channel)))
    with contextlib.suppress(ChannelClosed):  # the front has no more use for us
        clerk.run()
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
