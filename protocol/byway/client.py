"""The blocking client: what a program says to a daemon, call by call."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from types import TracebackType
from typing import Any, Final, Unpack

from byway import asking, messages
from byway.answer import Answer, Found, Route
from byway.ask import Ask, OnBetter, begin, steer
from byway.asking import GuardOptions, Pose, ReplanOptions
from byway.changing import LayerSettings
from byway.client_changes import ClientChanges
from byway.contact import Contact
from byway.conversation import Clock, Patience
from byway.event import TOPICS, Event, event_of
from byway.keys import KeysFrom
from byway.layer_source import LayerSource, Tender
from byway.link import Result, Steps, run
from byway.site_view import SiteView, site_view
from byway.stream import Stream


@dataclass(frozen=True, slots=True)
class Vehicle:
    """A vehicle that the daemon knows: its name, its model, its settings by their names."""

    name: str
    model: str
    settings: Mapping[str, Any]


def vehicles_of(told: messages.VehiclesAre) -> list[Vehicle]:
    """Return what a daemon says of its vehicles."""
    return [Vehicle(each.vehicle, each.model, each.settings) for each in told.vehicles]


class Client(ClientChanges):
    """
    A conversation with one daemon.

    Use it as a context manager, from one thread: a second one, or a forked child, is refused
    with RuntimeError. It connects at its first call.

    Calls that change the site return after the daemon has acknowledged the change, with the
    revision that has it. The client keeps what it has put into its layers, and gives it again to
    a daemon that was started again, as soon as a call meets it. For a stream of changes, and for
    layers that must be given again at once, use `source`.

    Args:
        endpoint: The requests socket: "tcp://127.0.0.1:7461" or "ipc:///run/byway/requests".
        timeout_s: How long a call waits for its reply; a replan waits its budget longer.
        reconnect_s: How long a call waits for a connection before it raises DaemonLost.
        repeat_s: After what silence a message is sent again; doubles each time.
        client_id: A name for logs, and the unit of replans that name none; drawn if left out.
        keys: The file that `byway keys` made for this client, for a daemon that uses keys. Then
            nobody else is taken for that daemon, and nobody in between can read or change a word.
        clock: Seconds, for tests.

    Raises:
        BadValue: The key file is none, or others can read it.
    """

    def __init__(
        self,
        endpoint: str,
        *,
        timeout_s: float = 5.0,
        reconnect_s: float = 1.0,
        repeat_s: float = 1.0,
        client_id: str | None = None,
        keys: KeysFrom | None = None,
        clock: Clock = time.monotonic,
    ) -> None:
        patience = Patience(timeout_s, reconnect_s, repeat_s)
        self._contact = Contact(endpoint, patience, client_id, clock, keys)
        #: Held by whoever lets the sockets work: a call, or the tender between calls.
        self._working: Final = threading.RLock()
        self._tender: Final = Tender(self._contact, self._working)

    def __enter__(self) -> Client:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Close all sockets. What the daemon has not acknowledged is forgotten here."""
        if not self._contact.is_closed:
            self._contact.enter()
            self._tender.end()
            self._contact.close()

    def _run(self, steps: Steps[Result]) -> Result:
        with self._working:
            return run(steps, self._contact.clock)

    # -- questions -----------------------------------------------------------------------------

    def hello(self) -> messages.Welcome:
        """Ask who the daemon is: state, vehicles, revision, limits."""
        return self._run(self._contact.hello())

    @property
    def client_id(self) -> str:
        """The name of the client: in logs, and the unit of replans that name none."""
        return self._contact.client_id

    @property
    def epoch(self) -> str:
        """Which life of the daemon the client talks to; empty before the first call."""
        return self._contact.epoch

    @property
    def clock_offset_s(self) -> float | None:
        """The daemon's wall clock less ours at the last hello, in seconds; for logs only."""
        return self._contact.clock_offset_s

    def vehicles(self) -> list[Vehicle]:
        """Return the vehicles that the daemon knows."""
        return vehicles_of(self._run(self._contact.ask(messages.Vehicles(), messages.VehiclesAre)))

    def health(self) -> messages.HealthIs:
        """Return how the daemon is."""
        return self._run(self._contact.ask(messages.Health(), messages.HealthIs))

    def site(
        self,
        layers: Iterable[str] | None = None,
        *,
        box_m: Sequence[float] | None = None,
        cells: bool = True,
        guards: bool = False,
    ) -> SiteView:
        """
        Return what the daemon knows of obstacles.

        Args:
            layers: Only these; all if left out.
            box_m: x_min, y_min, x_max, y_max: only what touches it.
            cells: False leaves the cells out.
            guards: True tells guarded routes as well.

        Raises:
            UnknownLayer; TooLarge: it does not fit into one message.
        """
        asked = asking.site(layers, box_m, cells, guards)
        return site_view(self._run(self._contact.ask_raw(asked)))

    # -- replans -------------------------------------------------------------------------------

    def replan(
        self,
        vehicle: str,
        start: Pose,
        goal: Pose,
        budget_s: float,
        *,
        unit: str | None = None,
        on_better: OnBetter | None = None,
        **options: Unpack[ReplanOptions],
    ) -> Answer:
        """
        Ask for a route and wait for the final answer.

        Args:
            vehicle: A vehicle type of the daemon.
            start, goal: x_m, y_m, heading_rad, in metres of the site and radians.
            budget_s: From the arrival of the request at the daemon; the answer leaves before.
            unit: The individual vehicle; a newer replan of a unit supersedes an older one.
            on_better: Called with every better route, in order, never after the return.
            options: method, seed, leave_out, clearance_m, start_speed_mps,
                start_curvature_per_m, gap_wanted, guard, replan_on_alert, silence_s: see
                `ReplanOptions`.

        Raises:
            SenderFault: The request cannot be served as it is.
            Withdrawn: It was cancelled, or superseded by another replan of the unit.
            Unavailable: Not now; `retry_after_s` says when, if that is known. NewEpoch: the
                daemon was started again; decide whether its site is complete, then ask again.
            LinkFault: No connection, or no reply in time.
        """
        ask = self.start_replan(
            vehicle, start, goal, budget_s, unit=unit, on_better=on_better, **options
        )
        return ask.wait()

    def start_replan(
        self,
        vehicle: str,
        start: Pose,
        goal: Pose,
        budget_s: float,
        *,
        unit: str | None = None,
        on_better: OnBetter | None = None,
        **options: Unpack[ReplanOptions],
    ) -> Ask:
        """Ask for a route and return at once; see `replan` for what it takes and raises."""
        self._contact.enter()
        unit = self.client_id if unit is None else unit
        asked = asking.replan(vehicle, start, goal, budget_s, unit, options)
        return Ask(self._run(begin(self._contact, asked, on_better)), self._run)

    def cancel(self, unit: str | None = None, *, replan: str | None = None) -> bool:
        """
        End open replans without an answer.

        Args:
            unit: All of this unit; of the client's own if nothing is named.
            replan: The one with this id.

        Returns:
            Whether there was one. An answer may be on its way already.
        """
        asked = asking.steer(messages.Cancel, unit, replan, self.client_id)
        return self._run(steer(self._contact, asked))

    def finish(self, unit: str | None = None, *, replan: str | None = None) -> bool:
        """Have open replans answered now with the best there is; otherwise as `cancel`."""
        asked = asking.steer(messages.Finish, unit, replan, self.client_id)
        return self._run(steer(self._contact, asked))

    # -- guards --------------------------------------------------------------------------------

    def guard(self, found: Found | Route, **options: Unpack[GuardOptions]) -> messages.GuardIs:
        """
        Have a route watched that a unit is going to drive.

        At every revision the daemon checks what of it is ahead of the unit; `listen` to "guard"
        hears of it. A new guard of a unit takes the place of its old one.

        Args:
            found: The answer to a replan of this client, which knows all that is needed; or a
                route, with the vehicle that drives it.
            options: vehicle, unit, leave_out, clearance_m, progress_m, silence_s,
                replan_on_alert, budget_s: see `GuardOptions`.

        Raises:
            BadValue: There is no route, or nobody knows the vehicle that drives it.
            BadGeometry: The rows of the route do not meet.
            Unavailable, LinkFault: As `replan`.
        """
        asked, packed = asking.guard(found, self.client_id, options)
        return self._run(self._contact.ask(asked, messages.GuardIs, packed))

    def progress(
        self,
        progress_m: float,
        speed_mps: float | None = None,
        *,
        unit: str | None = None,
        guard: str | None = None,
    ) -> messages.GuardIs:
        """
        Tell where on its guarded route a unit is.

        Args:
            progress_m: Along the route from its start, as driven.
            speed_mps: How fast it drives.
            unit: The client's own if left out.
            guard: Only if this one stands. After `rerouted`, the old one as long as the unit
                drives the old route.

        Raises:
            UnknownRequest: No guard stands for the unit, or another.
        """
        unit = self.client_id if unit is None else unit
        asked = asking.progress(unit, progress_m, speed_mps, guard)
        return self._run(self._contact.ask(asked, messages.GuardIs))

    def release(self, unit: str | None = None, *, guard: str | None = None) -> messages.GuardIs:
        """End the guard of a unit, of the client's own if left out. Raises UnknownRequest."""
        asked = asking.release(self.client_id if unit is None else unit, guard)
        return self._run(self._contact.ask(asked, messages.GuardIs))

    # -- layers that are looked after ----------------------------------------------------------

    def source(
        self,
        layer: str,
        *,
        window: int = 32,
        tends: bool = True,
        **settings: Unpack[LayerSettings],
    ) -> LayerSource:
        """
        Claim a layer and look after it: for a stream of changes, and for what must stand.

        Args:
            layer: Its name.
            window: How many changes may be undecided before `wait=False` has to wait.
            tends: A thread looks after the layer between calls: it renews the lease, and finds
                out within half a second that the daemon was started again. Without it, call
                `LayerSource.tend` often, and the lease ends when the program hangs.
            settings: As in `claim`.

        Raises:
            NotOwner: Another source has it under a lease.
            Conflict: It exists and is something else.
        """
        stream = Stream(self._contact, layer, window)
        self._run(stream.claim(settings))
        if tends:
            self._tender.begin()
        return LayerSource(stream, self._run)

    # -- events --------------------------------------------------------------------------------

    def listen(
        self, topics: Iterable[str] = TOPICS, timeout_s: float | None = None
    ) -> Iterator[Event]:
        """
        Give events as they are published.

        Args:
            topics: Beginnings of topics: "better", "guard.tug-3", "health", "layers".
            timeout_s: When to end; None: never.

        Raises:
            DaemonLost: If there is no connection for `reconnect_s`.
        """
        contact = self._contact
        contact.enter()
        end_s = float("inf") if timeout_s is None else contact.clock() + timeout_s
        ear = self._run(contact.new_ear(tuple(topics)))
        try:
            while (heard := self._run(contact.next_event(ear, end_s))) is not None:
                yield event_of(heard)
        finally:
            contact.close_ear(ear)
