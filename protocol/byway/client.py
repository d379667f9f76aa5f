"""The blocking client: what a program says to a daemon, call by call."""

from __future__ import annotations

import os
import secrets
import threading
import time
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from types import TracebackType
from typing import Any, Final, TypeVar

import numpy as np
import numpy.typing as npt
import zmq

from byway import frames, limits, messages, obstacles
from byway.answer import Answer, Better, answer_of, better_of
from byway.ask import Ask, OnBetter
from byway.conversation import Clock, Patience, Question, Requests, Updates
from byway.ear import Ear, Heard
from byway.endpoints import sibling
from byway.errors import (
    BadReply,
    BadValue,
    BywayError,
    DaemonLost,
    NewEpoch,
    TimedOut,
    UnknownRequest,
    from_code,
)
from byway.link import Context, Link, wait
from byway.packed import Bytes, pack
from byway.site_view import SiteView, site_view
from byway.source import Sent, Source

__version__: Final = "0.1.0"

Pose = Sequence[float]
Told = TypeVar("Told", bound=messages.Message)


@dataclass(frozen=True, slots=True)
class Vehicle:
    """A vehicle that the daemon knows: its name, its model, its settings by their names."""

    name: str
    model: str
    settings: Mapping[str, Any]


@dataclass(frozen=True, slots=True, eq=False)
class Event:
    """
    What `Client.listen` gives.

    Attributes:
        topic: "health", or "better." and the unit.
        epoch: Of the daemon.
        number: In the stream of the topic.
        missed: Events of the topic that were lost before this one.
        content: A better route, or a health record.
    """

    topic: str
    epoch: str
    number: int
    missed: int
    content: Better | messages.HealthIs


class Client:
    """
    A conversation with one daemon.

    Use it as a context manager, from one thread: a second one, or a forked child, is refused
    with RuntimeError. It connects at its first call.

    Calls that change the site return after the daemon has acknowledged the change, with the
    revision that has it. The client keeps what it has put into its layers, and gives it again to
    a daemon that was started again, as soon as a call meets it.

    Args:
        endpoint: The requests socket: "tcp://127.0.0.1:7461" or "ipc:///run/byway/requests".
        timeout_s: How long a call waits for its reply; a replan waits its budget longer.
        reconnect_s: How long a call waits for a connection before it raises DaemonLost.
        repeat_s: After what silence a message is sent again; doubles each time.
        client_id: A name for logs, and the unit of replans that name none; drawn if left out.
        clock: Seconds, for tests.
    """

    def __init__(
        self,
        endpoint: str,
        *,
        timeout_s: float = 5.0,
        reconnect_s: float = 1.0,
        repeat_s: float = 1.0,
        client_id: str | None = None,
        clock: Clock = time.monotonic,
    ) -> None:
        # -- fixed ---------------------------------------------------------------------------------
        self._endpoint: Final = endpoint
        self._patience: Final = Patience(timeout_s, reconnect_s, repeat_s)
        self._clock: Final = clock
        #: In every request id: ids of two clients must never be the same.
        self._token: Final = secrets.token_hex(8)
        self.client_id: Final = self._token if client_id is None else client_id
        # -- owned by the one thread that uses the client ------------------------------------------
        self._owner: tuple[int, int] | None = None
        self._is_closed = False
        self._context: Context | None = None
        self._requests: Requests | None = None
        self._updates: Updates | None = None
        self._source = Source(self._token)
        self._ear: Ear | None = None
        self._ears: list[Ear] = []
        self._welcome: messages.Welcome | None = None
        self._epoch = ""
        self._serial = 0
        #: The daemon's wall clock less ours, in seconds, from the last hello; for logs only.
        self.clock_offset_s: float | None = None

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
        if self._context is not None:
            self._enter()
            for conversation in (self._requests, self._updates):
                if conversation is not None:
                    conversation.close()
            for ear in self._ears:
                ear.link.close()
            self._context.destroy(linger=0)
            self._context = None
        self._is_closed = True

    # -- questions -----------------------------------------------------------------------------

    def hello(self) -> messages.Welcome:
        """Ask who the daemon is: state, epoch, vehicles, revision, limits."""
        self._enter()
        asked = messages.Hello(
            versions=[limits.spec_version],
            client=_name("client_id", self.client_id),
            software=f"byway {__version__}",
        )
        sent_s = time.time_ns() * 1e-9
        self._welcome = welcome = self._ask(asked, messages.Welcome)
        self.clock_offset_s = welcome.wall_s - 0.5 * (sent_s + time.time_ns() * 1e-9)
        return welcome

    @property
    def epoch(self) -> str:
        """Which life of the daemon the client talks to; empty before the first call."""
        return self._epoch

    def vehicles(self) -> list[Vehicle]:
        """Return the vehicles that the daemon knows."""
        told = self._ask(messages.Vehicles(), messages.VehiclesAre)
        return [Vehicle(each.vehicle, each.model, each.settings) for each in told.vehicles]

    def health(self) -> messages.HealthIs:
        """Return how the daemon is."""
        return self._ask(messages.Health(), messages.HealthIs)

    def site(
        self,
        layers: Iterable[str] | None = None,
        *,
        box_m: Sequence[float] | None = None,
        cells: bool = True,
    ) -> SiteView:
        """
        Return the obstacles and cells that the daemon has.

        Args:
            layers: Only these; all if left out.
            box_m: x_min, y_min, x_max, y_max: only what touches it.
            cells: False leaves the cells out.

        Raises:
            UnknownLayer; TooLarge: it does not fit into one message.
        """
        asked = frames.build(
            messages.Site,
            {
                "layers": None if layers is None else list(layers),
                "box_m": None if box_m is None else _floats(box_m),
                "cells": cells,
            },
        )
        return site_view(self._ask_raw(asked, messages.SiteIs))

    # -- replans -------------------------------------------------------------------------------

    def replan(
        self,
        vehicle: str,
        start: Pose,
        goal: Pose,
        budget_s: float,
        *,
        unit: str | None = None,
        method: str = "auto",
        seed: int | None = None,
        leave_out: Iterable[str] = (),
        clearance_m: float | None = None,
        start_speed_mps: float = 0.0,
        start_curvature_per_m: float = 0.0,
        gap_wanted: float = 0.0,
        on_better: OnBetter | None = None,
    ) -> Answer:
        """
        Ask for a route and wait for the final answer.

        Args:
            vehicle: A vehicle type of the daemon.
            start, goal: x_m, y_m, heading_rad, in metres of the site and radians.
            budget_s: From the arrival of the request at the daemon; the answer leaves before.
            unit: The individual vehicle; a newer replan of a unit supersedes an older one.
            method: "auto" or the name of a search method.
            seed: The daemon draws one if left out.
            leave_out: Layers of outlines that do not count, such as that of the unit itself.
            clearance_m: Instead of the vehicle's own.
            start_speed_mps, start_curvature_per_m: How the vehicle moves at the start; signed.
            gap_wanted: 0 to 1; a route with this gap is answered at once.
            on_better: Called with every better route, in order, never after the return.

        Raises:
            SenderFault: The request cannot be served as it is.
            Withdrawn: It was cancelled, or superseded by another replan of the unit.
            Unavailable: Not now; `retry_after_s` says when, if that is known. NewEpoch: the
                daemon was started again; decide whether its site is complete, then ask again.
            LinkFault: No connection, or no reply in time.
        """
        ask = self.start_replan(
            vehicle,
            start,
            goal,
            budget_s,
            unit=unit,
            method=method,
            seed=seed,
            leave_out=leave_out,
            clearance_m=clearance_m,
            start_speed_mps=start_speed_mps,
            start_curvature_per_m=start_curvature_per_m,
            gap_wanted=gap_wanted,
            on_better=on_better,
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
        method: str = "auto",
        seed: int | None = None,
        leave_out: Iterable[str] = (),
        clearance_m: float | None = None,
        start_speed_mps: float = 0.0,
        start_curvature_per_m: float = 0.0,
        gap_wanted: float = 0.0,
        on_better: OnBetter | None = None,
    ) -> Ask:
        """Ask for a route and return at once; see `replan` for what it takes and raises."""
        self._enter()
        asked = frames.build(
            messages.Replan,
            {
                "vehicle": vehicle,
                "unit": self.client_id if unit is None else unit,
                "start": _floats(start),
                "goal": _floats(goal),
                "budget_s": budget_s,
                "method": method,
                "seed": None if seed is None else int(seed),
                "leave_out": list(leave_out),
                "clearance_m": clearance_m,
                "start_speed_mps": start_speed_mps,
                "start_curvature_per_m": start_curvature_per_m,
                "gap_wanted": gap_wanted,
            },
        )
        self._meet()
        if on_better is not None:
            self._listen_to(asked.unit)
        requests = self._talk()
        question = requests.ask(self._new_id(), asked, epoch=self._epoch, work_s=asked.budget_s)
        deadline_s = self._deadline_s(asked.budget_s)
        while not question.is_sent:
            self._turn(question, deadline_s)
        return Ask(self, question, asked.unit, deadline_s, on_better)

    def cancel(self, unit: str | None = None, *, replan: str | None = None) -> bool:
        """
        End open replans without an answer.

        Args:
            unit: All of this unit; of the client's own if nothing is named.
            replan: The one with this id.

        Returns:
            Whether there was one. An answer may be on its way already.
        """
        return self._steer(messages.Cancel, unit, replan)

    def finish(self, unit: str | None = None, *, replan: str | None = None) -> bool:
        """Have open replans answered now with the best there is; otherwise as `cancel`."""
        return self._steer(messages.Finish, unit, replan)

    def _steer(
        self,
        kind: type[messages.Cancel] | type[messages.Finish],
        unit: str | None,
        replan: str | None,
    ) -> bool:
        if unit is None and replan is None:
            unit = self.client_id
        asked = frames.build(kind, {"unit": unit, "replan": replan})
        if unit is not None and replan is not None:
            raise BadValue("name either the replan or the unit", {"field": "replan"})
        try:
            self._ask(asked, messages.Noted)
        except UnknownRequest:
            return False
        return True

    def _wait_for(self, ask: Ask, on_better: OnBetter | None) -> Answer:
        self._enter()
        if ask.answer is not None:
            return ask.answer
        if on_better is not None:
            self._listen_to(ask.unit)
        try:
            while True:
                if on_better is not None:
                    self._tell_better(ask, on_better)
                while ask.question.replies:
                    received = ask.question.replies.popleft()
                    if isinstance(received.message, messages.Accepted):
                        continue
                    self._raise_if_error(received)
                    ask.answer = answer_of(received)
                    return ask.answer
                self._turn(ask.question, ask.deadline_s)
        finally:
            self._talk().end(ask.question)

    def _tell_better(self, ask: Ask, on_better: OnBetter) -> None:
        if self._ear is None:
            return
        self._ear.look()
        while (heard := self._ear.next()) is not None:
            header, message = heard.received.header, heard.received.message
            if header.id == ask.id and isinstance(message, messages.BetterMessage):
                on_better(better_of(header, message, heard.received.packed))

    # -- changes of the site -------------------------------------------------------------------

    def claim(
        self,
        layer: str,
        *,
        lease_s: float | None = None,
        unknown_blocks: bool | None = None,
        outlines_only: bool | None = None,
    ) -> int:
        """
        Own a layer from now on, with what is in it; make it if there is none. Returns the revision.

        Args:
            layer: Its name.
            lease_s: Nobody else can have it until this client has been silent for so long.
            unknown_blocks: Unknown cells, and ground that was never patched, count as occupied.
            outlines_only: Obstacles only, no cells; replans may leave the layer out.

        Raises:
            NotOwner: Another source has it under a lease.
            Conflict: It exists and is something else.
        """
        fields = {
            "layer": layer,
            "lease_s": lease_s,
            "unknown_blocks": unknown_blocks,
            "outlines_only": outlines_only,
        }
        return self._change(frames.build(messages.Claim, fields))

    def replace_layer(
        self,
        layer: str,
        polygons: obstacles.Polygons | None = None,
        discs: obstacles.Discs | None = None,
        *,
        lease_s: float | None = None,
        unknown_blocks: bool | None = None,
        outlines_only: bool | None = None,
        expires_in_s: float | None = None,
    ) -> int:
        """
        Claim a layer, forget all it holds, and put these obstacles: one change.

        Args and errors: as `claim` and `put`. Returns the revision that has it.
        """
        fields, packed = obstacles.pack_shapes(obstacles.shapes(polygons, discs))
        settings = {
            "layer": layer,
            "lease_s": lease_s,
            "unknown_blocks": unknown_blocks,
            "outlines_only": outlines_only,
            "expires_in_s": expires_in_s,
        }
        return self._change(frames.build(messages.ReplaceLayer, {**settings, **fields}), packed)

    def put(
        self,
        layer: str,
        polygons: obstacles.Polygons | None = None,
        discs: obstacles.Discs | None = None,
        expires_in_s: float | None = None,
    ) -> int:
        """
        Add obstacles, or move those whose ids are there. Returns the revision that has them.

        Args:
            layer: Claimed first if this client does not have it yet.
            polygons: {id: [(x, y), ...]}, metres, three points or more, not crossing itself.
            discs: {id: (x, y, radius)}, metres.
            expires_in_s: They go after this time.

        Raises:
            BadGeometry, OutsideLimits, TooLarge: Nothing was changed.
            NotOwner: The layer belongs to another source.
            LinkFault: The change stays in line and is sent again at the next call.
        """
        fields, packed = obstacles.pack_shapes(obstacles.shapes(polygons, discs))
        settings = {"layer": layer, "expires_in_s": expires_in_s}
        return self._change(frames.build(messages.Put, {**settings, **fields}), packed)

    def drop(self, layer: str, ids: Iterable[str]) -> int:
        """
        Take obstacles away; ids that are not there are passed over. Returns the revision.

        More than `limits.drop_ids_max` go in several changes.
        """
        names = list(ids)
        revision = 0
        for first in range(0, max(1, len(names)), limits.drop_ids_max):
            some = names[first : first + limits.drop_ids_max]
            revision = self._change(frames.build(messages.Drop, {"layer": layer, "ids": some}))
        return revision

    def patch(
        self,
        layer: str,
        corner_m: Sequence[float],
        cell_m: float,
        cells: npt.NDArray[Any],
    ) -> int:
        """
        Overwrite a rectangle of cells. Returns the revision that has it.

        Args:
            layer: Claimed first if this client does not have it yet.
            corner_m: x, y of the lower left corner of cells[0, 0].
            cell_m: Side of a cell.
            cells: uint8 (rows, columns): 0 free, 1 occupied, 2 unknown; row 0 at the lowest y.

        Raises:
            As `put`; BadValue: the cells are not uint8 in two dimensions.
        """
        given = np.asarray(cells)
        if given.dtype != np.uint8 or given.ndim != 2:
            raise BadValue(
                f"cells must be uint8 (rows, columns), not {given.dtype} in {given.ndim} axes",
                {"field": "cells"},
            )
        obstacles.check_packed_size("cells", given.size)
        columns, packed = pack({"cells": given})
        fields = {
            "layer": layer,
            "corner_m": _floats(corner_m),
            "cell_m": cell_m,
            "columns": columns,
        }
        return self._change(frames.build(messages.Patch, fields), packed)

    def _change(self, message: messages.Change, packed: Bytes = b"") -> int:
        self._enter()
        self._meet()
        deadline_s = self._deadline_s()
        source = self._source
        if len(source.line) >= limits.unacknowledged_max:
            # Nothing more is taken on before what is open is settled: the line is bounded.
            self._settle(list(source.line), deadline_s)
        made: list[Sent] = []
        takes_over = isinstance(message, messages.Claim | messages.ReplaceLayer)
        if not takes_over and not source.knows(message.layer):
            made.append(source.add(messages.Claim(layer=message.layer), b"", self._clock()))
        made.append(source.add(message, packed, self._clock()))
        self._settle(made, deadline_s)
        for sent in made:
            if sent.error is not None:
                raise sent.error
        self._raise_losses()
        return made[-1].revision

    def _settle(self, made: Sequence[Sent], deadline_s: float) -> None:
        """Wait until these changes are decided."""
        if self._updates is None:
            link = Link(self._zmq(), self._sibling("updates"))
            self._updates = Updates(link, self._patience, self._clock, self._source)
        while not all(sent.is_decided for sent in made):
            if self._clock() >= deadline_s:
                what = f"{len(self._source.line)} changes"
                raise self._late(what, is_connected=self._updates.is_connected)
            self._updates.turn(deadline_s)
        self._epoch = self._source.epoch

    def _raise_losses(self) -> None:
        if self._source.losses:
            loss, *_ = self._source.losses
            self._source.losses.clear()
            raise loss

    # -- events --------------------------------------------------------------------------------

    def listen(
        self, topics: Iterable[str] = ("better", "health"), timeout_s: float | None = None
    ) -> Iterator[Event]:
        """
        Give events as they are published.

        Args:
            topics: Beginnings of topics: "better", "better.tug-3", "health".
            timeout_s: When to end; None: never.

        Raises:
            DaemonLost: If there is no connection for `reconnect_s`.
        """
        self._enter()
        self._meet()
        wanted = tuple(topics)
        ear = self._new_ear(wanted)
        end_s = float("inf") if timeout_s is None else self._clock() + timeout_s
        try:
            down_since_s: float | None = None
            while (now_s := self._clock()) < end_s:
                self._enter()
                ear.look()
                while (heard := ear.next()) is not None:
                    yield self._event(heard)
                down_since_s = self._check_down(ear, down_since_s, now_s)
                # A timeout of infinity is no number that the poll understands.
                wait([(ear.link, False)], min(end_s, now_s + 0.5), self._clock)
        finally:
            self._ears.remove(ear)
            ear.link.close()

    def _check_down(self, ear: Ear, since_s: float | None, now_s: float) -> float | None:
        if ear.link.is_connected:
            return None
        if since_s is not None and now_s - since_s >= self._patience.reconnect_s:
            raise self._late("events", is_connected=False)
        return now_s if since_s is None else since_s

    def _event(self, heard: Heard) -> Event:
        header, message = heard.received.header, heard.received.message
        content: Better | messages.HealthIs
        if isinstance(message, messages.BetterMessage):
            content = better_of(header, message, heard.received.packed)
        elif isinstance(message, messages.HealthIs):
            content = message
        else:
            raise BadReply(f"a {header.kind} under the topic {heard.topic}")
        return Event(heard.topic, header.epoch, header.number, heard.missed, content)

    def _new_ear(self, topics: Sequence[str]) -> Ear:
        ear = Ear(Link(self._zmq(), self._sibling("events"), topics))
        self._ears.append(ear)
        return ear

    def _listen_to(self, unit: str) -> None:
        """Be sure that the next better route of the unit will be heard, if that can be."""
        topic = f"better.{unit}"
        if self._ear is None:
            self._ear = self._new_ear([])
        ear = self._ear
        ear.link.subscribe(topic)
        until_s = self._clock() + self._patience.listen_s
        while topic not in ear.confirmed and self._clock() < until_s:
            wait([(ear.link, False)], until_s, self._clock)
            ear.look()
            while ear.next() is not None:
                pass  # better routes of earlier replans

    # -- within --------------------------------------------------------------------------------

    def _enter(self) -> None:
        if self._is_closed:
            raise RuntimeError("the client is closed")
        me = (os.getpid(), threading.get_ident())
        if self._owner is None:
            self._owner = me
        elif self._owner != me:
            raise RuntimeError(
                "a client belongs to the thread that made its first call; make one for each thread"
            )

    def _zmq(self) -> Context:
        if self._context is None:
            self._context = zmq.Context()
        return self._context

    def _talk(self) -> Requests:
        if self._requests is None:
            link = Link(self._zmq(), self._endpoint)
            self._requests = Requests(link, self._patience, self._clock)
        return self._requests

    def _meet(self) -> messages.Welcome:
        return self._welcome or self.hello()

    def _sibling(self, socket: str) -> str:
        welcome = self._meet()
        offered = welcome.updates_endpoints if socket == "updates" else welcome.events_endpoints
        return sibling(self._endpoint, socket, offered)

    def _new_id(self) -> str:
        self._serial += 1
        return f"{self._token}-{self._serial}"

    def _deadline_s(self, work_s: float = 0.0) -> float:
        return self._clock() + work_s + self._patience.timeout_s

    def _ask(self, message: messages.Request, told: type[Told]) -> Told:
        """Send a request and return what is in its one reply."""
        found = self._ask_raw(message, told).message
        if not isinstance(found, told):
            raise BadReply(f"a {found.kind} in reply to {message.kind}")
        return found

    def _ask_raw(self, message: messages.Request, told: type[messages.Message]) -> frames.Received:
        self._enter()
        requests = self._talk()
        question = requests.ask(self._new_id(), message)
        deadline_s = self._deadline_s()
        try:
            while not question.replies:
                self._turn(question, deadline_s)
        finally:
            requests.end(question)
        received = question.replies.popleft()
        self._raise_if_error(received)
        self._meet_epoch(received.header.epoch)
        return received

    def _turn(self, question: Question, deadline_s: float) -> None:
        requests = self._talk()
        if self._clock() >= deadline_s:
            requests.end(question)
            raise self._late(f"request {question.id}", is_connected=requests.is_connected)
        requests.turn(deadline_s, [] if self._ear is None else [self._ear.link])

    def _raise_if_error(self, received: frames.Received) -> None:
        message = received.message
        if not isinstance(message, messages.ErrorMessage):
            return
        error = from_code(message.code, message.text, message.facts, message.retry_after_s)
        if isinstance(error, NewEpoch):
            self._meet_epoch(received.header.epoch)
        raise error

    def _meet_epoch(self, epoch: str) -> None:
        """Take note of the daemon's life; give a new one the layers that the old one had."""
        source = self._source
        if epoch == self._epoch:
            return
        self._epoch = epoch
        if source.epoch != epoch:
            source.begin_again(epoch, 0, self._clock())
        if source.line:
            self._settle([sent for sent in source.line if sent.restores], self._deadline_s())
        self._raise_losses()

    def _late(self, what: str, *, is_connected: bool) -> BywayError:
        facts = {"endpoint": self._endpoint}
        if is_connected:
            return TimedOut(f"{self._endpoint} has not replied to {what} in time", facts)
        return DaemonLost(f"no connection to {self._endpoint} for {what}", facts)


def _floats(values: Iterable[float]) -> list[float]:
    """Return plain floats, of numpy's or other numbers."""
    try:
        return [float(value) for value in values]
    except (TypeError, ValueError) as fault:
        raise BadValue(f"not a list of numbers: {values!r:.80}", {}) from fault


def _name(field: str, value: str) -> str:
    """Return a name. Raises BadValue, naming the argument that it came from."""
    try:
        return obstacles.check_id(value)
    except BadValue as fault:
        raise BadValue(fault.text, {"field": field}) from None
