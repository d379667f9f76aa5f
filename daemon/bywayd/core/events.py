"""
What can happen to the front, in the past tense. The runtime makes these; nobody else does.

Three kinds of origin:

* clients and sources, through the two ROUTER sockets (`Received`, `Unreadable`, `Undeliverable`),
* the crew, through the socket pairs and pidfds (`Worker...`, `Surveyor...`, `SnapshotReady`,
  `GuardSeen`, `SiteDescribed`; those of the clerk are in `kept`),
* the runtime itself (`Started`, `Tick`, `Vitals`, `StopAsked`).

Rules for the runtime:

1. One call of `Front.handle(event, now)` an event, in order of arrival for each origin; `now`
   never goes back. Budgets are measured from the `now` of the `Received`, so read the clock when
   the frames come off the socket.
2. `worker` and `surveyor` are the numbers that `SpawnWorker` and `SpawnSurveyor` gave. A number
   is never used twice. `WorkerLost` / `SurveyorLost` is the last event with that number: read
   and hand over what its pipe still holds first, then report the loss, once, whatever the cause
   (died, killed by us, could not be started, its pipe closed or spoke nonsense).
3. Values marked *opaque* pass through the core untouched: it neither reads nor copies them.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal, TypeAlias

from byway import frames
from byway.errors import SenderFault
from byway.messages import ErrorMessage, SiteIs
from byway.packed import Bytes
from bywayd.core.kept import ClerkEvent
from bywayd.core.rights import Rights

#: What planning came to. Names as in the protocol; an outcome is never an error.
OutcomeKind: TypeAlias = Literal[
    "route", "start_blocked", "goal_blocked", "start_too_fast", "no_route", "not_found"
]

#: What a guarded route can be blocked by.
BlockKind: TypeAlias = Literal["polygon", "disc", "cell", "limits", "track"]

#: Facts for a program beside a sentence for a person.
Facts: TypeAlias = Mapping[str, object]


@dataclass(frozen=True, slots=True)
class Peer:
    """Where a message came from and where its reply goes: a socket and a ROUTER identity."""

    channel: Literal["requests", "updates"]
    identity: bytes
    #: What the owner of its key may do; None: no keys are in use, and everybody may do everything.
    rights: Rights | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Outcome:
    """
    What a worker found. The core reads kind and cost; the rest is opaque and goes to the asker.

    `body` and `packed` are what `answer` and `better` take: a `byway.messages.OutcomeIs` as
    msgpack, and the frame with its columns. `path` is whatever a worker needs beside them to
    check this route again; it comes back in `Recheck`, perhaps in another worker.
    """

    kind: OutcomeKind
    #: inf when there is no route.
    cost: float
    body: bytes
    packed: Bytes = b""
    path: object = None


@dataclass(frozen=True, slots=True)
class Refusal:
    """One change of a batch that the surveyor would not take, by its place in the batch."""

    index: int
    #: A code of the protocol's closed list of errors.
    code: str
    #: A sentence for a person, with the offending value.
    text: str
    facts: Facts


@dataclass(frozen=True, slots=True)
class Block:
    """
    The first place of a guarded route, ahead of its vehicle, where the body meets something.

    In metres of the site as clients see it (origin included), like the route it is about.
    """

    #: Along the route, from its start.
    at_m: float
    #: The route's own time there.
    t_s: float
    #: The pose of the vehicle there.
    x_m: float
    y_m: float
    heading_rad: float
    kind: BlockKind
    #: What is in the way; empty if that cannot be said (cells, the limits of the site).
    layer: str
    id: str
    #: How deep the body, clearance included, would be in it.
    depth_m: float


# -- from clients and sources ------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Received:
    """A message came in, and the door `byway.frames.decode` let it through."""

    peer: Peer
    came: frames.Received


@dataclass(frozen=True, slots=True)
class Unreadable:
    """Frames came in that the door refused. The sender is told why, and it is counted."""

    peer: Peer
    fault: SenderFault


@dataclass(frozen=True, slots=True)
class Undeliverable:
    """A reply could not be handed to its peer (gone, or its queue is full). Counted only."""

    peer: Peer


# -- from the workers --------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class WorkerReady:
    """A worker has started, its kernels are warm, and it waits for its first job."""

    worker: int


@dataclass(frozen=True, slots=True)
class WorkerAlive:
    """
    A sign of life, nothing else.

    A worker says it at least every 100 ms while it is busy, and at once as the answer to
    `PingWorker`. Any other event of a worker counts as one too.
    """

    worker: int


@dataclass(frozen=True, slots=True)
class WorkerBetter:
    """A verified route, better than what this worker sent for this job before."""

    worker: int
    job: int
    outcome: Outcome


@dataclass(frozen=True, slots=True)
class WorkerDone:
    """
    A job has ended (by itself, by its deadline, by finish or cancel); the worker is idle.

    Carries the best outcome again, so that a lost `WorkerBetter` never matters. After a
    "cancel" the outcome is ignored and may be an empty `not_found`.
    """

    worker: int
    job: int
    outcome: Outcome


@dataclass(frozen=True, slots=True)
class WorkerFailed:
    """
    A job has ended without an outcome; the worker is idle and well.

    `code` is an error of the protocol: "bad_value" when the planner found the request senseless
    (the text says what), "internal" for an exception nobody expected.
    """

    worker: int
    job: int
    code: str
    text: str
    facts: Facts


@dataclass(frozen=True, slots=True)
class WorkerChecked:
    """The answer to `Recheck`: whether the route still stands. The worker is idle."""

    worker: int
    job: int
    good: bool
    #: What was found, when it is not good: a sentence for the log.
    text: str = ""


@dataclass(frozen=True, slots=True)
class WorkerLost:
    """A worker is gone. The last event with this number."""

    worker: int
    why: str


# -- from the surveyor -------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class SurveyorReady:
    """
    A surveyor has started and holds a site: an empty one with the layers of the settings
    declared, or the one it was given to recover.

    `revision` and `handle` name its current snapshot; for a successor the very one that
    `SpawnSurveyor` gave it.
    """

    surveyor: int
    revision: int
    #: Opaque: how workers attach to the snapshot.
    handle: object
    memory_bytes: int = 0
    #: As in `SnapshotReady`.
    next_in_s: float | None = None


@dataclass(frozen=True, slots=True)
class SurveyorAlive:
    """
    A sign of life, nothing else: the answer to `PingSurveyor`, and said at least every 500 ms
    while a long batch is being worked on.
    """

    surveyor: int


@dataclass(frozen=True, slots=True)
class SnapshotReady:
    """
    The answer to one `ApplyChanges`: its changes are in this snapshot, but for the refused ones.

    The revision is the same as before when nothing changed (all refused, all without effect).
    """

    surveyor: int
    batch: int
    revision: int
    #: Opaque.
    handle: object
    refusals: tuple[Refusal, ...] = ()
    memory_bytes: int = 0
    #: How many obstacles each layer has, for the health record; and how many of them move.
    obstacles: Mapping[str, int] = field(default_factory=dict)
    tracks: Mapping[str, int] = field(default_factory=dict)
    #: After what time the surveyor wants a batch, if only an empty one; None: no need.
    next_in_s: float | None = None


@dataclass(frozen=True, slots=True)
class GuardSeen:
    """
    What a guarded route comes to on a snapshot: said once after `WatchRoute`, and after that
    whenever it is another than was said last.

    Comes after the `SnapshotReady` of that revision. One about a guard that has been unwatched
    meanwhile is passed over.
    """

    surveyor: int
    guard: int
    #: Of the snapshot that was looked at.
    revision: int
    #: None: the route is free from where the vehicle was last said to be.
    blocked: Block | None
    #: Why the route cannot be watched at all: a sentence. The guard is given up then.
    fault: str = ""


@dataclass(frozen=True, slots=True)
class SiteDescribed:
    """The answer to one `DescribeSite`, or why there is none: goes to the asker as it is."""

    surveyor: int
    ticket: int
    message: SiteIs | ErrorMessage
    packed: Bytes = b""


@dataclass(frozen=True, slots=True)
class SurveyorLost:
    """The surveyor is gone. The last event with this number."""

    surveyor: int
    why: str


# -- from the runtime --------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Started:
    """The first event of all: effects can be carried out now. The crew is spawned."""

    #: The wall clock (seconds since 1970), for people and for clients that compare clocks.
    wall_s: float


@dataclass(frozen=True, slots=True)
class Tick:
    """Time has passed: the instant of the last `Wake` has come. Harmless at any other time."""


@dataclass(frozen=True, slots=True)
class Vitals:
    """
    What the runtime measured about itself, about once a second, for the health record.

    `facts` is opaque and appears among the counts of the record as it is (peers, replies and log
    lines dropped, the longest turn, ...): whole numbers by name, names with their unit.
    """

    facts: Mapping[str, int]
    #: The wall clock, read at the same moment.
    wall_s: float
    #: Resident bytes of each process, by name.
    memory_bytes: Mapping[str, int] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class StopAsked:
    """Somebody wants the daemon to end (SIGTERM): drain, then `Stop`."""

    why: str


Event: TypeAlias = (
    Received
    | Unreadable
    | Undeliverable
    | WorkerReady
    | WorkerAlive
    | WorkerBetter
    | WorkerDone
    | WorkerFailed
    | WorkerChecked
    | WorkerLost
    | SurveyorReady
    | SurveyorAlive
    | SnapshotReady
    | GuardSeen
    | SiteDescribed
    | SurveyorLost
    | ClerkEvent
    | Started
    | Tick
    | Vitals
    | StopAsked
)
