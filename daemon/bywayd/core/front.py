"""
The front: every decision of the daemon behind one method.

`Front(settings, epoch, seed).handle(event, now) -> effects`. It routes events to the part that
owns what they are about, lets each part do what time has made due, and says when it has to be
called again. The parts:

    intake, rerouting --> dispatch --> answering --> outbox
       \\                  \\--> room, roster (workers), snapshots
        \\--> surveying, keeping --> ledger --> sources, layers, expiries
                   \\--> guarding --> guards
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Final

from byway import frames, messages
from byway.errors import Forbidden, SenderFault
from bywayd.core import events, kept, reports
from bywayd.core.alarms import Alarms
from bywayd.core.answering import Answering
from bywayd.core.dispatch import Dispatch
from bywayd.core.effects import Effect, PingWorker, SpawnWorker, Stop, Wake
from bywayd.core.events import Event, Peer
from bywayd.core.front_settings import FrontSettings
from bywayd.core.guarding import Guarding
from bywayd.core.guards import Guards
from bywayd.core.health import Health
from bywayd.core.instants import Duration, Instant
from bywayd.core.intake import Intake
from bywayd.core.invariant import invariant
from bywayd.core.keeping import Keeping
from bywayd.core.ledger import Ledger
from bywayd.core.outbox import Outbox
from bywayd.core.rerouting import Rerouting
from bywayd.core.rights import refusal
from bywayd.core.roster import Manners, Order, Roster
from bywayd.core.snapshots import Snapshots
from bywayd.core.surveying import Surveying

__all__ = ["Front", "FrontSettings"]


class Front:
    """
    Owns docket, ledger, roster and health; one caller, one thread.

    Args:
        settings: fixed for its life.
        epoch: names this life of the daemon; different from all before.
        seed: where the seeds of replans come from that bring none; same seed, same events at the
            same instants, same effects.
    """

    def __init__(self, settings: FrontSettings, epoch: str, seed: int) -> None:
        # -- fixed -----------------------------------------------------------------------------
        self.settings: Final = settings
        self.epoch: Final = epoch
        self._drain_max = Duration.of_s(settings.drain_max_s)
        self._health_every = Duration.of_s(settings.health_every_s)
        # -- parts -----------------------------------------------------------------------------
        self.outbox = Outbox(epoch, settings.units_max)
        self.health = Health()
        self.snapshots = Snapshots()
        self.workers = Roster("worker", settings.workers, _manners(settings))
        self.surveyors = Roster("surveyor", 1, _manners(settings, surveyor=True))
        self.clerks = Roster("clerk", int(settings.keeps), _manners(settings, clerk=True))
        shared = (settings, self.outbox, self.health)
        self.ledger = Ledger(*shared)
        self.keeping = Keeping(*shared, self.clerks, self.ledger)
        self.guards = Guards(*shared)
        self.guarding = Guarding(*shared, self.guards)
        guarded = (self.guards, self.guarding)
        self.surveying = Surveying(*shared, self.snapshots, self.surveyors, self.ledger, *guarded)
        self.answering = Answering(*shared, self.snapshots, self.guarding)
        self.dispatch = Dispatch(*shared, self.snapshots, self.workers, self.answering)
        self.intake = Intake(
            settings,
            seed,
            self.outbox,
            self.health,
            self.snapshots,
            self.workers,
            self.answering,
            self.dispatch,
            self.ledger,
            self.surveying,
            *guarded,
        )
        self.rerouting = Rerouting(
            *(*shared, seed, self.guards, self.answering, self.dispatch),
            self.ledger.freshness,
        )
        # -- what the runtime measured last ---------------------------------------------------
        self.vitals: events.Vitals | None = None
        #: The wall clock and the front's own, read at the same moment; and when it all began.
        self.wall: tuple[float, Instant] | None = None
        self.began: Instant | None = None
        # -- state -----------------------------------------------------------------------------
        #: "health" and "drain".
        self._alarms: Alarms[str] = Alarms()
        self._now: Instant | None = None
        #: The last `Wake` that was given and has not come.
        self._wake: Instant | None = None
        #: Why the daemon is ending, once it is.
        self._stop_why = ""
        self._is_failing = False
        self._stopped = False
        self._on: Final = self._handlers()

    def _handlers(self) -> dict[type, Callable[[Any, Instant], None]]:
        return {
            events.Received: self._received,
            events.Unreadable: self._unreadable,
            events.Undeliverable: self._undeliverable,
            events.WorkerReady: self._worker_ready,
            events.WorkerAlive: self._worker_alive,
            events.WorkerBetter: self._worker_better,
            events.WorkerDone: self._worker_done,
            events.WorkerFailed: self._worker_failed,
            events.WorkerChecked: self._worker_checked,
            events.WorkerLost: self._worker_lost,
            events.SurveyorReady: self._surveyor_ready,
            events.SurveyorAlive: self._surveyor_alive,
            events.SnapshotReady: self._snapshot_ready,
            events.GuardSeen: self._guard_seen,
            events.SiteDescribed: self._site_described,
            events.SurveyorLost: self._surveyor_lost,
            kept.ClerkReady: self.keeping.ready,
            kept.ClerkAlive: lambda event, now: self.clerks.heard(event.clerk, now),
            kept.ClerkHindered: self._clerk_hindered,
            kept.ClerkUnfit: self._clerk_unfit,
            kept.Recalled: self.keeping.recalled,
            kept.ChangesKept: self.keeping.kept,
            kept.ClerkLost: lambda event, now: self.keeping.lost(event.clerk, event.why, now),
            events.Started: self._started,
            events.Tick: self._tick,
            events.Vitals: self._vitals,
            events.StopAsked: self._stop_asked,
        }

    def handle(self, event: Event, now: Instant) -> list[Effect]:
        """
        Take in one event and return what is to be done about it, in order.

        Raises:
            Defect: If a rule of our own is broken. Nothing may be done after that but to end.
        """
        invariant(self._now is None or now >= self._now, "time does not go back")
        self._now = now
        if self._stopped:
            return []
        if self._wake is not None and now >= self._wake:
            self._wake = None
        self._on[type(event)](event, now)
        self._settle(now)
        return self.outbox.take()

    # -- from clients and sources -------------------------------------------------------------

    def _received(self, event: events.Received, now: Instant) -> None:
        peer, came = event.peer, event.came
        forbidden = refusal(peer.rights, came.message) or self._impostor(peer, came.header)
        if forbidden is not None:
            self.health.count("forbidden_total")
            forbidden.header = came.header
            self._refuse(peer, forbidden, now)
        elif peer.channel == "updates":
            self._change(peer, came, now)
        else:
            self._request(peer, came, now)

    def _impostor(self, peer: Peer, header: frames.Header | None) -> Forbidden | None:
        """Return why a peer cannot speak for a source: it would use up numbers of another key."""
        source = None if header is None else self.ledger.sources.get(header.source)
        if source is None or peer.rights is None or source.peer.rights is None:
            return None
        if source.peer.rights.name == peer.rights.name:
            return None
        text = f"source {source.name} belongs to another key than {peer.rights.name}"
        return Forbidden(text, {"source": source.name, "role": peer.rights.role or ""})

    def _change(self, peer: Peer, came: frames.Received, now: Instant) -> None:
        if self._stop_why:
            # Not taken in, so not acknowledged: the source sends it again, to our successor.
            self.outbox.error(peer, came.header, "stopping", "the daemon is on its way out")
        elif isinstance(came.message, messages.Change):
            self.ledger.take(peer, came, came.message, now)
        else:
            text = f"{came.message.kind} is no change"
            self.outbox.error(peer, came.header, "unknown_kind", text)

    def _request(self, peer: Peer, came: frames.Received, now: Instant) -> None:
        header, message = came.header, came.message
        match message:
            case messages.Replan():
                self.intake.replan(peer, came, message, now)
            case messages.Cancel() | messages.Finish():
                self.intake.end(peer, header, message, now)
            case messages.Guard():
                self.intake.guard(peer, came, message, now)
            case messages.Progress():
                self.guarding.progress(peer, header, message, now)
            case messages.Release():
                self.guarding.release(peer, came, message, now)
            case messages.Site():
                self.intake.site(peer, header, message)
            case messages.Vehicles():
                self.intake.vehicles(peer, header)
            case messages.Health():
                self.outbox.reply(peer, header, reports.health(self, now))
            case messages.Hello():
                self.outbox.reply(peer, header, reports.welcome(self, message, now))
            case _:
                text = f"{message.kind} is no request"
                self.outbox.error(peer, header, "unknown_kind", text, {"kind": message.kind})

    def _unreadable(self, event: events.Unreadable, now: Instant) -> None:
        self.health.count("unreadable_total")
        self._refuse(event.peer, event.fault, now)

    def _refuse(self, peer: Peer, fault: SenderFault, now: Instant) -> None:
        # Only whoever may change something is counted as a source, and only under its own name.
        is_source = peer.channel == "updates" and (peer.rights is None or peer.rights.may_change)
        is_itself = is_source and self._impostor(peer, fault.header) is None
        if is_itself and not self._stop_why and self.ledger.take_fault(peer, fault, now):
            return
        self.outbox.reply(peer, fault.header, frames.error_message(fault))

    def _undeliverable(self, event: events.Undeliverable, now: Instant) -> None:
        self.health.count("undeliverable_total")

    # -- from the workers ---------------------------------------------------------------------

    def _worker_ready(self, event: events.WorkerReady, now: Instant) -> None:
        if not self.workers.ready(event.worker, now):
            self.dispatch.kill(event.worker, "spoke nonsense: ready a second time", now)
        elif self.workers.phase(event.worker) == "idle":
            self.outbox.log("info", "worker.ready", worker=event.worker)
            self.dispatch.look_again()

    def _worker_alive(self, event: events.WorkerAlive, now: Instant) -> None:
        self.workers.heard(event.worker, now)

    def _worker_better(self, event: events.WorkerBetter, now: Instant) -> None:
        self.workers.heard(event.worker, now)
        self.dispatch.better(event, now)

    def _worker_done(self, event: events.WorkerDone, now: Instant) -> None:
        self.workers.heard(event.worker, now)
        self.dispatch.done(event, now)

    def _worker_failed(self, event: events.WorkerFailed, now: Instant) -> None:
        self.workers.heard(event.worker, now)
        self.dispatch.failed(event, now)

    def _worker_checked(self, event: events.WorkerChecked, now: Instant) -> None:
        self.workers.heard(event.worker, now)
        self.dispatch.checked(event, now)

    def _worker_lost(self, event: events.WorkerLost, now: Instant) -> None:
        self.dispatch.lost(event.worker, event.why, now)

    # -- from the surveyor --------------------------------------------------------------------

    def _surveyor_ready(self, event: events.SurveyorReady, now: Instant) -> None:
        self.surveying.ready(event, now)

    def _surveyor_alive(self, event: events.SurveyorAlive, now: Instant) -> None:
        self.surveyors.heard(event.surveyor, now)

    def _snapshot_ready(self, event: events.SnapshotReady, now: Instant) -> None:
        self.surveyors.heard(event.surveyor, now)
        self.surveying.snapshot(event, now)

    def _guard_seen(self, event: events.GuardSeen, now: Instant) -> None:
        self.surveyors.heard(event.surveyor, now)
        self.surveying.saw(event, now)

    def _site_described(self, event: events.SiteDescribed, now: Instant) -> None:
        self.surveyors.heard(event.surveyor, now)
        self.surveying.described(event, now)

    def _surveyor_lost(self, event: events.SurveyorLost, now: Instant) -> None:
        self.surveying.lost(event.surveyor, event.why, now)

    # -- from the clerk -----------------------------------------------------------------------

    def _clerk_hindered(self, event: kept.ClerkHindered, now: Instant) -> None:
        self.clerks.heard(event.clerk, now)
        self.keeping.hindered(event, now)

    def _clerk_unfit(self, event: kept.ClerkUnfit, now: Instant) -> None:
        self.clerks.heard(event.clerk, now)
        if self.keeping.unfit(event):
            self._is_failing = True
            self._stop_asked(events.StopAsked(event.why), now)

    # -- from the runtime ---------------------------------------------------------------------

    def _started(self, event: events.Started, now: Instant) -> None:
        invariant(self.began is None, "the front is started once")
        self.began = now
        self.wall = (event.wall_s, now)
        self.clerks.open(now)
        self.surveyors.open(now)
        self.workers.open(now)
        self._alarms.set("health", now + self._health_every)

    def _tick(self, event: events.Tick, now: Instant) -> None:
        pass  # what is due is done after every event

    def _vitals(self, event: events.Vitals, now: Instant) -> None:
        self.vitals = event
        self.wall = (event.wall_s, now)

    def _stop_asked(self, event: events.StopAsked, now: Instant) -> None:
        if self._stop_why:
            return
        self._stop_why = event.why
        self.intake.stopping = True
        self.outbox.log(
            "info",
            "front.draining",
            why=event.why,
            open=len(self.answering.open),
            pending=self.ledger.pending,
        )
        self.rerouting.stopping = True
        self.guarding.stop(now)
        self.dispatch.drain(now)
        self.surveying.stop()
        self._alarms.set("drain", now + self._drain_max)

    # -- what time does -----------------------------------------------------------------------

    def _settle(self, now: Instant) -> None:
        for order in self.surveyors.due(now):
            self._carry_out_surveyor(order)
        for order in self.clerks.due(now):
            self.keeping.carry_out(order)
        for order in self.workers.due(now):
            self._carry_out(order, now)
        self.ledger.settle(now)
        self.guards.settle(now)
        self.guarding.settle(now)
        self.dispatch.settle(now)
        while self.rerouting.settle(now):
            self.dispatch.settle(now)
        self.surveying.settle(now)
        self.keeping.settle(now)
        unsettled = self.ledger.pending + self.keeping.pending
        is_drained = self._is_failing or (not self.answering.open and unsettled == 0)
        while (alarm := self._alarms.pop_due(now)) is not None:
            if alarm == "health":
                self._alarms.set("health", now + self._health_every)
                self.outbox.publish("health", reports.health(self, now))
            else:
                is_drained = True  # as far as can be
        if self._stop_why and is_drained:
            self._end(now)
        else:
            self._set_wake()

    def _carry_out(self, order: Order, now: Instant) -> None:
        if order.what == "spawn":
            self.outbox.add(SpawnWorker(order.number))
        elif order.what == "ping":
            self.outbox.add(PingWorker(order.number))
        else:
            self.dispatch.kill(order.number, order.why, now)

    def _carry_out_surveyor(self, order: Order) -> None:
        if order.what == "spawn":
            self.surveying.spawn(order.number)
        elif order.what == "ping":
            self.surveying.ping(order.number)
        else:
            self.surveying.kill(order.number, order.why)

    def _end(self, now: Instant) -> None:
        self.dispatch.stop(now)
        self._stopped = True
        pending = self.ledger.pending + self.keeping.pending
        self.outbox.log("info", "front.stopped", why=self._stop_why, pending=pending)
        self.outbox.add(Stop(self._stop_why, self._is_failing))

    def _set_wake(self) -> None:
        found = (
            self.workers.next_alarm(),
            self.surveyors.next_alarm(),
            self.clerks.next_alarm(),
            self.ledger.next_alarm(),
            self.surveying.next_alarm(),
            self.dispatch.next_alarm(),
            self.guards.next_alarm(),
            self.guarding.next_alarm(),
            self._alarms.next(),
        )
        at = min((alarm for alarm in found if alarm is not None), default=None)
        # One that is too early does no harm, and saves telling the runtime at every event.
        if at is not None and (self._wake is None or at < self._wake):
            self._wake = at
            self.outbox.add(Wake(at))

    # -- looking at it ------------------------------------------------------------------------

    @property
    def state(self) -> str:
        """What `welcome` and the health record say: warming, ready, or stopping."""
        if self._stop_why:
            return "stopping"
        return "ready" if self.intake.is_warm else "warming"

    def check(self) -> None:
        """
        Stop with a `Defect` if any part is in a state that it must never be in.

        For tests, the simulated world, and about once a minute in service: it looks at everything.
        """
        for part in (
            self.snapshots,
            self.workers,
            self.surveyors,
            self.clerks,
            self.ledger,
            self.keeping,
            self.surveying,
            self.answering,
            self.dispatch,
            self.guards,
            self.guarding,
            self.rerouting,
            self.health,
            self._alarms,
        ):
            part.check()


def _manners(settings: FrontSettings, *, surveyor: bool = False, clerk: bool = False) -> Manners:
    silence_s = settings.surveyor_silence_s if surveyor else settings.worker_silence_s
    silence_s = settings.clerk_silence_s if clerk else silence_s
    return Manners(
        start_time_max=Duration.of_s(settings.start_time_max_s),
        silence=Duration.of_s(silence_s),
        grace=Duration.of_s(settings.worker_grace_s),
        ping_every=Duration.of_s(settings.ping_every_s),
        backoff_first=Duration.of_s(settings.backoff_first_s),
        backoff_max=Duration.of_s(settings.backoff_max_s),
    )
