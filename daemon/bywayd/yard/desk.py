"""
The world's only way to the daemon: threads that speak through the public client.

One thread a unit asks for routes and has them guarded, as a vehicle's own controller would; others
tell of the site (telling.py) and listen (hearing.py). A client belongs to one thread, and the
world's loop never waits for any of them.
"""

import contextlib
import queue
import threading
import time
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final, TypeVar

import byway
from bywayd.yard.claims import Claim
from bywayd.yard.fork_truck import Moving
from bywayd.yard.hearing import Alerted, Ear, block_of, reactions_s
from bywayd.yard.report import Asked, Heard
from bywayd.yard.scene import SENSOR_ON
from bywayd.yard.sensor import Scan
from bywayd.yard.shapes import Mass
from bywayd.yard.telling import LAYERS, SITE, Cameras, SensorFeed, layer_of
from bywayd.yard.tracking import Line
from bywayd.yard.unit import Ask, News, Reply, Watch

__all__ = ["LAYERS", "SITE", "LiveDesk", "key_of", "layer_of"]

#: A route this near to the best possible is good enough to drive; the worker is free for others.
GAP_WANTED: Final = 0.02
BEGIN_S: Final = 10.0
#: How long a thread may take to end: the longest budget, and the client's own patience.
ENDING_S: Final = 5.0
#: A vehicle says where it is several times a second; after this long a silence nobody drives.
SILENCE_S: Final = 3.0

Item = TypeVar("Item")


@dataclass(frozen=True)
class Progress:
    """Where a unit is on its guarded route. `guard` "" says that it drives no more."""

    guard: str
    at_m: float
    speed_mps: float


def key_of(keys: Path | None, name: str) -> Path | None:
    """Return the key file of the site or of a unit: the one for all, or the one in a folder."""
    if keys is None or not keys.is_dir():
        return keys
    return keys / f"{name}.key"


class LiveDesk:
    """A desk (see world.py) with a daemon behind it."""

    def __init__(self, endpoint: str, units: Iterable[str], keys: Path | None = None) -> None:
        self._endpoint = endpoint
        self._keys = keys
        self._ending = threading.Event()
        #: What went wrong outside of a question, a sentence each. Appended by any thread.
        self.faults: list[str] = []
        #: Every question and what it took. Appended by any thread.
        self.asked: list[Asked] = []
        #: The newest revision that an answer knew of.
        self.revision = 0
        self._asks: dict[str, queue.SimpleQueue[Ask | Watch | Progress | None]] = {
            unit: queue.SimpleQueue() for unit in units
        }
        self._replies: queue.SimpleQueue[Reply] = queue.SimpleQueue()
        listener = next(iter(self._asks))
        self._cameras = Cameras(self._client, self._ending, self.faults)
        self._sensor = SensorFeed(self._client, SENSOR_ON, self._ending, self.faults)
        self._ear = Ear(self._client, listener, self._ending, self.faults)
        threads: list[tuple[str, Any, tuple[str, ...]]] = [
            ("site", self._cameras.tell_for_ever, ()),
            ("sensor", self._sensor.tell_for_ever, ()),
            ("ear", self._ear.listen_for_ever, ()),
            *((unit, self._plan_for_ever, (unit,)) for unit in self._asks),
        ]
        self._threads = [
            threading.Thread(target=work, args=args, name=name) for name, work, args in threads
        ]

    def vehicles(self) -> dict[str, Mapping[str, Any]]:
        """Return the vehicles that the daemon knows, as it tells their settings."""
        with self._client(SITE) as client:
            return {known.name: known.settings for known in client.vehicles()}

    def _client(self, name: str) -> byway.Client:
        return byway.Client(self._endpoint, keys=key_of(self._keys, name))

    def open(self, claims: Mapping[str, Claim]) -> None:
        """
        Tell the daemon what stands on the yard, then begin to work.

        Raises:
            RuntimeError: If the daemon could not be told.
        """
        self.show(claims)
        site, *others = self._threads
        site.start()
        if not self._cameras.begun.wait(BEGIN_S) or self.faults:
            raise RuntimeError("; ".join(self.faults) or "the daemon could not be told of the yard")
        for thread in others:
            thread.start()

    def close(self) -> None:
        """End all threads; a question that is open is waited for."""
        self._ending.set()
        for waiting in self._asks.values():
            waiting.put(None)
        for thread in filter(threading.Thread.is_alive, self._threads):
            thread.join(ENDING_S)
            if thread.is_alive():
                self.faults.append(f"the thread of {thread.name} did not end")

    @property
    def heard(self) -> Heard:
        """What was published about guarded routes, and how soon."""
        alerts: list[Alerted] = list(self._ear.alerts)
        return Heard(
            [(alert.block.layer, alert.block.kind) for alert in alerts],
            reactions_s(self._cameras.changes, alerts),
            reactions_s(self._sensor.changes, alerts),
            self._sensor.sent,
            self._ear.missed,
        )

    # -- what the world calls; nothing here waits --------------------------------------------

    def ask(self, ask: Ask) -> None:
        """Take a question; one a unit is open at a time."""
        self._asks[ask.unit].put(ask)

    def replies(self) -> Sequence[Reply]:
        """Return what came of questions since the last call."""
        return list(_drained(self._replies))

    def put(self, mass: Mass) -> None:
        """Tell the daemon of a pack."""
        self._cameras.orders.put((mass, time.monotonic()))

    def drop(self, name: str) -> None:
        """Tell the daemon that a pack is gone."""
        self._cameras.orders.put((name, time.monotonic()))

    def show(self, claims: Mapping[str, Claim]) -> None:
        """Tell the daemon, when there is time, what ground the vehicles claim now."""
        self._cameras.claims = dict(claims)

    def scan(self, scan: Scan, news: Sequence[Mass]) -> None:
        """Pass a sweep of the range sensor on."""
        self._sensor.take(scan, news, time.monotonic())

    def track(self, moving: Moving) -> None:
        """Tell the daemon how something moves."""
        self._cameras.orders.put((moving, time.monotonic()))

    def watch(self, watch: Watch) -> None:
        """Have a line guarded."""
        self._asks[watch.unit].put(watch)

    def progress(self, unit: str, guard: str, at_m: float, speed_mps: float) -> None:
        """Tell where on its guarded route a unit is."""
        self._asks[unit].put(Progress(guard, at_m, speed_mps))

    def release(self, unit: str) -> None:
        """Tell that a unit drives no more."""
        self._asks[unit].put(Progress("", 0.0, 0.0))

    def news(self) -> Sequence[News]:
        """Return what was heard of guards since the last call."""
        return list(_drained(self._ear.news))

    # -- a thread a unit ---------------------------------------------------------------------

    def _plan_for_ever(self, unit: str) -> None:
        with self._client(unit) as client:
            while (order := self._asks[unit].get()) is not None:
                if isinstance(order, Ask):
                    self._replies.put(self._plan(client, order))
                elif isinstance(order, Watch):
                    self._watch(client, order)
                else:
                    self._tell_progress(client, unit, order)

    def _plan(self, client: byway.Client, ask: Ask) -> Reply:
        began_s = time.monotonic()
        better = 0

        def count(_: object) -> None:
            nonlocal better
            better += 1

        try:
            answer = client.replan(
                ask.vehicle,
                start=ask.start,
                goal=ask.goal,
                budget_s=ask.budget_s,
                unit=ask.unit,
                leave_out=[layer_of(ask.unit)],
                start_speed_mps=ask.start_speed_mps,
                start_curvature_per_m=ask.start_curvature_per_m,
                gap_wanted=GAP_WANTED,
                # A vehicle that stands takes what it gets; on the move it may stay on its route.
                guard=ask.goes_on_at_m is None,
                replan_on_alert=True,
                silence_s=SILENCE_S,
                on_better=count,
            )
        except byway.BywayError as fault:
            kind = f"error:{fault.code}"
            self.asked.append(Asked(kind, ask.budget_s, time.monotonic() - began_s))
            return Reply(ask, kind)
        took_s = time.monotonic() - began_s
        first_s = float("nan") if answer.first_s is None else answer.first_s
        self.asked.append(Asked(answer.kind, ask.budget_s, took_s, first_s, answer.total_s, better))
        self.revision = max(self.revision, answer.revision)
        line = None if answer.route is None else Line(answer.route.table, answer)
        return Reply(ask, answer.kind, line, answer.cost, answer.guard or "")

    def _watch(self, client: byway.Client, watch: Watch) -> None:
        try:
            told = client.guard(
                watch.line.found,
                unit=watch.unit,
                vehicle=watch.vehicle,
                leave_out=[layer_of(watch.unit)],
                progress_m=watch.at_m,
                silence_s=SILENCE_S,
                replan_on_alert=True,
            )
        except byway.Withdrawn:
            return  # another guard has taken its place
        except byway.BywayError as fault:
            self.faults.append(f"guarding the route of {watch.unit}: {fault}")
            return
        block = None if told.blocked is None else block_of(told.blocked)
        self._ear.news.put(
            News(watch.unit, "guarded", told.guard, block, line_number=watch.line_number)
        )

    def _tell_progress(self, client: byway.Client, unit: str, told: Progress) -> None:
        # A guard that has ended or was replaced meanwhile is told of by an event.
        with contextlib.suppress(byway.UnknownRequest):
            try:
                if told.guard:
                    client.progress(told.at_m, told.speed_mps, unit=unit, guard=told.guard)
                else:
                    client.release(unit)
            except byway.Unavailable as fault:
                self.faults.append(f"telling the progress of {unit}: {fault}")


def _drained(found: "queue.SimpleQueue[Item]") -> Iterable[Item]:
    while True:
        try:
            yield found.get_nowait()
        except queue.Empty:
            return
