"""Questions to a daemon, and its replies."""

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

from byway import limits
from byway.message_base import (
    Blob,
    BlockedIs,
    Box,
    Budget,
    Count,
    Distance,
    Expiry,
    Fact,
    Flag,
    Name,
    Number,
    Point,
    Pose,
    Ratio,
    Real,
    Reply,
    Request,
    Seconds,
    Text,
)
from byway.packed import Column, Columns


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
