"""
The guards: which routes vehicles are driving, and what is said when something blocks one.

A guard stands for a unit from the moment a client asks for it (or its replan did) until the client
releases it, another takes its place, or the unit has been silent for too long. The surveyor looks
at every guarded route ahead of its vehicle on every revision, and says when what it sees is
another; what listeners are told of that is decided here.

All ways along a route are kept as on the course that is watched. After a reroute that course is
the stretch of the old route that the vehicle still has to drive, and then the new route; outside,
ways count from the beginning of the new one.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal, TypeAlias

from byway import messages
from byway.messages import BlockedIs, GuardIs
from byway.packed import Bytes
from bywayd.core.alarms import Alarms
from bywayd.core.course import STANDING_MPS, Course
from bywayd.core.effects import MoveGuard, Unwatch, WatchRoute
from bywayd.core.events import Block, GuardSeen
from bywayd.core.front_settings import FrontSettings
from bywayd.core.health import Health
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import invariant
from bywayd.core.outbox import Outbox

State: TypeAlias = Literal["clear", "blocked", "unchecked", "released"]

#: A vehicle whose route wants it to drive faster than this, and that is said to stand, stands.
_CRAWLING_MPS = 0.1
#: A vehicle that is faster than its route is believed up to this.
_PACE_MAX = 1.5


@dataclass(frozen=True, slots=True)
class Terms:
    """What a guard is, for as long as it stands."""

    unit: str
    vehicle: str
    left_out: tuple[str, ...]
    clearance_m: float | None
    silence: Duration
    replan_on_alert: bool
    #: For the replan of an alert.
    budget_s: float


@dataclass(frozen=True, slots=True)
class Lead:
    """What a course begins with after a reroute: a stretch of the route before."""

    length_m: float
    #: The guard of the route before, whose vehicle may not know yet that it has another.
    was: str = ""
    #: Where on that route, as seen from outside, this course begins.
    begins_m: float = 0.0


#: A course that is one route from its start.
NO_LEAD = Lead(0.0)


@dataclass(slots=True)
class Guard:
    """One guard. Changed by `Guards` only."""

    # -- fixed ---------------------------------------------------------------------------------
    number: int
    terms: Terms
    course: Course
    lead: Lead
    # -- what the unit has told ----------------------------------------------------------------
    heard_at: Instant
    progress_m: float
    #: When the progress was true, and how many seconds of the route pass in a second from then.
    moved_at: Instant
    pace: float = 1.0
    # -- what the surveyor has told ------------------------------------------------------------
    #: The revision looked at last, if the surveyor that is at work has looked at all.
    seen: int | None = None
    blocked: Block | None = None
    #: What listeners know.
    told: Block | None = None

    @property
    def id(self) -> str:
        """How the outside calls it; together with the epoch no other is called so."""
        return f"guard{self.number}"

    @property
    def state(self) -> State:
        """What replies say."""
        if self.seen is None:
            return "unchecked"
        return "clear" if self.blocked is None else "blocked"

    def way_m(self, now: Instant) -> float:
        """Return where on its course the vehicle should be, from what it told last."""
        course = self.course
        begun_s = course.place(self.progress_m).t_s
        return course.way_at(begun_s + self.pace * now.since(self.moved_at).s)

    def moved(self, progress_m: float, speed_mps: float | None, now: Instant) -> None:
        """Take note of what the unit tells of itself."""
        self.progress_m, self.moved_at, self.pace = progress_m, now, 1.0
        expected = abs(self.course.place(progress_m).speed_mps)
        if speed_mps is None or expected < _CRAWLING_MPS:
            return  # about to leave: the table tells more than a speed that is about to change
        speed = abs(speed_mps)
        self.pace = 0.0 if speed <= STANDING_MPS else min(speed / expected, _PACE_MAX)

    def outside(self, block: Block, now: Instant) -> BlockedIs:
        """Return what is in the way, as it travels."""
        way_m = self.way_m(now)
        ahead_s = block.t_s - self.course.place(way_m).t_s
        return BlockedIs(
            distance_m=max(0.0, block.at_m - way_m),
            time_s=max(0.0, ahead_s),
            at_m=max(0.0, block.at_m - self.lead.length_m),
            x_m=block.x_m,
            y_m=block.y_m,
            heading_rad=block.heading_rad,
            layer=block.layer,
            id=block.id,
            kind=block.kind,
            depth_m=block.depth_m,
        )


class Guards:
    """Owned by the front: at most one guard a unit, and so many in all."""

    def __init__(self, settings: FrontSettings, outbox: Outbox, health: Health) -> None:
        # -- shared with the rest of the front -------------------------------------------------
        self._settings = settings
        self._outbox = outbox
        self._health = health
        # -- state -----------------------------------------------------------------------------
        #: By number; and the same by unit.
        self._guards: dict[int, Guard] = {}
        self._by_unit: dict[str, Guard] = {}
        self._serial = 0
        self._size_bytes = 0
        #: The numbers of those that want another route, in the order of their alerts.
        self.wanting: dict[int, None] = {}
        #: By number, when a guard may have been silent for too long.
        self._alarms: Alarms[int] = Alarms()
        #: The surveyor at work.
        self._surveyor: int | None = None

    def __iter__(self) -> Iterator[Guard]:
        return iter(self._guards.values())

    def __len__(self) -> int:
        return len(self._guards)

    @property
    def size_bytes(self) -> int:
        """About how much memory the guarded routes take."""
        return self._size_bytes

    def of_unit(self, unit: str) -> Guard | None:
        """Return the guard that stands for a unit."""
        return self._by_unit.get(unit)

    def get(self, number: int) -> Guard | None:
        """Return the guard of this number, if it stands."""
        return self._guards.get(number)

    def was_given(self, number: int) -> bool:
        """Whether there has ever been a guard of this number."""
        return 1 <= number <= self._serial

    # -- standing and going --------------------------------------------------------------------

    def has_room(self, unit: str, size_bytes: int = 0) -> bool:
        """Whether a guard could stand for this unit."""
        older = self._by_unit.get(unit)
        count = len(self._guards) - (older is not None)
        size = self._size_bytes - (0 if older is None else older.course.size_bytes)
        settings = self._settings
        return count < settings.guards_max and size + size_bytes <= settings.guards_bytes_max

    def stand(
        self,
        terms: Terms,
        course: Course,
        now: Instant,
        *,
        progress_m: float = 0.0,
        lead: Lead = NO_LEAD,
        heard_at: Instant | None = None,
        pace: float = 1.0,
    ) -> Guard:
        """
        Let a guard stand, in the place of the unit's older one. There is room.

        Args:
            progress_m: Along the course, lead included.
            heard_at: When the unit was heard last; now, if it asks for this guard.
            pace: Seconds of the course in a second, until the unit tells more.
        """
        older = self._by_unit.get(terms.unit)
        self._serial += 1
        heard_at = now if heard_at is None else heard_at
        guard = Guard(self._serial, terms, course, lead, heard_at, progress_m, now, pace)
        if older is not None:
            self._end(older)
        self._guards[guard.number] = self._by_unit[terms.unit] = guard
        self._size_bytes += course.size_bytes
        self._alarms.set(guard.number, heard_at + terms.silence)
        self._health.count("guards_total")
        if self._surveyor is not None:
            self._watch(guard, self._surveyor)
        return guard

    def release(self, guard: Guard) -> None:
        """End a guard because its unit wants it so."""
        self._end(guard)
        self._health.count("guards_released_total")

    def _end(self, guard: Guard) -> None:
        del self._guards[guard.number]
        del self._by_unit[guard.terms.unit]
        self._size_bytes -= guard.course.size_bytes
        self._alarms.clear(guard.number)
        self.wanting.pop(guard.number, None)
        if self._surveyor is not None:
            self._outbox.add(Unwatch(self._surveyor, guard.number))

    def move(self, guard: Guard, progress_m: float, speed_mps: float | None, now: Instant) -> None:
        """The unit is somewhere else on its course."""
        guard.heard_at = now
        self._alarms.set(guard.number, now + guard.terms.silence)
        has_moved = progress_m != guard.progress_m
        guard.moved(progress_m, speed_mps, now)
        if has_moved and self._surveyor is not None:
            self._outbox.add(MoveGuard(self._surveyor, guard.number, progress_m))

    # -- the surveyor --------------------------------------------------------------------------

    def surveyor_ready(self, surveyor: int) -> None:
        """There is a surveyor: it is to look at every route."""
        self._surveyor = surveyor
        for guard in self._guards.values():
            self._watch(guard, surveyor)

    def surveyor_gone(self) -> None:
        """There is none: nobody knows whether the routes are free."""
        self._surveyor = None
        for guard in self._guards.values():
            guard.seen = None

    def _watch(self, guard: Guard, surveyor: int) -> None:
        terms, course = guard.terms, guard.course
        self._outbox.add(
            WatchRoute(
                surveyor,
                guard.number,
                terms.unit,
                guard.id,
                self._settings.vehicles[terms.vehicle].settings,
                course.columns,
                course.packed,
                terms.left_out,
                terms.clearance_m,
                guard.progress_m,
            )
        )

    def saw(self, guard: Guard, event: GuardSeen, now: Instant) -> bool:
        """Take in what the surveyor at work has seen; True if that was worth an alert."""
        guard.seen, guard.blocked = event.revision, event.blocked
        if event.fault:
            self._give_up(guard, event.fault, now)
            return False
        if event.blocked is None:
            self._clear(guard, event.revision)
            return False
        if guard.told is not None and not self._is_news(guard.told, event.blocked):
            return False
        guard.told = event.blocked
        if guard.terms.replan_on_alert:
            self.wanting[guard.number] = None
        self._health.count("alerts_total")
        alert = messages.Alert(
            unit=guard.terms.unit,
            guard=guard.id,
            revision=event.revision,
            blocked=guard.outside(event.blocked, now),
        )
        self.publish(guard, alert)
        return True

    def _clear(self, guard: Guard, revision: int) -> None:
        if guard.told is None:
            return
        guard.told = None
        self.wanting.pop(guard.number, None)
        self._health.count("cleared_total")
        self.publish(
            guard, messages.Cleared(unit=guard.terms.unit, guard=guard.id, revision=revision)
        )

    def _is_news(self, told: Block, seen: Block) -> bool:
        """Whether a vehicle that knows of the one should hear of the other."""
        if (told.kind, told.layer, told.id) != (seen.kind, seen.layer, seen.id):
            return True
        return abs(told.at_m - seen.at_m) > self._settings.guard_news_m

    # -- telling -------------------------------------------------------------------------------

    def describe(self, guard: Guard, now: Instant) -> GuardIs:
        """Return how a guard is, as it travels."""
        blocked = None if guard.state != "blocked" or guard.blocked is None else guard.blocked
        return GuardIs(
            unit=guard.terms.unit,
            guard=guard.id,
            state=guard.state,
            revision=guard.seen or 0,
            progress_m=max(0.0, guard.progress_m - guard.lead.length_m),
            blocked=None if blocked is None else guard.outside(blocked, now),
        )

    def publish(self, guard: Guard, message: messages.Message, packed: Bytes = b"") -> None:
        """Tell who listens to the unit's guard."""
        self._outbox.publish(f"guard.{guard.terms.unit}", message, packed)

    # -- time ----------------------------------------------------------------------------------

    def settle(self, now: Instant) -> None:
        """Give up the guards of units that have been silent for too long."""
        while (number := self._alarms.pop_due(now)) is not None:
            guard = self._guards[number]
            self._give_up(guard, "the unit was silent for too long", now)

    def _give_up(self, guard: Guard, why: str, now: Instant) -> None:
        silent_s = now.since(guard.heard_at).s
        self._end(guard)
        self._health.count("guards_lost_total")
        self._outbox.log("warning", "guard.lost", unit=guard.terms.unit, guard=guard.id, why=why)
        lost = messages.GuardLost(
            unit=guard.terms.unit, guard=guard.id, silent_s=silent_s, text=why
        )
        self.publish(guard, lost)

    def next_alarm(self) -> Instant | None:
        """Return when a guard may have been silent for too long."""
        return self._alarms.next()

    # -- looking at it -------------------------------------------------------------------------

    def check(self) -> None:
        """Stop with a `Defect` if a guard could be forgotten, or memory is not bounded."""
        self._alarms.check()
        invariant(len(self._guards) <= self._settings.guards_max, "guards are bounded")
        invariant(
            {guard.terms.unit: guard for guard in self} == self._by_unit, "one guard stands a unit"
        )
        invariant(
            self._size_bytes == sum(guard.course.size_bytes for guard in self),
            "the size of guarded routes is known",
        )
        for guard in self:
            invariant(self._alarms.at(guard.number) is not None, "every silence has an end")
        for number in self.wanting:
            wants = self._guards.get(number)
            invariant(
                wants is not None and wants.told is not None, "who wants a new route is blocked"
            )
