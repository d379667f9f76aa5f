"""
The world's only way to the daemon: threads that speak through the public client.

One thread a unit asks for routes, as a vehicle's own controller would; one thread tells of packs
and of the ground that vehicles claim, as the yard's cameras would. A client belongs to one thread,
and the world's loop never waits for any of them.
"""

import queue
import threading
import time
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any, Final

import byway
from bywayd.yard.claims import Claim, told_outlines
from bywayd.yard.report import Asked
from bywayd.yard.scene import BUILDINGS, STACKS
from bywayd.yard.shapes import Mass
from bywayd.yard.tracking import Line
from bywayd.yard.unit import Ask, Reply

SHOW_EVERY_S: Final = 0.2
#: A route this near to the best possible is good enough to drive; the worker is free for others.
GAP_WANTED: Final = 0.02
BEGIN_S: Final = 10.0
#: How long a thread may take to end: the longest budget, and the client's own patience.
ENDING_S: Final = 5.0


#: Who tells of the site, as its key is called.
SITE: Final = "yard"
#: What stands, what is stacked, and what the crane puts down.
LAYERS: Final = ("fixed", "stacks", "packs")


def key_of(keys: Path | None, name: str) -> Path | None:
    """Return the key file of the site or of a unit: the one for all, or the one in a folder."""
    if keys is None or not keys.is_dir():
        return keys
    return keys / f"{name}.key"


def layer_of(unit: str) -> str:
    """Return the layer that holds a unit's own outline; its own replans leave it out."""
    return f"unit.{unit}"


class LiveDesk:
    """A desk (see world.py) with a daemon behind it. Use it as a context manager."""

    def __init__(self, endpoint: str, units: Iterable[str], keys: Path | None = None) -> None:
        self._endpoint = endpoint
        self._keys = keys
        self._ending = threading.Event()
        self._begun = threading.Event()
        #: What went wrong outside of a question, a sentence each. Appended by any thread.
        self.faults: list[str] = []
        #: Every question and what it took. Appended by any thread.
        self.asked: list[Asked] = []
        #: The newest revision that an answer knew of.
        self.revision = 0
        self._asks: dict[str, queue.SimpleQueue[Ask | None]] = {
            unit: queue.SimpleQueue() for unit in units
        }
        self._replies: queue.SimpleQueue[Reply] = queue.SimpleQueue()
        self._orders: queue.SimpleQueue[Mass | str] = queue.SimpleQueue()
        self._told: queue.SimpleQueue[str] = queue.SimpleQueue()
        self._claims: Mapping[str, Claim] = {}
        self._threads = [threading.Thread(target=self._tell_for_ever, name="site")]
        self._threads += [
            threading.Thread(target=self._plan_for_ever, args=(unit,), name=unit)
            for unit in self._asks
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
        site, *units = self._threads
        site.start()
        if not self._begun.wait(BEGIN_S) or self.faults:
            raise RuntimeError("; ".join(self.faults) or "the daemon could not be told of the yard")
        for thread in units:
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

    # -- what the world calls; nothing here waits --------------------------------------------

    def ask(self, ask: Ask) -> None:
        """Take a question; one a unit is open at a time."""
        self._asks[ask.unit].put(ask)

    def replies(self) -> Sequence[Reply]:
        """Return what came of questions since the last call."""
        return list(_drained(self._replies))

    def put(self, mass: Mass) -> None:
        """Tell the daemon of a pack."""
        self._orders.put(mass)

    def drop(self, name: str) -> None:
        """Tell the daemon that a pack is gone."""
        self._orders.put(name)

    def told(self) -> Sequence[str]:
        """Return the packs of which the daemon has learned since the last call."""
        return list(_drained(self._told))

    def show(self, claims: Mapping[str, Claim]) -> None:
        """Tell the daemon, when there is time, what ground the vehicles claim now."""
        self._claims = dict(claims)

    # -- a thread a unit ---------------------------------------------------------------------

    def _plan_for_ever(self, unit: str) -> None:
        with self._client(unit) as client:
            while (ask := self._asks[unit].get()) is not None:
                self._replies.put(self._plan(client, ask))

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
        line = None if answer.route is None else Line(answer.route.table)
        return Reply(ask, answer.kind, line, answer.cost)

    # -- the thread that tells of the site ------------------------------------------------------

    def _tell_for_ever(self) -> None:
        shown: dict[str, Claim] = {}
        try:
            with self._client(SITE) as client:
                for layer, masses in zip(LAYERS, (BUILDINGS, STACKS, ()), strict=True):
                    client.replace_layer(layer, polygons=_polygons(masses), discs=_discs(masses))
                self._show(client, shown)
                self._begun.set()
                while not self._ending.wait(SHOW_EVERY_S):
                    self._carry_out_orders(client)
                    self._show(client, shown)
        except byway.BywayError as fault:
            self.faults.append(f"telling the daemon of the yard: {fault}")
            self._begun.set()

    def _carry_out_orders(self, client: byway.Client) -> None:
        for order in _drained(self._orders):
            if isinstance(order, Mass):
                client.put("packs", polygons={order.name: order.ring_m})
                self._told.put(order.name)
            else:
                client.drop("packs", [order])

    def _show(self, client: byway.Client, shown: dict[str, Claim]) -> None:
        for unit, claim in self._claims.items():
            if shown.get(unit) is not claim:
                outlines = {f"ground-{k}": ring for k, ring in enumerate(told_outlines(claim))}
                client.replace_layer(layer_of(unit), polygons=outlines, outlines_only=True)
                shown[unit] = claim


def _drained(found: "queue.SimpleQueue[Any]") -> Iterable[Any]:
    while True:
        try:
            yield found.get_nowait()
        except queue.Empty:
            return


def _polygons(masses: Iterable[Mass]) -> dict[str, Any]:
    return {mass.name: mass.ring_m for mass in masses if len(mass.ring_m) > 1}


def _discs(masses: Iterable[Mass]) -> dict[str, tuple[float, float, float]]:
    return {
        mass.name: (float(mass.ring_m[0, 0]), float(mass.ring_m[0, 1]), mass.radius_m)
        for mass in masses
        if len(mass.ring_m) == 1
    }
