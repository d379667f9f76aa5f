"""
What the front wants done, as commands. The runtime carries them out, in order; nobody else does.

Rules for the runtime:

1. Carry out all effects of one `handle` in their order before the next event is handed in.
   None may block: what cannot be sent at once is dropped and reported (`Undeliverable`), a worker
   or surveyor that cannot be written to is reported lost.
2. An effect for a worker or surveyor that has gone meanwhile is dropped: its loss is on the way.
3. Instants are readings of the same clock that `handle` is given.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal, TypeAlias

from byway.frames import Header
from byway.messages import Message, Site
from byway.packed import Bytes, Column
from bywayd.core.events import Outcome, Peer
from bywayd.core.instants import Instant
from bywayd.core.kept import ClerkEffect

# -- to clients, sources, listeners ------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Reply:
    """Send `byway.frames.encode(header, message, packed)` to a peer, on the socket it is at."""

    peer: Peer
    header: Header
    message: Message
    packed: Bytes = b""


@dataclass(frozen=True, slots=True)
class Publish:
    """
    Send `byway.frames.encode(header, message, packed)` on the events socket, under a topic.

    The header's number is the place in the stream of this topic, from 1. The runtime keeps the
    last frames of a topic for new subscribers, and sends them again as they were.
    """

    topic: str
    header: Header
    message: Message
    packed: Bytes = b""


# -- to the workers ----------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Job:
    """Everything that a worker needs for one replan. Numbers are never used twice."""

    job: int
    #: The vehicle's `KnownVehicle.settings`. Opaque.
    vehicle: object
    start: tuple[float, float, float]
    goal: tuple[float, float, float]
    #: When the worker must have sent its `WorkerDone`. Time for the front is already set aside.
    deadline: Instant
    seed: int
    method: str
    left_out: tuple[str, ...]
    clearance_m: float | None
    start_speed_mps: float
    start_curvature_per_m: float
    gap_wanted: float
    #: The snapshot to plan on; stays in memory until the core has released it.
    revision: int
    #: Opaque.
    handle: object


@dataclass(frozen=True, slots=True)
class SpawnWorker:
    """Start a worker that will go by this number. It says `WorkerReady`, or is reported lost."""

    worker: int


@dataclass(frozen=True, slots=True)
class KillWorker:
    """Kill the process at once (SIGKILL), whatever its state. `WorkerLost` follows."""

    worker: int
    why: str


@dataclass(frozen=True, slots=True)
class PingWorker:
    """Ask an idle worker for a `WorkerAlive`."""

    worker: int


@dataclass(frozen=True, slots=True)
class StartJob:
    """Hand a job to an idle worker."""

    worker: int
    job: Job


@dataclass(frozen=True, slots=True)
class SteerJob:
    """
    Tell a worker to end its job now: "finish" with the best it has, "cancel" without interest.

    Answered by the `WorkerDone` of the job, which may have been on its way already. For a job
    that the worker is no longer at, it is to be ignored.
    """

    worker: int
    job: int
    how: Literal["finish", "cancel"]


@dataclass(frozen=True, slots=True)
class Recheck:
    """
    Ask an idle worker whether a route still stands on a newer snapshot: the planner's exact,
    independent check, nothing else. Answered by `WorkerChecked`, as soon as possible and by
    `job.deadline` at the latest.

    `job` is the replan as it would be planned now: same request, newest revision and handle, a
    number of its own. `outcome` is the one whose `route` and `path` are to be checked; it may
    have come from another worker.
    """

    worker: int
    job: Job
    outcome: Outcome


# -- to the surveyor ---------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class LayerFlags:
    """What a layer is, for as long as it exists."""

    unknown_blocks: bool = False
    outlines_only: bool = False
    #: What is acknowledged survives the daemon: the clerk's business, not the surveyor's.
    durable: bool = False
    #: For how long what a scan says holds; None: for ever.
    decay_s: float | None = None


@dataclass(frozen=True, slots=True)
class Change:
    """
    One change of one layer. The surveyor applies it whole or refuses it whole.

    A layer that does not exist yet is made first, with `settings` (whoever contradicts the
    settings of a layer that exists has been refused before). Then, by `what`:

    * "claim"     nothing more
    * "put"       the obstacles in `message` and `packed` are where they say
    * "replace"   the layer holds these and nothing else, no cells either
    * "patch"     the cells in `message` and `packed` overwrite what the layer had there
    * "scan"      the beams in `message` and `packed` free and fill cells, seen at `as_of`
    * "track"     the obstacles in `message` and `packed` move, from where they were at `as_of`
    * "drop"      the obstacles `ids`, moving or not, are gone; no error for those that never were

    All of them can be applied a second time without harm: a successor of a surveyor that died
    gets the batch again whose answer never came.
    """

    what: Literal["claim", "put", "replace", "patch", "scan", "track", "drop"]
    layer: str
    settings: LayerFlags
    #: For put, replace, patch, scan and track: as it came, its numbers not yet looked at.
    message: Message | None = None
    packed: Bytes = b""
    #: For drop.
    ids: tuple[str, ...] = ()
    #: For scan and track: when it was seen, its age taken off.
    as_of: Instant | None = None


@dataclass(frozen=True, slots=True)
class SpawnSurveyor:
    """
    Start a surveyor that will go by this number. It says `SurveyorReady`, or is reported lost.

    With `revision` None it starts with an empty site. Otherwise it goes on from that snapshot:
    `handle` is the current one, `in_use` the handles of every snapshot (this one included) whose
    memory must stay as it is until `ReleaseBefore`.
    """

    surveyor: int
    revision: int | None
    handle: object
    in_use: tuple[object, ...]


@dataclass(frozen=True, slots=True)
class KillSurveyor:
    """Kill the process at once (SIGKILL). `SurveyorLost` follows."""

    surveyor: int
    why: str


@dataclass(frozen=True, slots=True)
class PingSurveyor:
    """Ask a surveyor without work for a `SurveyorAlive`."""

    surveyor: int


@dataclass(frozen=True, slots=True)
class ApplyChanges:
    """
    Apply these in order, then publish. Answered by one `SnapshotReady` with the same number.

    One batch is out at a time; what comes in meanwhile makes the next one. A batch without
    changes carries tracks forward and lets scans be forgotten, as every batch does.
    """

    surveyor: int
    batch: int
    changes: tuple[Change, ...]
    #: For which moment tracks are carried forward: now.
    at: Instant


@dataclass(frozen=True, slots=True)
class ReleaseBefore:
    """No job reads a snapshot older than this revision any more: give back their memory."""

    surveyor: int
    revision: int


@dataclass(frozen=True, slots=True)
class DescribeSite:
    """
    Ask for the site as tables, for one client. Answered by `SiteDescribed` with the same ticket.

    A layer that the message names is known; one that the surveyor has no snapshot of is empty.
    """

    surveyor: int
    ticket: int
    message: Site


@dataclass(frozen=True, slots=True)
class WatchRoute:
    """
    Check this route on the current snapshot and on every one to come, until `Unwatch`. Answered
    by `GuardSeen` as soon as possible, and again whenever the answer is another.

    The route is in `columns` and `packed`: the seven columns of a route, metres of the site as
    clients see it. Numbers of guards are never used twice; a successor of a surveyor that died
    is told all that stand, under the same numbers.
    """

    surveyor: int
    guard: int
    #: Whose route it is, and how the outside calls the guard: for descriptions of the site.
    unit: str
    name: str
    #: The vehicle's `KnownVehicle.settings`. Opaque.
    vehicle: object
    columns: Mapping[str, Column]
    packed: Bytes
    left_out: tuple[str, ...]
    #: None: that of the vehicle.
    clearance_m: float | None
    #: Where the vehicle is, along the route from its start; what lies behind does not matter.
    progress_m: float


@dataclass(frozen=True, slots=True)
class MoveGuard:
    """
    The vehicle is somewhere else on its guarded route. No answer, unless the state is another.

    For a guard that is not watched it is to be ignored.
    """

    surveyor: int
    guard: int
    progress_m: float


@dataclass(frozen=True, slots=True)
class Unwatch:
    """Look after this route no more. For a guard that is not watched it is to be ignored."""

    surveyor: int
    guard: int


# -- to the runtime ----------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Log:
    """Write a line: `event` is a fixed dotted name, facts are keys with units."""

    level: Literal["debug", "info", "warning", "error"]
    event: str
    facts: Mapping[str, object]


@dataclass(frozen=True, slots=True)
class Wake:
    """Hand in a `Tick` at this instant, or as soon after as can be. Replaces the last `Wake`."""

    at: Instant


@dataclass(frozen=True, slots=True)
class Stop:
    """Everything open has been answered: flush the sockets and end. The last effect."""

    why: str
    #: The daemon cannot do what it is there for, and whoever started it is to be told.
    is_failure: bool = False


Effect: TypeAlias = (
    Reply
    | Publish
    | SpawnWorker
    | KillWorker
    | PingWorker
    | StartJob
    | SteerJob
    | Recheck
    | SpawnSurveyor
    | KillSurveyor
    | PingSurveyor
    | ApplyChanges
    | ReleaseBefore
    | DescribeSite
    | WatchRoute
    | MoveGuard
    | Unwatch
    | ClerkEffect
    | Log
    | Wake
    | Stop
)
