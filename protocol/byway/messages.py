"""
Every message, one model each. SPEC.md is the authority; a test keeps the two together.

What a client sends refuses unknown fields: a misspelt limit must not be ignored. What a daemon
sends may carry fields that this code does not know yet, and texts (states, kinds of outcome)
that it does not know yet.

The models hold what is in the body of a message. What names and addresses it is the header
(see frames.py); long numbers lie in a third frame, of which the body has the `columns`.
"""

from typing import Annotated, Any, ClassVar, Final, Literal, TypeAlias

from pydantic import BaseModel, ConfigDict, Field, StringConstraints

from byway import limits
from byway.packed import Column, Columns

# -- values ---------------------------------------------------------------------------------

Name: TypeAlias = Annotated[str, StringConstraints(strict=True, pattern=limits.name_pattern)]
Text: TypeAlias = Annotated[str, StringConstraints(strict=True, max_length=limits.text_chars_max)]
Flag: TypeAlias = Annotated[bool, Field(strict=True)]
Count: TypeAlias = Annotated[int, Field(strict=True, ge=0, le=limits.number_max)]
Number: TypeAlias = Annotated[int, Field(strict=True, ge=1, le=limits.number_max)]
Real: TypeAlias = Annotated[float, Field(strict=True, allow_inf_nan=False)]
Metres: TypeAlias = Annotated[
    float,
    Field(
        strict=True, allow_inf_nan=False, ge=-limits.coordinate_m_max, le=limits.coordinate_m_max
    ),
]
Distance: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, ge=0.0, le=limits.coordinate_m_max)
]
Seconds: TypeAlias = Annotated[float, Field(strict=True, allow_inf_nan=False, ge=0.0)]
Heading: TypeAlias = Annotated[
    float,
    Field(strict=True, allow_inf_nan=False, ge=-limits.heading_rad_max, le=limits.heading_rad_max),
]
Budget: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, gt=0.0, le=limits.budget_s_max)
]
Expiry: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, gt=0.0, le=limits.expiry_s_max)
]
Age: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, ge=0.0, le=limits.age_s_max)
]
Range: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, gt=0.0, le=limits.range_m_max)
]
Ratio: TypeAlias = Annotated[float, Field(strict=True, allow_inf_nan=False, ge=0.0, le=1.0)]
Point: TypeAlias = tuple[Metres, Metres]
Pose: TypeAlias = tuple[Metres, Metres, Heading]
Box: TypeAlias = tuple[Metres, Metres, Metres, Metres]


Blob: TypeAlias = Annotated[bytes, Field(strict=True, max_length=limits.reply_bytes_max)]
#: A value of `facts`, `statistics` and `settings`.
Fact: TypeAlias = Any


class Message(BaseModel):
    """The body of one message; `kind` is how its header names it."""

    model_config = ConfigDict(frozen=True, extra="ignore", defer_build=True)
    kind: ClassVar[str] = ""


class Request(Message):
    """What a client sends. Unknown fields are refused."""

    model_config = ConfigDict(frozen=True, extra="forbid", defer_build=True)


class Change(Request):
    """What a source sends to the updates socket; its header has `source` and `number`."""

    layer: Name


class Reply(Message):
    """What a daemon sends. Unknown fields are passed over."""


# -- requests -------------------------------------------------------------------------------


class Hello(Request):
    """The first message of a conversation. Its shape is frozen for ever."""

    kind = "hello"
    versions: Annotated[list[Count], Field(min_length=1, max_length=16)]
    client: Name
    software: Text = ""


class Replan(Request):
    """Ask for a route."""

    kind = "replan"
    vehicle: Name
    unit: Name
    start: Pose
    goal: Pose
    budget_s: Budget
    method: Name = "auto"
    seed: Count | None = None
    leave_out: Annotated[list[Name], Field(max_length=limits.left_out_max)] = []
    clearance_m: Distance | None = None
    start_speed_mps: Real = 0.0
    start_curvature_per_m: Real = 0.0
    gap_wanted: Ratio = 0.0
    guard: Flag = False
    replan_on_alert: Flag = False
    silence_s: Expiry | None = None


class Cancel(Request):
    """End an open replan without an answer."""

    kind = "cancel"
    replan: Name | None = None
    unit: Name | None = None


class Finish(Request):
    """Have an open replan answered now with the best it has."""

    kind = "finish"
    replan: Name | None = None
    unit: Name | None = None


class Site(Request):
    """Ask for the obstacles."""

    kind = "site"
    layers: Annotated[list[Name], Field(max_length=limits.left_out_max)] | None = None
    box_m: Box | None = None
    cells: Flag = True
    guards: Flag = False


class Vehicles(Request):
    """Ask for the vehicles that the daemon knows."""

    kind = "vehicles"


class Health(Request):
    """Ask how the daemon is."""

    kind = "health"


class Guard(Request):
    """Have a route watched that a unit is going to drive; its columns are those of a route."""

    kind = "guard"
    vehicle: Name
    unit: Name
    leave_out: Annotated[list[Name], Field(max_length=limits.left_out_max)] = []
    clearance_m: Distance | None = None
    progress_m: Distance = 0.0
    silence_s: Expiry | None = None
    replan_on_alert: Flag = False
    budget_s: Budget = 0.2
    columns: Columns


class Progress(Request):
    """Tell where on its guarded route a unit is."""

    kind = "progress"
    unit: Name
    progress_m: Distance
    speed_mps: Real | None = None
    guard: Name | None = None


class Release(Request):
    """Have the route of a unit watched no more."""

    kind = "release"
    unit: Name
    guard: Name | None = None


# -- changes of the site ----------------------------------------------------------------------


#: What becomes of replans and of those who watch when a layer has not changed for too long.
WhenStale: TypeAlias = Literal["ignore", "report", "refuse"]


class Claim(Change):
    """Own a layer from now on; make it if there is none."""

    kind = "claim"
    lease_s: Expiry | None = None
    unknown_blocks: Flag | None = None
    outlines_only: Flag | None = None
    durable: Flag | None = None
    expected_period_s: Expiry | None = None
    when_stale: WhenStale | None = None
    decay_s: Expiry | None = None


class Put(Change):
    """Add obstacles, or move those whose ids are there already."""

    kind = "put"
    polygons: Count = 0
    discs: Count = 0
    boxes: Count = 0
    expires_in_s: Expiry | None = None
    columns: Columns


class ReplaceLayer(Change):
    """Claim a layer, forget all it holds, and put these obstacles: one change."""

    kind = "replace_layer"
    lease_s: Expiry | None = None
    unknown_blocks: Flag | None = None
    outlines_only: Flag | None = None
    durable: Flag | None = None
    expected_period_s: Expiry | None = None
    when_stale: WhenStale | None = None
    decay_s: Expiry | None = None
    polygons: Count = 0
    discs: Count = 0
    boxes: Count = 0
    expires_in_s: Expiry | None = None
    columns: Columns


class Drop(Change):
    """Take obstacles away; ids that are not there are passed over."""

    kind = "drop"
    ids: Annotated[list[Name], Field(max_length=limits.drop_ids_max)]


class Patch(Change):
    """Overwrite a rectangle of cells."""

    kind = "patch"
    corner_m: Point
    cell_m: Annotated[float, Field(strict=True, ge=limits.cell_m_min, le=limits.cell_m_max)]
    heading_rad: Heading = 0.0
    columns: Columns


class Scan(Change):
    """One sweep of a range sensor: frees the cells along its beams, fills those at their ends."""

    kind = "scan"
    origin: Pose
    range_m_max: Range
    range_m_min: Distance = 0.0
    age_s: Age = 0.0
    columns: Columns


class Track(Change):
    """Obstacles that move; those whose ids are there already are where this says."""

    kind = "track"
    polygons: Count = 0
    discs: Count = 0
    age_s: Age = 0.0
    expires_in_s: Expiry | None = None
    columns: Columns


#: Whatever a source may send.
AnyChange: TypeAlias = Claim | Put | ReplaceLayer | Drop | Patch | Scan | Track


# -- replies to requests ----------------------------------------------------------------------


class Welcome(Reply):
    """The reply to `hello`. The fields up to `software` are frozen for ever."""

    kind = "welcome"
    version: Number
    software: Text = ""
    state: Text
    updates_endpoints: list[Text]
    events_endpoints: list[Text]
    vehicles: list[Text]
    revision: Count
    wall_s: Real
    limits: dict[str, Real] = {}


class Accepted(Reply):
    """A replan was taken in; exactly one `answer` or `error` follows."""

    kind = "accepted"
    unit: Text
    budget_s: Seconds
    revision: Count


class AnswerMessage(Reply):
    """The final answer to a replan; the outcome is as the worker wrote it."""

    kind = "answer"
    unit: Text
    revision: Count
    first_s: Seconds | None = None
    waited_s: Seconds
    total_s: Seconds
    attempts: Count = 1
    guard: Text | None = None
    outcome: Blob


class Noted(Reply):
    """`cancel` or `finish` reached the replans named here."""

    kind = "noted"
    replans: list[Text]


class BlockedIs(BaseModel):
    """Where a guarded route is blocked, and by what."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    distance_m: Real
    time_s: Real
    at_m: Real
    x_m: Real
    y_m: Real
    heading_rad: Real
    kind: Text
    layer: Text = ""
    id: Text = ""
    depth_m: Real


class GuardIs(Reply):
    """The reply to `guard`, `progress` and `release`."""

    kind = "guard_is"
    unit: Text
    guard: Text
    state: Text
    revision: Count
    progress_m: Real
    blocked: BlockedIs | None = None


class ErrorMessage(Reply):
    """A request ends without what it asked for."""

    kind = "error"
    code: Text
    text: Text
    facts: dict[str, Fact] = {}
    retry_after_s: Seconds | None = None


class CellsIs(BaseModel):
    """Cells of one layer in `site_is`: the column of that name, row 0 at the lowest y."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    column: Text
    corner_m: Point
    cell_m: Real


class TrackIs(BaseModel):
    """One track in `site_is`, carried forward to the moment of the reply."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    layer: Text
    id: Text
    pose: tuple[Real, Real, Real]
    velocity_mps: tuple[Real, Real]
    turn_rate_radps: Real
    uncertainty_m: Real
    growth_mps: Real
    age_s: Real
    outline: Text
    sweep: list[Text] = []


class GuardedIs(BaseModel):
    """One guarded route in `site_is`: the column of that name has its poses."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    unit: Text
    progress_m: Real
    state: Text
    column: Text
    blocked: BlockedIs | None = None


class LayerIs(BaseModel):
    """One layer in `site_is`. Its obstacles lie in the columns after those of earlier layers."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    layer: Text
    unknown_blocks: Flag = False
    outlines_only: Flag = False
    durable: Flag = False
    decay_s: Real | None = None
    polygons: Count
    discs: Count
    cells: list[CellsIs] = []


class SiteIs(Reply):
    """The reply to `site`."""

    kind = "site_is"
    revision: Count
    origin_m: tuple[Real, Real] = (0.0, 0.0)
    limits_m: tuple[Real, Real, Real, Real] | None = None
    layers: list[LayerIs]
    tracks: list[TrackIs] = []
    guards: list[GuardedIs] = []
    columns: dict[str, Column]


class VehicleIs(BaseModel):
    """One vehicle in `vehicles_are`."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    vehicle: Text
    model: Text
    settings: dict[str, Fact] = {}


class VehiclesAre(Reply):
    """The reply to `vehicles`."""

    kind = "vehicles_are"
    vehicles: list[VehicleIs]


class LayerHealth(BaseModel):
    """One layer in `health_is`."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    source: Text | None = None
    age_s: Seconds | None = None
    lease_left_s: Seconds | None = None
    obstacles: Count = 0
    tracks: Count = 0
    durable: Flag = False
    expected_period_s: Seconds | None = None
    stale: Flag = False


class Histogram(BaseModel):
    """How often a time fell between two bounds: counts[i] is of (bounds_s[i-1], bounds_s[i]]."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    bounds_s: list[Real]
    counts: list[Count]
    sum_s: Real


class HealthIs(Reply):
    """The reply to `health`, and once a second an event."""

    kind = "health_is"
    state: Text
    revision: Count
    uptime_s: Seconds
    waiting: Count
    planning: Count
    workers: dict[str, Count] = {}
    layers: dict[str, LayerHealth] = {}
    counts: dict[str, Count] = {}
    histograms: dict[str, Histogram] = {}
    memory_bytes: dict[str, Count] = {}


# -- replies to changes -----------------------------------------------------------------------


class Acknowledged(Reply):
    """All changes of the source up to `number` are decided; those not refused are visible."""

    kind = "acknowledged"
    source: Text
    number: Number
    revision: Count


class Refused(Reply):
    """One change was refused and changed nothing."""

    kind = "refused"
    source: Text
    number: Number
    code: Text
    text: Text
    facts: dict[str, Fact] = {}
    retry_after_s: Seconds | None = None


class Resend(Reply):
    """The daemon has the changes of the source up to `have`, and needs what came after."""

    kind = "resend"
    source: Text
    reason: Text
    have: Count
    retry_after_s: Seconds | None = None


# -- events -----------------------------------------------------------------------------------


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


# -- inside an answer -------------------------------------------------------------------------


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


REQUESTS: Final = (
    *(Hello, Replan, Cancel, Finish, Site, Vehicles, Health),
    *(Guard, Progress, Release),
)
CHANGES: Final = (Claim, Put, Drop, ReplaceLayer, Patch, Scan, Track)
REQUEST_REPLIES: Final = (
    *(Welcome, Accepted, AnswerMessage, Noted, GuardIs, ErrorMessage),
    *(SiteIs, VehiclesAre, HealthIs),
)
CHANGE_REPLIES: Final = (Acknowledged, Refused, Resend, ErrorMessage)
EVENTS: Final = (
    *(BetterMessage, HealthIs, Listening),
    *(Alert, Cleared, GuardLost, Rerouted, RerouteFailed, LayerState),
)


def every_message() -> tuple[type[Message], ...]:
    """Return every kind of message once, in the order of the SPEC."""
    found: dict[str, type[Message]] = {}
    for group in (REQUESTS, CHANGES, REQUEST_REPLIES, CHANGE_REPLIES, EVENTS):
        for model in group:
            found[model.kind] = model
    return tuple(found.values())


def build_all() -> None:
    """
    Build the validators of all messages now, some 50 ms in all.

    Otherwise each is built when it is first used: a command that sends one question starts
    sooner, but a daemon does not want to do it while somebody waits.
    """
    models: tuple[type[BaseModel], ...] = (*every_message(), OutcomeIs)
    for model in models:
        model.model_rebuild()
