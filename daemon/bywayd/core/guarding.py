"""
What clients ask of guards: to let one stand, to say where the vehicle is, to release it.

Who asks for a guard is answered when the surveyor has looked at the route, so that the reply says
whether it is free; if that takes too long the reply says that nobody has looked yet, and what
there is to say comes as an event. A replan may ask for a guard of its route: it stands before the
answer leaves.
"""

from __future__ import annotations

from dataclasses import dataclass

from byway import frames, messages
from byway.errors import SenderFault
from byway.frames import Header
from byway.messages import ErrorMessage, GuardIs
from bywayd.core.alarms import Alarms
from bywayd.core.answers import Answers
from bywayd.core.course import Course
from bywayd.core.docket import Docket
from bywayd.core.events import GuardSeen, Outcome, Peer
from bywayd.core.front_settings import FrontSettings
from bywayd.core.guards import Guard, Guards, Terms
from bywayd.core.health import Health
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import invariant, known
from bywayd.core.outbox import Outbox, error_of

#: Progress beyond the end of a route by more than this is about another route.
_BEYOND_M_MAX = 0.5


@dataclass(slots=True)
class Waiting:
    """Somebody who asked for a guard and is to hear whether its route is free."""

    peer: Peer
    header: Header
    body: bytes


class Guarding:
    """Owned by the front."""

    def __init__(
        self, settings: FrontSettings, outbox: Outbox, health: Health, guards: Guards
    ) -> None:
        # -- shared with the rest of the front -------------------------------------------------
        self._settings = settings
        self._outbox = outbox
        self._health = health
        self._guards = guards
        # -- state -----------------------------------------------------------------------------
        #: By the number of the guard.
        self._waiting: dict[int, Waiting] = {}
        #: By the number of the guard, when its asker has waited for long enough.
        self._alarms: Alarms[int] = Alarms()
        #: What was replied lately, so that a repeat changes nothing.
        self._replied = Answers(
            settings.answers_max,
            settings.answers_bytes_max,
            Duration.of_s(settings.answers_kept_s),
        )

    # -- what clients ask ----------------------------------------------------------------------

    def take(self, peer: Peer, came: frames.Received, ask: messages.Guard, now: Instant) -> None:
        """Let a guard stand. What can be said of the request without its route has been checked."""
        header = came.header
        made = self._course(ask, came)
        if isinstance(made, Course) and not self._guards.has_room(ask.unit, made.size_bytes):
            text = f"{len(self._guards)} guards stand already"
            made = error_of("overloaded", text, {"guards": len(self._guards)})
        if isinstance(made, ErrorMessage):
            self._end(Waiting(peer, header, came.body), made, now)
            return
        settings = self._settings
        silence_s = settings.guard_silence_s if ask.silence_s is None else ask.silence_s
        terms = Terms(
            ask.unit,
            ask.vehicle,
            tuple(ask.leave_out),
            ask.clearance_m,
            Duration.of_s(silence_s),
            ask.replan_on_alert,
            ask.budget_s,
        )
        progress_m = min(ask.progress_m, made.length_m)
        guard = self._guards.stand(terms, made, now, progress_m=progress_m)
        self._waiting[guard.number] = Waiting(peer, header, came.body)
        self._alarms.set(guard.number, now + Duration.of_s(settings.guard_check_s))

    def _course(self, ask: messages.Guard, came: frames.Received) -> Course | ErrorMessage:
        try:
            course = Course(ask.columns, came.packed)
        except SenderFault as fault:
            return frames.error_message(fault)
        return self._why_not_at(ask.progress_m, course) or course

    def _why_not_at(self, progress_m: float, course: Course) -> ErrorMessage | None:
        if progress_m <= course.length_m + _BEYOND_M_MAX:
            return None
        text = f"progress_m is {progress_m}, and the route is {course.length_m:.3f} m long"
        facts = {"field": "progress_m", "value": progress_m, "length_m": course.length_m}
        return error_of("bad_value", text, facts)

    def is_repeat(self, peer: Peer, came: frames.Received) -> bool:
        """Answer a request again that was answered before; leave it if its answer is still due."""
        id = came.header.id
        waiting = next((w for w in self._waiting.values() if w.header.id == id), None)
        replied = self._replied.get(id)
        asked = waiting or replied
        if asked is None:
            return False
        if asked.body != came.body:
            self._health.count("conflicts_total")
            text = f"request {id} was asked before with another body"
            self._outbox.error(peer, came.header, "conflict", text)
            return True
        self._health.count("repeats_total")
        if waiting is not None:
            waiting.peer = peer
        if replied is not None:
            self._outbox.reply(peer, came.header, replied.message)
        return True

    def refuse(
        self, peer: Peer, came: frames.Received, refusal: ErrorMessage, now: Instant
    ) -> None:
        """Tell why no guard can stand."""
        self._end(Waiting(peer, came.header, came.body), refusal, now)

    def progress(self, peer: Peer, header: Header, told: messages.Progress, now: Instant) -> None:
        """Take in where a vehicle is on its route."""
        guard = self._guards.of_unit(told.unit)
        if guard is None:
            self._outbox.reply(peer, header, self._unknown(told.unit, told.guard))
            return
        way_m = self._way_m(guard, told)
        if isinstance(way_m, ErrorMessage):
            self._outbox.reply(peer, header, way_m)
            return
        self._guards.move(guard, way_m, told.speed_mps, now)
        self._outbox.reply(peer, header, self._guards.describe(guard, now))

    def _way_m(self, guard: Guard, told: messages.Progress) -> float | ErrorMessage:
        """Return where on its course a vehicle is that tells its progress."""
        course, lead = guard.course, guard.lead
        if told.guard in (None, guard.id):
            refused = self._why_not_at(told.progress_m + lead.length_m, course)
            return refused or min(told.progress_m + lead.length_m, course.length_m)
        if told.guard == lead.was:
            # It has a new route and does not know yet, or is on its way to where that begins.
            way_m = max(0.0, told.progress_m - lead.begins_m)
            if way_m <= lead.length_m + _BEYOND_M_MAX:
                return way_m
        return self._unknown(guard.terms.unit, told.guard)

    def release(
        self, peer: Peer, came: frames.Received, told: messages.Release, now: Instant
    ) -> None:
        """End the guard of a unit."""
        if self.is_repeat(peer, came):
            return
        guard = self._guards.of_unit(told.unit)
        reply: GuardIs | ErrorMessage
        if guard is None or told.guard not in (None, guard.id, guard.lead.was):
            reply = self._unknown(told.unit, told.guard)
        else:
            reply = self._guards.describe(guard, now)
            reply = reply.model_copy(update={"state": "released", "blocked": None})
            self._guards.release(guard)
        self._end(Waiting(peer, came.header, came.body), reply, now)

    def _unknown(self, unit: str, guard: str | None = None) -> ErrorMessage:
        found = self._guards.of_unit(unit)
        stands = None if found is None else found.id
        what = f"guard {guard}" if guard else "guard"
        text = f"no {what} stands for {unit}"
        return error_of("unknown_request", text, {"unit": unit, "guard": guard, "stands": stands})

    # -- replans that want a guard -------------------------------------------------------------

    def of_answer(self, docket: Docket, outcome: Outcome, now: Instant) -> Guard | None:
        """Let a guard stand on the route of a final answer, if its replan asked for that."""
        ask = docket.ask
        if not ask.guard or outcome.kind != "route":
            return None
        try:
            course = course_of(outcome)
        except SenderFault as fault:
            # Verified, and yet no route: the worker and this front do not speak the same.
            self._health.count("guards_failed_total")
            self._outbox.log("error", "guard.failed", request_id=docket.id, text=fault.text)
            return None
        if not self._guards.has_room(ask.unit, course.size_bytes):
            self._health.count("guards_failed_total")
            self._outbox.log("warning", "guard.failed", request_id=docket.id, text="no room")
            return None
        settings = self._settings
        silence_s = settings.guard_silence_s if ask.silence_s is None else ask.silence_s
        terms = Terms(
            ask.unit,
            ask.vehicle,
            tuple(ask.leave_out),
            ask.clearance_m,
            Duration.of_s(silence_s),
            ask.replan_on_alert,
            settings.guard_budget_s,
        )
        return self._guards.stand(terms, course, now)

    # -- what the surveyor sees ----------------------------------------------------------------

    def saw(self, event: GuardSeen, now: Instant) -> bool:
        """The surveyor has looked at a guarded route; True if that was worth an alert."""
        guard = self._guards.get(event.guard)
        if guard is None:
            return False
        alerts = self._guards.saw(guard, event, now)
        waiting = self._waiting.get(event.guard)
        if waiting is not None:
            self._forget(event.guard)
            if event.fault:
                self._end(waiting, error_of("bad_geometry", event.fault), now)
            else:
                self._end(waiting, self._guards.describe(guard, now), now)
        return alerts

    # -- time ----------------------------------------------------------------------------------

    def settle(self, now: Instant) -> None:
        """Answer who has waited for long enough, or waits for a guard that has ended."""
        for ended, waiting in list(self._waiting.items()):
            if self._guards.get(ended) is None:
                self._forget(ended)
                text = "the guard has ended, or another has taken its place"
                self._end(waiting, error_of("superseded", text), now)
        while (number := self._alarms.pop_due(now)) is not None:
            self._answer_unchecked(number, now)

    def stop(self, now: Instant) -> None:
        """Answer everybody who waits."""
        for number in list(self._waiting):
            self._answer_unchecked(number, now)

    def _answer_unchecked(self, number: int, now: Instant) -> None:
        guard = known(self._guards.get(number), "who waits, waits for a guard")
        waiting = self._waiting[number]
        self._forget(number)
        self._end(waiting, self._guards.describe(guard, now), now)

    def _forget(self, number: int) -> None:
        del self._waiting[number]
        self._alarms.clear(number)

    def _end(self, waiting: Waiting, reply: GuardIs | ErrorMessage, now: Instant) -> None:
        self._replied.keep(waiting.header.id, waiting.body, reply, 0, b"", now)
        self._outbox.reply(waiting.peer, waiting.header, reply)

    def next_alarm(self) -> Instant | None:
        """Return when somebody has waited for long enough."""
        return self._alarms.next()

    def check(self) -> None:
        """Stop with a `Defect` if somebody could wait for ever, or memory is not bounded."""
        self._alarms.check()
        self._replied.check()
        for number in self._waiting:
            invariant(self._alarms.at(number) is not None, "nobody waits for ever")
            invariant(self._guards.get(number) is not None, "who waits, waits for a guard")


def course_of(outcome: Outcome) -> Course:
    """
    Return the route of an outcome.

    Raises:
        SenderFault: If it has none that makes sense.
    """
    return Course(frames.decode_outcome(outcome.body, outcome.packed).columns, outcome.packed)
