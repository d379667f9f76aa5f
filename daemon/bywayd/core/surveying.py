"""
The surveyor as the front sees it: one batch at a time, one current snapshot, and successors.

If the surveyor dies, planning goes on on the last snapshot. Its successor gets that snapshot and
all that are still being read, then the batch whose answer never came; what was acknowledged is in
the snapshot already, what was not is applied again.
"""

from __future__ import annotations

from dataclasses import dataclass

from byway.frames import Header
from byway.messages import Site
from bywayd.core.effects import (
    ApplyChanges,
    Change,
    DescribeSite,
    KillSurveyor,
    PingSurveyor,
    ReleaseBefore,
    SpawnSurveyor,
)
from bywayd.core.events import GuardSeen, Peer, SiteDescribed, SnapshotReady, SurveyorReady
from bywayd.core.front_settings import FrontSettings
from bywayd.core.guarding import Guarding
from bywayd.core.guards import Guards
from bywayd.core.health import Health
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import invariant
from bywayd.core.ledger import Ledger
from bywayd.core.outbox import Outbox
from bywayd.core.roster import Roster
from bywayd.core.snapshots import Snapshots

#: Surveyors that one question about the site may cost before it is given up.
_TRIES_MAX = 2


@dataclass(slots=True)
class Ticket:
    """A question about the site that waits for its answer."""

    peer: Peer
    header: Header
    message: Site
    tries: int = 0
    #: The surveyor that was asked, if any is at it.
    surveyor: int | None = None


class Surveying:
    """Owned by the front."""

    def __init__(
        self,
        settings: FrontSettings,
        outbox: Outbox,
        health: Health,
        snapshots: Snapshots,
        surveyors: Roster,
        ledger: Ledger,
        guards: Guards,
        guarding: Guarding,
    ) -> None:
        # -- shared with the rest of the front -------------------------------------------------
        self._settings = settings
        self._outbox = outbox
        self._health = health
        self._snapshots = snapshots
        self._roster = surveyors
        self._ledger = ledger
        self._guards = guards
        self._guarding = guarding
        # -- state -----------------------------------------------------------------------------
        #: The surveyor that is ready; None while there is none.
        self._ready: int | None = None
        #: The task number of the batch that the ready surveyor is at.
        self._batch: int | None = None
        #: Questions by task number, oldest first.
        self._tickets: dict[int, Ticket] = {}
        self._task_serial = 0
        #: For the health record.
        self.memory_bytes = 0
        #: The newest revision that a batch has made, and when it became visible.
        self._visible: tuple[int, Instant] | None = None
        self.obstacles: dict[str, int] = {}
        self.tracks: dict[str, int] = {}
        #: When the surveyor wants a batch, if only an empty one; None while it is at one.
        self._carry_at: Instant | None = None

    # -- what clients want ---------------------------------------------------------------------

    def ask(self, peer: Peer, header: Header, message: Site) -> bool:
        """Have the site described; False if too many are being answered."""
        if len(self._tickets) >= self._settings.descriptions_max:
            return False
        self._task_serial += 1
        self._tickets[self._task_serial] = Ticket(peer, header, message)
        return True

    def stop(self) -> None:
        """Answer every question that is open."""
        for ticket in self._tickets.values():
            self._outbox.error(ticket.peer, ticket.header, "stopping", "the daemon ends")
        self._tickets.clear()

    # -- what the surveyor says ----------------------------------------------------------------

    def spawn(self, number: int) -> None:
        """Start a surveyor, or a successor."""
        current = self._snapshots.current
        if current is None:
            self._outbox.add(SpawnSurveyor(number, None, None, ()))
            return
        in_use = self._snapshots.hand_over()
        self._outbox.add(SpawnSurveyor(number, current.revision, current.handle, in_use))

    def ready(self, event: SurveyorReady, now: Instant) -> None:
        """A surveyor has taken up the site."""
        number = event.surveyor
        if not self._roster.ready(number, now):
            self._nonsense(number, "ready a second time")
        elif self._roster.phase(number) == "killed":
            return
        elif not self._snapshots.publish(event.revision, event.handle):
            self._nonsense(number, f"took up revision {event.revision}")
        else:
            self._ready = number
            self._carry_in(event.next_in_s, now)
            self._guards.surveyor_ready(number)
            self.memory_bytes = event.memory_bytes
            self._outbox.log("info", "surveyor.ready", surveyor=number, revision=event.revision)

    def snapshot(self, event: SnapshotReady, now: Instant) -> None:
        """A batch has become visible."""
        number = event.surveyor
        if not self._roster.done(number, event.batch, now) or event.batch in self._tickets:
            self._nonsense(number, f"the end of batch {event.batch}")
        elif self._roster.phase(number) == "killed":
            # Not counted on: its successor gets the batch once more.
            return
        elif not self._snapshots.publish(event.revision, event.handle):
            self._nonsense(number, f"went back to revision {event.revision}")
        else:
            self._batch = None
            if self._visible is None or event.revision > self._visible[0]:
                self._visible = (event.revision, now)
            self.memory_bytes = event.memory_bytes
            self.obstacles, self.tracks = dict(event.obstacles), dict(event.tracks)
            self._carry_in(event.next_in_s, now)
            if self._ledger.out is not None:
                self._ledger.decide(event.refusals, event.revision, now)
            else:
                self._ledger.carried(event.revision)

    def saw(self, event: GuardSeen, now: Instant) -> None:
        """A guarded route has been looked at."""
        number = event.surveyor
        if number != self._ready:
            return  # it has been killed: its successor looks again
        if event.revision > self._snapshots.revision or not self._guards.was_given(event.guard):
            self._nonsense(number, f"saw guard {event.guard} at revision {event.revision}")
        else:
            alerts = self._guarding.saw(event, now)
            if alerts and self._visible is not None and self._visible[0] == event.revision:
                self._health.observe("alert_s", now.since(self._visible[1]))

    def described(self, event: SiteDescribed, now: Instant) -> None:
        """A question about the site has its answer."""
        ticket = self._tickets.get(event.ticket)
        number = event.surveyor
        if not self._roster.done(number, event.ticket, now) or event.ticket == self._batch:
            self._nonsense(number, f"the answer to question {event.ticket}")
        elif ticket is not None:
            del self._tickets[event.ticket]
            self._outbox.reply(ticket.peer, ticket.header, event.message, event.packed)

    def lost(self, number: int, why: str, now: Instant) -> None:
        """A surveyor is gone; what it owed is for its successor."""
        self._roster.lost(number, why, now)
        self._health.count("surveyors_lost_total")
        self._outbox.log("error", "surveyor.lost", surveyor=number, why=why)
        self._forsake(number)

    def kill(self, number: int, why: str) -> None:
        """Have a surveyor killed. Nothing it still says counts."""
        self._roster.kill(number, why)
        self._health.count("surveyors_killed_total")
        self._outbox.add(KillSurveyor(number, why))
        self._outbox.log("error", "surveyor.killed", surveyor=number, why=why)
        self._forsake(number)

    def ping(self, number: int) -> None:
        """Ask for a sign of life."""
        self._outbox.add(PingSurveyor(number))

    # -- what is to be done --------------------------------------------------------------------

    def settle(self, now: Instant) -> None:
        """Hand out what waits, and give back what nobody reads."""
        number = self._ready
        if number is None:
            return
        for task, ticket in self._tickets.items():
            if ticket.surveyor is None:
                ticket.surveyor = number
                ticket.tries += 1
                self._roster.give(number, task, None, now)
                self._outbox.add(DescribeSite(number, task, ticket.message))
        while self._batch is None:
            batch = self._ledger.out or self._ledger.next_batch()
            if batch is None:
                break
            if not batch.changes:
                self._ledger.decide((), self._snapshots.revision, now)
                continue
            self._hand_out(number, batch.changes, now)
        if self._carry_at is not None and now >= self._carry_at:
            self._hand_out(number, (), now)
        revision = self._snapshots.maybe_release()
        if revision is not None:
            self._outbox.add(ReleaseBefore(number, revision))

    def _hand_out(self, number: int, changes: tuple[Change, ...], now: Instant) -> None:
        self._task_serial += 1
        self._batch = self._task_serial
        self._carry_at = None  # every batch carries forward what moves
        self._roster.give(number, self._batch, None, now)
        self._outbox.add(ApplyChanges(number, self._batch, changes, now))

    def _carry_in(self, next_in_s: float | None, now: Instant) -> None:
        self._carry_at = None if next_in_s is None else now + Duration.of_s(next_in_s)

    def next_alarm(self) -> Instant | None:
        """Return when something is to be carried forward."""
        return self._carry_at

    @property
    def is_ready(self) -> bool:
        """Whether a surveyor is at work."""
        return self._ready is not None

    # -- within --------------------------------------------------------------------------------

    def _nonsense(self, number: int, what: str) -> None:
        if self._roster.phase(number) != "killed":
            self._health.count("surveyor_nonsense_total")
            self.kill(number, f"spoke nonsense: {what}")

    def _forsake(self, number: int) -> None:
        """Nothing is expected of this surveyor any more."""
        if self._ready == number:
            self._ready = None
            self._batch = None
            self._carry_at = None
            self._guards.surveyor_gone()
        for task, ticket in list(self._tickets.items()):
            if ticket.surveyor == number:
                ticket.surveyor = None
                if ticket.tries >= _TRIES_MAX:
                    del self._tickets[task]
                    text = f"{ticket.tries} surveyors were lost over this question"
                    self._outbox.error(ticket.peer, ticket.header, "internal", text)

    def check(self) -> None:
        """Stop with a `Defect` if something could be forgotten."""
        invariant(len(self._tickets) <= self._settings.descriptions_max, "questions are bounded")
        invariant(self._batch is None or self._ready is not None, "a batch is out with somebody")
        is_free = self._ready is not None and self._batch is None
        invariant(self._carry_at is None or is_free, "what moves is carried by who is free")
        for ticket in self._tickets.values():
            invariant(ticket.surveyor in (None, self._ready), "questions are with who is ready")
