"""What a caller sees of a route: answers, and the better routes on the way to them."""

import itertools
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from byway import frames, messages
from byway.errors import BadReply, SenderFault
from byway.packed import ROUTE_COLUMNS, Bytes, check_columns, read, route_columns

#: The columns of a route, in the order of the table.
ROUTE_TABLE: Final = np.dtype(list(ROUTE_COLUMNS))
_FLOATS: Final = tuple(name for name, dtype in ROUTE_COLUMNS if dtype == "<f8")


@dataclass(frozen=True, slots=True)
class Leg:
    """
    One stretch of a route without a change of direction.

    Attributes:
        first_row, last_row: Of the table; the last row of one leg is the first of the next.
        gear: 1 forward, -1 reverse.
        length_m: Along the path, not negative.
    """

    first_row: int
    last_row: int
    gear: int
    length_m: float


@dataclass(frozen=True, slots=True, eq=False)
class Route:
    """
    Timed poses from start to goal.

    Attributes:
        table: Structured array, read-only: t_s, x_m, y_m, heading_rad, curvature_per_m,
            speed_mps, gear. A row's curvature holds until the next row, so the motion between
            two rows is an arc. Metres of the site, radians.
        legs: In order.
        length_m: Along the path.
        duration_s: Of the last row.
    """

    table: npt.NDArray[np.void] = field(repr=False)
    legs: tuple[Leg, ...]
    length_m: float
    duration_s: float

    @property
    def direction_changes(self) -> int:
        """How often the vehicle stops to change its direction."""
        gears = [leg.gear for leg in self.legs]
        return sum(one != other for one, other in itertools.pairwise(gears))


@dataclass(frozen=True, slots=True)
class Blockage:
    """An obstacle that the start or goal overlaps, and how deep."""

    layer: str
    obstacle: str
    depth_m: float


@dataclass(frozen=True, slots=True)
class Movable:
    """An obstacle that would have to move: its id, or "cells", and a place of it."""

    layer: str
    obstacle: str
    x_m: float
    y_m: float


@dataclass(frozen=True, slots=True, eq=False)
class Remedy:
    """
    What would have to move for a disc to get through.

    Attributes:
        movables: A small set, not proved to be the smallest.
        way_m: (n, 2): the way of the disc.
        disc_radius_m: Its radius; the whole vehicle may need more room.
        proved: Whether there is no route without moving anything.
    """

    movables: tuple[Movable, ...]
    way_m: npt.NDArray[np.float64]
    disc_radius_m: float
    proved: bool


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Found:
    """
    What planning came to, now or in the end.

    Attributes:
        kind: "route", "start_blocked", "goal_blocked", "start_too_fast", "no_route", "not_found".
        route: None unless kind is "route".
        cost: In `cost_unit`; inf without a route.
        bound: No route costs less; inf if there is none.
        gap: (cost - bound) / cost, 1 without a route.
        blocked_by: For start_blocked and goal_blocked.
        remedy: What would have to move, for no_route and not_found, if there was time to look.
        seed: With which it can be computed again.
        left_out: Layers that were not counted.
        statistics: Numbers and texts by name, as the search tells them.
        revision: Of the site that the route was checked against.
        epoch: Of the daemon.
        unit: Whose route it is.
        replan: Id of the request.
        vehicle, clearance_m: As asked; empty and None where it was somebody else who asked.
    """

    kind: str
    route: Route | None
    cost: float
    cost_unit: str
    bound: float
    gap: float
    blocked_by: tuple[Blockage, ...]
    seed: int
    left_out: tuple[str, ...]
    statistics: Mapping[str, Any]
    revision: int
    epoch: str
    unit: str
    replan: str
    remedy: Remedy | None = None
    vehicle: str = ""
    clearance_m: float | None = None


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Answer(Found):
    """
    The final answer to a replan. All times from the arrival of the request at the daemon.

    Attributes:
        first_s: To the first verified route; None without one.
        waited_s: Until a worker took it.
        total_s: Until the answer left.
        attempts: Workers that it took; more than one if one was lost.
        guard: The guard that stands on the route, if one was asked for.
    """

    first_s: float | None
    waited_s: float
    total_s: float
    attempts: int
    guard: str | None = None


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Better(Found):
    """
    A better route for a replan that is still open.

    Attributes:
        elapsed_s: From the arrival of the request at the daemon.
        number: In the stream of this unit; a number that is missing was lost on the way.
    """

    elapsed_s: float
    number: int


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Rerouted(Found):
    """
    A new route for a unit whose guarded one is blocked; it is guarded already.

    Attributes:
        guard: Of the new route.
        was: The guard of the old one.
        from_m: Where on the old route the new one begins; negative before its start.
        in_s: When the unit is there, by the timing of the old route.
    """

    guard: str
    was: str
    from_m: float
    in_s: float


def answer_of(received: frames.Received, asked: messages.Replan | None = None) -> Answer:
    """Return what an `answer` to a replan says. Raises BadReply."""
    message = received.message
    if not isinstance(message, messages.AnswerMessage):
        raise BadReply(f"a {received.header.kind} where an answer was due")
    return Answer(
        **_found(received.header, message, received.packed),
        **_asked(asked),
        first_s=message.first_s,
        waited_s=message.waited_s,
        total_s=message.total_s,
        attempts=message.attempts,
        guard=message.guard,
    )


def _asked(asked: messages.Replan | None) -> dict[str, Any]:
    if asked is None:
        return {}
    return {"vehicle": asked.vehicle, "clearance_m": asked.clearance_m}


def better_of(received: frames.Received, asked: messages.Replan | None = None) -> Better:
    """Return what a `better` says. Raises BadReply."""
    message = received.message
    if not isinstance(message, messages.BetterMessage):
        raise BadReply(f"a {received.header.kind} where a better was due")
    return Better(
        **_found(received.header, message, received.packed),
        **_asked(asked),
        elapsed_s=message.elapsed_s,
        number=received.header.number,
    )


def rerouted_of(received: frames.Received) -> Rerouted:
    """Return what a `rerouted` says. Raises BadReply."""
    message = received.message
    if not isinstance(message, messages.Rerouted):
        raise BadReply(f"a {received.header.kind} where a rerouted was due")
    return Rerouted(
        **_found(received.header, message, received.packed),
        guard=message.guard,
        was=message.was,
        from_m=message.from_m,
        in_s=message.in_s,
    )


def _found(
    header: frames.Header,
    message: messages.AnswerMessage | messages.BetterMessage | messages.Rerouted,
    packed: Bytes,
) -> dict[str, Any]:
    try:
        told = frames.decode_outcome(message.outcome, packed)
        route = _route(told, packed) if told.kind == "route" else None
    except SenderFault as fault:
        raise BadReply(f"the outcome cannot be read: {fault.text}", fault.facts) from fault
    return {
        "kind": told.kind,
        "route": route,
        "cost": math.inf if told.cost is None else told.cost,
        "cost_unit": told.cost_unit,
        "bound": math.inf if told.bound is None else told.bound,
        "gap": told.gap,
        "blocked_by": tuple(
            Blockage(each.layer, each.id, each.depth_m) for each in told.blocked_by
        ),
        "seed": told.seed,
        "left_out": tuple(told.left_out),
        "statistics": told.statistics,
        "remedy": None if told.remedy is None else _remedy(told.remedy),
        "revision": message.revision,
        "epoch": header.epoch,
        "unit": message.unit,
        "replan": header.id,
    }


def _remedy(told: messages.RemedyIs) -> Remedy:
    return Remedy(
        tuple(Movable(each.layer, each.id, each.x_m, each.y_m) for each in told.movables),
        np.array(told.way_m, np.float64).reshape(-1, 2),
        told.disc_radius_m,
        told.proved,
    )


def _route(told: messages.OutcomeIs, packed: Bytes) -> Route:
    """Return the route of an outcome. Raises SenderFault."""
    row_count = told.columns["t_s"].shape[0] if "t_s" in told.columns else 0
    check_columns(told.columns, packed, route_columns(row_count))
    table = np.empty(row_count, ROUTE_TABLE)
    for name, column in told.columns.items():
        table[name] = read(column, packed)
    for name in _FLOATS:
        # A controller that follows NaN does something; better that it does not get to.
        if not np.isfinite(table[name]).all():
            raise BadReply(f"the route has a {name} that is not finite")
    if row_count == 0 or told.length_m is None or told.duration_s is None:
        raise BadReply("an outcome with a route has neither rows nor length nor duration")
    table.flags.writeable = False
    legs = tuple(Leg(leg.first, leg.last, leg.gear, leg.length_m) for leg in told.legs)
    return Route(table, legs, told.length_m, told.duration_s)
