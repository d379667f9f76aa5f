"""
What clients ask for, and the checks before anything is promised.

A replan is taken in, or refused at once with the reason. A request that is repeated is answered
as before, or left alone if its answer is still to come; a message never changes anything before
all checks have passed.
"""

from __future__ import annotations

from byway import frames, messages
from byway.messages import Accepted, ErrorMessage, Noted, VehicleIs, VehiclesAre
from bywayd.core.answering import Answering
from bywayd.core.dispatch import Dispatch
from bywayd.core.docket import Docket, times_of
from bywayd.core.events import Peer
from bywayd.core.front_settings import FrontSettings
from bywayd.core.guarding import Guarding
from bywayd.core.guards import Guards
from bywayd.core.health import Health
from bywayd.core.instants import Duration, Instant
from bywayd.core.ledger import Ledger
from bywayd.core.outbox import Outbox, error_of
from bywayd.core.roster import Roster
from bywayd.core.snapshots import Snapshots
from bywayd.core.surveying import Surveying

_MASK_64 = 2**64 - 1


def spread(seed: int, serial: int) -> int:
    """
    Return the seed of one of many, from 0 to 2**63 - 1.

    The output function of SplitMix64 (Steele, Lea, Flood 2014: Fast splittable pseudorandom
    number generators) at the serial-th step from the seed.
    """
    z = (seed + serial * 0x9E3779B97F4A7C15) & _MASK_64
    z = ((z ^ (z >> 30)) * 0xBF58476D1CE4E5B9) & _MASK_64
    z = ((z ^ (z >> 27)) * 0x94D049BB133111EB) & _MASK_64
    return (z ^ (z >> 31)) >> 1


class Intake:
    """Owned by the front."""

    def __init__(
        self,
        settings: FrontSettings,
        seed: int,
        outbox: Outbox,
        health: Health,
        snapshots: Snapshots,
        workers: Roster,
        answering: Answering,
        dispatch: Dispatch,
        ledger: Ledger,
        surveying: Surveying,
        guards: Guards,
        guarding: Guarding,
    ) -> None:
        # -- fixed -----------------------------------------------------------------------------
        self._settings = settings
        self._seed = seed
        # -- shared with the rest of the front -------------------------------------------------
        self._outbox = outbox
        self._health = health
        self._snapshots = snapshots
        self._workers = workers
        self._answering = answering
        self._dispatch = dispatch
        self._ledger = ledger
        self._surveying = surveying
        self._guards = guards
        self._guarding = guarding
        # -- state -----------------------------------------------------------------------------
        #: Replans taken in since the start.
        self._serial = 0
        self.stopping = False

    # -- replans -------------------------------------------------------------------------------

    def replan(self, peer: Peer, came: frames.Received, ask: messages.Replan, now: Instant) -> None:
        """Take a replan in, or say why not."""
        header = came.header
        if self._is_repeat(peer, came, now):
            return
        self._health.count("replans_total")
        refused = self._why_not(header, ask, now)
        if refused is not None:
            self._answering.refuse(peer, header, came.body, refused, now)
            return
        settings = self._settings
        times = times_of(
            now,
            Duration.of_s(ask.budget_s),
            Duration.of_s(settings.margin_s),
            settings.margin_ratio_max,
            Duration.of_s(settings.start_left_min_s),
        )
        self._serial += 1
        docket = Docket(
            header=header,
            ask=ask,
            body=came.body,
            times=times,
            seed=spread(self._seed, self._serial) if ask.seed is None else ask.seed,
            attempts_max=settings.attempts_max,
            retry_left_min=Duration.of_s(settings.retry_left_min_s),
            peer=peer,
        )
        revision = self._snapshots.revision
        accepted = Accepted(unit=ask.unit, budget_s=ask.budget_s, revision=revision)
        self._outbox.reply(peer, header, accepted)
        self._dispatch.enter(docket, now)

    def _is_repeat(self, peer: Peer, came: frames.Received, now: Instant) -> bool:
        id = came.header.id
        docket = self._answering.open.get(id)
        answered = self._answering.known(id)
        known = docket or answered
        if known is None:
            return False
        if known.body != came.body:
            self._health.count("conflicts_total")
            text = f"request {id} was asked before with another body"
            self._outbox.error(peer, came.header, "conflict", text)
            return True
        self._health.count("repeats_total")
        if docket is not None:
            # The answer goes to where the asker is now.
            docket.peer = peer
        if answered is not None:
            self._outbox.reply(peer, came.header, answered.message, answered.packed)
        return True

    def _why_not(
        self, header: frames.Header, ask: messages.Replan, now: Instant
    ) -> ErrorMessage | None:
        """Return why a replan cannot be taken in, the reasons that stay before those that pass."""
        settings = self._settings
        refused = self._why_not_at_all(header, ask)
        if refused is not None:
            return refused
        stale = self._ledger.freshness.why_not(ask.leave_out, now)
        if stale is not None:
            return stale
        if ask.guard and not self._guards.has_room(ask.unit):
            text = f"{len(self._guards)} guards stand already"
            return error_of("overloaded", text, {"guards": len(self._guards)})
        if self._dispatch.room.of_unit(ask.unit) is None and not self._dispatch.has_room:
            waiting = len(self._dispatch.room)
            text = f"{waiting} replans wait for {settings.workers} workers already"
            retry_after_s = self._answering.retry_after_s(waiting)
            return error_of("overloaded", text, {"waiting": waiting}, retry_after_s)
        return None

    def _why_not_at_all(
        self, header: frames.Header, ask: messages.Replan | messages.Guard
    ) -> ErrorMessage | None:
        """Return why nothing can be done about a route, whoever else wants what."""
        settings = self._settings
        if self.stopping:
            return error_of("stopping", "the daemon is on its way out")
        if header.epoch and header.epoch != self._outbox.epoch:
            text = "the daemon was started again since; the site may not be complete yet"
            return error_of("new_epoch", text, {"epoch": self._outbox.epoch})
        if ask.vehicle not in settings.vehicles:
            known = sorted(settings.vehicles)
            text = f"no vehicle is called {ask.vehicle}"
            return error_of("unknown_vehicle", text, {"vehicle": ask.vehicle, "vehicles": known})
        if ask.budget_s > settings.budget_max_s:
            text = f"budget_s is {ask.budget_s}, the most is {settings.budget_max_s}"
            return error_of("bad_value", text, {"field": "budget_s", "value": ask.budget_s})
        for name in ask.leave_out:
            refused = self._why_not_leave_out(name)
            if refused is not None:
                return refused
        if not self.is_warm:
            text = "the daemon is not ready yet"
            return error_of("warming", text, retry_after_s=settings.warming_retry_s)
        return None

    def _why_not_leave_out(self, name: str) -> ErrorMessage | None:
        layer = self._ledger.layers.get(name)
        if layer is None or not layer.is_visible:
            return error_of("unknown_layer", f"the site has no layer {name}", {"layer": name})
        if not layer.flags.outlines_only:
            text = f"layer {name} holds more than outlines and cannot be left out"
            return error_of("bad_value", text, {"field": "leave_out", "layer": name})
        return None

    @property
    def is_warm(self) -> bool:
        """Whether the site is there, with all that is kept of it, and a worker to plan on it."""
        return (
            self._snapshots.current is not None
            and self._workers.was_ready
            and self._ledger.is_complete
        )

    def end(
        self,
        peer: Peer,
        header: frames.Header,
        wanted: messages.Cancel | messages.Finish,
        now: Instant,
    ) -> None:
        """Cancel or finish what a client names."""
        if wanted.replan is not None:
            docket = self._answering.open.get(wanted.replan)
            found = [] if docket is None else [docket]
        else:
            found = self._dispatch.of_unit(wanted.unit or "")
        if not found:
            facts: dict[str, object] = {"replan": wanted.replan, "unit": wanted.unit}
            text = f"no replan is open under {wanted.replan or wanted.unit}"
            self._outbox.error(peer, header, "unknown_request", text, facts)
            return
        for docket in found:
            if isinstance(wanted, messages.Cancel):
                self._dispatch.cancel(docket, now)
            else:
                self._dispatch.finish(docket, now)
        self._outbox.reply(peer, header, Noted(replans=[docket.id for docket in found]))

    # -- guards --------------------------------------------------------------------------------

    def guard(self, peer: Peer, came: frames.Received, ask: messages.Guard, now: Instant) -> None:
        """Let a guard stand, or say why not."""
        if self._guarding.is_repeat(peer, came):
            return
        refused = self._why_not_at_all(came.header, ask)
        if refused is None:
            self._guarding.take(peer, came, ask, now)
        else:
            self._guarding.refuse(peer, came, refused, now)

    # -- the rest ------------------------------------------------------------------------------

    def site(self, peer: Peer, header: frames.Header, wanted: messages.Site) -> None:
        """Have the site described."""
        for name in wanted.layers or ():
            if self._ledger.layers.get(name) is None:
                text = f"the site has no layer {name}"
                self._outbox.error(peer, header, "unknown_layer", text, {"layer": name})
                return
        if self.stopping:
            self._outbox.error(peer, header, "stopping", "the daemon is on its way out")
        elif self._snapshots.current is None:
            retry = self._settings.warming_retry_s
            text = "the daemon is not ready yet"
            self._outbox.error(peer, header, "warming", text, retry_after_s=retry)
        elif not self._surveying.ask(peer, header, wanted):
            text = "too many descriptions of the site are being made"
            retry = self._settings.warming_retry_s
            self._outbox.error(peer, header, "overloaded", text, retry_after_s=retry)

    def vehicles(self, peer: Peer, header: frames.Header) -> None:
        """Tell which vehicles there are."""
        known = [
            VehicleIs(vehicle=name, model=vehicle.model, settings=dict(vehicle.settings))
            for name, vehicle in self._settings.vehicles.items()
        ]
        self._outbox.reply(peer, header, VehiclesAre(vehicles=known))
