"""
Who tells the daemon of the site: the yard's cameras, and the vehicle with the range sensor.

Each is a program of its own with its own client, here a thread. What the crane puts down is told
at once, the ground that vehicles claim when there is time, the fork truck as a track. Scans go into
a layer that forgets: what is not seen again does not stand there for ever.
"""

import queue
import threading
import time
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Any, Final, TypeAlias

import byway
from bywayd.yard.claims import Claim, told_outlines
from bywayd.yard.fork_truck import Moving
from bywayd.yard.scene import BUILDINGS, STACKS
from bywayd.yard.sensor import RANGE_M_MAX, RANGE_M_MIN, Scan
from bywayd.yard.shapes import Mass, discs_of, polygons_of

#: Makes a client for the program of this name.
Connect: TypeAlias = Callable[[str], byway.Client]

#: Who tells of the site, as its key is called.
SITE: Final = "yard"
#: What stands, what is stacked, what the crane puts down, what moves, and what the sensor sees.
LAYERS: Final = ("fixed", "stacks", "packs", "movers", "lidar")
SHOW_EVERY_S: Final = 0.2
#: A fork truck that is not seen any more is forgotten.
TRACK_EXPIRES_S: Final = 1.0
#: What the sensor has seen holds for so long; it sees it again, or it has gone.
DECAY_S: Final = 2.0
SCANS_EXPECTED_S: Final = 0.5


def layer_of(unit: str) -> str:
    """Return the layer that holds a unit's own outline; its own replans leave it out."""
    return f"unit.{unit}"


@dataclass(frozen=True)
class Change:
    """A change of the site: when it happened in the yard, and the revision that has it."""

    layer: str
    names: tuple[str, ...]
    at_s: float
    revision: int


class Cameras:
    """The thread that tells of everything but scans. Others only append to `orders`."""

    def __init__(self, connect: Connect, ending: threading.Event, faults: list[str]) -> None:
        self._connect = connect
        self._ending = ending
        self._faults = faults
        #: Something put down, the name of something taken away, something that moves; and when.
        self.orders: queue.SimpleQueue[tuple[Mass | str | Moving, float]] = queue.SimpleQueue()
        self.claims: Mapping[str, Claim] = {}
        #: Set when the daemon knows the yard, or cannot be told.
        self.begun = threading.Event()
        #: What was put down. Appended by this thread.
        self.changes: list[Change] = []

    def tell_for_ever(self) -> None:
        """Run until the end."""
        shown: dict[str, Claim] = {}
        try:
            with self._connect(SITE) as client:
                for layer, masses in zip(LAYERS, (BUILDINGS, STACKS, ()), strict=False):
                    client.replace_layer(
                        layer, polygons=polygons_of(masses), discs=discs_of(masses)
                    )
                self._show(client, shown)
                self.begun.set()
                show_s = 0.0
                while not self._ending.is_set():
                    wait_s = show_s - time.monotonic()
                    if wait_s > 0.0:
                        self._carry_out_an_order(client, wait_s)
                    else:
                        self._show(client, shown)
                        show_s = time.monotonic() + SHOW_EVERY_S
        except byway.BywayError as fault:
            self._faults.append(f"telling the daemon of the yard: {fault}")
            self.begun.set()

    def _carry_out_an_order(self, client: byway.Client, wait_s: float) -> None:
        try:
            order, at_s = self.orders.get(timeout=wait_s)
        except queue.Empty:
            return
        if isinstance(order, Mass):
            revision = client.put("packs", polygons={order.name: order.ring_m})
            self.changes.append(Change("packs", (order.name,), at_s, revision))
        elif isinstance(order, Moving):
            track = byway.Track(
                pose=order.pose,
                outline_m=order.outline_m,
                velocity_mps=order.velocity_mps,
                turn_rate_radps=order.turn_rate_radps,
                uncertainty_m=order.uncertainty_m,
                growth_mps=order.growth_mps,
            )
            age_s = time.monotonic() - at_s
            client.track("movers", {order.name: track}, age_s, TRACK_EXPIRES_S)
        else:
            client.drop("packs", [order])

    def _show(self, client: byway.Client, shown: dict[str, Claim]) -> None:
        for unit, claim in self.claims.items():
            if shown.get(unit) is not claim:
                outlines = {f"ground-{k}": ring for k, ring in enumerate(told_outlines(claim))}
                client.replace_layer(layer_of(unit), polygons=outlines, outlines_only=True)
                shown[unit] = claim


class SensorFeed:
    """The thread that passes scans on, by the key of the vehicle that has the sensor."""

    def __init__(
        self, connect: Connect, unit: str, ending: threading.Event, faults: list[str]
    ) -> None:
        self._connect = connect
        self._unit = unit
        self._ending = ending
        self._faults = faults
        self._scans: queue.SimpleQueue[tuple[Scan, tuple[str, ...], float]] = queue.SimpleQueue()
        #: Scans with something new in sight. Appended by this thread.
        self.changes: list[Change] = []
        self.sent = 0

    def take(self, scan: Scan, news: Iterable[Mass], at_s: float) -> None:
        """Take a scan; called by the world."""
        self._scans.put((scan, tuple(mass.name for mass in news), at_s))

    def tell_for_ever(self) -> None:
        """Run until the end."""
        try:
            with (
                self._connect(self._unit) as client,
                client.source(
                    LAYERS[4],
                    decay_s=DECAY_S,
                    expected_period_s=SCANS_EXPECTED_S,
                    when_stale="report",
                ) as layer,
            ):
                while not self._ending.is_set():
                    self._pass_on(layer)
        except byway.BywayError as fault:
            self._faults.append(f"telling the daemon of scans: {fault}")

    def _pass_on(self, layer: Any) -> None:
        try:
            scan, names, at_s = self._scans.get(timeout=0.2)
        except queue.Empty:
            return
        while not self._scans.empty():  # a newer one says more
            scan, names, at_s = self._scans.get()
        revision = layer.scan(
            scan.origin,
            scan.bearings_rad,
            scan.ranges_m,
            RANGE_M_MAX,
            RANGE_M_MIN,
            age_s=time.monotonic() - at_s,
        )
        self.sent += 1
        if names:
            self.changes.append(Change(layer.layer, names, at_s, revision))
