"""
Durable layers as the front sees them: the clerk that keeps them, and what it recalls at the start.

What has become visible in a durable layer waits in one line (`keepline`). All that waits goes to
the clerk together, one batch at a time, so that one commit serves everybody who came during the
last one. A source is acknowledged when all of its changes are visible and those of durable layers
are on the disk; a source without any waits for nobody.

If the clerk dies, or cannot write, what is out is given to its successor, or waits until there is
room: nothing is acknowledged meanwhile, and nothing else stops.

At the start the clerk recalls what is kept, piece by piece, before any change of a source is
taken in: so whatever sources say comes after what they said before.

    due --asked--> asked --recalled--> due, or over after the last;  asked --clerk lost--> due
"""

from __future__ import annotations

from typing import Literal, TypeAlias

from bywayd.core.front_settings import FrontSettings
from bywayd.core.health import Health
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import invariant
from bywayd.core.kept import (
    ChangesKept,
    ClerkHindered,
    ClerkReady,
    ClerkUnfit,
    KeepChanges,
    KillClerk,
    PingClerk,
    Place,
    RecallChanges,
    Recalled,
    SpawnClerk,
)
from bywayd.core.ledger import Ledger
from bywayd.core.outbox import Outbox
from bywayd.core.roster import Order, Roster

#: Where the recall is.
Recall: TypeAlias = Literal["due", "asked", "over"]

#: How often it is said again that nothing can be written.
_SAID_AGAIN_AFTER = Duration.of_s(10.0)


class Keeping:
    """Owned by the front."""

    def __init__(
        self,
        settings: FrontSettings,
        outbox: Outbox,
        health: Health,
        clerks: Roster,
        ledger: Ledger,
    ) -> None:
        # -- fixed -----------------------------------------------------------------------------
        self._settings = settings
        # -- shared with the rest of the front -------------------------------------------------
        self._outbox = outbox
        self._health = health
        self._roster = clerks
        self._ledger = ledger
        self._line = ledger.keepline
        # -- state -----------------------------------------------------------------------------
        #: The clerk that is ready; None while there is none.
        self._ready: int | None = None
        #: The task of the recall or batch that the ready clerk is at.
        self._task: int | None = None
        self._task_serial = 0
        self._recall: Recall = "due" if settings.keeps else "over"
        self._place: Place = None
        #: Why nothing can be written at the moment, and when that was said last.
        self._hindered: tuple[str, Instant] | None = None

    # -- what the clerk says -------------------------------------------------------------------

    def ready(self, event: ClerkReady, now: Instant) -> None:
        """A clerk has opened its file."""
        number = event.clerk
        if not self._roster.ready(number, now):
            self._nonsense(number, "ready a second time")
        elif self._roster.phase(number) != "killed":
            self._ready = number
            self._line.stock = event.stock
            self._outbox.log("info", "clerk.ready", clerk=number, kept_bytes=event.stock.size_bytes)

    def recalled(self, event: Recalled, now: Instant) -> None:
        """A piece of what is kept has been recalled."""
        if not self._is_answer(event.clerk, event.task, "asked", now):
            return
        self._task, self._place = None, event.place
        self._ledger.recall(event.found, now)
        if event.place is not None:
            self._recall = "due"
            return
        self._recall = "over"
        self._ledger.is_open = True
        recalled = self._health.counts().get("recalled_total", 0)
        self._outbox.log("info", "keep.recalled", changes=recalled)

    def kept(self, event: ChangesKept, now: Instant) -> None:
        """What was out is on the disk."""
        if not self._is_answer(event.clerk, event.task, "over", now):
            return
        self._task = None
        for keepsake in self._line.kept(event.stock):
            self._health.count("changes_kept_total")
            if keepsake.arrived is not None:
                self._health.observe("kept_s", now.since(keepsake.arrived))
        self._health.count("commits_total")
        if self._hindered is not None:
            self._hindered = None
            self._outbox.log("info", "keep.goes_on", waiting=len(self._line))
        self._ledger.kept()

    def _is_answer(self, number: int, task: int, recall: Recall, now: Instant) -> bool:
        """Whether this ends what the ready clerk is at."""
        is_known = self._roster.done(number, task, now)
        if self._roster.phase(number) == "killed":
            return False
        if is_known and recall == self._recall:
            return True
        self._nonsense(number, f"the end of task {task}")
        return False

    def hindered(self, event: ClerkHindered, now: Instant) -> None:
        """Nothing can be written at the moment."""
        if event.clerk != self._ready:
            return
        self._health.count("commits_hindered_total")
        if self._hindered is None or now.since(self._hindered[1]) >= _SAID_AGAIN_AFTER:
            self._hindered = (event.why, now)
            waiting = len(self._line)
            self._outbox.log("error", "keep.hindered", why=event.why, waiting=waiting)

    def unfit(self, event: ClerkUnfit) -> bool:
        """
        The file cannot be used; True if the daemon cannot be either.

        At the start nobody knows then what the site should hold, and a route through a forgotten
        obstacle is worse than none. Later everything is on the site, and live layers go on.
        """
        if self._roster.phase(event.clerk) == "killed":
            return False
        self._health.count("clerks_unfit_total")
        self._outbox.log("error", "keep.unfit", why=event.why)
        return self._recall != "over"

    def lost(self, number: int, why: str, now: Instant) -> None:
        """A clerk is gone; what it owed is for its successor."""
        self._roster.lost(number, why, now)
        self._health.count("clerks_lost_total")
        self._outbox.log("error", "clerk.lost", clerk=number, why=why)
        self._forsake(number)

    # -- what is to be done --------------------------------------------------------------------

    def carry_out(self, order: Order) -> None:
        """Do what the roster wants done about a clerk."""
        if order.what == "spawn":
            self._outbox.add(SpawnClerk(order.number))
        elif order.what == "ping":
            self._outbox.add(PingClerk(order.number))
        else:
            self._kill(order.number, order.why)

    def settle(self, now: Instant) -> None:
        """Ask for what is kept, or hand out what is to be kept."""
        number = self._ready
        if number is None or self._task is not None:
            return
        if self._recall == "due":
            # No more than the surveyor is about to take, so that a large site costs no memory.
            if self._ledger.pending < self._settings.batch_changes_max:
                self._recall = "asked"
                self._outbox.add(RecallChanges(number, self._give(number, now), self._place))
        elif batch := self._line.next_batch():
            self._outbox.add(KeepChanges(number, self._give(number, now), batch))

    def _give(self, number: int, now: Instant) -> int:
        self._task_serial += 1
        self._task = self._task_serial
        self._roster.give(number, self._task, None, now)
        return self._task

    @property
    def pending(self) -> int:
        """Changes that are visible, and not on the disk."""
        return len(self._line)

    def counts(self) -> dict[str, int]:
        """Return what the health record tells of it."""
        if not self._settings.keeps:
            return {}
        return {
            "clerk_ready": int(self._ready is not None),
            "clerk_hindered": int(self._hindered is not None),
            "keep_pending": len(self._line),
            "keep_patches": self._line.stock.patches,
        }

    # -- within --------------------------------------------------------------------------------

    def _nonsense(self, number: int, what: str) -> None:
        self._health.count("clerk_nonsense_total")
        self._kill(number, f"spoke nonsense: {what}")

    def _kill(self, number: int, why: str) -> None:
        self._roster.kill(number, why)
        self._health.count("clerks_killed_total")
        self._outbox.add(KillClerk(number, why))
        self._outbox.log("error", "clerk.killed", clerk=number, why=why)
        self._forsake(number)

    def _forsake(self, number: int) -> None:
        """Nothing is expected of this clerk any more."""
        if self._ready == number:
            self._ready = self._task = None
            if self._recall == "asked":
                self._recall = "due"

    def check(self) -> None:
        """Stop with a `Defect` if something could be forgotten."""
        self._line.check()
        invariant(self._task is None or self._ready is not None, "a task is with somebody")
        invariant((self._recall == "asked") <= (self._task is not None), "who asks will hear")
        invariant((self._recall == "over") == self._ledger.is_open, "sources come after the recall")
        invariant(
            bool(self._settings.keeps) or not self._line, "nothing is kept where nobody keeps"
        )
        invariant(self._recall == "over" or not self._line.out, "nothing is kept during the recall")
