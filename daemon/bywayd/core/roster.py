"""
Who of the crew is starting, idle, busy, or on the way out; who has been silent for too long.

One roster for the workers, one (of a single seat) for the surveyor. Each seat is held by one
member at a time, known by a number that is never used again. A member owes answers for the tasks
it was given; while it owes any it has to say something now and then, and a worker has to be done
soon after its deadline. Whoever breaks this is killed, whoever is lost is replaced: the first
time at once, again and again without having finished anything at growing intervals, so that a
crew that cannot start does not keep the machine busy with forking.

What each member may go through (drawn from `MOVES`):

    starting --ready--> idle --given--> busy --freed--> idle
    any --killed--> killed;  any --lost--> gone, and its seat is vacant
"""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Final, Literal, TypeAlias

from bywayd.core.alarms import Alarms
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import Defect, invariant, known

Phase: TypeAlias = Literal["starting", "idle", "busy", "killed", "gone"]
Move: TypeAlias = Literal["ready", "heard", "given", "done", "freed", "killed", "lost"]

#: Every legal move. A pair that is missing is a defect, not a case to ignore.
MOVES: Final[Mapping[tuple[Phase, Move], Phase]] = {
    ("starting", "heard"): "starting",
    ("starting", "ready"): "idle",
    ("starting", "killed"): "killed",
    ("starting", "lost"): "gone",
    ("idle", "heard"): "idle",
    ("idle", "given"): "busy",
    ("idle", "killed"): "killed",
    ("idle", "lost"): "gone",
    ("busy", "heard"): "busy",
    ("busy", "given"): "busy",
    # "done" with one task while others are owed, "freed" with the last.
    ("busy", "done"): "busy",
    ("busy", "freed"): "idle",
    ("busy", "killed"): "killed",
    ("busy", "lost"): "gone",
    # Words that were on their way when we killed it. Its work is disowned, nothing else counts.
    ("killed", "heard"): "killed",
    ("killed", "ready"): "killed",
    ("killed", "done"): "killed",
    ("killed", "freed"): "killed",
    ("killed", "lost"): "gone",
}


@dataclass(frozen=True, slots=True)
class Manners:
    """What is expected of a member, and how losses are dealt with."""

    start_time_max: Duration
    #: The longest silence while an answer is owed.
    silence: Duration
    #: How long after its deadline a task may still end.
    grace: Duration
    ping_every: Duration
    backoff_first: Duration
    backoff_max: Duration


@dataclass(slots=True)
class Member:
    """One process of the crew."""

    # -- fixed ---------------------------------------------------------------------------------
    number: int
    seat: int
    # -- changed by the roster only ------------------------------------------------------------
    phase: Phase
    #: When it last said anything; at first, when it was spawned.
    heard_at: Instant
    #: When it was last asked for a sign of life, and has not said anything since.
    pinged_at: Instant | None = None
    #: Tasks it owes an answer for, with the instant by which each must have ended, if any.
    owes: dict[int, Instant | None] = field(default_factory=dict)
    #: Whether it has finished any task.
    useful: bool = False


@dataclass(slots=True)
class Seat:
    """A place for one member."""

    member: int | None = None
    #: Losses in a row without anything finished in between.
    failures: int = 0


@dataclass(frozen=True, slots=True)
class Order:
    """What the roster wants done about a member."""

    what: Literal["spawn", "kill", "ping"]
    number: int
    why: str = ""


@dataclass(frozen=True, slots=True)
class RosterStatistics:
    """How many members are where, and what has happened since the start."""

    starting: int
    idle: int
    busy: int
    killed: int
    vacant: int
    spawned_total: int
    killed_total: int
    lost_total: int


class Roster:
    """
    Owned by the front. `role` is for texts; `seats` members are kept alive.

    Nothing is spawned before `open`.
    """

    def __init__(self, role: str, seats: int, manners: Manners) -> None:
        # -- fixed -----------------------------------------------------------------------------
        self._role = role
        self._manners = manners
        # -- state -----------------------------------------------------------------------------
        self._seats = [Seat() for _ in range(seats)]
        #: Everybody not yet lost, by number.
        self._members: dict[int, Member] = {}
        #: Numbers of those in phase "idle"; the last to become idle comes last.
        self._idle: dict[int, None] = {}
        #: ("member", number): it may have been silent too long. ("seat", index): to be filled.
        self._alarms: Alarms[tuple[str, int]] = Alarms()
        self._spawned = 0
        self._killed = 0
        self._lost = 0
        #: Whether anybody was ever ready.
        self.was_ready = False
        #: What happened, newest last, for error messages.
        self.story: deque[str] = deque(maxlen=200)

    # -- what the front does -------------------------------------------------------------------

    def open(self, now: Instant) -> None:
        """Let every seat be filled."""
        for index in range(len(self._seats)):
            self._alarms.set(("seat", index), now)

    def idle(self) -> int | None:
        """Return a member without a task: the last to become idle, its caches are warmest."""
        return next(reversed(self._idle), None)

    @property
    def idle_count(self) -> int:
        """How many have no task."""
        return len(self._idle)

    def phase(self, number: int) -> Phase:
        """Return where this member is; "gone" for one that is not known."""
        member = self._members.get(number)
        return "gone" if member is None else member.phase

    def give(self, number: int, task: int, deadline: Instant | None, now: Instant) -> None:
        """Note that this member was given a task, to be ended by the deadline."""
        member = self._member(number)
        if not member.owes:
            # Its silence while it had nothing to say does not count.
            member.heard_at = now
        member.owes[task] = deadline
        self._move(member, "given")
        self._watch(member)

    def hurry(self, number: int, task: int, now: Instant) -> None:
        """Note that this member was told to end a task now."""
        member = self._member(number)
        deadline = member.owes[task]
        if deadline is None or deadline > now:
            member.owes[task] = now
            self._watch(member)

    def kill(self, number: int, why: str) -> None:
        """Note that this member is being killed. Nobody is killed twice."""
        member = self._member(number)
        self._move(member, "killed", why)
        self._killed += 1
        # SIGKILL cannot be refused: the loss will be reported.
        self._alarms.clear(("member", number))

    # -- what the crew does --------------------------------------------------------------------

    def ready(self, number: int, now: Instant) -> bool:
        """Note that a member has started; False if it is not the time to say so."""
        member = self._member(number)
        if (member.phase, "ready") not in MOVES:
            return False
        member.heard_at = now
        self.was_ready = self.was_ready or member.phase == "starting"
        self._move(member, "ready")
        self._watch(member)
        return True

    def heard(self, number: int, now: Instant) -> None:
        """Note a sign of life."""
        member = self._member(number)
        member.heard_at = now
        member.pinged_at = None
        self._move(member, "heard")

    def done(self, number: int, task: int, now: Instant) -> bool:
        """Note that a task has ended; False if it was never given, or has ended before."""
        member = self._member(number)
        if task not in member.owes:
            return False
        del member.owes[task]
        member.heard_at = now
        member.pinged_at = None
        member.useful = True
        self._seats[member.seat].failures = 0
        self._move(member, "done" if member.owes else "freed")
        self._watch(member)
        return True

    def lost(self, number: int, why: str, now: Instant) -> tuple[int, ...]:
        """Note that a member is gone; its seat will be filled again. Returns what it owed."""
        member = self._member(number)
        self._move(member, "lost", why)
        self._alarms.clear(("member", number))
        del self._members[number]
        self._lost += 1
        seat = self._seats[member.seat]
        seat.member = None
        seat.failures = 0 if member.useful else seat.failures + 1
        self._alarms.set(("seat", member.seat), now + self._pause(seat.failures))
        return tuple(member.owes)

    # -- what time does ------------------------------------------------------------------------

    def due(self, now: Instant) -> list[Order]:
        """Return what has to be done by now. A member to kill is noted by `kill`, not here."""
        orders: list[Order] = []
        while (key := self._alarms.pop_due(now)) is not None:
            kind, index = key
            if kind == "seat":
                orders.append(self._fill(index, now))
            else:
                orders += self._look_at(self._members[index], now)
        return orders

    def next_alarm(self) -> Instant | None:
        """Return when `due` is to be called again."""
        return self._alarms.next()

    # -- within --------------------------------------------------------------------------------

    def _fill(self, index: int, now: Instant) -> Order:
        self._spawned += 1
        member = Member(self._spawned, index, "starting", now)
        self._members[member.number] = member
        self._seats[index].member = member.number
        self.story.append(f"{now.ns}: {self._role} {member.number} spawned")
        self._watch(member)
        return Order("spawn", member.number)

    def _look_at(self, member: Member, now: Instant) -> list[Order]:
        """The member's alarm has come: it may have spoken since that was set."""
        limit, why = self._patience(member)
        if limit > now:
            self._alarms.set(("member", member.number), limit)
            return []
        if member.phase == "idle" and member.pinged_at is None:
            member.pinged_at = now
            self._watch(member)
            return [Order("ping", member.number)]
        return [Order("kill", member.number, why)]

    def _patience(self, member: Member) -> tuple[Instant, str]:
        """Until when nothing need be done about a member, and what is wrong after that."""
        manners = self._manners
        if member.phase == "starting":
            return member.heard_at + manners.start_time_max, "not ready in time"
        if member.phase == "idle":
            if member.pinged_at is None:
                return member.heard_at + manners.ping_every, "to be pinged"
            return member.pinged_at + manners.silence, "silent when pinged"
        limit, why = member.heard_at + manners.silence, "silent at work"
        for deadline in member.owes.values():
            if deadline is not None and deadline + manners.grace < limit:
                limit, why = deadline + manners.grace, "past its deadline"
        return limit, why

    def _watch(self, member: Member) -> None:
        if member.phase != "killed":
            self._alarms.set(("member", member.number), self._patience(member)[0])

    def _pause(self, failures: int) -> Duration:
        if failures <= 1:
            return Duration(0)
        longest = self._manners.backoff_max
        # 2**20 times the first pause is beyond any longest one that makes sense.
        pause = self._manners.backoff_first.times(2 ** min(failures - 2, 20))
        return min(pause, longest)

    def _member(self, number: int) -> Member:
        rule = f"{self._role} {number} is known, and was not lost before"
        return known(self._members.get(number), rule, self.story)

    def _move(self, member: Member, move: Move, why: str = "") -> None:
        after = MOVES.get((member.phase, move))
        if after is None:
            raise Defect(
                f"{self._role} {member.number}: no move for {move} in {member.phase}", self.story
            )
        if move != "heard":
            self.story.append(
                f"{self._role} {member.number}: {member.phase} -> {after} ({why or move})"
            )
        member.phase = after
        if after == "idle":
            if move != "heard":
                self._idle[member.number] = None
        else:
            self._idle.pop(member.number, None)

    def statistics(self) -> RosterStatistics:
        """Return counts, for the health record and tests."""
        phases = [member.phase for member in self._members.values()]
        return RosterStatistics(
            starting=phases.count("starting"),
            idle=phases.count("idle"),
            busy=phases.count("busy"),
            killed=phases.count("killed"),
            vacant=sum(seat.member is None for seat in self._seats),
            spawned_total=self._spawned,
            killed_total=self._killed,
            lost_total=self._lost,
        )

    def check(self) -> None:
        """Stop with a `Defect` if somebody could be forgotten."""
        self._alarms.check()
        seated = {seat.member for seat in self._seats if seat.member is not None}
        invariant(seated == set(self._members), "every member has a seat of its own", self.story)
        for member in self._members.values():
            invariant(
                (member.phase == "busy") >= bool(member.owes) or member.phase == "killed",
                "who owes something is busy or killed",
                self.story,
            )
            invariant(
                member.phase != "busy" or bool(member.owes),
                "who is busy owes something",
                self.story,
            )
            invariant(
                (member.number in self._idle) == (member.phase == "idle"),
                "the idle are known",
                self.story,
            )
            watched = self._alarms.at(("member", member.number)) is not None
            invariant(
                watched == (member.phase != "killed"), "nobody is silent for ever", self.story
            )
        for index, seat in enumerate(self._seats):
            waits = self._alarms.at(("seat", index)) is not None
            invariant(
                seat.member is None or not waits, "a seat that is taken is not filled", self.story
            )
