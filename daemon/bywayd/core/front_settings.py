"""What the front has to be told before it starts, and the bounds it keeps, each with its reason."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from byway import limits
from byway.messages import WhenStale
from bywayd.core.effects import LayerFlags
from bywayd.core.invariant import invariant


@dataclass(frozen=True, slots=True)
class KnownVehicle:
    """A vehicle of the settings. The core knows it by name only."""

    #: Its motion model, for `vehicles_are`.
    model: str
    #: What defines it, as in the settings, the model included. Opaque; msgpack can carry it.
    settings: Mapping[str, object]


@dataclass(frozen=True, slots=True)
class FrontSettings:
    """
    Fixed for the life of a front. The defaults are for one small machine and budgets from a few
    milliseconds to some seconds.
    """

    # -- what is served ------------------------------------------------------------------------

    #: Vehicles by name.
    vehicles: Mapping[str, KnownVehicle] = field(default_factory=dict)
    #: Layers that exist from the start.
    layers: Mapping[str, LayerFlags] = field(default_factory=dict)
    #: Of some of these: how often a change is expected, in seconds, and what if none comes.
    expected: Mapping[str, tuple[float, WhenStale]] = field(default_factory=dict)
    #: Where the other sockets are, for `welcome`.
    updates_endpoints: tuple[str, ...] = ()
    events_endpoints: tuple[str, ...] = ()
    #: The daemon's name and version, for `welcome`.
    software: str = ""

    # -- planning ------------------------------------------------------------------------------

    #: Worker processes.
    workers: int = 2
    #: The longest budget that is granted.
    budget_max_s: float = 60.0
    #: Set aside at the end of each budget for the last check, packing and sending ...
    margin_s: float = 0.002
    #: ... but never more than this share of a budget, so that short ones are not eaten up.
    margin_ratio_max: float = 0.2
    #: A waiting replan with less than this left is not worth starting any more.
    start_left_min_s: float = 0.0015
    #: A replan whose worker was lost or whose route was blocked is tried again if this is left.
    retry_left_min_s: float = 0.003
    #: How often a replan is tried: one that kills its workers must not go through the whole crew.
    attempts_max: int = 3
    #: The share of its budget that a replan may wait before running ones are cut short for it.
    patience_ratio: float = 0.25
    #: Waiting replans per worker before new ones are refused: a longer queue only makes answers
    #: late (at 1.5 times capacity a bounded or unbounded queue of 16 completes next to nothing).
    waiting_per_worker_max: int = 2

    # -- the crew ------------------------------------------------------------------------------

    #: A worker that has not ended its job this long after the job's deadline is killed. Nobody
    #: waits for that, the answer has left; and a niced worker on a busy host may well stand still
    #: for some tens of milliseconds.
    worker_grace_s: float = 0.2
    #: A busy worker that says nothing at all for this long is killed.
    worker_silence_s: float = 0.5
    #: Idle workers and the idle surveyor are asked for a sign of life this often.
    ping_every_s: float = 1.0
    #: A worker must be ready within this time of its start: forked warm it takes 20 ms, but the
    #: first may have to compile for two minutes.
    start_time_max_s: float = 300.0
    #: A surveyor that says nothing for this long while it owes an answer is killed.
    surveyor_silence_s: float = 5.0
    #: The first replacement starts at once; those of a crew member that is lost again and again
    #: before it has done anything useful wait, from this time, doubling, to the longest.
    backoff_first_s: float = 0.05
    backoff_max_s: float = 5.0

    # -- sources -------------------------------------------------------------------------------

    #: Sources known at a time; the silent ones are forgotten first.
    sources_max: int = 256
    #: Layers known at a time.
    layers_max: int = 256
    #: Changes of one source that may wait to become visible; it keeps the same bound itself.
    source_window: int = limits.unacknowledged_max
    #: Bytes of all changes that wait to become visible. The surveyor gets through more in a
    #: second, so this much waits only while it is being replaced.
    pending_bytes_max: int = 64 * 1024 * 1024
    #: One batch for the surveyor: a snapshot should not be long in the making.
    batch_changes_max: int = 256
    batch_bytes_max: int = 16 * 1024 * 1024
    #: A source that left a gap is told so once in this time, whatever it sends beyond the gap.
    resend_every_s: float = 0.05
    #: Tracks whose source does not say when they expire go after this time: a sensor that sees
    #: something tells of it several times a second.
    track_expires_s: float = 2.0
    #: Obstacles that may have an expiry at a time.
    expiries_max: int = 100_000

    # -- what is kept --------------------------------------------------------------------------

    #: Whether there is a file for durable layers.
    keeps: bool = False
    #: Where it is, for whoever is told that there is none, or that it is full.
    keep_setting: str = "[keep] file"
    #: How large it may grow: obstacles and patches beyond that are refused.
    keep_bytes_max: int = 256 * 1024 * 1024
    #: Patches that no newer one covers: all of them have to be laid again at the start.
    keep_patches_max: int = 4096
    #: Bytes of changes that are visible and wait for the disk.
    keep_pending_bytes_max: int = 64 * 1024 * 1024
    #: A clerk that says nothing for this long while it owes an answer is killed: a disk may take
    #: its time for one commit.
    clerk_silence_s: float = 20.0

    # -- guards --------------------------------------------------------------------------------

    #: Guards that may stand at a time: each is looked at on every revision.
    guards_max: int = 256
    #: ... and no more than so many bytes of their routes (a kilometre takes about 0.3 MB).
    guards_bytes_max: int = 64 * 1024 * 1024
    #: A unit that says nothing for this long loses its guard, unless it asked for another time.
    guard_silence_s: float = 5.0
    #: The budget of a replan that an alert brings about, for guards that came with a replan.
    guard_budget_s: float = 0.2
    #: Such a new route begins where the vehicle is this long after the end of that budget: time
    #: for the message to arrive, and for the vehicle to take it up.
    guard_margin_s: float = 0.1
    #: Who asks for a guard is answered when the surveyor has looked, or after this time.
    guard_check_s: float = 0.1
    #: Listeners hear of it when an obstacle that they know moves this far along the route.
    guard_news_m: float = 0.5

    # -- memory of answers ---------------------------------------------------------------------

    #: Answered requests that are remembered, so that a repeat gets the same answer again.
    answers_max: int = 1024
    #: ... and no more than so many bytes of them.
    answers_bytes_max: int = 16 * 1024 * 1024
    #: ... nor for longer than this.
    answers_kept_s: float = limits.answers_kept_s
    #: Units whose stream of better routes is numbered at a time.
    units_max: int = 4096
    #: Descriptions of the site that may be in the making.
    descriptions_max: int = 8

    #: Who asks before the daemon is ready is told to try again after this time.
    warming_retry_s: float = 0.5

    # -- ending and telling --------------------------------------------------------------------

    #: Everything open is answered this long after a stop was asked for.
    drain_max_s: float = 1.8
    #: Between two health records on `events`.
    health_every_s: float = 1.0

    def __post_init__(self) -> None:
        invariant(self.workers >= 1, "there is at least one worker")
        invariant(0 <= self.margin_ratio_max < 1, "the margin is a share of the budget")
        invariant(0 <= self.patience_ratio < 1, "patience is a share of the budget")
        invariant(self.waiting_per_worker_max >= 1, "at least one replan may wait for a worker")
        invariant(self.source_window >= 1, "a source may have a change under way")
        invariant(self.batch_changes_max >= 1, "a batch holds a change")
        invariant(self.answers_max >= 1, "an answer is remembered")
        invariant(self.guards_max >= 1, "a guard may stand")

    @property
    def waiting_max(self) -> int:
        """Replans that may wait for a worker."""
        return self.workers * self.waiting_per_worker_max
