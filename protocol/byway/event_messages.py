"""What a daemon publishes, and the outcome that is inside of answers."""

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

from byway.message_base import Blob, BlockedIs, Count, Fact, Flag, Real, Reply, Seconds, Text
from byway.packed import Columns


class BetterMessage(Reply):
    """A better route for a replan that is still open; its header has the id of the replan."""

    kind = "better"
    unit: Text
    revision: Count
    elapsed_s: Seconds
    outcome: Blob


class Alert(Reply):
    """A guarded route is blocked ahead of its unit."""

    kind = "alert"
    unit: Text
    guard: Text
    revision: Count
    blocked: BlockedIs


class Cleared(Reply):
    """A guarded route that was blocked is free again."""

    kind = "cleared"
    unit: Text
    guard: Text
    revision: Count


class GuardLost(Reply):
    """A unit has said nothing for too long; its route is watched no more."""

    kind = "guard_lost"
    unit: Text
    guard: Text
    silent_s: Seconds
    text: Text = ""


class Rerouted(Reply):
    """A new route for a unit whose guarded one is blocked; it is guarded already."""

    kind = "rerouted"
    unit: Text
    guard: Text
    was: Text
    from_m: Real
    in_s: Seconds
    revision: Count
    outcome: Blob


class RerouteFailed(Reply):
    """No new route for a unit whose guarded one is blocked."""

    kind = "reroute_failed"
    unit: Text
    guard: Text
    reason: Text
    text: Text = ""


class LayerState(Reply):
    """A layer has become stale or fresh, or has lost its owner."""

    kind = "layer_state"
    layer: Text
    state: Text
    source: Text | None = None
    age_s: Seconds | None = None


class Listening(Reply):
    """A subscription to this topic has reached the daemon."""

    kind = "listening"
    topic: Text


class LegIs(BaseModel):
    """One stretch of a route without a change of direction."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    first: Count
    last: Count
    gear: Annotated[int, Field(strict=True, ge=-1, le=1)]
    length_m: Real


class BlockageIs(BaseModel):
    """One obstacle that the start or the goal overlaps."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    layer: Text
    id: Text
    depth_m: Real


class MovableIs(BaseModel):
    """One obstacle that would have to move: by its id, or "cells" at a place."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    layer: Text
    id: Text
    x_m: Real
    y_m: Real


class RemedyIs(BaseModel):
    """What would have to move for a disc to get through, and its way."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    movables: list[MovableIs]
    way_m: list[tuple[Real, Real]]
    disc_radius_m: Real
    proved: Flag = False


class OutcomeIs(BaseModel):
    """What a worker found: the `outcome` of `answer` and `better`, packed by msgpack again."""

    model_config = ConfigDict(frozen=True, extra="ignore", defer_build=True)
    kind: Text
    cost: Real | None = None
    cost_unit: Text = "m"
    bound: Real | None = None
    gap: Real
    seed: Count
    left_out: list[Text] = []
    blocked_by: list[BlockageIs] = []
    remedy: RemedyIs | None = None
    statistics: dict[str, Fact] = {}
    length_m: Real | None = None
    duration_s: Real | None = None
    legs: list[LegIs] = []
    columns: Columns = {}
