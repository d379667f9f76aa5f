"""What the front has to be told before it starts, and the bounds it keeps, each with its reason."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from bywayd.core.instants import Duration
from bywayd.core.invariant import invariant


def _ms(milliseconds: float) -> Duration:
    return Duration.of_s(milliseconds / 1000)


@dataclass(frozen=True, slots=True)
class KnownLayer:
    """A layer that the settings declare, so that it exists before any source has claimed it."""

    unknown_blocks: bool = False
    outlines_only: bool = False


@dataclass(frozen=True, slots=True)
class FrontSettings:
    """
    Fixed for the life of a front. The defaults are for one small machine and budgets from a few
    milliseconds to some seconds.
    """

    # -- what is served -----------------------------------------------------------------------

    #: Vehicle definitions by name, as in the settings; opaque, they travel to workers and askers.
    vehicles: Mapping[str, Mapping[str, object]] = field(default_factory=dict)
    #: Layers that exist from the start.
    layers: Mapping[str, KnownLayer] = field(default_factory=dict)
    #: Where the sockets are, for `welcome`: "requests", "updates", "events" and so on.
    endpoints: Mapping[str, str] = field(default_factory=dict)
    #: The limits of the wire, for `welcome`; opaque.
    limits: Mapping[str, int | float] = field(default_factory=dict)
    #: The daemon's own version, for `welcome` and health.
    version: str = "0"

    # -- planning -----------------------------------------------------------------------------

    #: Worker processes.
    workers: int = 2
    #: The longest budget that is granted.
    budget_max: Duration = Duration.of_s(60)
    #: Set aside at the end of each budget for the last check, packing and sending ...
    margin: Duration = _ms(2)
    #: ... but never more than this share of a budget, so that short ones are not eaten up.
    margin_ratio_max: float = 0.2
    #: A waiting replan with less than this left is not worth starting any more.
    start_left_min: Duration = _ms(1.5)
    #: A replan whose worker was lost or whose route was blocked is tried again if this is left.
    retry_left_min: Duration = _ms(3)
    #: The share of its budget that a replan may wait before running ones are cut short for it.
    patience_ratio: float = 0.25
    #: Waiting replans per worker before new ones are refused: a longer queue only makes answers
    #: late (at 1.5 times capacity a bounded or unbounded queue of 16 completes next to nothing).
    waiting_per_worker_max: int = 2

    # -- the crew -----------------------------------------------------------------------------

    #: A worker that has not ended its job this long after the job's deadline is killed.
    worker_grace: Duration = _ms(50)
    #: A busy worker that says nothing at all for this long is killed.
    worker_silence: Duration = _ms(500)
    #: Idle workers and the idle surveyor are asked for a sign of life this often.
    ping_every: Duration = Duration.of_s(1)
    #: A worker must be ready within this time of its start: forked warm it takes 20 ms, but the
    #: first may have to compile for two minutes.
    start_time_max: Duration = Duration.of_s(300)
    #: A surveyor that says nothing for this long while it owes an answer is killed.
    surveyor_silence: Duration = Duration.of_s(5)
    #: The first replacement starts at once; those of a crew member that is lost again and again
    #: before it has done anything useful wait, from this time, doubling, to the longest.
    backoff_first: Duration = _ms(50)
    backoff_max: Duration = Duration.of_s(5)

    # -- sources ------------------------------------------------------------------------------

    #: Sources known at a time; the silent ones are forgotten first.
    sources_max: int = 256
    #: Layers known at a time.
    layers_max: int = 256
    #: Changes of one source that may wait to become visible.
    source_window: int = 256
    #: Changes of one batch for the surveyor: a snapshot should not be long in the making.
    batch_changes_max: int = 256
    #: Obstacles that may have an expiry at a time.
    expiries_max: int = 100_000

    # -- memory of answers --------------------------------------------------------------------

    #: Answered requests that are remembered, so that a repeat gets the same answer again.
    answers_max: int = 1024
    #: ... and no more than so many bytes of them.
    answers_bytes_max: int = 16 * 1024 * 1024
    #: Units whose stream of better routes is numbered at a time.
    units_max: int = 4096
    #: Descriptions of the site that may be in the making.
    descriptions_max: int = 8

    # -- ending and telling -------------------------------------------------------------------

    #: Everything open is answered this long after a stop was asked for.
    drain_max: Duration = _ms(1800)
    #: Between two health records on `events`.
    health_every: Duration = Duration.of_s(1)

    def __post_init__(self) -> None:
        invariant(self.workers >= 1, "there is at least one worker")
        invariant(0 <= self.margin_ratio_max < 1, "the margin is a share of the budget")
        invariant(0 <= self.patience_ratio < 1, "patience is a share of the budget")
        invariant(self.waiting_per_worker_max >= 1, "at least one replan may wait for a worker")
        invariant(self.source_window >= 1, "a source may have a change under way")
        invariant(self.batch_changes_max >= 1, "a batch holds a change")
        invariant(self.answers_max >= 1, "an answer is remembered")

    @property
    def waiting_max(self) -> int:
        """Replans that may wait for a worker."""
        return self.workers * self.waiting_per_worker_max
