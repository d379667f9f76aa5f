"""
New routes for guarded vehicles whose old ones are blocked.

An alert of a guard that wants it brings about a replan at once, ahead of all others that wait:
from where the vehicle will be when the answer can have reached it, at the speed that it will
have there, to where the old route ended. If the vehicle could not stop any more from there, the
new route begins where it comes to a stand when it brakes now. The new route is guarded from
before it is published, together with what is left of the old one until there.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

from byway import messages
from byway.errors import SenderFault
from byway.frames import Header
from byway.messages import AnswerMessage, ErrorMessage
from bywayd.core.answering import Answering
from bywayd.core.course import STANDING_MPS
from bywayd.core.dispatch import Dispatch
from bywayd.core.docket import Docket, Held, times_of
from bywayd.core.events import OutcomeKind
from bywayd.core.freshness import Freshness
from bywayd.core.front_settings import FrontSettings
from bywayd.core.guarding import course_of
from bywayd.core.guards import Guard, Guards, Lead
from bywayd.core.health import Health
from bywayd.core.instants import Duration, Instant
from bywayd.core.intake import spread
from bywayd.core.invariant import invariant, known
from bywayd.core.outbox import Outbox

#: Vehicles whose settings do not say how they brake are taken to brake like this; it is what
#: planning takes as well.
_DECELERATION_MPS2: Final = 1.5

#: Why there is no new route.
_TEXTS: Final[Mapping[OutcomeKind, str]] = {
    "start_blocked": "where the vehicle could leave its route it is blocked already",
    "goal_blocked": "the goal is blocked",
    "start_too_fast": "the vehicle is too fast where it would have to leave its route",
    "no_route": "there is no other route",
    "not_found": "no other route was found in time",
}

#: A vehicle that is so much beyond the place where a new route begins has missed it.
_MISSED_M: Final = 0.3


@dataclass(frozen=True, slots=True)
class TurnOff:
    """Where a vehicle leaves its route."""

    way_m: float
    #: It brakes now, and stands there.
    brakes: bool


@dataclass(frozen=True, slots=True)
class Reroute:
    """A replan under way for a guard."""

    docket: Docket
    turn_off: TurnOff


class Rerouting:
    """Owned by the front. At most one replan under way for each guard."""

    def __init__(
        self,
        settings: FrontSettings,
        outbox: Outbox,
        health: Health,
        seed: int,
        guards: Guards,
        answering: Answering,
        dispatch: Dispatch,
        freshness: Freshness,
    ) -> None:
        # -- fixed -----------------------------------------------------------------------------
        self._settings = settings
        self._seed = seed
        # -- shared with the rest of the front -------------------------------------------------
        self._outbox = outbox
        self._health = health
        self._guards = guards
        self._answering = answering
        self._dispatch = dispatch
        self._freshness = freshness
        # -- state -----------------------------------------------------------------------------
        #: By the number of the guard.
        self._under_way: dict[int, Reroute] = {}
        self._serial = 0
        self.stopping = False

    def settle(self, now: Instant) -> bool:
        """Take in what has ended, end what nobody needs, begin what is wanted; True if any was."""
        for docket, reply in self._answering.take_ended():
            self._ended(docket, reply, now)
        for number, reroute in list(self._under_way.items()):
            guard = self._guards.get(number)
            if guard is None or guard.told is None:
                del self._under_way[number]
                self._health.count("reroutes_dropped_total")
                self._dispatch.cancel(reroute.docket, now)
        begun = False
        for number in list(self._guards.wanting):
            if number in self._under_way:
                continue  # looked at again when that has ended
            del self._guards.wanting[number]
            guard = known(self._guards.get(number), "who wants a new route stands")
            stale = self._freshness.why_not(guard.terms.left_out, now)
            if self.stopping:
                self._failed(guard, "stopping", "the daemon is on its way out")
            elif stale is not None:
                self._failed(guard, stale.code, stale.text)
            else:
                self._begin(guard, now)
                begun = True
        return begun

    # -- beginning -----------------------------------------------------------------------------

    def _begin(self, guard: Guard, now: Instant) -> None:
        terms, settings = guard.terms, self._settings
        turn_off = self._turn_off(guard, now)
        place = guard.course.place(turn_off.way_m)
        self._serial += 1
        ask = messages.Replan(
            vehicle=terms.vehicle,
            unit=terms.unit,
            start=(place.x_m, place.y_m, place.heading_rad),
            goal=guard.course.goal,
            budget_s=terms.budget_s,
            leave_out=list(terms.left_out),
            clearance_m=terms.clearance_m,
            start_speed_mps=0.0 if turn_off.brakes else place.speed_mps,
            start_curvature_per_m=place.curvature_per_m,
        )
        docket = Docket(
            # No client can have an id like this.
            header=Header("replan", f"~reroute-{self._serial}"),
            ask=ask,
            body=b"",
            times=times_of(
                now,
                Duration.of_s(terms.budget_s),
                Duration.of_s(settings.margin_s),
                settings.margin_ratio_max,
                Duration.of_s(settings.start_left_min_s),
            ),
            seed=spread(~self._seed, self._serial),
            attempts_max=settings.attempts_max,
            retry_left_min=Duration.of_s(settings.retry_left_min_s),
            peer=None,
            guard=guard.number,
        )
        self._under_way[guard.number] = Reroute(docket, turn_off)
        self._health.count("reroutes_total")
        self._dispatch.enter(docket, now)

    def _turn_off(self, guard: Guard, now: Instant) -> TurnOff:
        course = guard.course
        block = known(guard.told, "a route that is left is blocked")
        braking = deceleration_mps2(self._settings.vehicles[guard.terms.vehicle].settings)
        way_m = guard.way_m(now)
        here = course.place(way_m)
        later_s = guard.terms.budget_s + self._settings.guard_margin_s
        there = course.place(course.way_at(here.t_s + guard.pace * later_s))
        if course.stand_after(there.way_m, abs(there.speed_mps), braking) < block.at_m:
            return TurnOff(there.way_m, brakes=abs(there.speed_mps) <= STANDING_MPS)
        speed = abs(here.speed_mps) * guard.pace
        return TurnOff(course.stand_after(way_m, speed, braking), brakes=True)

    # -- ending --------------------------------------------------------------------------------

    def _ended(self, docket: Docket, reply: AnswerMessage | ErrorMessage, now: Instant) -> None:
        number = known(docket.guard, "what ends here was begun here", docket.story)
        reroute = self._under_way.get(number)
        if reroute is None or reroute.docket is not docket:
            return  # nobody needs it any more
        del self._under_way[number]
        guard = known(self._guards.get(number), "a replan ends with its guard", docket.story)
        if isinstance(reply, ErrorMessage):
            self._failed(guard, reply.code, reply.text)
            return
        held = docket.best or docket.verdict
        kind: OutcomeKind = "not_found" if held is None else held.outcome.kind
        if held is None or kind != "route":
            self._failed(guard, kind, _TEXTS[kind])
            return
        try:
            self._change_over(guard, reroute.turn_off, held, now)
        except SenderFault as fault:
            self._failed(guard, "internal", fault.text)

    def _change_over(self, guard: Guard, turn_off: TurnOff, held: Held, now: Instant) -> None:
        """Let a new guard stand on the new route, and tell who listens."""
        route = course_of(held.outcome)
        way_m = guard.way_m(now)
        if not turn_off.brakes and way_m > turn_off.way_m + _MISSED_M:
            # It drives faster than its route says. What was found is of no use to it.
            self._health.count("reroutes_missed_total")
            self._guards.wanting[guard.number] = None
            return
        begins_m = min(way_m, turn_off.way_m)
        braking = deceleration_mps2(self._settings.vehicles[guard.terms.vehicle].settings)
        course = guard.course.followed_by(
            route, begins_m, turn_off.way_m, braking if turn_off.brakes else None
        )
        if not self._guards.has_room(guard.terms.unit, course.size_bytes):
            self._failed(guard, "overloaded", "the new route takes more memory than is left")
            return
        lead_m = max(0.0, course.length_m - route.length_m)
        in_s = course.place(lead_m).t_s
        from_m = turn_off.way_m - guard.lead.length_m
        lead = Lead(lead_m, guard.id, from_m - lead_m)
        newer = self._guards.stand(
            guard.terms, course, now, lead=lead, heard_at=guard.heard_at, pace=guard.pace
        )
        self._health.count("rerouted_total")
        self._outbox.log(
            *("info", "guard.rerouted"),
            unit=guard.terms.unit,
            guard=newer.id,
            was=guard.id,
            from_m=from_m,
            in_s=in_s,
            cost_m=held.outcome.cost,
            revision=held.revision,
        )
        rerouted = messages.Rerouted(
            unit=guard.terms.unit,
            guard=newer.id,
            was=guard.id,
            from_m=from_m,
            in_s=in_s,
            revision=held.revision,
            outcome=held.outcome.body,
        )
        self._guards.publish(newer, rerouted, held.outcome.packed)

    def _failed(self, guard: Guard, kind: str, text: str) -> None:
        self._health.count("reroutes_failed_total")
        self._outbox.log(
            *("warning", "guard.reroute_failed"),
            unit=guard.terms.unit,
            guard=guard.id,
            kind=kind,
            text=text,
        )
        failed = messages.RerouteFailed(
            unit=guard.terms.unit, guard=guard.id, reason=kind, text=text
        )
        self._guards.publish(guard, failed)

    # -- looking at it -------------------------------------------------------------------------

    def __len__(self) -> int:
        return len(self._under_way)

    def check(self) -> None:
        """Stop with a `Defect` if a new route could be forgotten."""
        for number, reroute in self._under_way.items():
            docket = reroute.docket
            invariant(docket.guard == number, "a replan knows its guard", docket.story)
            invariant(
                self._answering.open.get(docket.id) is docket,
                "what is under way is open",
                docket.story,
            )


def deceleration_mps2(settings: Mapping[str, object]) -> float:
    """Return how a vehicle of these settings brakes when it is in no hurry."""
    told = settings.get("deceleration_mps2_max")
    return float(told) if isinstance(told, int | float) and told > 0 else _DECELERATION_MPS2
