"""
The life of one replan, from the moment it was taken in to its one final answer.

What may happen to it in which phase is a table; a pair that is missing is a defect. The docket
decides what is to be done (an `Act`) and keeps what it knows: how long it has, the best verified
route it holds, who is at it. Doing it (replies, jobs, kills) is for `dispatch`.

                         +------------------ lost / blocked, time left -----------------+
                         v                                                              |
    taken in --> waiting --begun--> planning --ended, newer revision--> checking --stood--> answered
                    |                |    \\--finish/shorten--> ending --ended--> (as planning)
                    +-- withdrawn, superseded, due: answered at once from every phase

Words of the table: what comes with "_early" leaves time to try again, with "_late" it does not.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Final, Literal, TypeAlias

from byway.frames import Header
from byway.messages import Replan
from bywayd.core.events import Outcome, Peer
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import Defect, invariant

Phase: TypeAlias = Literal["waiting", "planning", "ending", "checking", "answered"]

#: What may happen to a replan.
Move: TypeAlias = Literal[
    "begun",  # a worker was given its job
    "better",  # the worker found a better route
    "ended_fresh",  # the job has ended; what it found needs no second look
    "ended_stale",  # the job has ended with a route, and the site has changed since
    "failed",  # the planner could not make sense of it, or broke
    "stood",  # the route stands on the newest snapshot
    "fell_early",  # it does not
    "fell_late",
    "lost_early",  # the worker is gone
    "lost_late",
    "shorten",  # no more improving: others wait, or the site has changed
    "finish",  # the client wants the best now
    "cancel",  # the client does not want it any more
    "supersede",  # a newer one of the same unit takes its place
    "due",  # its time is over
    "stop",  # the daemon ends
]

#: What is to be done.
Act: TypeAlias = Literal[
    "nothing",
    "publish",  # tell listeners about the better route
    "steer",  # tell the worker to end
    "recheck",  # have the route checked on the newest snapshot
    "again",  # wait for a worker once more, before all others
    "answer",  # with what it has come to
    "answer_unserved",  # the same; that the daemon is overloaded if no worker ever was at it
    "answer_failed",  # with the error of the planner
    "answer_cancelled",
    "answer_superseded",
    "answer_stopping",  # with the best route, or that the daemon stops
]

#: Every legal move. A pair that is missing is a defect, not a case to ignore.
MOVES: Final[Mapping[tuple[Phase, Move], tuple[Phase, Act]]] = {
    ("waiting", "begun"): ("planning", "nothing"),
    ("waiting", "finish"): ("answered", "answer"),
    ("waiting", "cancel"): ("answered", "answer_cancelled"),
    ("waiting", "supersede"): ("answered", "answer_superseded"),
    ("waiting", "due"): ("answered", "answer_unserved"),
    ("waiting", "stop"): ("answered", "answer_stopping"),
    ("planning", "better"): ("planning", "publish"),
    ("planning", "ended_fresh"): ("answered", "answer"),
    ("planning", "ended_stale"): ("checking", "recheck"),
    ("planning", "failed"): ("answered", "answer_failed"),
    ("planning", "lost_early"): ("waiting", "again"),
    ("planning", "lost_late"): ("answered", "answer"),
    ("planning", "shorten"): ("ending", "steer"),
    ("planning", "finish"): ("ending", "steer"),
    ("planning", "cancel"): ("answered", "answer_cancelled"),
    ("planning", "due"): ("answered", "answer"),
    ("planning", "stop"): ("answered", "answer_stopping"),
    # A kernel cannot be interrupted, only the search between two slices: what it still finds
    # until it has heard is as good as any.
    ("ending", "better"): ("ending", "publish"),
    ("ending", "ended_fresh"): ("answered", "answer"),
    ("ending", "ended_stale"): ("checking", "recheck"),
    ("ending", "failed"): ("answered", "answer_failed"),
    # Somebody wants its worker, or its answer: it is not tried again.
    ("ending", "lost_early"): ("answered", "answer"),
    ("ending", "lost_late"): ("answered", "answer"),
    ("ending", "finish"): ("ending", "nothing"),
    ("ending", "cancel"): ("answered", "answer_cancelled"),
    ("ending", "due"): ("answered", "answer"),
    ("ending", "stop"): ("answered", "answer_stopping"),
    ("checking", "stood"): ("answered", "answer"),
    ("checking", "fell_early"): ("waiting", "again"),
    ("checking", "fell_late"): ("answered", "answer"),
    # The route is verified at the revision it was found on, and the answer says which that is.
    ("checking", "failed"): ("answered", "answer"),
    ("checking", "lost_early"): ("answered", "answer"),
    ("checking", "lost_late"): ("answered", "answer"),
    ("checking", "finish"): ("checking", "nothing"),
    ("checking", "cancel"): ("answered", "answer_cancelled"),
    ("checking", "due"): ("answered", "answer"),
    ("checking", "stop"): ("answered", "answer_stopping"),
}

#: Why a job was told to end before its time.
Hurry: TypeAlias = Literal["", "finish", "shorten", "newer", "changed"]

#: What is kept of a budget for a second search, in case the site changes under the first: so many
#: times what its first route took, and at most this share of the time that the job has.
_SECOND_SEARCH_FIRSTS: Final = 4.0
_SECOND_SEARCH_RATIO_MAX: Final = 0.4


@dataclass(frozen=True, slots=True)
class Held:
    """An outcome and the revision that it is true for."""

    outcome: Outcome
    revision: int


@dataclass(frozen=True, slots=True)
class Times:
    """The instants that bound one replan, in this order."""

    arrived: Instant
    #: Later than this it is not worth handing to a worker.
    start_by: Instant
    #: When its worker must be done.
    work_by: Instant
    #: When the front answers without it.
    answer_by: Instant


@dataclass(slots=True)
class Docket:
    """One replan. `move` is the only method that changes its phase."""

    # -- fixed ---------------------------------------------------------------------------------
    ask: Replan
    #: The body as it came, to tell a repeat from a conflict.
    body: bytes
    times: Times
    seed: int
    #: That of the request, for its replies.
    header: Header
    #: Tries that are granted: a job that kills its workers must not go through the whole crew.
    attempts_max: int
    #: What must be left for another try.
    retry_left_min: Duration
    # -- changed by the front only -------------------------------------------------------------
    #: Where the answer goes: whoever sent the request, or repeated it, last. None for a replan of
    #: our own.
    peer: Peer | None
    #: For a replan of our own: the number of the guard that wants a new route.
    guard: int | None = None
    phase: Phase = "waiting"
    #: The task under way, if a worker is at it, and that worker.
    task: int | None = None
    worker: int | None = None
    #: The best verified route so far.
    best: Held | None = None
    #: What the last job came to, when that is no route.
    verdict: Held | None = None
    #: When the first job began, and when the first route was there.
    begun_at: Instant | None = None
    first_at: Instant | None = None
    attempts: int = 0
    hurry: Hurry = ""
    #: From when on the job under way ends at once when the site has changed. Set with its first
    #: route; sooner, there is nothing yet to look at.
    looks_from: Instant | None = None
    #: What the planner made of it, when it failed: code, text, facts.
    failure: tuple[str, str, Mapping[str, object]] | None = None
    #: What happened, newest last, for error messages.
    story: deque[str] = field(default_factory=lambda: deque(maxlen=50))

    @property
    def id(self) -> str:
        """The id of the request."""
        return self.header.id

    @property
    def slot(self) -> str:
        """Whose turn it is: replans of one slot follow each other. A unit's guard has its own."""
        return self.ask.unit if self.guard is None else f"~{self.ask.unit}"

    def move(self, move: Move, now: Instant) -> Act:
        """Go where the table says, and return what is to be done."""
        row = MOVES.get((self.phase, move))
        if row is None:
            raise Defect(f"replan {self.id}: no move for {move} in {self.phase}", self.story)
        after, act = row
        self.story.append(f"{now.ns}: {self.phase} -> {after} ({move})")
        self.phase = after
        return act

    def hold(self, outcome: Outcome, revision: int, now: Instant) -> bool:
        """
        Keep a verified route if it is the better one; False if it is not.

        One found on a newer revision replaces an older one whatever it costs: the older may be
        blocked by now. So costs fall within a revision, and revisions never do.
        """
        invariant(outcome.kind == "route", "only routes are held", self.story)
        best = self.best
        if best is not None and revision == best.revision and outcome.cost >= best.outcome.cost:
            return False
        invariant(best is None or revision >= best.revision, "revisions rise", self.story)
        self.best = Held(outcome, revision)
        if self.first_at is None:
            self.first_at = now
        return True

    def ended(self, outcome: Outcome, revision: int, now: Instant) -> None:
        """Take in what a job has come to."""
        if outcome.kind == "route":
            self.hold(outcome, revision, now)
            return
        # A proof about a newer revision outweighs a route on an older one. On the same revision
        # the route is there, whatever the planner says; and not to have found one proves nothing.
        proves = outcome.kind != "not_found"
        if self.best is None or (proves and revision > self.best.revision):
            self.best = None
            self.verdict = Held(outcome, revision)

    def blocked(self) -> None:
        """Take note that the route held does not stand any more."""
        self.best = None
        self.verdict = None

    def has_another_try(self, now: Instant) -> bool:
        """Whether there is time, and reason, to plan once more."""
        return (
            self.attempts < self.attempts_max
            and self.hurry in ("", "shorten", "changed")
            and now < self.times.start_by
            and now.until(self.times.answer_by) >= self.retry_left_min
        )

    def begin(self, task: int, worker: int, now: Instant) -> None:
        """Take note that a worker was given the job."""
        self.move("begun", now)
        self.attempts += 1
        self.task, self.worker = task, worker
        self.verdict = None
        self.hurry = ""
        self.looks_from = None
        if self.begun_at is None:
            self.begun_at = now

    def expect_changes(self, now: Instant) -> None:
        """
        The job has its first route: decide from when on a changed site ends it.

        Improved to the end of its budget on ground that has changed meanwhile, a route that does
        not stand any more would leave no time for another; and the best one passes close by the
        very things that move.
        """
        if self.looks_from is not None or self.first_at is None or self.begun_at is None:
            return
        firsts = self.first_at.since(self.begun_at).times(_SECOND_SEARCH_FIRSTS)
        second = Duration(firsts.ns + self.retry_left_min.ns)
        left = now.until(self.times.work_by)
        self.looks_from = self.times.work_by - min(second, left.times(_SECOND_SEARCH_RATIO_MAX))

    def leave_worker(self) -> None:
        """Take note that no worker is at it any more."""
        self.task = self.worker = None

    def check(self) -> None:
        """Stop with a `Defect` if this cannot be."""
        at_work = self.phase in ("planning", "ending", "checking")
        invariant((self.task is not None) == at_work, "who is at work has a task", self.story)
        invariant((self.worker is not None) == at_work, "a task has a worker", self.story)
        invariant(
            self.phase != "checking" or self.best is not None, "a route is checked", self.story
        )
        invariant(
            (self.begun_at is not None) == (self.attempts > 0), "begun means tried", self.story
        )
        times = self.times
        invariant(
            times.arrived <= times.start_by <= times.work_by <= times.answer_by,
            "the instants of a replan are in order",
            self.story,
        )


def times_of(
    arrived: Instant,
    budget: Duration,
    margin: Duration,
    margin_ratio_max: float,
    start_left: Duration,
) -> Times:
    """
    Return how a budget is shared out.

    The margin is kept at its end: half of it for the worker's last words to arrive and perhaps
    be checked against a newer revision, half for the answer to leave.
    """
    margin = min(margin, budget.times(margin_ratio_max))
    work_by = arrived + budget - margin
    work = arrived.until(work_by)
    start_by = work_by - min(start_left, work.times(0.5))
    return Times(arrived, start_by, work_by, work_by + margin.times(0.5))
