"""
What the daemon publishes about guarded routes, passed on to the vehicles.

One thread listens for all; in a fleet every vehicle would listen for itself.
"""

import queue
import threading
import time
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import byway
from byway import messages
from bywayd.yard.telling import Change, Connect
from bywayd.yard.tracking import Line
from bywayd.yard.unit import Block, News

#: Health comes once a second, so that the listener notices when it is to end.
TOPICS: Final = ("guard.", "health")


@dataclass(frozen=True)
class Alerted:
    """An alert as it came."""

    unit: str
    block: Block
    revision: int
    at_s: float


class Ear:
    """The thread that listens."""

    def __init__(
        self, connect: Connect, name: str, ending: threading.Event, faults: list[str]
    ) -> None:
        self._connect = connect
        self._name = name
        self._ending = ending
        self._faults = faults
        self.news: queue.SimpleQueue[News] = queue.SimpleQueue()
        #: Appended by this thread.
        self.alerts: list[Alerted] = []
        self.missed = 0

    def listen_for_ever(self) -> None:
        """Run until the end."""
        try:
            with self._connect(self._name) as client:
                for event in client.listen(TOPICS):
                    if self._ending.is_set():
                        return
                    self._take(event)
        except byway.BywayError as fault:
            self._faults.append(f"listening to the daemon: {fault}")

    def _take(self, event: byway.Event) -> None:
        if event.topic != "health":
            self.missed += event.missed
        content = event.content
        if isinstance(content, messages.Alert):
            found = Alerted(
                content.unit, block_of(content.blocked), content.revision, time.monotonic()
            )
            self.alerts.append(found)
        heard = news_of(content)
        if heard is not None:
            self.news.put(heard)


def block_of(told: messages.BlockedIs) -> Block:
    """Return where and by what a route is blocked."""
    return Block(told.at_m, told.layer, told.id, told.kind)


def news_of(content: object) -> News | None:
    """Return what an event says to a vehicle; None if nothing."""
    match content:
        case messages.Alert():
            return News(content.unit, "alert", content.guard, block_of(content.blocked))
        case messages.Cleared():
            return News(content.unit, "cleared", content.guard)
        case messages.GuardLost():
            return News(content.unit, "guard_lost", content.guard)
        case messages.RerouteFailed():
            return News(content.unit, "reroute_failed", content.guard)
        case byway.Rerouted():
            line = None if content.route is None else Line(content.route.table, content)
            return News(
                content.unit, "rerouted", content.guard,
                was=content.was, line=line, from_m=content.from_m,
            )  # fmt: skip
    return None


def reactions_s(changes: Sequence[Change], alerts: Sequence[Alerted]) -> list[float]:
    """
    Return how long it took from each change to the first alert that it brought about.

    Counted are alerts that name what was put down, or the layer of the scan that saw it, and that
    came of the revision which took the change in: a guard that was set later finds it there.
    """
    found = []
    for change in changes:
        for alert in alerts:
            names_it = alert.block.name in change.names or alert.block.kind == "cell"
            if (
                alert.block.layer == change.layer
                and names_it
                and alert.at_s >= change.at_s
                and alert.revision <= change.revision
            ):
                found.append(alert.at_s - change.at_s)
                break
    return found
