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
        seed: With which it can be computed again.
        left_out: Layers that were not counted.
        statistics: Numbers and texts by name, as the search tells them.
        revision: Of the site that the route was checked against.
        epoch: Of the daemon.
        unit: Whose route it is.
        replan: Id of the request.
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


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Answer(Found):
    """
    The final answer to a replan. All times from the arrival of the request at the daemon.

    Attributes:
        first_s: To the first verified route; None without one.
        waited_s: Until a worker took it.
        total_s: Until the answer left.
        attempts: Workers that it took; more than one if one was lost.
    """

    first_s: float | None
    waited_s: float
    total_s: float
    attempts: int


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


def answer_of(received: frames.Received) -> Answer:
    """Return what an `answer` says. Raises BadReply."""
    message = received.message
    if not isinstance(message, messages.AnswerMessage):
        raise BadReply(f"a {received.header.kind} where an answer was due")
    return Answer(
        **_found(received.header, message.unit, message.revision, message.outcome, received.packed),
        first_s=message.first_s,
        waited_s=message.waited_s,
        total_s=message.total_s,
        attempts=message.attempts,
    )


def better_of(received: frames.Received) -> Better:
    """Return what a `better` says. Raises BadReply."""
    message = received.message
    if not isinstance(message, messages.BetterMessage):
        raise BadReply(f"a {received.header.kind} where a better was due")
    return Better(
        **_found(received.header, message.unit, message.revision, message.outcome, received.packed),
        elapsed_s=message.elapsed_s,
        number=received.header.number,
    )


def _found(
    header: frames.Header, unit: str, revision: int, outcome: bytes, packed: Bytes
) -> dict[str, Any]:
    try:
        told = frames.decode_outcome(outcome, packed)
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
        "revision": revision,
        "epoch": header.epoch,
        "unit": unit,
        "replan": header.id,
    }


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
