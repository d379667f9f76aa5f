"""The blocking client: what a program says to a daemon, call by call."""

from __future__ import annotations

import time
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from types import TracebackType
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from byway import frames, limits, messages, obstacles
from byway.answer import Answer, Better, better_of
from byway.ask import Ask, OnBetter
from byway.contact import Contact
from byway.conversation import Clock, Patience
from byway.ear import Heard
from byway.errors import BadValue, UnknownRequest
from byway.link import wait
from byway.packed import pack
from byway.site_view import SiteView, site_view

Pose = Sequence[float]


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
        patience = Patience(timeout_s, reconnect_s, repeat_s)
        self._contact: Final = Contact(endpoint, patience, client_id, clock)

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
        self._contact.close()

    # -- questions -----------------------------------------------------------------------------

    def hello(self) -> messages.Welcome:
        """Ask who the daemon is: state, vehicles, revision, limits."""
        return self._contact.hello()

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
        told = self._contact.ask(messages.Vehicles(), messages.VehiclesAre)
        return [Vehicle(each.vehicle, each.model, each.settings) for each in told.vehicles]

    def health(self) -> messages.HealthIs:
        """Return how the daemon is."""
        return self._contact.ask(messages.Health(), messages.HealthIs)

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
                "box_m": None if box_m is None else _floats("box_m", box_m),
                "cells": cells,
            },
        )
        return site_view(self._contact.ask_raw(asked))

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
        self._contact.enter()
        asked = frames.build(
            messages.Replan,
            {
                "vehicle": vehicle,
                "unit": self.client_id if unit is None else unit,
                "start": _floats("start", start),
                "goal": _floats("goal", goal),
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
        if on_better is not None:
            self._contact.listen_to(asked.unit)
        question = self._contact.begin(asked)
        return Ask(self._contact, question, asked.unit, on_better)

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
            self._contact.ask(asked, messages.Noted)
        except UnknownRequest:
            return False
        return True

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
        return self._contact.change(frames.build(messages.Claim, fields))

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
        return self._contact.change(
            frames.build(messages.ReplaceLayer, {**settings, **fields}), packed
        )

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
        return self._contact.change(frames.build(messages.Put, {**settings, **fields}), packed)

    def drop(self, layer: str, ids: Iterable[str]) -> int:
        """
        Take obstacles away; ids that are not there are passed over. Returns the revision.

        More than `limits.drop_ids_max` go in several changes.
        """
        names = list(ids)
        revision = 0
        for first in range(0, max(1, len(names)), limits.drop_ids_max):
            some = names[first : first + limits.drop_ids_max]
            revision = self._contact.change(
                frames.build(messages.Drop, {"layer": layer, "ids": some})
            )
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
            "corner_m": _floats("corner_m", corner_m),
            "cell_m": cell_m,
            "columns": columns,
        }
        return self._contact.change(frames.build(messages.Patch, fields), packed)

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
        contact = self._contact
        contact.enter()
        contact.meet()
        ear = contact.new_ear(tuple(topics))
        end_s = float("inf") if timeout_s is None else contact.clock() + timeout_s
        down_since_s: float | None = None
        try:
            while contact.clock() < end_s:
                ear.look()
                while (heard := ear.next()) is not None:
                    yield _event(heard)
                    contact.enter()
                down_since_s = contact.check_ear(ear, down_since_s)
                # Looked at now and then: a connection that is not there makes no noise.
                wait([(ear.link, False)], min(end_s, contact.clock() + 0.1), contact.clock)
        finally:
            contact.close_ear(ear)


def _event(heard: Heard) -> Event:
    header, message = heard.received.header, heard.received.message
    content = message if isinstance(message, messages.HealthIs) else better_of(heard.received)
    return Event(heard.topic, header.epoch, header.number, heard.missed, content)


def _floats(field: str, values: Iterable[float]) -> list[float]:
    """Return plain floats, of numpy's or other numbers. Raises BadValue."""
    try:
        return [float(value) for value in values]
    except (TypeError, ValueError) as fault:
        raise BadValue(f"{field} must be numbers, not {values!r:.80}", {"field": field}) from fault
