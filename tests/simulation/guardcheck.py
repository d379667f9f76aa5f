"""
What is promised about guards, checked from outside.

This knows what clients were told, what the surveyor was told to watch, and what it said that it
saw; from that follows what must be published, and nothing else may be.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from tests.simulation import routes
from tests.simulation.promises import promise
from tests.simulation.times import MS

from byway import frames, messages
from bywayd.core import effects, events
from bywayd.core.events import Block

#: A revision that only a surveyor out of its mind speaks of.
RAVING = 10**9

#: How late a front may notice that a time is over.
SLACK_NS = 5 * MS


@dataclass(slots=True)
class Known:
    """One guard, by its name."""

    unit: str
    heard_ns: int
    silence_ns: int
    #: Where on x its vehicle counts from.
    from_x_m: float
    told: Block | None = None
    ended: bool = False


@dataclass(slots=True)
class Asked:
    """A request about a guard, by its id."""

    message: messages.Message
    arrived_ns: int
    from_x_m: float = 0.0
    reply: messages.Message | None = None


@dataclass
class GuardCheck:
    """One life of the daemon."""

    silence_s: float
    news_m: float
    guards_max: int
    verified: set[tuple[bytes, int]]
    known: dict[str, Known] = field(default_factory=dict)
    asked: dict[str, Asked] = field(default_factory=dict)
    #: The surveyor at work, and what it watches: number, and the name it goes by.
    surveyor: int | None = None
    watched: dict[int, str] = field(default_factory=dict)
    numbers: set[int] = field(default_factory=set)
    #: What must be published now: kind, name, and what was seen.
    due: tuple[str, str, Block | None] | None = None
    #: Guards that the surveyor was told to forget, and nobody has heard of their end.
    unwatched: list[str] = field(default_factory=list)
    #: Whether a surveyor has just begun.
    begins: bool = False
    counts: dict[str, int] = field(default_factory=dict)

    # -- what goes in ---------------------------------------------------------------------------

    def came(self, came: frames.Received, now_ns: int) -> None:
        """A request about a guard reaches the front."""
        if came.header.id not in self.asked:
            asked = self.asked[came.header.id] = Asked(came.message, now_ns)
            if isinstance(came.message, messages.Guard):
                asked.from_x_m, _ = routes.ends(came.message.columns, came.packed)

    def hands_in(self, event: events.Event) -> None:
        """An event is about to reach the front."""
        match event:
            case events.SurveyorReady():
                self.surveyor = event.surveyor
                self.watched.clear()
                self.begins = True
            case events.SurveyorLost() if event.surveyor == self.surveyor:
                self.surveyor = None
            case events.GuardSeen() if event.surveyor == self.surveyor:
                self._sees(event)

    def _sees(self, event: events.GuardSeen) -> None:
        name = self.watched.get(event.guard)
        if name is None or event.revision >= RAVING:
            return  # it is not looked after any more; or what was seen cannot be
        told = self._find(name).told if name in self.known else None
        if event.blocked is None:
            self.due = None if told is None else ("cleared", name, None)
        elif told is None or self._is_news(told, event.blocked):
            self.due = ("alert", name, event.blocked)

    def _is_news(self, told: Block, seen: Block) -> bool:
        return (told.kind, told.layer, told.id) != (seen.kind, seen.layer, seen.id) or abs(
            told.at_m - seen.at_m
        ) > self.news_m

    # -- what comes out -------------------------------------------------------------------------

    def effect(self, effect: effects.Effect, now_ns: int) -> None:
        """One effect of the front, in order."""
        match effect:
            case effects.WatchRoute():
                promise(effect.surveyor == self.surveyor, "who is at work watches")
                promise(effect.guard not in self.watched, "a guard is watched once")
                promise(
                    all(self.unit_of(name) != effect.unit for name in self.watched.values()),
                    "one guard stands a unit",
                    effect.unit,
                )
                self.watched[effect.guard] = effect.name
                if effect.name not in self.known:
                    # Its silence is known when its asker is answered.
                    from_x_m, _ = routes.ends(effect.columns, effect.packed)
                    self.known[effect.name] = Known(effect.unit, 0, 10**18, from_x_m)
                    self._replaces(effect.name)
            case effects.Unwatch():
                promise(effect.guard in self.watched, "what is unwatched was watched")
                self.unwatched.append(self.watched.pop(effect.guard))
            case effects.MoveGuard():
                promise(effect.guard in self.watched, "what moves is watched", effect.guard)
            case effects.KillSurveyor() if effect.surveyor == self.surveyor:
                self.surveyor = None

    def _replaces(self, name: str) -> None:
        """A guard stands: the older one of its unit does not any more."""
        unit = self.known[name].unit
        for other, known in self.known.items():
            if known.unit == unit and other != name:
                known.ended = True

    def unit_of(self, name: str) -> str:
        return self.known[name].unit if name in self.known else ""

    def _find(self, name: str) -> Known:
        known = self.known.get(name)
        promise(known is not None, "only guards that stand are spoken of", name)
        assert known is not None
        return known

    def _stands(self, name: str, unit: str, heard_ns: int, silence_s: float | None, x_m: float):
        """A client is told that its guard stands."""
        silence_ns = round((self.silence_s if silence_s is None else silence_s) * 1e9)
        known = self.known.setdefault(name, Known(unit, heard_ns, silence_ns, x_m))
        # It may have told its progress before anybody was told that the guard stands.
        known.heard_ns = max(known.heard_ns, heard_ns)
        known.silence_ns = silence_ns
        known.from_x_m = x_m
        self._replaces(name)
        return known

    def reply(self, effect: effects.Reply, now_ns: int) -> None:
        """A reply leaves the front."""
        message = effect.message
        asked = self.asked.get(effect.header.id)
        if asked is None:
            return
        promise(
            isinstance(message, messages.GuardIs | messages.ErrorMessage), "guards are answered"
        )
        if isinstance(message, messages.ErrorMessage):
            if message.code != "conflict":
                asked.reply = asked.reply or message
            return
        told = asked.message
        if isinstance(told, messages.Progress):
            if told.unit in self._pending():
                # Nobody looks after it yet, and its asker has not been told.
                unsaid = Known(told.unit, now_ns, 10**18, 0.0)
                self.known.setdefault(message.guard, unsaid)
            known = self._find(message.guard)
            promise(not known.ended, "progress is about a guard that stands", message.guard)
            known.heard_ns = now_ns
            return
        if asked.reply is not None:
            promise(message == asked.reply, "a repeat gets the same reply", effect.header.id)
            return
        asked.reply = message
        if isinstance(told, messages.Guard):
            known = self._stands(
                message.guard, told.unit, asked.arrived_ns, told.silence_s, asked.from_x_m
            )
            promise(not known.ended, "who is told that a guard stands has one", message)
        else:
            promise(message.state == "released", "a release releases", message)
            self._find(message.guard).ended = True

    def answer(
        self, ask: messages.Replan, message: messages.AnswerMessage, packed: Any, now_ns: int
    ) -> None:
        """A replan is answered, for the first time."""
        promise(ask.guard or message.guard is None, "only who asks for it gets a guard")
        if message.guard is not None:
            body = frames.decode_outcome(message.outcome, packed)
            promise(body.kind == "route", "only routes are guarded")
            from_x_m, _ = routes.ends(body.columns, packed)
            self._stands(message.guard, ask.unit, now_ns, ask.silence_s, from_x_m)
            self._count("answers_guarded")

    def publish(self, effect: effects.Publish, now_ns: int) -> bool:
        """An event leaves the front; False if it is not about guards."""
        message = effect.message
        if not effect.topic.startswith("guard."):
            return False
        if isinstance(message, messages.Rerouted):
            # Without a surveyor this is the first that is heard of it.
            old = self._find(message.was)
            new = Known(old.unit, old.heard_ns, old.silence_ns, 0.0)
            self.known.setdefault(message.guard, new)
        known = self._find(message.guard)  # type: ignore[attr-defined]
        promise(effect.topic == f"guard.{known.unit}", "events go to the unit's topic")
        self._count(message.kind)
        match message:
            case messages.Alert() | messages.Cleared():
                self._told(known, message)
            case messages.GuardLost():
                promise(not known.ended, "a guard is lost once", message)
                known.ended = True
                silent_ns = now_ns - known.heard_ns
                promise(
                    known.silence_ns <= silent_ns <= known.silence_ns + SLACK_NS,
                    "a guard is lost after the silence that was agreed",
                    *(message, silent_ns / 1e9, known.silence_ns / 1e9),
                )
            case messages.Rerouted():
                self._rerouted(known, message, effect.packed)
            case messages.RerouteFailed():
                promise(not known.ended, "who gets no new route has the old one", message)
            case _:
                promise(False, "nothing else is said of guards", message.kind)
        return True

    def _told(self, known: Known, message: messages.Alert | messages.Cleared) -> None:
        promise(not known.ended, "alerts are about guards that stand", message)
        promise(self.due is not None, "nothing is said without a reason", message)
        assert self.due is not None
        kind, name, seen = self.due
        promise((kind, name) == (message.kind, message.guard), "what is due is said", message)
        self.due = None
        known.told = seen
        if isinstance(message, messages.Alert) and seen is not None:
            named = (message.blocked.layer, message.blocked.id, message.blocked.x_m)
            promise(named == (seen.layer, seen.id, seen.x_m), "an alert names what was seen")

    def _rerouted(self, new: Known, message: messages.Rerouted, packed: Any) -> None:
        old = self._find(message.was)
        promise(old.told is not None, "who is not blocked keeps the route", message.was)
        body = bytes(message.outcome)
        promise((body, message.revision) in self.verified, "new routes are verified", message.was)
        if self.surveyor is not None:
            promise(message.guard in self.watched.values(), "a new route is watched first")
        columns = frames.decode_outcome(body, packed).columns
        from_x_m, _ = routes.ends(columns, packed)
        promise(
            abs(old.from_x_m + message.from_m - from_x_m) < 1e-6,
            "a new route begins on the old one, where it says",
            *(old.from_x_m, message.from_m, from_x_m),
        )
        new.heard_ns, new.silence_ns, new.from_x_m = old.heard_ns, old.silence_ns, from_x_m
        self._replaces(message.guard)

    def turn_ends(self, now_ns: int) -> None:
        """All effects of one event are out."""
        if self.begins:
            self.check(now_ns)
            self.begins = False
        promise(self.due is None, "what the surveyor sees is told", self.due)
        for name in self.unwatched:
            promise(self._find(name).ended, "what stands is watched", name)
        self.unwatched.clear()
        promise(len(self.watched) <= self.guards_max, "guards are bounded")

    # -- from time to time ----------------------------------------------------------------------

    def check(self, now_ns: int) -> None:
        """Whatever stands is watched, and whoever is silent for too long is not left standing."""
        # A guard that nobody has been told of may have taken the place of one that was.
        pending = self._pending()
        names = set(self.watched.values())
        for name, known in self.known.items():
            if known.ended or known.unit in pending:
                continue
            promise(self.surveyor is None or name in names, "what stands is watched", name)
            promise(
                now_ns - known.heard_ns <= known.silence_ns + SLACK_NS,
                "no silence is without end",
                name,
            )

    def _pending(self) -> set[str]:
        """Return the units for which a guard was asked for and nobody has been answered."""
        return {
            asked.message.unit
            for asked in self.asked.values()
            if asked.reply is None and isinstance(asked.message, messages.Guard)
        }

    def forget(self, now_ns: int, after_ns: int) -> None:
        """Let go of what ended long ago."""
        used = set(self.watched.values())
        for name in [n for n, known in self.known.items() if known.ended and n not in used]:
            if now_ns - self.known[name].heard_ns > after_ns:
                del self.known[name]
        for id in [i for i, asked in self.asked.items() if now_ns - asked.arrived_ns > after_ns]:
            del self.asked[id]

    def waiting(self, now_ns: int) -> list[str]:
        """Return who has asked for a guard and was left without an answer for too long."""
        return [
            id
            for id, asked in self.asked.items()
            if asked.reply is None
            and isinstance(asked.message, messages.Guard)
            and now_ns - asked.arrived_ns > 200 * MS
        ]

    def _count(self, what: str) -> None:
        self.counts[what] = self.counts.get(what, 0) + 1
